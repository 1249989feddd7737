"""Measures of the tail: which scenarios count, how deep they look, their windows and errors."""

from fractions import Fraction

import numpy as np
import pytest

from service.risk.measures.quantile_based import window_depth
from service.risk.quantiles import order_statistic_ranks
from tests.unit.risk.arithmetic import alone, contributions, es, measure, split, total, value, var

RNG = np.random.default_rng(10)


@pytest.mark.parametrize(
    ("period", "per_period", "share"),
    [
        (200.0, 1.0, Fraction(1, 200)),
        (3.0, 1.0, Fraction(1, 3)),
        (0.1, 20.0, Fraction(1, 2)),
        (1.1, 1.0, Fraction(10, 11)),
    ],
)
def test_return_levels_in_exact_fractions(period, per_period, share):
    one = measure("return_level", return_period=period, scenarios_per_period=per_period)
    assert one.share == share
    n = 1100
    losses = RNG.permutation(np.arange(n) + 1.0)
    assert value(one, losses) == n - int(share * n)  # a third of 3n is exact; in binary it is not
    assert value(measure("return_level", return_period=3.0), np.arange(300.0)) == 199.0


def test_range_value_at_risk_is_between_its_shortfalls():
    losses = RNG.normal(size=(500, 3))
    one = measure("range_value_at_risk", lower_level=0.9, upper_level=0.98)
    for function in (value, lambda *a: contributions("euler", *a)):
        outer, inner = (function(es(level), losses) for level in (0.9, 0.98))
        assert function(one, losses) == pytest.approx((0.1 * outer - 0.02 * inner) / 0.08, rel=1e-12)
    whole = measure("range_value_at_risk", lower_level=0.9, upper_level=1.0)
    assert value(whole, losses) == pytest.approx(value(es(0.9), losses), rel=1e-14)
    assert total(whole, losses).standard_errors == pytest.approx(total(es(0.9), losses).standard_errors)
    mean = measure("range_value_at_risk", lower_level=0.0, upper_level=1.0)
    assert value(mean, losses) == pytest.approx(losses.sum(axis=1).mean(), rel=1e-12)
    sd = losses.sum(axis=1).std()
    assert total(mean, losses).standard_errors == pytest.approx([sd / np.sqrt(500.0)])
    narrow = measure("range_value_at_risk", lower_level=0.9, upper_level=0.9000000001)
    assert value(narrow, losses) == pytest.approx(np.sort(losses.sum(axis=1))[450])


def test_the_error_of_a_tail_mean_with_an_atom_at_the_quantile():
    """An atom that straddles the level adds nothing: (L - q)+ is 0 on it. The plain sd of the tail would be larger."""
    losses = np.concatenate([np.full(800, 1.0), np.full(100, 2.0), np.arange(3.0, 103.0)])
    excess = np.maximum(losses - 2.0, 0.0)
    found = total(es(0.85), losses)
    assert found.standard_errors == pytest.approx([excess.std() / 0.15 / np.sqrt(1000.0)])
    assert found.tail_scenarios.tolist() == [150.0]


@pytest.mark.parametrize("n", [50, 400, 10_000, 1_000_000])
@pytest.mark.parametrize("level", [0.75, 0.9, 0.99, 0.999, 0.99999])
@pytest.mark.parametrize("coverage", [0.5, 0.95, 0.999999])
def test_the_interval_lies_within_the_depth(n, level, coverage):
    """What is kept of the tail must reach the lower rank of the interval, at the least for every usual coverage."""
    low, high, _ = order_statistic_ranks(n, level, coverage)
    if low >= 1 and high <= n:
        kept = np.ceil(window_depth(1.0 - level, n, smoothed=False) * n) + 1
        assert n - low < kept


def test_smoothing_beats_a_single_scenario():
    """Contributions to a quantile of independent normal columns are proportional to their variances."""
    rng = np.random.default_rng(11)
    scales = np.array([1.0, 2.0, 3.0])
    expected = 2.3263478740 * scales**2 / np.sqrt(14.0)
    smoothed, plain = np.zeros(3), np.zeros(3)
    for _ in range(40):
        losses = rng.normal(size=(5000, 3)) * scales
        smoothed += (contributions("euler", var(0.99), losses) - expected) ** 2
        plain += (contributions("euler", var(0.99), losses, smoothing="none") - expected) ** 2
    assert (smoothed < plain / 4.0).all()


def test_few_scenarios_are_not_smoothed():
    losses = RNG.normal(size=(20, 2))
    at = int(np.argsort(losses.sum(axis=1))[14])
    found = split("euler", var(0.75), losses)
    assert found.window is None
    assert found.figures.values.tolist() == losses[at].tolist()


def test_contributions_of_a_comonotone_book_are_as_sure_as_its_quantiles():
    """The regression leaves no residual; what is left is the place where the line is read."""
    factor = RNG.lognormal(size=4000)
    losses = np.stack([factor, 3.0 * factor, 0.5 * factor], axis=1)
    found = split("euler", var(0.95), losses).figures
    expected = alone(var(0.95), losses)
    assert found.values == pytest.approx(expected.values, rel=1e-12)
    assert found.standard_errors == pytest.approx(expected.standard_errors, rel=1e-6)
