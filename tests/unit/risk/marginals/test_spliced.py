"""A body and a tail joined at a threshold."""

import math

import numpy as np
import pytest

from service.risk import marginals as m

BODY = m.GammaMarginal(family="gamma", shape=2.0, scale=500.0)
TAIL = m.GeneralizedParetoMarginal(family="generalized_pareto", shape=0.4, scale=900.0, threshold=2500.0)
FURTHER = m.LognormalMarginal(family="lognormal", mu=7.0, sigma=1.2)
OBSERVED = m.EmpiricalMarginal(
    family="empirical", values=[10.0, 800.0, 2500.0, 9000.0], probabilities=[0.4, 0.3, 0.2, 0.1]
)
STUDENT = m.StudentTMarginal(family="student_t", df=0.8, location=0.0, scale=100.0)


def spliced(body, tail, *, threshold=2500.0, tail_probability=0.08):
    return m.SplicedMarginal(
        family="spliced", body=body, tail=tail, threshold=threshold, tail_probability=tail_probability
    )


PARTS = [(BODY, TAIL), (BODY, FURTHER), (OBSERVED, TAIL), (BODY, OBSERVED), (OBSERVED, OBSERVED), (STUDENT, TAIL)]
CASES = [
    pytest.param(spliced(body, tail, tail_probability=probability), id=f"{body.family}-{tail.family}-{probability}")
    for body, tail in PARTS
    for probability in (1e-9, 0.08, 0.9)
]


@pytest.mark.parametrize("law", CASES)
def test_each_part_has_its_probability(law):
    at = np.array(law.threshold)
    assert float(law.beyond(at)) == pytest.approx(law.tail_probability, rel=1e-14)
    assert float(law.below(at)) == pytest.approx(1.0 - law.tail_probability, rel=1e-14)
    split = law.tail_probability
    around = np.array([split * (1.0 + 1e-9), split * (1.0 - 1e-9)])
    low, high = law.quantile(1.0 - around, around) if split < 0.5 else law.quantile([0.1 - 1e-10, 0.1 + 1e-10], around)
    assert low <= law.threshold <= high


@pytest.mark.parametrize("law", CASES)
def test_each_part_is_the_cut_law(law):
    below = np.array([5.0, 300.0, 2000.0])
    expected = (1.0 - law.tail_probability) * law.body.below(below) / law.body.below(np.array(law.threshold))
    np.testing.assert_allclose(law.below(below), expected, rtol=1e-13)
    beyond = np.array([2600.0, 8000.0, 1e5])
    expected = law.tail_probability * law.tail.beyond(beyond) / law.tail.beyond(np.array(law.threshold))
    np.testing.assert_allclose(law.beyond(beyond), expected, rtol=1e-13)
    np.testing.assert_allclose(law.below(below) + law.beyond(below), 1.0, rtol=1e-14)


@pytest.mark.parametrize("law", CASES)
def test_quantiles_lead_back(law):
    lower = np.array([1e-12, 1e-3, 0.05, 0.4, 0.6, 0.9, 0.95, 0.999, 1.0])
    upper = np.array([1.0, 0.999, 0.95, 0.6, 0.4, 0.1, 0.05, 1e-3, 1e-12])
    values = law.quantile(lower, upper)
    assert np.all(np.diff(values) >= 0.0)
    # P(X <= Q(u)) >= u > P(X < Q(u)), up to rounding, whether the law steps there or not
    before = np.nextafter(values, -math.inf)
    assert np.all(law.below(values) >= lower * (1.0 - 3e-12))
    assert np.all(law.below(before) <= lower * (1.0 + 3e-12))
    assert np.all(law.beyond(values) <= upper * (1.0 + 3e-12))
    assert np.all(law.beyond(before) >= upper * (1.0 - 3e-12))


@pytest.mark.parametrize(("body", "tail"), [(BODY, TAIL), (BODY, FURTHER), (OBSERVED, TAIL), (BODY, OBSERVED)])
def test_the_mean_is_that_of_the_parts(body, tail):
    law = spliced(body, tail)
    t, rest, left = law.threshold, body.below(np.array(law.threshold)), tail.beyond(np.array(law.threshold))
    given_body = (body.limited_mean(t) - t * body.beyond(np.array(t))) / rest
    given_tail = (tail.mean - tail.limited_mean(t) + t * left) / left
    assert law.mean == pytest.approx(float(0.92 * given_body + 0.08 * given_tail), rel=1e-12)


def test_a_generalized_pareto_tail_keeps_its_form():
    """Beyond a higher threshold the law is generalized Pareto again, with scale + shape × (higher − lower)."""
    higher = m.GeneralizedParetoMarginal(family="generalized_pareto", shape=0.4, scale=1100.0, threshold=3000.0)
    one = spliced(BODY, TAIL, threshold=3000.0, tail_probability=0.01)
    other = spliced(BODY, higher, threshold=3000.0, tail_probability=0.01)
    lower = np.linspace(0.9, 0.999999, 50)
    np.testing.assert_allclose(one.quantile(lower, 1.0 - lower), other.quantile(lower, 1.0 - lower), rtol=1e-13)
    assert one.mean == pytest.approx(other.mean, rel=1e-13)
    assert one.variance == pytest.approx(other.variance, rel=1e-11)


def test_a_body_that_is_its_own_tail_is_itself():
    beyond = float(FURTHER.beyond(np.array(2500.0)))
    law = spliced(FURTHER, FURTHER, tail_probability=beyond)
    lower = np.linspace(0.001, 0.999, 99)
    np.testing.assert_allclose(law.quantile(lower, 1.0 - lower), FURTHER.quantile(lower, 1.0 - lower), rtol=1e-13)
    assert law.mean == pytest.approx(FURTHER.mean, rel=1e-13)
    assert law.variance == pytest.approx(FURTHER.variance, rel=1e-12)
    assert law.limited_mean(4000.0) == pytest.approx(FURTHER.limited_mean(4000.0), rel=1e-13)


def test_tails_come_from_the_parts():
    law = spliced(STUDENT, TAIL)
    assert (law.lower_tail_index, law.upper_tail_index) == (0.8, 2.5)
    assert (law.lower_exponential_moment, law.exponential_moment) == (0.0, 0.0)
    assert (law.mean, law.variance, law.limited_mean(10.0)) == (math.inf, math.inf, -math.inf)
    heavy = spliced(BODY, STUDENT)
    assert heavy.mean == math.inf
    assert heavy.limited_mean(1e5) == pytest.approx(heavy.limited_mean(2500.0) + heavy.layer_mean(2500.0, 1e5))
    light = spliced(FURTHER, m.ExponentialMarginal(family="exponential", mean=50.0))
    assert (light.upper_tail_index, light.exponential_moment) == (math.inf, 1.0 / 50.0)


def test_discrete_parts_step_where_they_must():
    law = spliced(OBSERVED, OBSERVED, tail_probability=0.25)
    levels = np.array([0.1, 0.333, 0.334, 0.58, 0.59, 0.75, 0.7500001, 0.99])
    assert law.quantile(levels, 1.0 - levels).tolist() == [10.0, 10.0, 800.0, 800.0, 2500.0, 2500.0, 9000.0, 9000.0]
    assert law.mean == pytest.approx(0.75 * (0.4 * 10 + 0.3 * 800 + 0.2 * 2500) / 0.9 + 0.25 * 9000.0, rel=1e-14)
