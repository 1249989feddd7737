"""Levels as decimals, running sums, positions, intervals and ties."""

from fractions import Fraction
from math import comb, fsum

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from service.risk.quantiles import (
    Ordered,
    Ties,
    compensated_cumsum,
    decimal,
    distribution_error,
    order_statistic_ranks,
    quantile_error,
    quantile_interval,
)
from tests.unit.risk.arithmetic import es, ordered, value, var

bounded = settings(derandomize=True, max_examples=40, deadline=None, database=None)


@pytest.mark.parametrize(
    ("number", "expected"),
    [
        (0.995, Fraction(199, 200)),
        (0.95, Fraction(19, 20)),
        (1.0 - 0.9, Fraction(1, 10)),  # 0.09999999999999998 in binary64
        (0.1 + 0.2, Fraction(3, 10)),  # 0.30000000000000004
        (0.975, Fraction(39, 40)),
        (1.0 / 3.0, Fraction(333333333333333, 10**15)),
        (1e-300, Fraction(1, 10**300)),
        (200.0, Fraction(200)),
        (1e22, Fraction(10**22)),
    ],
)
def test_a_level_is_the_decimal_that_was_meant(number, expected):
    assert decimal(number) == expected


@given(st.integers(1, 10**15 - 1))
@bounded
def test_every_decimal_of_fifteen_digits_comes_back(digits):
    assert decimal(float(Fraction(digits, 10**15))) == Fraction(digits, 10**15)


@pytest.mark.parametrize(
    ("n", "level", "rank"),
    [
        (20, 0.95, 19),  # 0.95 * 20 is 19 exactly, and 1 - 0.95 is 0.050000000000000044
        (10, 0.9, 9),  # 10 * (1 - 0.9) is 0.9999999999999998
        (10, 0.7, 7),  # 0.7 * 10 is 7.000000000000001 by some routes
        (100, 0.29, 29),  # 0.29 * 100 is 28.999999999999996
        (1000, 0.995, 995),
        (7, 0.5, 4),
        (1, 0.999, 1),
        (1, 0.001, 1),
        (3, 1e-9, 1),
        (200, 0.995, 199),
        (200, 0.9951, 200),
    ],
)
@pytest.mark.parametrize("explicit", [False, True])
def test_the_lower_quantile_is_decided_on_the_decimal(n, level, rank, explicit):
    losses = np.random.default_rng(n).permutation(np.arange(1.0, n + 1.0))
    p = np.full(n, 1.0 / n) if explicit else None
    assert value(var(level), losses, p) == rank


@given(
    st.lists(st.tuples(st.integers(-5, 5), st.integers(0, 6)), min_size=1, max_size=30).filter(
        lambda pairs: sum(w for _, w in pairs) > 0
    ),
    st.sampled_from([0.001, 0.05, 0.25, 0.5, 0.6, 0.75, 0.9, 0.95, 0.99, 0.999]),
)
@bounded
def test_quantile_and_tail_mean_by_brute_force(pairs, level):
    """Every level k/20 and k/1000 may fall on an edge of an atom here."""
    losses, weights = zip(*pairs, strict=True)
    mass = sum(weights)
    share = Fraction(str(level))
    expected = min(x for x, _ in pairs if Fraction(sum(w for y, w in pairs if y <= x), mass) >= share)
    p = np.array(weights) / mass
    assert value(var(level), losses, p) == expected
    above = sum(Fraction(w, mass) * y for y, w in pairs if y > expected)
    left = Fraction(sum(w for y, w in pairs if y <= expected), mass) - share
    shortfall = (above + left * expected) / (1 - share)
    # an edge is recognised within 1e-12 of mass, and what that moves is divided by the tail
    assert value(es(level), losses, p) == pytest.approx(float(shortfall), abs=1e-13 + 1e-14 / float(1 - share))


