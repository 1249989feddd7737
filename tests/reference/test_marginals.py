"""Marginals against the dossier's closed forms, and in the far tails against arithmetic of many digits."""

import math

import mpmath as mp
import numpy as np
import pytest

from service.risk import marginals as m
from service.risk.marginals.moments import excess_moments
from tests.reference.laws import names, rows

DIGITS = 30
SMALLEST = 2.3e-308  # normal number of binary64
NEAR_END = 1e-5
PROBABILITIES = (1e-300, 1e-16, 0.2)


def parameters(text):
    return [float(part.rpartition("=")[2]) for part in text.split(";")]


def gpd(shape, scale, threshold=0.0):
    return m.GeneralizedParetoMarginal(family="generalized_pareto", shape=shape, scale=scale, threshold=threshold)


def gev(location, scale, shape):
    return m.GeneralizedExtremeValueMarginal(
        family="generalized_extreme_value", shape=shape, location=location, scale=scale
    )


LAWS = {
    "normal": lambda mean, sd: m.NormalMarginal(family="normal", mean=mean, standard_deviation=sd),
    "student_t": lambda df, loc, scale: m.StudentTMarginal(family="student_t", df=df, location=loc, scale=scale),
    "lognormal": lambda mu, sigma: m.LognormalMarginal(family="lognormal", mu=mu, sigma=sigma),
    "pareto_type1": lambda alpha, xm: m.ParetoMarginal(family="pareto", shape=alpha, scale=xm),
    "pareto_type2_lomax": lambda alpha, theta: m.LomaxMarginal(family="lomax", shape=alpha, scale=theta),
    "gpd": gpd,
    "gamma": lambda shape, scale: m.GammaMarginal(family="gamma", shape=shape, scale=scale),
    "exponential": lambda mean: m.ExponentialMarginal(family="exponential", mean=mean),
    "weibull": lambda shape, scale: m.WeibullMarginal(family="weibull", shape=shape, scale=scale),
    "logistic": lambda loc, scale: m.LogisticMarginal(family="logistic", location=loc, scale=scale),
    "uniform": lambda a, b: m.UniformMarginal(family="uniform", lower=a, upper=b),
    "gev": gev,
    "gumbel": lambda mu, sigma: m.GumbelMarginal(family="gumbel", location=mu, scale=sigma),
}
LAWS |= {"lomax": LAWS["pareto_type2_lomax"], "pareto1": LAWS["pareto_type1"]}
TAILS = [row for row in rows("a_closed_form_var_es") if row["distribution"] != "laplace"]  # no marginal is one


@pytest.mark.parametrize("row", TAILS, ids=lambda row: names(row, "distribution", "parameters", "level"))
def test_quantile_and_tail_mean(row):
    law = LAWS[row["distribution"]](*parameters(row["parameters"]))
    upper = float(1 - mp.mpf(row["level"]))
    quantile = float(law.quantile(np.array([float(row["level"])]), np.array([upper]))[0])
    tail_mean = quantile + excess_moments(law, quantile)[0] / upper
    assert quantile == pytest.approx(float(row["var"]), rel=1e-13)  # the file has 16 digits
    assert tail_mean == pytest.approx(float(row["es"]), rel=1e-12)  # quadrature of the quantile function


@pytest.mark.parametrize(
    "row", rows("h_return_levels"), ids=lambda row: names(row, "model", "parameters", "return_period_years")
)
def test_return_levels(row):
    numbers, years = parameters(row["parameters"]), float(row["return_period_years"])
    if row["model"] == "gev_annual_max":
        law, upper = gev(*numbers), 1.0 / years
    else:
        threshold, scale, shape, reached, per_year = numbers
        law, upper = gpd(shape, scale, threshold), 1.0 / (years * per_year * reached)
    level = float(law.quantile(np.array([1.0 - upper]), np.array([upper]))[0])
    assert level == pytest.approx(float(row["return_level"]), rel=2e-13)  # the file has 14 digits


@pytest.mark.parametrize("row", rows("i_layers"), ids=lambda row: names(row, "severity", "parameters", "attachment"))
def test_layers(row):
    law = LAWS[row["severity"]](*parameters(row["parameters"]))
    start, stop = float(row["attachment"]), float(row["attachment"]) + float(row["limit"])
    assert law.limited_mean(start) == pytest.approx(float(row["lev_attachment"]), rel=1e-13)
    assert law.limited_mean(stop) == pytest.approx(float(row["lev_exhaustion"]), rel=1e-13)
    assert law.layer_mean(start, stop) == pytest.approx(float(row["expected_layer_loss_per_claim"]), rel=1e-12)
    reached = float(law.beyond(np.array(start)))
    assert reached == pytest.approx(float(row["prob_claim_exceeds_attachment"]), rel=1e-13)


def gamma_tails(shape):
    return (
        lambda x: mp.gammainc(shape, 0, x, regularized=True),
        lambda x: mp.gammainc(shape, x, mp.inf, regularized=True),
    )


