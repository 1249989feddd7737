"""CSV (RFC 4180) with a header line, read to numbers and texts.

Most tables are plain numbers, which `service.payloads.csv_plain` reads quickly; this reads every other one
by the csv module, and says what is wrong with the rest.
"""

import csv
import io
import math
from collections.abc import Collection, Iterator
from contextlib import contextmanager
from itertools import chain, islice
from operator import itemgetter
from typing import Any

import numpy as np
from numpy.typing import NDArray

from service.errors import CallerError, Fault, Malformed
from service.payloads.cells import excerpt, require_cells, settle
from service.payloads.csv_plain import plain_sheet
from service.payloads.sheet import PART, Selection, Sheet, invalid_cell, select

BLOCK_CELLS = 1 << 14
"""Cells that the csv module holds as text at a time."""

_SEPARATORS = {";": "semicolons", "\t": "tabs", "|": "bars"}
_WORKBOOKS = (b"PK\x03\x04", b"\xd0\xcf\x11\xe0")
"""How a file of a spreadsheet program begins: a zip archive, or in its old form a compound file."""
_PLACE = Fault(detail="", code="", part=PART)


def table_from_csv(
    body: bytes | memoryview,
    *,
    text_columns: Collection[str] = (),
    ignore: Collection[str] = (),
    max_cells: int,
) -> Sheet:
    """Read a table in CSV.

    Parameters
    ----------
    body : bytes or memoryview
        UTF-8, commas, a first line of headers, decimal points; a byte order mark is dropped.
    text_columns, ignore : collection of str
        Headers of the columns that are read as text, and of those that are dropped.
    max_cells : int
        Limit on rows times columns of numbers.

    Returns
    -------
    Sheet
        Each number is the float64 nearest to the decimal.

    Raises
    ------
    InvalidValue
        With row and column, for a cell that is not a finite number, a ragged or blank line, or a bad header.
    Malformed
        If the body is not CSV in UTF-8.
    LimitExceeded
        If there are more than `max_cells` cells of numbers.
    """
    data = bytes(body)
    _require_text(data)
    names, start = _header(data)
    selection = select(names, text_columns=text_columns, ignore=ignore)
    plain = None if start is None else plain_sheet(data, start, selection, max_cells=max_cells)
    return plain or _sheet(data, selection, max_cells=max_cells)


def _require_text(data: bytes) -> None:
    if data.startswith(_WORKBOOKS):
        raise _malformed("the table is a workbook, or an archive of another kind: save the sheet as CSV in UTF-8")
    if data.startswith((b"\xff\xfe", b"\xfe\xff")) or b"\x00" in data:
        raise _malformed("the table holds NUL bytes or is UTF-16: CSV is sent in UTF-8")


def _header(data: bytes) -> tuple[list[str], int | None]:
    """Return the headers and the offset of the line below, if it can be told by counting line feeds."""
    with _reading():
        reader = _reader(data)
        names = next(reader, None)
        lines = reader.line_num
    if names is None:
        raise _malformed("the table is empty: its first line must name the columns")
    _require_names(names)
    start = 0
    for _ in range(lines):
        start = data.find(b"\n", start) + 1
        if not start:
            return names, None
    lone_returns = data.count(b"\r", 0, start) != data.count(b"\r\n", 0, start)
    return names, None if lone_returns else start


def _require_names(names: list[str]) -> None:
    """Refuse a first line of numbers, and one that shows another separator."""
    if len(names) == 1:
        for mark, plural in _SEPARATORS.items():
            if mark in names[0]:
                raise _malformed(f"the columns are separated by {plural}: CSV is sent with commas, and decimal points")
    if not names:
        raise invalid_cell("the first line must name the columns, but it is blank")
    if all(_is_number(name) for name in names):
        raise invalid_cell("the first line must name the columns, but it holds numbers")


def _sheet(data: bytes, selection: Selection, *, max_cells: int) -> Sheet:
    """Read the table by the csv module, block by block."""
    blocks: list[NDArray[np.float64]] = []
    texts: dict[str, list[str]] = {selection.names[index]: [] for index in selection.texts}
    done = 0
    for rows in _row_blocks(data, columns=len(selection.names)):
        require_cells((done + len(rows)) * len(selection.numbers), max_cells=max_cells, fault=_PLACE, at_least=True)
        blocks.append(_numbers(rows, selection, first=done + 1))
        for index in selection.texts:
            texts[selection.names[index]] += [row[index] for row in rows]
        done += len(rows)
    if not blocks:
        raise invalid_cell("the table has no rows below its header")
    return Sheet(
        values=np.concatenate(blocks),
        names=selection.number_names,
        texts={name: tuple(cells) for name, cells in texts.items()},
    )


