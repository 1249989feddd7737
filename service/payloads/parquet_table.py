"""A Parquet file, read to numbers and texts."""

from collections.abc import Collection, Iterator
from typing import Any

from service.errors import Fault
from service.payloads.arrow_columns import malformed, pyarrow, reading, require_types, sheet_of
from service.payloads.cells import require_cells
from service.payloads.sheet import PART, Selection, Sheet, invalid_cell, select

BYTES_PER_CELL = 16
"""Uncompressed bytes that a cell may take in the file: its value, once in a page and once in a dictionary."""

BYTES_APART = 1 << 20
"""Uncompressed bytes that small files may take beyond that, for headers and texts."""

_WHAT = "a Parquet file"
_PLACE = Fault(detail="", code="", part=PART)


def table_from_parquet(
    body: bytes | memoryview,
    *,
    text_columns: Collection[str] = (),
    ignore: Collection[str] = (),
    max_cells: int,
) -> Sheet:
    """Read a table from a Parquet file.

    Parameters
    ----------
    body : bytes or memoryview
        The whole file; any encoding and compression.
    text_columns, ignore : collection of str
        Headers of the columns that are read as text, and of those that are dropped unread.
    max_cells : int
        Limit on rows times columns of numbers. The footer is held against it before a page is read, also by
        the uncompressed size that it states: at most 16 bytes for each cell allowed, and 1 MB.

    Returns
    -------
    Sheet
        float32, float16 and whole numbers are widened.

    Raises
    ------
    InvalidValue
        With the column, and the row if there is one, for other types, missing and non-finite values, and
        whole numbers that float64 does not hold.
    Malformed
        If the file is damaged or cut.
    LimitExceeded
        If there are more than `max_cells` cells of numbers, or the file unpacks to more bytes.
    UnsupportedMediaType
        If pyarrow is not installed.
    """
    pa = pyarrow()
    with reading(_WHAT):
        from pyarrow import parquet

        file = parquet.ParquetFile(pa.BufferReader(pa.py_buffer(body)), page_checksum_verification=True)
        selection = select(file.schema_arrow.names, text_columns=text_columns, ignore=ignore)
        require_types(file.schema_arrow, selection)
        groups = [file.metadata.row_group(index) for index in range(file.metadata.num_row_groups)]
        rows = sum(group.num_rows for group in groups)
        if not rows:
            raise invalid_cell("the table has no rows")
        if any(group.num_rows < 0 for group in groups) or rows != file.metadata.num_rows:
            raise malformed("the footer contradicts itself about the number of rows")
        _require_size(rows, groups, selection, max_cells=max_cells)
        return sheet_of(_tables(file, selection), selection, rows=rows)


def _require_size(rows: int, groups: list[Any], selection: Selection, *, max_cells: int) -> None:
    """Refuse more cells, or more bytes once unpacked, than this server takes."""
    require_cells(rows * len(selection.numbers), max_cells=max_cells, fault=_PLACE)
    size = sum(max(group.total_byte_size, 0) for group in groups)
    if size > BYTES_PER_CELL * max_cells + BYTES_APART:
        require_cells(-(-size // BYTES_PER_CELL), max_cells=max_cells, fault=_PLACE)


def _tables(file: Any, selection: Selection) -> Iterator[Any]:
    """Yield the selected columns of each row group."""
    names = [selection.names[index] for index in selection.numbers + selection.texts]
    for index in range(file.metadata.num_row_groups):
        table = file.read_row_group(index, columns=names)
        if set(table.column_names) != set(names):
            raise malformed("the columns of the file are not those that its footer names")
        yield table
