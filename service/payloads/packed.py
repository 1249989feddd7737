"""A loss table as base64 text: little-endian numbers, row after row."""

import json
from typing import Any, Literal

import numpy as np
import pybase64
from numpy.typing import NDArray

from service.errors import InvalidValue
from service.payloads.cells import require_cells, settle

DTYPES: dict[str, np.dtype[Any]] = {"float64": np.dtype("<f8"), "float32": np.dtype("<f4")}
"""The numbers that may be packed."""

POINTER = "/data"
"""Where the text stands in the object that describes it."""


def unpack(
    data: memoryview | bytes | str,
    *,
    dtype: Literal["float64", "float32"],
    rows: int,
    columns: int,
    max_cells: int,
) -> NDArray[np.float64]:
    """Decode a table of base64 text.

    Parameters
    ----------
    data : memoryview, bytes or str
        The text in the standard alphabet, padded, without line breaks; or the inside of the JSON text that
        holds it, in which a slash may be escaped.
    dtype : {"float64", "float32"}
        The type of the packed numbers; float32 is widened.
    rows, columns : int
        Shape of the table, each at least 1.
    max_cells : int
        Limit on rows times columns; it is checked before memory is taken.

    Returns
    -------
    ndarray of shape (rows, columns)
        C ordered; −0.0 is 0.

    Raises
    ------
    InvalidValue
        For text that is not base64, a size other than that of the shape, and numbers that are not finite.
    LimitExceeded
        If there are more than `max_cells` cells.
    """
    if rows < 1 or columns < 1:
        raise InvalidValue.at("", f"a table has rows and columns, not {rows} × {columns}")
    require_cells(rows * columns, max_cells=max_cells)
    decoded = _decode(data)
    expected = rows * columns * DTYPES[dtype].itemsize
    if len(decoded) != expected:
        detail = (
            f"data holds {len(decoded):,} bytes, but {rows:,} rows × {columns:,} columns of {dtype} "
            f"take {expected:,} bytes"
        )
        raise InvalidValue.at(POINTER, detail)
    packed = np.frombuffer(decoded, DTYPES[dtype])
    with np.errstate(invalid="ignore"):  # a signalling NaN of float32 is found below
        values: NDArray[np.float64] = packed.astype(np.float64, copy=False).reshape(rows, columns)
    if (cell := settle(values)) is not None:
        detail = f"row {cell[0]}, column {cell[1]} (counted from 0) is {values[cell]}: every number must be finite"
        raise InvalidValue.at(POINTER, detail)
    return values


def _decode(data: memoryview | bytes | str) -> bytearray:
    """Return the bytes that the text stands for; escapes are looked for only if it is not base64 as it is."""
    try:
        return pybase64.b64decode_as_bytearray(data, validate=True)
    except ValueError:
        text = data if isinstance(data, str) else bytes(data).decode("ascii", errors="replace")
    try:
        plain = json.loads(f'"{text}"') if "\\" in text else text
        return pybase64.b64decode_as_bytearray(plain, validate=True)
    except ValueError:
        detail = (
            "data is not base64: the standard alphabet (A-Z a-z 0-9 + /) is needed, padded with = to a "
            "multiple of four characters, without spaces or line breaks"
        )
        raise InvalidValue.at(POINTER, detail) from None
