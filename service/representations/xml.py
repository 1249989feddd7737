"""An answer as XML, for the spreadsheet function that reads it: each row of the CSV as a row of attributes."""

from math import isfinite
from typing import Protocol
from xml.sax.saxutils import quoteattr

from service.errors import Fault, InvalidValue
from service.representations.table import Table

MOST_CHARACTERS = 32_767  # of a spreadsheet's cell
LINE_ENDS = {"\n": "&#10;", "\r": "&#13;", "\t": "&#9;"}


class Tabular(Protocol):
    """An answer that offers a flat view of itself."""

    def table(self) -> Table: ...


def xml_bytes(answer: Tabular) -> bytes:
    """Return the answer's table as XML, in UTF-8.

    Numbers are the shortest decimals that read back the same, as in the CSV; what is null there is an
    attribute left out here.

    Raises
    ------
    InvalidValue
        For several measures or rules, whose rows could not be told apart by their ids alone, and for more
        characters than a cell of a spreadsheet holds.
    """
    table = answer.table()
    names = [column.name for column in table.columns]
    for name, what in (("measure", "measure"), ("rule", "rule")):
        count = len({row[names.index(name)] for row in table.rows}) if name in names else 1
        if count > 1:
            raise _refused(f"XML holds one {what} and this answer has {count}; ask for one, or take CSV")
    rows = "".join(f"<row {_attributes(names, row)}/>\n" for row in table.rows)
    document = f'<?xml version="1.0" encoding="UTF-8"?>\n<rows>\n{rows}</rows>\n'
    if len(document) > MOST_CHARACTERS:
        detail = (
            f"the answer has {len(document):,} characters as XML, and a cell of a spreadsheet holds "
            f"{MOST_CHARACTERS:,}; take CSV, or ask for fewer groups"
        )
        raise _refused(detail)
    return document.encode()


def _refused(detail: str) -> InvalidValue:
    return InvalidValue(detail, faults=[Fault(detail=detail, code=InvalidValue.code, header="Accept")])


def _attributes(names: list[str], row: tuple[object, ...]) -> str:
    cells = ((name, cell) for name, cell in zip(names, row, strict=True) if cell is not None)
    return " ".join(f"{name}={quoteattr(_cell(cell), LINE_ENDS)}" for name, cell in cells)


def _cell(cell: object) -> str:
    """Return a text as it is and a number by its shortest decimal; zero has no sign."""
    if isinstance(cell, int):
        return str(cell)
    if not isinstance(cell, float):
        return str(cell)
    if not isfinite(cell):
        raise ArithmeticError(f"{cell} where a number is due")
    return repr(float(cell) + 0.0)