def beta_tails(a, b):
    return (
        lambda x: mp.betainc(a, b, 0, x, regularized=True),
        lambda x: mp.betainc(b, a, 0, 1 - x, regularized=True),
    )


def student_tails(df):
    def beyond(x):
        ratio = df / (df + x * x)
        tail = mp.betainc(mp.mpf(df) / 2, mp.mpf(1) / 2, 0, ratio, regularized=True) / 2
        return tail if x > 0 else 1 - tail

    return lambda x: beyond(-x), beyond


def inverse_gaussian_tails(mean, shape):
    def part(x, side):
        root, share = mp.sqrt(shape / x), x / mean
        reflected = mp.exp(2 * mp.mpf(shape) / mean) * mp.ncdf(-root * (share + 1))
        return mp.ncdf(side * root * (share - 1)) + side * reflected

    return lambda x: part(x, 1), lambda x: part(x, -1)


def density_tails(log_density, sd):
    """Return the tails of a law whose density falls off at least like a normal one of this deviation."""

    def part(x, towards):
        top = log_density(x)
        whole = mp.quad(lambda u: mp.exp(log_density(x + towards * u * sd) - top), [0, 0.1, 0.5, 2, 5, 12])
        return sd * mp.exp(top) * whole

    return lambda x: part(x, -1), lambda x: part(x, 1)


def large_gamma_tails(shape):
    return density_tails(lambda x: (shape - 1) * mp.log(x) - x - mp.loggamma(shape), math.sqrt(shape))


def gamma(shape):
    return m.GammaMarginal(family="gamma", shape=shape, scale=1.0)


def beta(a, b):
    return m.BetaMarginal(family="beta", a=a, b=b)


def student(df):
    return m.StudentTMarginal(family="student_t", df=df, location=0.0, scale=1.0)


def inverse_gaussian(mean, shape):
    return m.InverseGaussianMarginal(family="inverse_gaussian", mean=mean, shape=shape)


FAR = [
    (gamma(0.01), gamma_tails(0.01), 1e-12),  # a power of 1/shape of the probability
    (gamma(2.0), gamma_tails(2.0), 1e-13),
    (gamma(1000.0), gamma_tails(1000.0), 1e-14),
    (gamma(4e5), large_gamma_tails(4e5), 3e-14),
    (gamma(1e9), large_gamma_tails(1e9), 1e-14),
    (beta(2.0, 5.0), beta_tails(2.0, 5.0), 1e-13),
    (beta(30.0, 1e5), beta_tails(30.0, 1e5), 1e-13),
    (beta(1000.0, 2000.0), beta_tails(1000.0, 2000.0), 1e-13),
    (beta(3.02, 0.0103), beta_tails(3.02, 0.0103), 1e-13),
    (beta(0.214, 1.04), beta_tails(0.214, 1.04), 1e-13),
    (student(1.0), student_tails(1.0), 1e-13),
    (student(3.0), student_tails(3.0), 1e-13),
    (student(30.0), student_tails(30.0), 1e-14),
    (inverse_gaussian(1.0, 1.0), inverse_gaussian_tails(1.0, 1.0), 1e-13),
    (inverse_gaussian(1.0, 1e-3), inverse_gaussian_tails(1.0, 1e-3), 1e-12),
    (inverse_gaussian(1.0, 1e4), inverse_gaussian_tails(1.0, 1e4), 1e-14),
]
SLOW = [tails for law, tails, _ in FAR if law.family == "gamma" and law.shape > 1e5]
SIDES = [
    pytest.param(
        law,
        tails[side],
        probability,
        side,
        rtol,
        id=f"{law.family}-{number}-{'below' if side == 0 else 'beyond'}-{probability:g}",
    )
    for number, (law, tails, rtol) in enumerate(FAR)
    for probability in (PROBABILITIES if tails not in SLOW else PROBABILITIES[::2])
    for side in (0, 1)
]


@pytest.mark.parametrize(("law", "tail", "probability", "side", "rtol"), SIDES)
def test_far_tails(law, tail, probability, side, rtol):
    near, rest = np.array([probability]), np.array([1.0 - probability])
    value = float((law.quantile(near, rest) if side == 0 else law.quantile(rest, near))[0])
    with mp.workdps(DIGITS):
        if value == 0.0:
            assert tail(mp.mpf(SMALLEST)) > probability
            return
        exact = mp.mpf(value)
        lower, upper = tail(exact * (1 - rtol)), tail(min(exact * (1 + rtol), law.support[1]))
        assert min(lower, upper) <= probability <= max(lower, upper)
        share = float(tail(exact) / probability)
    if law.support[1] == 1.0 and 1.0 - value < NEAR_END:
        return  # the distance to the end, which decides the probability, has few digits
    found = law.below(np.array([value])) if side == 0 else law.beyond(np.array([value]))
    assert float(found[0]) == pytest.approx(share * probability, rel=3e-11, abs=0.0)