def test_running_sums_do_not_drift():
    terms = np.full(1_000_000, 0.1)
    found = compensated_cumsum(terms)
    for count in (1, 10, 12_345, 999_999, 1_000_000):
        assert found[count - 1] == fsum([0.1] * count)
    assert np.cumsum(terms)[-1] != found[-1]
    rng = np.random.default_rng(1)
    mixed = rng.random((2, 5000)) * 10.0 ** rng.integers(-12, 1, size=(2, 5000))
    found = compensated_cumsum(mixed)
    for row, sums in zip(mixed.tolist(), found, strict=True):
        exact = [float(fsum(row[:count])) for count in (1, 100, 5000)]
        assert sums[[0, 99, 4999]] == pytest.approx(exact, rel=3e-16)


def _brute_ranks(n, level, coverage):
    p, tail = Fraction(str(level)), (1 - Fraction(str(coverage))) / 2
    mass = [comb(n, k) * p**k * (1 - p) ** (n - k) for k in range(n + 1)]
    below = [sum(mass[:k], Fraction(0)) for k in range(n + 2)]  # P(B <= k - 1)
    low = max((rank for rank in range(1, n + 1) if below[rank] <= tail), default=0)
    high = min((rank for rank in range(1, n + 1) if below[rank] >= 1 - tail), default=n + 1)
    return low, high, below[high] - below[low]


@pytest.mark.parametrize("coverage", [0.5, 0.8, 0.95, 0.999])
@pytest.mark.parametrize("level", [0.01, 0.5, 0.75, 0.95, 0.995])
@pytest.mark.parametrize("n", [1, 2, 5, 30, 59, 90, 137])
def test_ranks_of_order_statistics_by_exact_binomials(n, level, coverage):
    low, high, actual = order_statistic_ranks(n, level, coverage)
    expected_low, expected_high, expected = _brute_ranks(n, level, coverage)
    assert (low, high) == (expected_low, expected_high)
    assert actual == pytest.approx(float(expected), abs=1e-12)


def test_ranks_of_order_statistics_of_a_large_sample():
    from scipy import stats  # noqa: TID251  # the slow half of scipy, for one independent check

    for n, level in ((10_000, 0.99), (1_000_000, 0.995), (250_000, 0.5)):
        low, high, actual = order_statistic_ranks(n, level, 0.95)
        law = stats.binom(n, level)
        assert law.cdf(low - 1) <= 0.025 < law.cdf(low)
        assert law.cdf(high - 2) < 0.975 <= law.cdf(high - 1)
        assert actual == pytest.approx(law.cdf(high - 1) - law.cdf(low - 1), abs=1e-9)


def test_an_interval_needs_a_finite_rank():
    of, _ = ordered(np.arange(250.0))
    found = quantile_interval(of, Fraction(1, 100), 0.95)
    assert np.isnan(found.upper).all()
    assert np.isnan(found.lower).all()
    assert np.isnan(quantile_error(of, Fraction(1, 100))).all()
    found = quantile_interval(of, Fraction(1, 20), 0.95)  # ranks 230 and 245 (exact binomial)
    assert (found.lower.tolist(), found.upper.tolist()) == ([229.0], [244.0])
    assert found.coverage == pytest.approx(0.9720578544, abs=1e-10)


def test_the_error_of_a_quantile_is_its_interval_in_units_of_normal_errors():
    of, _ = ordered(np.arange(250.0))
    z = 2.198  # of the coverage .97206
    assert quantile_error(of, Fraction(1, 20)) == pytest.approx(15.0 / (2.0 * z), rel=1e-3)


def test_the_error_of_the_distribution_function():
    rng = np.random.default_rng(2)
    losses, p = rng.normal(size=50), rng.random(50)
    p /= p.sum()
    of, _ = ordered(losses)
    assert distribution_error(of, Fraction(1, 5)) == pytest.approx(np.sqrt(0.16 / 50.0))
    of, _ = ordered(losses, p)
    q = of.at(of.position(Fraction(1, 5)))
    expected = np.sqrt(np.sum((p * ((losses <= q) - 0.8)) ** 2))
    assert distribution_error(of, Fraction(1, 5)) == pytest.approx(expected)


