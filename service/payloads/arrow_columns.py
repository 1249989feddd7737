"""The columns of an Arrow table, whatever file they came in, become one C-ordered array.

pyarrow is imported where it is used: it is an extra, and takes a while.
"""

from collections.abc import Iterator
from contextlib import contextmanager
from typing import Any

import numpy as np
from numpy.typing import NDArray

from service.errors import CallerError, Fault, Malformed, UnsupportedMediaType
from service.payloads.cells import settle
from service.payloads.sheet import PART, Selection, Sheet, invalid_cell

BLOCK_CELLS = 1 << 17
"""Cells transposed at a time (1 MB): rows of a block stay in the cache while every column fills its cells."""

SMALL_BATCH = 1 << 12
"""Mean rows of a batch below which batches are joined first."""

EXACT_BITS = 53
"""Bits of a whole number that float64 holds."""


def pyarrow() -> Any:
    """Return the module.

    Returns
    -------
    module
        ``pyarrow``.

    Raises
    ------
    UnsupportedMediaType
        If it is not installed.
    """
    try:
        import pyarrow as pa
    except ImportError:
        detail = "this server does not read Arrow or Parquet: its operator installs the extra `arrow` for that"
        raise UnsupportedMediaType.of(
            Fault(detail=detail, code=UnsupportedMediaType.code, header="Content-Type")
        ) from None
    return pa


@contextmanager
def reading(what: str) -> Iterator[None]:
    """Turn the errors of pyarrow into `Malformed`: the body cannot be read as `what`."""
    pa = pyarrow()
    try:
        yield
    except CallerError:
        raise
    except (pa.ArrowException, OSError, EOFError, ValueError) as error:
        raise malformed(f"the body cannot be read as {what}: it is damaged, cut or something else") from error


def malformed(detail: str) -> CallerError:
    """Return the error of a body that is not what it says it is."""
    return Malformed.of(Fault(detail=detail, code=Malformed.code, part=PART))


def require_types(schema: Any, selection: Selection) -> None:
    """Refuse columns that are not of the types read.

    Parameters
    ----------
    schema : pyarrow.Schema
        Of the whole table.
    selection : Selection
        What its columns are read as.

    Raises
    ------
    InvalidValue
        Naming the column, its type and what to do.
    """
    types = pyarrow().types
    for index in selection.numbers:
        kind = schema.field(index).type
        if not (types.is_floating(kind) or types.is_integer(kind)):
            detail = f"column {selection.names[index]!r} is {_type_name(kind)}: {_remedy(kind)}"
            raise invalid_cell(detail, column=selection.names[index])
    for index in selection.texts:
        kind = schema.field(index).type
        if not (types.is_floating(kind) or types.is_integer(kind) or _is_text(kind)):
            detail = f"column {selection.names[index]!r} is {_type_name(kind)}: cast it to a plain text column"
            raise invalid_cell(detail, column=selection.names[index])


def sheet_of(tables: Iterator[Any], selection: Selection, *, rows: int) -> Sheet:
    """Copy Arrow tables, one below the other, into one array.

    Parameters
    ----------
    tables : iterator of pyarrow.Table
        Each holds the selected columns by name; together they have `rows` rows.
    selection : Selection
        What the columns are read as.
    rows : int
        At least 1.

    Returns
    -------
    Sheet
        Its numbers have shape (rows, columns of numbers).

    Raises
    ------
    InvalidValue
        For a missing or non-finite value, or a whole number that float64 does not hold.
    Malformed
        If the tables do not hold `rows` rows, or are not valid.
    """
    values = np.empty((rows, len(selection.numbers)))
    texts: dict[str, list[str]] = {selection.names[index]: [] for index in selection.texts}
    done = 0
    for table in tables:
        table.validate(full=True)
        if done + table.num_rows > rows:
            raise malformed("the table has more rows than its header says")
        for name, cells in texts.items():
            cells.extend(_texts(table.column(name), name, first=done + 1))
        for batch in _batches(table.select(selection.number_names)):
            _fill(values[done : done + batch.num_rows], batch, selection.number_names, first=done + 1)
            done += batch.num_rows
    if done != rows:
        raise malformed("the table has fewer rows than its header says")
    return Sheet(
        values=values,
        names=selection.number_names,
        texts={name: tuple(cells) for name, cells in texts.items()},
    )


