"""What every measure must do, whatever the losses: tried on each member of the family."""

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from tests.properties.tables import (
    COHERENT,
    DISTORTIONS,
    MEASURES,
    bounded,
    ids,
    of_kind,
    often,
    scale,
    tables,
    weighted_tables,
)
from tests.unit.risk.arithmetic import alone, measure, total, value

every_measure = pytest.mark.parametrize("one", MEASURES, ids=ids)
located = [one for one in MEASURES if one.kind != "standard_deviation" and one.above == "zero"]
homogeneous = [one for one in MEASURES if one.kind != "entropic"]
monotone = [one for one in located if one.above == "zero"]


def near(expected, losses, *, times=1.0):
    """Compare to 1e-12 of the largest losses."""
    return pytest.approx(expected, rel=0.0, abs=1e-12 * times * scale(losses))


def errors_near(expected, losses):
    """Compare errors, which are sums of squares: what cancels in them is gone."""
    return pytest.approx(expected, rel=1e-8, abs=1e-11 * scale(losses), nan_ok=True)


@pytest.mark.parametrize("one", MEASURES, ids=ids)
@bounded
@given(weighted_tables(), st.sampled_from([-1024.0, -0.5, 3.0, 4096.0]))
def test_a_certain_amount_moves_the_figure_by_itself(one, table, amount):
    losses, p = table
    moved = losses.copy()
    moved[:, 0] += amount
    moves = one.kind != "standard_deviation" and one.above == "zero"
    expected = value(one, losses, p) + (amount if moves else 0.0)
    assert value(one, moved, p) == near(
        expected, np.abs(losses) + abs(amount), times=getattr(one, "multiple", 1.0) * 2.0
    )


@pytest.mark.parametrize("one", homogeneous, ids=ids)
@bounded
@given(weighted_tables(), st.sampled_from([1e-6, 0.5, 3.0, 1e6]))
def test_the_figure_grows_with_the_size_of_the_book(one, table, factor):
    losses, p = table
    assert value(one, factor * losses, p) == near(factor * value(one, losses, p), factor * losses, times=5.0)


@often
@given(weighted_tables(), st.sampled_from([1e-3, 0.5, 3.0, 100.0]))
def test_entropic_grows_with_size_if_aversion_shrinks(table, factor):
    losses, p = table
    smaller = value(measure("entropic", aversion=0.5 / factor), factor * losses, p)
    assert smaller == near(factor * value(measure("entropic", aversion=0.5), losses, p), factor * losses, times=2.0)


@pytest.mark.parametrize("one", monotone, ids=ids)
@bounded
@given(weighted_tables(), st.integers(0, 2**32 - 1))
def test_worse_losses_have_no_better_figure(one, table, seed):
    losses, p = table
    rng = np.random.default_rng(seed)
    worse = losses + np.where(rng.random(losses.shape) < 0.5, 0.0, rng.exponential(size=losses.shape))
    assert value(one, worse, p) >= value(one, losses, p) - 1e-12 * scale(worse)


@pytest.mark.parametrize("one", [one for one in of_kind(*DISTORTIONS) if one.above == "zero"], ids=ids)
@bounded
@given(weighted_tables(["normal", "ties", "heavy"], columns=1), st.integers(0, 2**32 - 1))
def test_comonotone_losses_add_up(one, table, seed):
    losses, p = table
    rng = np.random.default_rng(seed)
    knots = np.sort(rng.normal(size=4))
    other = np.interp(losses[:, 0], knots, np.sort(rng.normal(size=4)))
    both = np.stack([losses[:, 0], other], axis=1)
    parts = alone(one, both, p).values
    assert value(one, both, p) == near(parts.sum(), both, times=2.0)


subadditive = [
    *of_kind(*COHERENT),
    *(one for one in of_kind("expectile") if one.level >= 0.5),
    *of_kind("standard_deviation"),
]


@pytest.mark.parametrize("one", subadditive, ids=ids)
@bounded
@given(weighted_tables())
def test_diversification_never_hurts(one, table):
    losses, p = table
    assert value(one, losses, p) <= alone(one, losses, p).values.sum() + 1e-12 * scale(losses) * losses.shape[1]


