"""From the bytes of a request to float64 arrays: no HTTP, no files, and no error but a ``CallerError``.

The JSON envelope is parted from the tables inside it (`split_envelope`), the table is decoded by one of
the readers (`rows_from_json`, `unpack`, or a member of `TABLE_READERS`), and a request of two parts is
taken apart by `split_multipart`. Every array is C ordered and finite, and holds no −0.0.
"""

from collections.abc import Collection
from typing import Protocol

from service.payloads.arrow_table import table_from_arrow
from service.payloads.csv_table import table_from_csv
from service.payloads.envelope import Envelope, split_envelope
from service.payloads.json_table import row_from_json, rows_from_json
from service.payloads.json_text import json_text
from service.payloads.media_types import ARROW, CSV, PARQUET
from service.payloads.multipart import Parts, split_multipart
from service.payloads.packed import unpack
from service.payloads.parquet_table import table_from_parquet
from service.payloads.sheet import Sheet

__all__ = [
    "ARROW",
    "CSV",
    "PARQUET",
    "TABLE_READERS",
    "Envelope",
    "Parts",
    "Sheet",
    "TableReader",
    "json_text",
    "row_from_json",
    "rows_from_json",
    "split_envelope",
    "split_multipart",
    "table_from_arrow",
    "table_from_csv",
    "table_from_parquet",
    "unpack",
]


class TableReader(Protocol):
    """The contract of a reader: the bytes of one table with named columns become a `Sheet`."""

    def __call__(
        self,
        body: bytes | memoryview,
        *,
        text_columns: Collection[str] = (),
        ignore: Collection[str] = (),
        max_cells: int,
    ) -> Sheet:
        """Read `body`.

        Parameters
        ----------
        body : bytes or memoryview
            The whole table.
        text_columns : collection of str
            Headers of the columns that are read as text.
        ignore : collection of str
            Headers of the columns that are dropped unread.
        max_cells : int
            Limit on rows times columns of numbers.

        Returns
        -------
        Sheet
            Its numbers have shape (rows, columns of numbers).

        Raises
        ------
        CallerError
            Whatever is wrong with the bytes; a fault has part ``body``, row and column if it has a place.
        """
        ...


TABLE_READERS: dict[str, TableReader] = {
    CSV: table_from_csv,
    ARROW: table_from_arrow,
    PARQUET: table_from_parquet,
}