def _row_blocks(data: bytes, *, columns: int) -> Iterator[list[list[str]]]:
    """Yield the rows below the header, each with `columns` cells; blank lines may only end the table."""
    size = max(1, BLOCK_CELLS // columns)
    done = 0
    with _reading():
        reader = _reader(data)
        next(reader)
        while rows := list(islice(reader, size)):
            if [] in rows:
                blank = rows.index([])
                if any(rows[blank:]) or any(reader):
                    raise invalid_cell("the line is blank", row=done + blank + 1)
                del rows[blank:]
            _require_lengths(rows, columns, first=done + 1)
            if rows:
                yield rows
            done += len(rows)


def _require_lengths(rows: list[list[str]], columns: int, *, first: int) -> None:
    lengths = list(map(len, rows))
    if lengths.count(columns) == len(lengths):
        return
    index = next(index for index, length in enumerate(lengths) if length != columns)
    verb, noun = ("is", "cell") if lengths[index] == 1 else ("are", "cells")
    detail = f"there {verb} {lengths[index]} {noun}, but the header names {columns}"
    if lengths[index] > columns:
        detail += " (a comma separates cells: it is no decimal mark)"
    raise invalid_cell(detail, row=first + index)


def _numbers(rows: list[list[str]], selection: Selection, *, first: int) -> NDArray[np.float64]:
    """Return the numbers of a block, of shape (rows, columns of numbers)."""
    if selection.all_numbers:
        cells = list(chain.from_iterable(rows))
    elif len(selection.numbers) == 1:
        cells = list(map(itemgetter(*selection.numbers), rows))
    else:
        cells = list(chain.from_iterable(map(itemgetter(*selection.numbers), rows)))
    joined = "".join(cells)
    values = None
    if joined.isascii() and "_" not in joined:  # the language reads more as a number than CSV should hold
        try:
            values = np.fromiter(map(float, cells), np.float64, len(cells)).reshape(len(rows), -1)
        except ValueError:
            values = None
    if values is None or settle(values) is not None:
        raise _first_fault(cells, selection, first=first)
    return values


def _first_fault(cells: list[str], selection: Selection, *, first: int) -> CallerError:
    """Return the error of the first cell that is not a finite number."""
    names = selection.number_names
    index = next(index for index, cell in enumerate(cells) if not _is_number(cell))
    row, column = divmod(index, len(names))
    return invalid_cell(_why_no_number(cells[index]), row=first + row, column=names[column])


def _is_number(cell: str) -> bool:
    if not cell.isascii() or "_" in cell:
        return False
    try:
        return math.isfinite(float(cell))
    except ValueError:
        return False


def _why_no_number(cell: str) -> str:
    if not cell.strip():
        return "the cell is empty"
    if "," in cell and cell.replace(",", "").strip().lstrip("+-").replace(".", "").isdecimal():
        return f"{excerpt(cell)} is not a number: the decimal mark is a point, and thousands are not separated"
    try:
        float(cell)
    except ValueError:
        return f"{excerpt(cell)} is not a number"
    if cell.isascii() and "_" not in cell:
        return f"{excerpt(cell)} is not a finite number"
    return f"{excerpt(cell)} is not a number: only the digits 0-9 without separators are read"


@contextmanager
def _reading() -> Iterator[None]:
    """Turn the errors of the csv module and of the text decoding into the caller's."""
    try:
        yield
    except UnicodeDecodeError:
        raise _malformed("the table is not UTF-8") from None
    except csv.Error as error:
        raise _malformed(f"the table is not CSV: {error}") from None


def _reader(data: bytes) -> Any:
    return csv.reader(io.TextIOWrapper(io.BytesIO(data), encoding="utf-8-sig", newline=""), strict=True)


def _malformed(detail: str) -> CallerError:
    return Malformed.of(Fault(detail=detail, code=Malformed.code, part=PART))
