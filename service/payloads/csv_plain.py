"""The quick reading of CSV: plain numbers, rewritten as JSON, which is parsed several times as fast.

Columns of text, or columns that are ignored, may stand before the numbers. Anything else (a quote, ``+1``,
a cell that is wrong) is left to the csv module. The numbers of JSON are among those of CSV and both
are rounded to the nearest float64, so that a table gives the same bits by either reading.
"""

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from service.errors import Fault
from service.payloads.cells import require_cells
from service.payloads.json_table import PIECE, count_byte, number_rows
from service.payloads.sheet import PART, Selection, Sheet

TAIL = 1 << 10
"""Bytes at the end in which blank lines are looked for."""


@dataclass(frozen=True, slots=True, eq=False)
class _Block:
    """Some lines: the columns before the numbers, undecoded, and the numbers one after the other."""

    heads: list[tuple[bytes, ...]]
    flat: NDArray[np.float64]


def plain_sheet(data: bytes, start: int, selection: Selection, *, max_cells: int) -> Sheet | None:
    """Read the lines from `start`, if they are plain numbers.

    Parameters
    ----------
    data : bytes
        The whole table.
    start : int
        Offset of the first line below the header.
    selection : Selection
        What the columns are read as.
    max_cells : int
        Limit on rows times columns of numbers.

    Returns
    -------
    Sheet or None
        ``None`` if the table is more than this reads, or is wrong.

    Raises
    ------
    LimitExceeded
        If there are more than `max_cells` cells of numbers.
    """
    stop = max(len(data) - TAIL, start)
    stop += len(data[stop:].rstrip(b"\r\n"))
    leading = len(selection.names) - len(selection.numbers)
    if stop <= start or selection.numbers[0] != leading:
        return None
    columns = len(selection.numbers)
    rows = count_byte(memoryview(data)[start:stop], b"\n") + 1
    if rows * columns > max_cells and b'"' in data:  # the line feeds may be in quoted cells
        return None
    require_cells(rows * columns, max_cells=max_cells, fault=Fault(detail="", code="", part=PART))
    flat = np.empty(min(rows * columns, stop - start))
    texts: list[list[str]] = [[] for _ in selection.texts]
    done = 0
    while start < stop:
        end = data.find(b"\n", start + PIECE, stop)
        end = stop if end < 0 else end
        try:
            block = _block(data[start:end], leading, columns)
            flat[done : done + block.flat.size] = block.flat
            for cells, index in zip(texts, selection.texts, strict=True):
                cells.extend(map(bytes.decode, block.heads[index]))
        except (ValueError, TypeError):
            return None
        done += block.flat.size
        start = end + 1
    return Sheet(
        values=flat.reshape(rows, columns),
        names=selection.number_names,
        texts={selection.names[index]: tuple(cells) for cells, index in zip(texts, selection.texts, strict=True)},
    )


def _block(lines: bytes, leading: int, columns: int) -> _Block:
    """Read whole lines; a ``ValueError`` or ``TypeError`` if they are not plain numbers."""
    if b"\r" in lines:
        lines = lines.replace(b"\r\n", b"\n").removesuffix(b"\r")
    if b'"' in lines or b"\r" in lines:
        raise ValueError("quotes or lone returns")
    heads: list[tuple[bytes, ...]] = []
    if leading:
        *heads, tails = zip(*(line.split(b",", leading) for line in lines.split(b"\n")), strict=True)
        lines = b"\n".join(tails)
    if len(heads) != leading or b"[" in lines or b"]" in lines:
        raise ValueError("too few cells, or brackets")
    rows = number_rows(b"".join((b"[[", lines.replace(b"\n", b"],["), b"]]")))
    if rows.lengths.count(columns) != len(rows.lengths):
        raise ValueError("ragged rows")
    return _Block(heads, rows.flat)
