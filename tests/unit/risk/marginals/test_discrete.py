"""Step quantiles, exactly."""

import math
from fractions import Fraction

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from service.risk import marginals as m


def empirical(values, probabilities=None):
    return m.EmpiricalMarginal(family="empirical", values=list(values), probabilities=probabilities)


def quantile(law, lower, upper=None):
    return float(law.quantile(np.array([lower]), np.array([1.0 - lower if upper is None else upper]))[0])


def test_equal_probabilities_step_exactly_at_k_over_n():
    law = empirical(range(1, 11))
    for k in range(1, 10):
        assert quantile(law, k / 10, (10 - k) / 10) == k
        assert quantile(law, math.nextafter(k / 10, 1.0), 1.0) == k + 1


def test_both_sides_agree_on_the_same_step():
    law = empirical(range(1, 1001))
    for k in (1, 37, 499, 501, 963, 999):
        assert quantile(law, k / 1000, 1.0) == k  # judged from below
        assert quantile(law, 1.0, (1000 - k) / 1000) == k  # judged from above
        assert quantile(law, 1.0, math.nextafter((1000 - k) / 1000, 0.0)) == k + 1


def test_sums_of_probabilities_are_compensated():
    count = 99_999
    rare = 1e-11
    probabilities = [rare] * count + [1.0 - count * rare]
    law = empirical(range(count + 1), probabilities)
    for k in (1, 1000, 77_777, count):
        assert float(law.below(np.array(k - 1.0))) == float(Fraction(rare) * k)  # correctly rounded


def test_the_far_tail_has_all_digits():
    law = empirical([1.0, 2.0, 3.0], [1.0 - 1e-17, 7e-18, 3e-18])
    assert quantile(law, 1.0, 2e-17) == 1.0
    assert quantile(law, 1.0, 5e-18) == 2.0
    assert quantile(law, 1.0, 3e-18) == 2.0
    assert quantile(law, 1.0, 2.9e-18) == 3.0
    assert law.beyond(np.array([0.0, 1.0, 2.0, 3.0])).tolist() == [1.0, 7e-18 + 3e-18, 3e-18, 0.0]


def test_ties_orders_and_values_without_probability():
    law = empirical([5.0, 1.0, 5.0, 9.0, 2.0], [0.25, 0.25, 0.25, 0.0, 0.25])
    assert law.support == (1.0, 5.0)
    assert law.atoms.values.tolist() == [1.0, 2.0, 5.0]
    assert law.atoms.masses.tolist() == [0.25, 0.25, 0.5]
    assert [quantile(law, level) for level in (0.25, 0.26, 0.5, 0.51, 1.0)] == [1.0, 2.0, 2.0, 5.0, 5.0]


def test_probabilities_are_divided_by_their_sum():
    law = empirical([1.0, 2.0], [0.5, 0.5 + 5e-10])
    assert float(law.below(np.array(2.0))) == 1.0
    assert float(law.below(np.array(1.0))) == 0.5 / (1.0 + 5e-10)


@given(
    st.lists(st.tuples(st.integers(-5, 5), st.integers(0, 20)), min_size=1, max_size=12).filter(
        lambda pairs: sum(weight for _, weight in pairs) > 0
    ),
    st.floats(0.0, 1.0),
)
def test_the_definition(pairs, lower):
    total = sum(weight for _, weight in pairs)
    law = empirical([float(value) for value, _ in pairs], [weight / total for _, weight in pairs])
    found = quantile(law, lower)
    below = float(law.below(np.array(found)))
    less = float(law.below(np.array(math.nextafter(found, -math.inf))))
    assert less - 1e-15 <= lower <= below + 1e-15
    exact = Fraction(sum(weight for value, weight in pairs if value <= found), total)
    assert below == pytest.approx(float(exact), rel=1e-14)
    assert law.mean == pytest.approx(sum(value * weight for value, weight in pairs) / total, abs=1e-13)


def test_a_large_sample():
    rng = np.random.Generator(np.random.PCG64(5))
    values = rng.standard_normal(200_000)
    law = empirical(values.tolist())
    ordered = np.sort(values)
    ranks = np.array([1, 2, 999, 100_000, 199_999, 200_000])
    found = law.quantile(ranks / 200_000, 1.0 - ranks / 200_000)
    assert found.tolist() == ordered[ranks - 1].tolist()
    assert law.mean == pytest.approx(values.mean(), abs=1e-14)
    assert law.variance == pytest.approx(values.var(), rel=1e-13)
    assert law.limited_mean(1.0) == pytest.approx(np.minimum(values, 1.0).mean(), abs=1e-14)


def test_equal_laws_are_equal_and_hash_alike():
    assert empirical([1.0, 2.0]) == empirical([1.0, 2.0])
    assert hash(empirical([1.0, 2.0])) == hash(empirical([1.0, 2.0]))
    assert empirical([1.0, 2.0]) != empirical([1.0, 2.5])


def test_a_point():
    law = m.PointMarginal(family="point", value=-3.0)
    assert (law.mean, law.variance, law.support) == (-3.0, 0.0, (-3.0, -3.0))
    assert law.quantile(np.array([0.0, 0.3, 1.0]), np.array([1.0, 0.7, 0.0])).tolist() == [-3.0] * 3
    assert [law.limited_mean(limit) for limit in (-4.0, -3.0, 5.0)] == [-4.0, -3.0, -3.0]
    assert law.layer_mean(-5.0, -4.0) == 1.0