@every_measure
@bounded
@given(weighted_tables(), st.randoms(use_true_random=False))
def test_the_order_of_scenarios_and_columns_does_not_matter(one, table, random):
    losses, p = table
    n, d = losses.shape
    rows, columns = (np.array(random.sample(range(count), count)) for count in (n, d))
    found = total(one, losses, p)
    other = total(one, losses[rows][:, columns], None if p is None else p[rows])
    assert other.values == near(found.values, losses, times=3.0)
    if np.ptp(losses.sum(axis=1)) > 1e-9 * scale(losses):  # else all errors are rounding, or nothing
        assert other.standard_errors == errors_near(found.standard_errors, losses)
        assert other.lower == errors_near(found.lower, losses)
        assert other.tail_scenarios == pytest.approx(found.tail_scenarios, rel=1e-6)
        assert other.remarks == found.remarks


@every_measure
@bounded
@given(weighted_tables(), st.integers(2, 4))
def test_repeating_every_scenario_changes_no_figure(one, table, times):
    losses, p = table
    again = np.tile(losses, (times, 1))
    weights = None if p is None else np.tile(p, times) / times
    assert value(one, again, weights) == near(value(one, losses, p), losses, times=3.0)
    assert alone(one, again, weights).values == near(alone(one, losses, p).values, losses, times=3.0)


@every_measure
@bounded
@given(weighted_tables(zeros=False), st.data())
def test_cutting_a_scenario_in_two_changes_no_figure(one, table, data):
    losses, p = table
    n = losses.shape[0]
    which, share = data.draw(st.integers(0, n - 1)), data.draw(st.sampled_from([0.5, 0.25, 0.1]))
    p = np.full(n, 1.0 / n) if p is None else p
    cut = np.append(p, share * p[which])
    cut[which] -= share * p[which]
    more = np.concatenate([losses, losses[which : which + 1]])
    assert value(one, more, cut) == near(value(one, losses, p), losses, times=3.0)


@every_measure
@bounded
@given(tables())
def test_equal_probabilities_are_none(one, losses):
    n = losses.shape[0]
    given_ = total(one, losses, np.full(n, 1.0 / n))
    usual = total(one, losses)
    assert given_.values == near(usual.values, losses, times=3.0)
    if one.kind not in ("value_at_risk", "return_level"):  # whose intervals are exact for equal probabilities alone
        assert given_.standard_errors == errors_near(usual.standard_errors, losses)


@every_measure
@bounded
@given(weighted_tables(), st.integers(0, 2**32 - 1))
def test_scenarios_without_probability_are_not_there(one, table, seed):
    losses, p = table
    n, d = losses.shape
    rng = np.random.default_rng(seed)
    p = np.full(n, 1.0 / n) if p is None else p
    extra = rng.normal(size=(3, d)) * 10.0 * scale(losses) / d
    more, weights = np.concatenate([extra, losses]), np.concatenate([np.zeros(3), p])
    assert value(one, more, weights) == near(value(one, losses, p), more, times=3.0)


@pytest.mark.parametrize("one", [one for one in MEASURES if one.above == "mean"], ids=ids)
@bounded
@given(weighted_tables())
def test_above_mean_is_the_figure_less_the_mean(one, table):
    losses, p = table
    whole = measure(one.kind, **one.parameters)
    mean = np.average(losses.sum(axis=1), weights=p)
    assert value(one, losses, p) == near(value(whole, losses, p) - mean, losses, times=2.0)
    means = np.average(losses, axis=0, weights=p)
    assert alone(one, losses, p).values == near(alone(whole, losses, p).values - means, losses, times=2.0)


@every_measure
@bounded
@given(weighted_tables())
def test_columns_alone_are_books_of_one_column(one, table):
    losses, p = table
    parts = alone(one, losses, p)
    for j in range(losses.shape[1]):
        single = total(one, losses[:, j], p)
        assert parts.values[j] == near(single.values[0], losses)
        assert parts.standard_errors[j] == errors_near(single.standard_errors[0], losses)
