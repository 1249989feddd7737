"""Groups along attributes, and losses too large to be squared."""

import numpy as np
import pytest

from service.errors import InvalidValue, NotDefined
from service.risk.loss_table import SubPortfolio, check_magnitude, group_losses, groups_of
from tests.unit.risk.arithmetic import es, framed

BOOK = (
    SubPortfolio("a", {"entity": "north", "line": "hull"}),
    SubPortfolio("b", {"entity": "south", "line": "hull"}),
    SubPortfolio("c", {"entity": "north"}),
    SubPortfolio("d", {"line": "cargo", "entity": "north", "treaty": "q/s"}),
)


def _found(attributes):
    return [(one.attribute, one.name, one.members.tolist()) for one in groups_of(BOOK, attributes)]


def test_groups_in_the_order_asked_and_of_first_appearance():
    assert _found(["line", "entity"]) == [
        ("line", "hull", [0, 1]),
        ("line", None, [2]),
        ("line", "cargo", [3]),
        ("entity", "north", [0, 2, 3]),
        ("entity", "south", [1]),
    ]
    assert _found([]) == []


def test_a_crossing_needs_all_its_attributes():
    assert _found(["entity/line"]) == [
        ("entity/line", "north/hull", [0]),
        ("entity/line", "south/hull", [1]),
        ("entity/line", None, [2]),
        ("entity/line", "north/cargo", [3]),
    ]


@pytest.mark.parametrize(("attribute", "missing"), [("office", "office"), ("line/office", "office"), ("", "")])
def test_an_attribute_that_nobody_has(attribute, missing):
    with pytest.raises(InvalidValue, match=f"no sub-portfolio has the attribute '{missing}'") as caught:
        groups_of(BOOK, ["line", attribute])
    (fault,) = caught.value.faults
    assert (fault.code, fault.pointer) == ("unknown_attribute", "/1")


def test_a_value_with_a_slash_makes_a_crossing_ambiguous():
    assert ("treaty", "q/s", [3]) in _found(["treaty"])
    with pytest.raises(InvalidValue, match="'q/s' holds a '/'") as caught:
        groups_of(BOOK, ["entity/treaty"])
    (fault,) = caught.value.faults
    assert (fault.code, fault.pointer) == ("ambiguous_group", "/0")


def test_summed_losses():
    losses = np.arange(12.0).reshape(3, 4)
    sums = group_losses(losses, groups_of(BOOK, ["line", "entity"]))
    assert sums.shape == (3, 5)
    assert sums.flags.c_contiguous
    assert sums[:, 0].tolist() == (losses[:, 0] + losses[:, 1]).tolist()
    assert sums[:, 3].tolist() == losses[:, [0, 2, 3]].sum(axis=1).tolist()
    everyone = groups_of(BOOK[:2], ["line"])
    assert group_losses(losses[:, :2], everyone)[:, 0].tolist() == losses[:, :2].sum(axis=1).tolist()


@pytest.mark.parametrize("loss", [1e151, -1e151, np.inf])
def test_losses_whose_square_overflows(loss):
    with pytest.raises(NotDefined, match="scenario 1 add up to more than 1e\\+150") as caught:
        check_magnitude(np.array([1.0, loss, -1e160]))
    assert caught.value.faults[0].pointer == "/1"


def test_sums_that_overflow_are_refused_and_large_ones_are_not():
    check_magnitude(np.array([1e150, -1e150]))
    with pytest.raises(NotDefined), np.errstate(over="ignore"):
        framed(es(0.5), [[1e308, 1e308], [0.0, 0.0]])
