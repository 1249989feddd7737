"""The flat view that every answer offers of itself, and its plain-text rendering for terminals."""

from collections.abc import Sequence
from dataclasses import dataclass
from math import floor, log10
from typing import Literal

SIGNIFICANT = 5  # digits shown of the largest number of a column
MOST_DECIMALS = 6
GAP = "  "


@dataclass(frozen=True, slots=True, kw_only=True)
class Column:
    """What one column of a table holds."""

    name: str
    """Header of the column."""
    unit: str | None = None
    """Unit of its numbers; None for texts and plain ratios."""
    kind: Literal["text", "number", "percent"]
    """Whether its cells are texts, numbers, or texts that stand to the right like numbers; any may be None."""


@dataclass(frozen=True, slots=True)
class Table:
    """Rows of cells under named columns."""

    columns: tuple[Column, ...]
    rows: Sequence[tuple[object, ...]]


def text_table(table: Table) -> str:
    """Return `table` for a person at a terminal: aligned, rounded, without its empty columns.

    Numbers are rounded for reading, each column to the same number of decimals; the data formats never
    round.

    Parameters
    ----------
    table : Table

    Returns
    -------
    str
        Lines without trailing blanks, each ended by a newline: a header, a rule and the rows.
    """
    cells_of = [[row[number] for row in table.rows] for number in range(len(table.columns))]
    pairs = zip(table.columns, cells_of, strict=True)
    shown = [(column, cells) for column, cells in pairs if any(cell is not None for cell in cells)]
    lined = [_lined_up(column, cells) for column, cells in shown]
    lines = (GAP.join(cells).rstrip() for cells in zip(*lined, strict=True))
    return "".join(f"{line}\n" for line in lines)


def _lined_up(column: Column, cells: Sequence[object]) -> list[str]:
    """Return header, rule and cells of one column, all of the same width."""
    if column.kind == "number":
        decimals = _decimals([abs(float(str(cell))) for cell in cells if cell is not None])
        texts = ["" if cell is None else _rounded(float(str(cell)), decimals) for cell in cells]
    else:
        texts = ["" if cell is None else str(cell) for cell in cells]
    width = max(map(len, [column.name, *texts]))
    align = str.ljust if column.kind == "text" else str.rjust
    return [align(text, width) for text in (column.name, "-" * width, *texts)]


def _decimals(sizes: Sequence[float]) -> int:
    """Return the decimals that show `SIGNIFICANT` digits of the largest size; none for whole numbers."""
    largest = max(sizes)
    if largest == 0.0 or all(size.is_integer() for size in sizes):
        return 0
    return min(max(SIGNIFICANT - 1 - floor(log10(largest)), 0), MOST_DECIMALS)


def _rounded(value: float, decimals: int) -> str:
    """Return `value` with thousands separators; what rounds to zero has no sign."""
    return f"{value:z,.{decimals}f}"
