"""Scenarios in the order of their total; which of them are tied; how deep the order goes."""

import numpy as np
import pytest

from service.risk.ranking import ranked, tie_tolerance, worst
from tests.unit.risk.arithmetic import contributions, es, loss_table, measure, split, value, var


def _ranked(losses, p=None, depth=1.0):
    table = loss_table(losses, p)
    return ranked(table.losses.sum(axis=1), table, depth=depth)


def test_worst_first_and_equal_ones_in_scenario_order():
    assert worst(np.array([1.0, 5.0, 3.0, 5.0]), 1.0).tolist() == [1, 3, 2, 0]


def test_at_least_the_depth_is_kept():
    values = np.arange(100.0)
    assert worst(values, 0.1).tolist() == list(range(99, 88, -1))  # ten and one more
    assert worst(values, 0.5).size == 100  # from here on all are ordered
    assert worst(np.zeros(100), 0.1).size == 100


def test_no_atom_is_cut():
    losses = np.repeat(np.arange(20.0), 10)[:, None] @ np.array([[0.25, 0.75]])
    ranking = _ranked(losses, depth=0.12)
    assert ranking.order.size == 30  # 25 are asked for, atoms have 10
    assert ranking.ties.starts.tolist() == [0, 10, 20]
    smaller = ranking.cut(0.03)
    assert smaller.order.size == 10
    assert smaller.order.tolist() == ranking.order[:10].tolist()
    assert smaller.ties.starts.tolist() == [0]
    assert ranking.cut(0.145) is ranking


def test_unequal_probabilities_keep_all():
    p = np.arange(1.0, 101.0)
    ranking = _ranked(np.random.default_rng(1).normal(size=(100, 2)), p / p.sum(), depth=0.05)
    assert ranking.ordered.complete
    assert ranking.cut(0.05) is ranking


def test_totals_that_differ_by_rounding_are_one_atom():
    """0.1 + 0.5 is 0.6 and 0.2 + 0.4 is 0.6000000000000001."""
    losses = np.array([[0.1, 0.5], [0.2, 0.4], [0.3, 0.3], [0.0, 0.1], [0.35, 0.25], [0.05, 0.55]])
    totals = losses.sum(axis=1)
    assert np.unique(totals).size > 2
    ranking = _ranked(losses)
    assert ranking.ties.starts.tolist() == [0, 5]
    assert np.unique(ranking.ordered.values).size == 2  # and nothing further on sees a difference
    assert contributions("euler", es(0.5), losses) == pytest.approx([0.2, 0.4], abs=1e-15)
    assert contributions("euler", var(0.5), losses, smoothing="none") == pytest.approx([0.2, 0.4], abs=1e-15)


def test_a_single_column_has_no_rounding():
    losses = np.array([0.6, np.nextafter(0.6, 1.0), 0.1])
    assert _ranked(losses).ties.none


def test_the_tolerance_is_that_of_each_scenario():
    rows = np.array([[1.0, -1.0, 0.5], [1e10, -1e10, 0.0], [0.0, 0.0, 0.0]])
    assert tie_tolerance(rows) == pytest.approx([3.0 * 2.0**-52 * x for x in (2.5, 2e10, 0.0)])


@pytest.mark.parametrize("huge", [1e10, 1e13, 1e16, 1e100])
@pytest.mark.parametrize("sign", [1.0, -1.0])
def test_a_huge_loss_does_not_tie_the_others(huge, sign):
    """The tolerance of one scenario must not reach the rest: contributions would no longer add up."""
    rng = np.random.default_rng(4)
    losses = rng.random((1000, 2))
    usual = split("euler", var(0.9), losses, smoothing="none").figures
    losses[17] = sign * huge, 0.0
    assert _ranked(losses).ties.none
    found = split("euler", var(0.9), losses, smoothing="none").figures
    assert found.values.sum() == pytest.approx(value(var(0.9), losses), rel=1e-14)
    assert np.abs(found.values - usual.values).max() < 1.0


@pytest.mark.parametrize(
    "one",
    [var(0.75), var(0.5), es(0.8), measure("expectile", level=0.99), measure("wang", shift=0.5)],
    ids=lambda m: m.name,
)
def test_errors_of_tied_totals_do_not_see_their_rounding(one):
    """Losses in tenths, as amounts in cents are, with totals of four values: errors as for whole numbers."""
    rng = np.random.default_rng(0)
    tenths = rng.integers(0, 4, size=(400, 4))
    tenths[:, -1] = rng.integers(4, 8, size=400) - tenths[:, :-1].sum(axis=1)
    exact, rounded = (split("euler", one, losses).figures for losses in (tenths * 1.0, tenths / 10.0))
    assert np.unique((tenths / 10.0).sum(axis=1)).size > 4
    assert rounded.values == pytest.approx(exact.values / 10.0, rel=1e-12)
    assert rounded.standard_errors == pytest.approx(exact.standard_errors / 10.0, rel=1e-9)
    assert rounded.upper == pytest.approx(exact.upper / 10.0, rel=1e-9)


DRAWS = np.random.default_rng(1).standard_normal(100_000)
MANY = {
    "draws": DRAWS,
    "integers": np.round(DRAWS),
    "mostly zeros": np.maximum(0.0, DRAWS - 1.5),
    "rising": np.arange(100_000.0),
    "falling": -np.arange(100_000.0),
    "large between those looked at": np.where(np.arange(100_000) % 16 == 7, 1e6 + DRAWS, DRAWS),
}


@pytest.mark.parametrize("depth", [0.0001, 0.019, 0.1, 0.4])
@pytest.mark.parametrize("values", MANY.values(), ids=MANY)
def test_a_look_at_a_part_finds_the_worst_of_all(values, depth):
    """The worst are those of a whole sort, every tie with the last of them included."""
    order = np.argsort(-values, kind="stable")
    count = int(np.ceil(depth * values.size)) + 1
    expected = order[values[order] >= values[order[count - 1]]]
    assert np.array_equal(worst(values, depth), expected)
