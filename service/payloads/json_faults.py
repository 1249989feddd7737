"""What is wrong with a JSON table that was refused: the first offending value, in words.

This walks value by value and is never run on a table that is right. It starts where the quick reading
stopped, so its work is bounded by one piece however long the table is.
"""

import math
import re
from dataclasses import dataclass, replace

import msgspec

from service.errors import CallerError, InvalidValue, Malformed
from service.payloads.cells import EXCERPT_LENGTH, excerpt

HEAD = 4 * EXCERPT_LENGTH
"""Bytes looked at to tell what a value is that is not a number (a character has four at most)."""

CELL_STEPS = 2
"""Steps of a pointer that leads to a cell: row and column."""

_SPACE = re.compile(rb"[ \t\r\n]*+")
_NUMBER = re.compile(rb"-?+(?:0|[1-9][0-9]*+)(?:\.[0-9]++)?+(?:[eE][+-]?+[0-9]++)?+")
_REST_OF_ROW = re.compile(rb"[^\[\]{}\"]*+\]")
_TEXT = re.compile(rb'"(?:[^"\\]|\\.)*+"?+')
_WORD = re.compile(rb"[^\s,\[\]{}\"]++")

_NOT_NUMBERS = {
    b"t": "true is not a number",
    b"f": "false is not a number",
    b"n": "null is not a number: a table has no gaps",
    b"{": "an object is not a number",
    b"[": "an array is not a number: a table has rows, and rows have numbers",
}
_NOT_JSON = re.compile(rb"NaN|-?Infinity")


@dataclass(frozen=True, slots=True, kw_only=True)
class Place:
    """A place in the text of a table, behind a comma or at the very start."""

    offset: int = 0
    """Bytes before it."""
    row: int = 0
    """Rows that are complete."""
    column: int = 0
    """Numbers of the row that is under way; 0 between two rows."""
    columns: int = 0
    """Numbers of row 0; 0 until it is complete."""


def explain(table: memoryview, place: Place) -> CallerError:
    """Return the error that says what is wrong with a table.

    Parameters
    ----------
    table : memoryview
        The text of the table.
    place : Place
        A place before which nothing is wrong.

    Returns
    -------
    CallerError
        `Malformed` if the text is not JSON; otherwise `InvalidValue` for the first offending value.
    """
    error = _first_fault(table, place)
    return error if isinstance(error, Malformed) else not_json(table) or error


def not_json(text: bytes | memoryview) -> CallerError | None:
    """Return what makes a text no JSON value; None for one."""
    try:
        msgspec.json.decode(text, type=msgspec.Raw)
    except RecursionError:
        return Malformed.at("", "the table is nested too deeply")
    except ValueError as reason:  # the library's own errors, and those of its text decoding
        return Malformed.at("", f"the table is not JSON: {str(reason).removeprefix('JSON is malformed: ')}")
    return None


def _first_fault(table: memoryview, place: Place) -> CallerError:
    """Walk from `place` to the first row that is wrong."""
    if place.offset == 0:
        start = _skip(table, 0)
        if _byte(table, start) != b"[":
            return _wrong_value(table, start, "")
        place = replace(place, offset=start + 1)
        if _byte(table, _skip(table, place.offset)) == b"]":
            return InvalidValue.at("", "the table has no rows")
    while True:
        found = _walk_row(table, place)
        if isinstance(found, CallerError):
            return found
        behind = _skip(table, found.offset)
        if _byte(table, behind) != b",":
            return Malformed.at("", f"the table is not JSON behind row {found.row - 1} (byte {behind})")
        place = replace(found, offset=behind + 1)


