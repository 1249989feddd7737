"""A table as it was sent: what does not fit it is refused in words."""

import numpy as np
import pytest

from service.errors import InvalidValue
from service.payloads import CSV, TABLE_READERS
from service.resolve import loss_table
from service.schemas.losses import ScenarioLosses, SubPortfolioColumn
from service.settings import Settings


def refused(table, **losses):
    """Return the fault of a table."""
    part = None if isinstance(table, np.ndarray) else "body"
    asked = ScenarioLosses(kind="scenarios", **({"part": "table"} if part else {}), **losses)
    with pytest.raises(InvalidValue) as caught:
        loss_table(asked, table, part=part, settings=Settings())
    return caught.value.faults[0]


def test_a_turned_table_is_told_what_a_row_is():
    named = [SubPortfolioColumn(id=name) for name in "ab"]
    plain = "2 sub-portfolios are named, but the table has"
    for rows, layout, words in [
        ((2, 4), "by_scenario", f"{plain} 4 columns; a row is a scenario unless layout is 'by_sub_portfolio'"),
        ((4, 2), "by_sub_portfolio", f"{plain} 4 rows; a row is a sub-portfolio unless layout is 'by_scenario'"),
        ((5, 4), "by_scenario", f"{plain} 4 columns"),
    ]:
        fault = refused(np.ones(rows), sub_portfolios=named, layout=layout, values=[])
        assert (fault.pointer, fault.detail) == ("/losses/sub_portfolios", words)


@pytest.mark.parametrize(
    ("header", "column", "words"),
    [
        ("a, b", " b", "' b': a name begins with a letter, a digit or an underscore; the space behind the comma is"),
        ("a,=b", "=b", "'=b': a name begins with a letter, a digit or an underscore"),
    ],
)
def test_a_name_in_the_header_is_shown(header, column, words):
    fault = refused(TABLE_READERS[CSV](f"{header}\n1,2\n".encode(), text_columns=[], ignore=[], max_cells=9))
    assert (fault.part, fault.column) == ("body", column)
    assert fault.detail.startswith(words)
