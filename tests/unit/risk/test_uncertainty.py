"""From influence values to errors, intervals and what is said about them."""

import numpy as np
import pytest
from scipy import special

from service.risk.uncertainty import (
    Estimates,
    Influence,
    Sampling,
    judged_by_carriers,
    judged_by_tail,
    lean_of_parts,
    leaning_estimates,
    spread,
)

RNG = np.random.default_rng(6)


def _errors(influence, **sampling):
    return spread(influence, Sampling(**sampling)).errors


def test_the_error_is_the_root_mean_square_over_n():
    values = RNG.normal(size=(3, 50)) + 7.0  # they need not be centred
    found = _errors(Influence(values, np.zeros(3)), scenarios=50)
    assert found == pytest.approx(values.std(axis=1) / np.sqrt(50.0))


def test_scenarios_left_out_count_with_their_common_value():
    values = RNG.normal(size=(2, 50))
    values[:, 20:] = -0.25
    whole = spread(Influence(values, np.zeros(2)), Sampling(50), beside=Influence(values[:1] ** 2, np.zeros(1)))
    kept = spread(
        Influence(values[:, :20], np.full(2, -0.25)),
        Sampling(50),
        beside=Influence(values[:1, :20] ** 2, np.full(1, 0.0625)),
    )
    for name in ("errors", "skewness", "effective", "correlation"):
        assert getattr(kept, name) == pytest.approx(getattr(whole, name)), name


def test_importance_weights():
    values, p = RNG.normal(size=(2, 30)), RNG.random(30)
    p /= p.sum()
    expected = np.sqrt(np.sum((p * (values - (values @ p)[:, None])) ** 2, axis=1))
    assert _errors(Influence(values, np.zeros(2)), scenarios=30, p=p[None, :]) == pytest.approx(expected)
    equal = np.full((1, 30), 1.0 / 30.0)
    assert _errors(Influence(values, np.zeros(2)), scenarios=30, p=equal) == pytest.approx(
        _errors(Influence(values, np.zeros(2)), scenarios=30)
    )


def test_scenarios_in_clusters_err_together():
    values = RNG.normal(size=(1, 20))
    repeated = Influence(np.repeat(values, 5, axis=1), np.zeros(1))
    clusters = np.repeat(np.arange(20), 5)[None, :]
    found = spread(repeated, Sampling(100, clusters=clusters))
    once = spread(Influence(values, np.zeros(1)), Sampling(20))
    for name in ("errors", "skewness", "effective"):
        assert getattr(found, name) == pytest.approx(getattr(once, name)), name
    apart = spread(repeated, Sampling(100, clusters=np.arange(100)[None, :]))
    assert apart.errors == pytest.approx(_errors(repeated, scenarios=100))


def test_how_many_scenarios_carry_an_error():
    alike = spread(Influence(np.array([[1.0, -1.0] * 30]), np.zeros(1)), Sampling(60))
    assert alike.effective == pytest.approx([60.0])
    assert alike.skewness == pytest.approx([0.0], abs=1e-12)
    one = np.zeros((1, 100_000))
    one[0, 0] = 1.0
    alone = spread(Influence(one, np.zeros(1)), Sampling(100_000))
    assert alone.effective == pytest.approx([1.0], rel=1e-3)
    assert alone.skewness == pytest.approx([1.0], rel=1e-3)
    nothing = spread(
        Influence(np.ones((1, 7)), np.zeros(1)), Sampling(7), beside=Influence(np.ones((1, 7)), np.zeros(1))
    )
    assert nothing.errors.tolist() == [0.0]
    assert nothing.effective.tolist() == [7.0]
    assert nothing.correlation.tolist() == [0.0]


def test_an_interval_without_lean_is_symmetric():
    of = spread(Influence(RNG.normal(size=(1, 10_000)), np.zeros(1)), Sampling(10_000))
    found = leaning_estimates(np.array([3.0]), of, np.zeros(1), coverage=0.95, tail_scenarios=np.array([500.0]))
    t = special.stdtrit(2.0 * of.effective[0], 0.975)
    assert found.lower == pytest.approx(3.0 - t * of.errors)
    assert found.upper == pytest.approx(3.0 + t * of.errors)
    assert found.method == "skewness_adjusted"


def test_an_interval_leans_to_the_side_of_its_lean():
    of = spread(Influence(RNG.normal(size=(1, 10_000)), np.zeros(1)), Sampling(10_000))
    right, left = (
        leaning_estimates(np.zeros(1), of, np.array([lean]), coverage=0.95, tail_scenarios=np.array([500.0]))
        for lean in (0.2, -0.2)
    )
    assert right.upper[0] > -right.lower[0] > 0.0
    assert left.upper == pytest.approx(-right.lower)
    assert left.lower == pytest.approx(-right.upper)
    # symmetric for the logarithm of the excess over q: (upper - q)(lower - q) = (value - q)^2
    lean = of.errors / 0.05
    found = leaning_estimates(np.array([1.05]), of, lean, coverage=0.95, tail_scenarios=np.array([500.0]))
    assert (found.upper - 1.0) * (found.lower - 1.0) == pytest.approx(0.05**2)


def test_parts_lean_with_the_total_as_far_as_they_move_with_it():
    total = RNG.normal(size=(1, 4000))
    parts = np.concatenate([2.0 * total, -total, RNG.normal(size=(1, 4000))])
    of = spread(Influence(parts, np.zeros(3)), Sampling(4000), beside=Influence(total, np.zeros(1)))
    assert lean_of_parts(of, 0.3) == pytest.approx([0.3, -0.3, 0.0], abs=1e-4)


def _figures(counts):
    counts = np.array(counts)
    ones = np.ones(counts.size)
    return Estimates(ones, ones, 0.0 * ones, 2.0 * ones, counts, "normal")


@pytest.mark.parametrize(
    ("counts", "given", "remarks"),
    [
        ([9.999, 5.0], [False, False], {"no_error"}),
        ([10.0, 99.9], [True, True], {"thin_tail"}),
        ([100.0, 1e6], [True, True], set()),
        ([9.0, 50.0, 200.0], [False, True, True], {"no_error", "thin_tail"}),
    ],
)
def test_a_thin_tail_is_remarked_on_and_a_thinner_one_has_no_error(counts, given, remarks):
    found = judged_by_tail(_figures(counts))
    for part in (found.standard_errors, found.lower, found.upper):
        assert np.isfinite(part).tolist() == given
    assert found.values.tolist() == [1.0] * len(counts)
    assert found.remarks == remarks


@pytest.mark.parametrize(
    ("counts", "factor", "remarks"),
    [([4.9], 1.0, {"no_error"}), ([5.0], 1.0, {"few_scenarios"}), ([15.0], 1.0, set()), ([40.0], 0.1, {"no_error"})],
)
def test_measures_of_the_whole_distribution_are_judged_by_what_carries_their_error(counts, factor, remarks):
    assert judged_by_carriers(_figures(counts), factor).remarks == remarks


def test_joining_keeps_all_remarks():
    one, two = _figures([1.0]).remarked("a"), _figures([2.0, 3.0]).remarked("b")
    both = Estimates.joined([one, two])
    assert both.tail_scenarios.tolist() == [1.0, 2.0, 3.0]
    assert both.remarks == {"a", "b"}
    assert Estimates.joined([one]) is one
