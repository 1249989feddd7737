"""Partial moments by quadrature, against closed forms."""

import math

import numpy as np
import pytest
from scipy import special

from service.risk import marginals as m
from service.risk.marginals import moments

EXPONENTIAL = m.ExponentialMarginal(family="exponential", mean=2.0)
PARETO = m.ParetoMarginal(family="pareto", shape=2.05, scale=3.0)
NORMAL = m.NormalMarginal(family="normal", mean=1.0, standard_deviation=2.0)
CAUCHY = m.StudentTMarginal(family="student_t", df=1.0, location=0.0, scale=1.0)


@pytest.mark.parametrize("limit", [0.0, 1e-6, 1.0, 30.0, 1400.0])
def test_excess_of_an_exponential(limit):
    tail = math.exp(-limit / 2.0)
    first, second = moments.excess_moments(EXPONENTIAL, limit)
    assert first == pytest.approx(2.0 * tail, rel=1e-12)
    assert second == pytest.approx(8.0 * tail, rel=1e-12)


@pytest.mark.parametrize("limit", [3.0, 10.0, 1e6])
def test_excess_of_a_heavy_tail(limit):
    """The second moment converges as slowly as (smallest probability)^(0.05/2.05): the rest is added as a power."""
    tail = (3.0 / limit) ** 2.05
    first, second = moments.excess_moments(PARETO, limit)
    assert first == pytest.approx(limit * tail / 1.05, rel=1e-12)
    assert second == pytest.approx(2.0 * limit**2 * tail / (1.05 * 0.05), rel=1e-11)


@pytest.mark.parametrize("limit", [-70.0, -5.0, 1.0, 4.0, 9.0])
def test_deficit_of_a_normal(limit):
    z = (limit - 1.0) / 2.0
    density, below = math.exp(-0.5 * z * z) / math.sqrt(2.0 * math.pi), float(special.ndtr(z))
    first, second = moments.deficit_moments(NORMAL, limit)
    if z > -10.0:
        assert first == pytest.approx(2.0 * (z * below + density), rel=1e-11)
        assert second == pytest.approx(4.0 * ((z * z + 1.0) * below + z * density), rel=1e-10)
    else:
        assert 0.0 < second < first < 1e-200


def test_what_does_not_exist_is_infinite():
    assert moments.excess_moments(CAUCHY, 0.0) == (math.inf, math.inf)
    assert moments.deficit_moments(CAUCHY, 5.0) == (math.inf, math.inf)
    first, second = moments.excess_moments(m.ParetoMarginal(family="pareto", shape=1.5, scale=1.0), 4.0)
    assert first == pytest.approx(1.0, rel=1e-12)
    assert second == math.inf


def test_parts_of_discrete_laws_are_sums():
    law = m.EmpiricalMarginal(family="empirical", values=[1.0, 2.0, 6.0, 7.0])
    assert moments.excess_moments(law, 2.0) == (2.25, (16.0 + 25.0) / 4.0)
    assert moments.deficit_moments(law, 2.0) == (0.25, 0.25)


@pytest.mark.parametrize(
    "law",
    [law for law in m.TYPICAL if len(law.pieces) == 1 and law.pieces[0].atoms is None],
    ids=lambda law: law.family,
)
def test_quadrature_agrees_with_the_closed_forms(law):
    for level in (0.01, 0.4, 0.7, 0.999):
        limit = float(law.quantile(np.array([level]), np.array([1.0 - level]))[0])
        size = abs(law.mean) + math.sqrt(law.variance)
        assert moments.limited_mean(law, limit) == pytest.approx(law.limited_mean(limit), rel=1e-12, abs=1e-13 * size)


def test_layers_without_a_mean():
    layer = moments.layer_mean(CAUCHY, -2.0, 3.0)
    antiderivative = [x * (0.5 - math.atan(x) / math.pi) + math.log1p(x * x) / (2.0 * math.pi) for x in (-2.0, 3.0)]
    assert layer == pytest.approx(antiderivative[1] - antiderivative[0], rel=1e-13)
    far = moments.layer_mean(EXPONENTIAL, 100.0, 102.0)
    assert far == pytest.approx(-2.0 * math.exp(-50.0) * math.expm1(-1.0), rel=1e-12)