def _walk_row(table: memoryview, place: Place) -> Place | CallerError:
    """Return the place behind the bracket that closes the row, or what is wrong in the row."""
    offset = _skip(table, place.offset)
    pointer = f"/{place.row}"
    if not place.column:
        if _byte(table, offset) != b"[":
            return _wrong_value(table, offset, pointer)
        offset = _skip(table, offset + 1)
        if _byte(table, offset) == b"]":
            return InvalidValue.at(pointer, f"row {place.row} has no values")
    column = place.column
    while True:
        value = _NUMBER.match(table, offset)
        end = _skip(table, value.end()) if value else offset
        mark = _byte(table, end)
        if value is None or mark not in (b",", b"]"):
            return _wrong_value(table, offset, f"{pointer}/{column}")
        if math.isinf(float(value[0])):
            return InvalidValue.at(
                f"{pointer}/{column}", f"{_number_excerpt(value[0])} is beyond the range of a 64-bit number"
            )
        column += 1
        if mark == b"]":
            return _closed(place, column, end + 1)
        offset = _skip(table, end + 1)
        if column == place.columns:
            return _too_long(table, offset, place)


def _closed(place: Place, column: int, offset: int) -> Place | CallerError:
    """Return the place behind a row of `column` numbers, or the error if row 0 has another number."""
    if place.columns and column != place.columns:
        return _ragged(place, str(column))
    return Place(offset=offset, row=place.row + 1, columns=column)


def _too_long(table: memoryview, offset: int, place: Place) -> CallerError:
    """Return the error of a row that goes on at `offset` where row 0 ends."""
    rest = _REST_OF_ROW.match(table, offset)
    if rest is None:
        return _ragged(place, f"more than {place.columns}")
    return _ragged(place, str(place.columns + 1 + rest[0].count(b",")))


def _ragged(place: Place, count: str) -> CallerError:
    noun = "value" if count == "1" else "values"
    detail = f"row {place.row} has {count} {noun}, but row 0 has {place.columns}"
    return InvalidValue.at(f"/{place.row}", detail)


def _wrong_value(table: memoryview, offset: int, pointer: str) -> CallerError:
    """Return the error of the value at `offset`, which is not the number, row or table that it should be."""
    head = bytes(table[offset : offset + HEAD])
    if not head:
        return Malformed.at(pointer, "the table ends too early")
    if head[:1] in (b",", b"]"):
        return Malformed.at(pointer, "a value is missing")
    if (word := _NOT_JSON.match(head)) is not None:
        return Malformed.at(pointer, f"{word[0].decode()} is not JSON: every number must be finite")
    return _not_a_number(head, pointer) if pointer.count("/") == CELL_STEPS else _not_an_array(head, pointer)


def _not_a_number(head: bytes, pointer: str) -> CallerError:
    """Return the error of a cell that is not a number."""
    first = head[:1]
    if first == b'"':
        text = _TEXT.match(head)
        shown = excerpt((text[0] if text else first).strip(b'"').decode(errors="replace"))
        return InvalidValue.at(pointer, f"{shown} is a text, not a number")
    if first in _NOT_NUMBERS:
        return InvalidValue.at(pointer, _NOT_NUMBERS[first])
    return _not_json(head, pointer)


def _not_an_array(head: bytes, pointer: str) -> CallerError:
    """Return the error of a row or a whole table that is not an array."""
    if head[:1] not in b'"tfn{-0123456789':
        return _not_json(head, pointer)
    if pointer:
        return InvalidValue.at(pointer, f"row {pointer[1:]} must be an array of numbers")
    return InvalidValue.at(pointer, "the table must be an array of rows")


def _not_json(head: bytes, pointer: str) -> CallerError:
    word = _WORD.match(head)
    shown = excerpt((word[0] if word else head[:1]).decode(errors="replace"))
    return Malformed.at(pointer, f"{shown} is not a JSON number")


def _number_excerpt(number: bytes) -> str:
    return excerpt(number.decode()).strip("'")


def _byte(table: memoryview, offset: int) -> bytes:
    return bytes(table[offset : offset + 1])


def _skip(table: memoryview, offset: int) -> int:
    """Return the offset of the first byte at or behind `offset` that is not white space."""
    space = _SPACE.match(table, offset)
    return space.end() if space else offset