def test_tail_weights():
    of, _ = ordered([5.0, 4.0, 3.0, 2.0, 1.0])
    assert of.tail_weights(Fraction(1, 2))[0] == pytest.approx([0.4, 0.4, 0.2, 0.0, 0.0], abs=1e-16)
    assert of.tail_weights(Fraction(1, 100))[0] == pytest.approx([1.0, 0.0, 0.0, 0.0, 0.0], abs=1e-16)
    assert of.tail_weights(Fraction(1))[0] == pytest.approx([0.2] * 5)
    of, _ = ordered([2.0, 1.0, 0.0], [0.1, 0.2, 0.7])
    assert of.tail_weights(Fraction(3, 10))[0] == pytest.approx([1 / 3, 2 / 3, 0.0], abs=1e-16)
    assert of.tail_weights(Fraction(1, 5))[0] == pytest.approx([0.5, 0.5, 0.0], abs=1e-15)


def test_effective_tail():
    of, _ = ordered(np.arange(40.0))
    assert of.effective_tail(Fraction(1, 10)).tolist() == [4.0]
    assert of.effective_tail(Fraction(1, 16)).tolist() == [2.5]
    of, _ = ordered([3.0, 2.0, 1.0], [0.1, 0.3, 0.6])
    assert of.effective_tail(Fraction(2, 5)) == pytest.approx([0.16 / 0.10])
    # at the quantile, scenarios of one value count for the same part of themselves in any order
    for p in ([0.1, 0.3, 0.2, 0.4], [0.1, 0.2, 0.3, 0.4]):
        of, _ = ordered([3.0, 2.0, 2.0, 1.0], p)
        part = (0.35 - 0.1) / 0.5
        assert of.effective_tail(Fraction(7, 20)) == pytest.approx([0.35**2 / (0.01 + part * (0.09 + 0.04))])


def _ties(values, p=None, tolerance=0.0):
    of, order = ordered(values, p)
    return Ties.of(of, tolerance=np.full(len(order), tolerance)), order


def test_ties_are_runs_of_equal_values():
    ties, _ = _ties([1.0, 3.0, 3.0, 2.0, 1.0, 1.0], [0.1, 0.2, 0.1, 0.3, 0.0, 0.3])
    assert ties.starts.tolist() == [0, 2, 3]
    assert ties.atom.tolist() == [0, 0, 1, 2, 2, 2]
    assert not ties.none
    assert ties.sums(ties.p) == pytest.approx([0.3, 0.3, 0.4])
    assert ties.shared(np.array([0.3, 0.0, 0.5, 0.2, 0.0, 0.0])) == pytest.approx([0.2, 0.1, 0.5, 0.05, 0.0, 0.15])
    means = ties.means(np.array([[1.0], [4.0], [7.0], [4.0], [99.0], [0.0]]))
    assert means[:, 0] == pytest.approx([2.0, 7.0, 1.0])
    assert ties.spread(np.array([5.0, 6.0, 7.0])).tolist() == [5.0, 5.0, 6.0, 7.0, 7.0, 7.0]


def test_no_ties():
    ties, _ = _ties([3.0, 1.0, 2.0])
    assert ties.none
    weights = np.array([0.5, 0.5, 0.0])
    assert ties.shared(weights).tolist() == weights.tolist()


def test_an_atom_without_probability_gets_nothing():
    ties, _ = _ties([2.0, 2.0, 1.0], [0.0, 0.0, 1.0])
    assert ties.shared(np.array([0.0, 0.0, 1.0])).tolist() == [0.0, 0.0, 1.0]
    assert ties.means(np.array([[5.0], [7.0], [1.0]]))[:, 0].tolist() == [0.0, 1.0]


def test_neighbours_within_the_tolerance_are_tied():
    ties, _ = _ties([1.0, 1.0 + 2e-16, 1.1], tolerance=1e-15)
    assert ties.starts.tolist() == [0, 1]


def test_masses_of_equal_scenarios_are_counts():
    of = Ordered.of(np.array([[3.0, 2.0, 1.0]]), scenarios=10, probabilities=None, sampled=True)
    assert not of.complete
    assert of.upper.tolist() == [[1.0, 2.0, 3.0]]
    assert of.unit == 10.0
    assert of.position(Fraction(2, 10)).tolist() == [2]
    assert of.position(Fraction(19, 100)).tolist() == [1]