def _batches(table: Any) -> Any:
    """Return the table in batches that are worth a loop."""
    batches = table.to_batches()
    if len(batches) > 1 and table.num_rows < SMALL_BATCH * len(batches):
        batches = table.combine_chunks().to_batches()
    return batches


def _fill(out: NDArray[np.float64], batch: Any, names: tuple[str, ...], *, first: int) -> None:
    """Copy one batch into `out` of shape (rows, columns), transposing block by block."""
    columns = [_numbers(column, name, first=first) for column, name in zip(batch.columns, names, strict=True)]
    size = max(1, BLOCK_CELLS // len(columns))
    for start in range(0, len(out), size):
        block = out[start : start + size]
        with np.errstate(invalid="ignore"):  # a signalling NaN is found by `settle`
            for index, column in enumerate(columns):
                block[:, index] = column[start : start + size]
        if (cell := settle(block)) is not None:
            detail = f"{block[cell]} is not a finite number"
            raise invalid_cell(detail, row=first + start + cell[0], column=names[cell[1]])


def _numbers(column: Any, name: str, *, first: int) -> NDArray[Any]:
    """Return the values of an Arrow array without a copy; each of them is exact in float64."""
    _require_complete(column, name, first=first)
    values: NDArray[Any] = column.to_numpy(zero_copy_only=True)
    if values.dtype.kind in "iu" and values.dtype.itemsize == np.dtype(np.int64).itemsize:
        inexact = _inexact(values)
        if inexact.any():
            index = int(inexact.argmax())
            detail = f"{values[index]} is beyond 2^{EXACT_BITS} and has no exact float64: cast the column"
            raise invalid_cell(detail, row=first + index, column=name)
    return values


def _inexact(values: NDArray[Any]) -> NDArray[np.bool_]:
    """Say which whole numbers of 64 bits float64 does not hold.

    A number is held if the bits from its highest to its lowest set bit are at most 53.
    """
    bits = values.view(np.uint64)
    magnitude = np.where(values < 0, ~bits + np.uint64(1), bits)
    lowest = magnitude & (~magnitude + np.uint64(1))
    inexact: NDArray[np.bool_] = (magnitude >> np.uint64(EXACT_BITS)) >= np.maximum(lowest, np.uint64(1))
    return inexact


def _texts(column: Any, name: str, *, first: int) -> list[str]:
    """Return the cells of a chunked Arrow column as text; whole numbers without a decimal point."""
    for chunk in column.chunks:
        _require_complete(chunk, name, first=first)
        first += len(chunk)
    cells = column.to_pylist()
    if cells and isinstance(cells[0], float):
        return [str(int(cell)) if cell.is_integer() else str(cell) for cell in cells]
    return [str(cell) for cell in cells]


def _require_complete(column: Any, name: str, *, first: int) -> None:
    if column.null_count:
        index = column.is_null().to_numpy(zero_copy_only=False).argmax()
        raise invalid_cell("a value is missing (null)", row=first + int(index), column=name)


def _is_text(kind: Any) -> bool:
    types = pyarrow().types
    return bool(types.is_string(kind) or types.is_large_string(kind) or types.is_string_view(kind))


def _type_name(kind: Any) -> str:
    """Return the name of a type, without the names inside a nested one."""
    return str(kind).partition("<")[0].partition("(")[0]


def _remedy(kind: Any) -> str:
    types = pyarrow().types
    if types.is_dictionary(kind):
        return "dictionary-encoded columns are not read, send it plain or leave it out"
    if _is_text(kind):
        return "ignore it, or name it as the column of scenario ids"
    if types.is_decimal(kind):
        return "cast it to float64"
    return "columns of floating point and whole numbers are read; cast it or ignore it"
