"""Quantiles, tails and moments against scipy.stats, from 1e-12 to 1 - 1e-12 on both sides."""

import math

import numpy as np
import pytest
from scipy import stats  # noqa: TID251  # an independent reference is worth the time in a test

from service.risk import marginals as m

CLOSED = 1e-13  # both are closed forms: a few roundings, more where a power is large
ITERATED = 1e-12  # one of the two is found by iteration
SMALL = 10.0 ** np.arange(-12.0, 0.0)
LOWER = np.concatenate([SMALL, [0.25, 0.5, 0.75], 1.0 - SMALL[::-1]])
UPPER = np.concatenate([1.0 - SMALL, [0.75, 0.5, 0.25], SMALL[::-1]])


def gpd(shape, scale, threshold):
    return m.GeneralizedParetoMarginal(family="generalized_pareto", shape=shape, scale=scale, threshold=threshold)


def gev(shape, location, scale):
    return m.GeneralizedExtremeValueMarginal(
        family="generalized_extreme_value", shape=shape, location=location, scale=scale
    )


PAIRS = [
    (m.NormalMarginal(family="normal", mean=1.0, standard_deviation=2.0), stats.norm(1.0, 2.0), CLOSED),
    (m.StudentTMarginal(family="student_t", df=4.5, location=1.0, scale=2.0), stats.t(4.5, 1.0, 2.0), ITERATED),
    (m.StudentTMarginal(family="student_t", df=0.7, location=0.0, scale=1.0), stats.t(0.7), ITERATED),
    (m.StudentTMarginal(family="student_t", df=300.0, location=0.0, scale=1.0), stats.t(300.0), ITERATED),
    (m.LognormalMarginal(family="lognormal", mu=7.0, sigma=1.5), stats.lognorm(1.5, scale=math.exp(7.0)), CLOSED),
    (
        m.LognormalByMeanMarginal(family="lognormal_by_mean", mean=1000.0, cv=2.0),
        stats.lognorm(math.sqrt(math.log(5.0)), scale=1000.0 / math.sqrt(5.0)),
        CLOSED,
    ),
    (m.GammaMarginal(family="gamma", shape=2.0, scale=500.0), stats.gamma(2.0, scale=500.0), ITERATED),
    (m.GammaMarginal(family="gamma", shape=0.3, scale=1.0), stats.gamma(0.3), ITERATED),
    (m.GammaMarginal(family="gamma", shape=150.0, scale=1.0), stats.gamma(150.0), ITERATED),
    (m.WeibullMarginal(family="weibull", shape=0.7, scale=1000.0), stats.weibull_min(0.7, scale=1000.0), CLOSED),
    (m.WeibullMarginal(family="weibull", shape=12.0, scale=1.0), stats.weibull_min(12.0), CLOSED),
    (m.ParetoMarginal(family="pareto", shape=2.5, scale=1000.0), stats.pareto(2.5, scale=1000.0), CLOSED),
    (m.ParetoMarginal(family="pareto", shape=0.8, scale=1.0), stats.pareto(0.8), CLOSED),
    (m.LomaxMarginal(family="lomax", shape=3.0, scale=2000.0), stats.lomax(3.0, scale=2000.0), CLOSED),
    (gpd(0.3, 700.0, 1000.0), stats.genpareto(0.3, 1000.0, 700.0), CLOSED),
    (gpd(-0.4, 700.0, 0.0), stats.genpareto(-0.4, 0.0, 700.0), CLOSED),
    (gpd(0.0, 700.0, 0.0), stats.genpareto(0.0, 0.0, 700.0), CLOSED),
    (m.GumbelMarginal(family="gumbel", location=100.0, scale=20.0), stats.gumbel_r(100.0, 20.0), CLOSED),
    (gev(0.1, 100.0, 20.0), stats.genextreme(-0.1, 100.0, 20.0), CLOSED),
    (gev(-0.05, 3.87, 0.198), stats.genextreme(0.05, 3.87, 0.198), CLOSED),
    (gev(0.0, 3.87, 0.198), stats.genextreme(0.0, 3.87, 0.198), CLOSED),
    (m.ExponentialMarginal(family="exponential", mean=250.0), stats.expon(scale=250.0), CLOSED),
    (m.UniformMarginal(family="uniform", lower=-50.0, upper=150.0), stats.uniform(-50.0, 200.0), CLOSED),
    (m.BetaMarginal(family="beta", a=2.0, b=5.0, lower=0.0, upper=1.0), stats.beta(2.0, 5.0), ITERATED),
    (m.BetaMarginal(family="beta", a=0.4, b=0.6, lower=0.0, upper=1.0), stats.beta(0.4, 0.6), ITERATED),
    (m.BetaMarginal(family="beta", a=60.0, b=3.0, lower=-1.0, upper=1.0), stats.beta(60.0, 3.0, -1.0, 2.0), ITERATED),
    (
        m.InverseGaussianMarginal(family="inverse_gaussian", mean=1000.0, shape=1500.0),
        stats.invgauss(2.0 / 3.0, scale=1500.0),
        ITERATED,
    ),
    (
        m.InverseGaussianMarginal(family="inverse_gaussian", mean=2.0, shape=0.1),
        stats.invgauss(20.0, scale=0.1),
        ITERATED,
    ),
    (m.BurrXIIMarginal(family="burr_xii", c=2.0, d=1.5, scale=1000.0), stats.burr12(2.0, 1.5, scale=1000.0), CLOSED),
    (m.BurrXIIMarginal(family="burr_xii", c=0.5, d=8.0, scale=1.0), stats.burr12(0.5, 8.0), CLOSED),
    (m.LogisticMarginal(family="logistic", location=1.0, scale=0.1), stats.logistic(1.0, 0.1), CLOSED),
]
CASES = [pytest.param(*pair, id=f"{pair[0].family}-{number}") for number, pair in enumerate(PAIRS)]


