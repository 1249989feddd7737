"""A table with named columns, and which of its columns are numbers, texts or nothing to us."""

from collections.abc import Collection, Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from service.errors import CallerError, Fault, InvalidValue
from service.payloads.cells import excerpt

PART = "body"
"""What a fault says it stands in; a caller that took the table from elsewhere replaces it."""


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Sheet:
    """A table as it was read."""

    values: NDArray[np.float64]
    """Shape (rows, columns of numbers), C ordered, finite, without −0.0."""
    names: tuple[str, ...]
    """Headers of the columns of numbers, in the order of the table."""
    texts: dict[str, tuple[str, ...]]
    """The cells of each column that was asked for as text, by header, in the order asked."""


@dataclass(frozen=True, slots=True, kw_only=True)
class Selection:
    """The columns that are read, as positions in the table counted from 0."""

    names: tuple[str, ...]
    """The headers of all columns."""
    numbers: tuple[int, ...]
    """In the order of the table."""
    texts: tuple[int, ...]
    """In the order asked."""

    @property
    def number_names(self) -> tuple[str, ...]:
        """Headers of the columns of numbers."""
        return tuple(self.names[index] for index in self.numbers)

    @property
    def all_numbers(self) -> bool:
        """Whether every column of the table is read as numbers."""
        return len(self.numbers) == len(self.names)


def select(names: Sequence[str], *, text_columns: Collection[str], ignore: Collection[str]) -> Selection:
    """Check the headers and say which columns are read as what.

    Parameters
    ----------
    names : sequence of str
        The headers of the table.
    text_columns, ignore : collection of str
        Headers of the columns that are texts, and of those that are dropped.

    Returns
    -------
    Selection
        All other columns are numbers, and there is at least one.

    Raises
    ------
    InvalidValue
        For an empty or repeated header, a column that is asked for but absent, or asked for twice.
    """
    _require_distinct(names)
    for asked in (*text_columns, *ignore):
        if asked not in names:
            raise invalid_cell(f"there is no column {excerpt(asked)} in the table")
    both = set(text_columns) & set(ignore)
    if both:
        asked = min(both)
        raise invalid_cell(f"column {excerpt(asked)} cannot be both read and ignored", column=asked)
    position = {name: index for index, name in enumerate(names)}
    texts = dict.fromkeys(text_columns)
    dropped = {*texts, *ignore}
    numbers = tuple(index for index, name in enumerate(names) if name not in dropped)
    if not numbers:
        raise invalid_cell("the table has no column of numbers")
    return Selection(names=tuple(names), numbers=numbers, texts=tuple(position[name] for name in texts))


def _require_distinct(names: Sequence[str]) -> None:
    seen: set[str] = set()
    for number, name in enumerate(names, start=1):
        if not name.strip():
            raise invalid_cell(f"column {number} has no name", column=str(number))
        if name in seen:
            raise invalid_cell(f"two columns are named {excerpt(name)}", column=name)
        seen.add(name)


def invalid_cell(detail: str, *, row: int | None = None, column: str | None = None) -> CallerError:
    """Return the error of one place in a table.

    Parameters
    ----------
    detail : str
        The sentence, without the place.
    row : int, optional
        Counted from 1, without the header.
    column : str, optional
        The header.

    Returns
    -------
    CallerError
        An `InvalidValue` whose sentence names the place.
    """
    where = f"row {row}" if row is not None else ""
    if row is not None and column is not None:
        where += f", column {excerpt(column)}"
    sentence = f"{where}: {detail}" if where else detail
    return InvalidValue.of(Fault(detail=sentence, code=InvalidValue.code, part=PART, row=row, column=column))
