"""A JSON array of rows, still as bytes, becomes an array at a fraction of a whole parse.

The text is cut at commas into pieces of about 64 KB. Each is completed by the brackets that the cut took
away, parsed, and stored at once, so that its number objects are recycled while they are in the cache:
memory stays at the array plus one piece, however long a row is. Nothing is looked up cell by cell; when
a piece is not what it should be, `service.payloads.json_faults` starts over at its first value.
"""

import re
from dataclasses import dataclass, replace
from itertools import chain

import numpy as np
import orjson
from numpy.typing import NDArray

from service.errors import CallerError, InvalidValue
from service.payloads.cells import require_cells
from service.payloads.json_faults import Place, explain, not_json

PIECE = 1 << 16
"""Bytes parsed at a time."""

TAIL = 64
"""Bytes at the end of a piece in which its last bracket or digit is looked for."""

COUNT_BLOCK = 1 << 18
"""Bytes compared at a time while a byte is counted."""

JSON_SPACE = b" \t\r\n"

_COMMA = re.compile(b",")

_NEVER_IN_NUMBERS = (b'"', b"{", b"l", b"u")
"""In valid JSON a value other than a number or an array holds one: text, object, false and null, true."""


@dataclass(frozen=True, slots=True, eq=False)
class NumberRows:
    """The numbers of some rows, one after the other, and how many each row has."""

    lengths: list[int]
    flat: NDArray[np.float64]


def rows_from_json(table: bytes | memoryview, *, max_cells: int) -> NDArray[np.float64]:
    """Decode a JSON array of equally long arrays of numbers.

    Parameters
    ----------
    table : bytes or memoryview
        The text of the array alone, in UTF-8.
    max_cells : int
        Limit on rows times columns; it is checked before memory is taken.

    Returns
    -------
    ndarray of shape (rows, columns)
        C ordered; every value is the float64 nearest to the decimal, −0.0 is 0.

    Raises
    ------
    InvalidValue
        For a value that is not a finite number, ragged or empty rows; the fault points at it, as in ``/3/2``.
    Malformed
        If the text is not JSON.
    LimitExceeded
        If there are more than `max_cells` cells.
    """
    view = memoryview(table)
    cells = count_byte(view, b",") + 1  # every comma of a table stands between two numbers, in a row or not
    require_cells(cells, max_cells=max_cells)
    flat = np.empty(cells)
    place = Place()
    done = 0
    while place.offset <= len(view):
        before = place
        try:
            rows, place = _read_piece(view, before)
            flat[done : done + rows.flat.size] = rows.flat
        except (ValueError, TypeError):
            raise explain(view, before) from None
        done += rows.flat.size
    return flat.reshape(-1, place.columns)


def row_from_json(row: bytes | memoryview) -> NDArray[np.float64]:
    """Decode a JSON array of numbers.

    Parameters
    ----------
    row : bytes or memoryview
        The text of the array alone, in UTF-8.

    Returns
    -------
    ndarray of shape (n,)
        Every value is the float64 nearest to the decimal, −0.0 is 0.

    Raises
    ------
    InvalidValue
        For a value that is not a finite number, or none; the fault points at it, as in ``/2``.
    Malformed
        If the text is not JSON.
    """
    try:
        rows = rows_from_json(b"".join((b"[", row, b"]")), max_cells=len(row))
        if len(rows) == 1:
            return rows[0]
        raise InvalidValue.at("/0", "more than one array")
    except CallerError as error:
        if (malformed := not_json(row)) is not None:
            raise malformed from None
        error.faults = tuple(replace(fault, pointer=(fault.pointer or "").removeprefix("/0")) for fault in error.faults)
        raise


def number_rows(document: bytes) -> NumberRows:
    """Parse a small JSON array of rows of numbers, each with one number or more.

    Parameters
    ----------
    document : bytes
        The whole array.

    Returns
    -------
    NumberRows
        Finite numbers without −0.0.

    Raises
    ------
    ValueError, TypeError
        If `document` is anything else.
    """
    if any(mark in document for mark in _NEVER_IN_NUMBERS):
        raise ValueError("not numbers alone")
    rows = orjson.loads(document)
    lengths = list(map(len, rows))
    if not all(lengths) or not lengths:
        raise ValueError("an empty row")
    flat = np.fromiter(chain.from_iterable(rows), np.float64, sum(lengths))
    flat += 0.0
    if not np.isfinite(flat).all():
        raise ValueError("beyond float64")
    return NumberRows(lengths, flat)


def count_byte(view: memoryview, byte: bytes) -> int:
    """Return how often `byte` occurs, without a copy of the whole.

    Parameters
    ----------
    view : memoryview
        Any bytes.
    byte : bytes of length 1
        What is counted.

    Returns
    -------
    int
        The number of occurrences.
    """
    octets = np.frombuffer(view, np.uint8)
    code = byte[0]
    blocks = (octets[start : start + COUNT_BLOCK] for start in range(0, octets.size, COUNT_BLOCK))
    return sum(int(np.count_nonzero(block == code)) for block in blocks)


def _read_piece(view: memoryview, place: Place) -> tuple[NumberRows, Place]:
    """Read from `place` to the first comma after `PIECE` bytes, and say where that is.

    The cut may fall between two rows or inside one. A piece is completed on that assumption and must then
    be valid JSON with a number in each row, so a misplaced bracket or comma cannot slip through the cut.
    """
    comma = _COMMA.search(view, place.offset + PIECE)
    stop = comma.start() if comma else len(view)
    piece = view[place.offset : stop]
    inside = comma is not None and not _ends_with_bracket(piece)
    opening = b"" if place.offset == 0 else b"[[" if place.column else b"["
    closing = b"" if comma is None else b"]]" if inside else b"]"
    rows = number_rows(b"".join((opening, piece, closing)))
    return rows, _after(place, rows.lengths, offset=stop + 1, inside=inside)


def _ends_with_bracket(piece: memoryview) -> bool:
    """Say whether the last byte but for white space closes an array; mostly few bytes are looked at."""
    tail = bytes(piece[-TAIL:]).rstrip(JSON_SPACE) or bytes(piece).rstrip(JSON_SPACE)
    return tail.endswith(b"]")


def _after(place: Place, lengths: list[int], *, offset: int, inside: bool) -> Place:
    """Return the place behind rows of these lengths, the last of which is still open if `inside`."""
    totals = [lengths[0] + place.column, *lengths[1:]]
    column = totals.pop() if inside else 0
    columns = place.columns or (totals[0] if totals else 0)
    if totals.count(columns) != len(totals) or 0 < columns <= column:
        raise ValueError("ragged rows")
    return Place(offset=offset, row=place.row + len(totals), column=column, columns=columns)