def test_every_continuous_family_is_here():
    other = {"empirical", "point", "spliced"}
    assert {law.family for law, _, _ in PAIRS} == {law.family for law in m.TYPICAL} - other


@pytest.mark.parametrize(("law", "reference", "rtol"), CASES)
def test_quantiles(law, reference, rtol):
    expected = np.where(LOWER <= 0.5, reference.ppf(LOWER), reference.isf(UPPER))
    spread = float(reference.ppf(0.75) - reference.ppf(0.25))
    found = law.quantile(LOWER, UPPER)
    assert found.shape == LOWER.shape
    np.testing.assert_allclose(found, expected, rtol=rtol, atol=0.0 if law.support[0] == 0.0 else rtol * spread)


@pytest.mark.parametrize(("law", "reference", "rtol"), CASES)
def test_probabilities_in_both_tails(law, reference, rtol):
    values = np.where(LOWER <= 0.5, reference.ppf(LOWER), reference.isf(UPPER))
    # near an end that is not 0 the distance from it, not the value, has few digits
    low, high = (0.0 if end in {0.0, -math.inf, math.inf} else 4e-16 for end in law.support)
    np.testing.assert_allclose(law.below(values), reference.cdf(values), rtol=10.0 * rtol, atol=low)
    np.testing.assert_allclose(law.beyond(values), reference.sf(values), rtol=10.0 * rtol, atol=high)


@pytest.mark.parametrize(("law", "reference", "rtol"), CASES)
def test_mean_and_variance(law, reference, rtol):
    mean, variance = (float(figure) for figure in reference.stats("mv"))
    exists = min(law.upper_tail_index, law.lower_tail_index)
    assert law.mean == (pytest.approx(mean, rel=rtol) if exists > 1.0 else math.inf)
    assert law.variance == (pytest.approx(variance, rel=100.0 * rtol) if exists > 2.0 else math.inf)
