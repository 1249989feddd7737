"""Value at risk and expected shortfall of laws with closed forms.

Source of the figures: our own evaluation of the closed forms with 20 to 80 digits, checked there against
quadrature and an independent quantile function (mark: own). The formulas are textbook knowledge.
"""

from itertools import groupby

import numpy as np
import pytest
from scipy import special

from tests.reference.laws import DEEPEST, rows, score_nodes, upper_nodes
from tests.unit.risk.arithmetic import es, value, var

LEVELS = (0.95, 0.975, 0.99, 0.995, 0.999)
FILE = "a_closed_form_var_es"


def _gpd(t, xi, beta):
    return beta * t if xi == 0.0 else beta * np.expm1(xi * t) / xi


def _gev(t, mu, sigma, xi):
    reduced = -np.log(-np.log1p(-np.exp(-t)))  # of the Gumbel law
    return mu + sigma * (reduced if xi == 0.0 else np.expm1(xi * reduced) / xi)


# quantile at survival probability exp(-t)
QUANTILES = {
    "normal": lambda t, mean, sd: mean - sd * special.ndtri_exp(-t),
    "student_t": lambda t, df, loc, scale: loc - scale * special.stdtrit(df, np.exp(-t)),
    "lognormal": lambda t, mu, sigma: np.exp(mu - sigma * special.ndtri_exp(-t)),
    "pareto_type1": lambda t, alpha, xm: xm * np.exp(t / alpha),
    "pareto_type2_lomax": lambda t, alpha, theta: theta * np.expm1(t / alpha),
    "gpd": _gpd,
    "gamma": lambda t, shape, scale: scale * special.gammainccinv(shape, np.exp(-t)),
    "exponential": lambda t, mean: mean * t,
    "weibull": lambda t, shape, scale: scale * t ** (1.0 / shape),
    "logistic": lambda t, loc, scale: loc + scale * np.log(np.expm1(t)),
    "laplace": lambda t, loc, scale: loc + scale * (t - np.log(2.0)),
    "uniform": lambda t, a, b: b - (b - a) * np.exp(-t),
    "gev": _gev,
    "gumbel": lambda t, mu, sigma: _gev(t, mu, sigma, 0.0),
}
# scipy inverts these two by iteration and not at survival probabilities like 1e-170; what is left out beyond
# exp(-100) is below 1e-28 of their tail means
SHALLOW = {"student_t": 100.0, "gamma": 100.0}
LAWS = [
    pytest.param(*law, list(found), id=f"{law[0]}-{law[1]}")
    for law, found in groupby(rows(FILE), lambda row: (row["distribution"], row["parameters"]))
]


@pytest.mark.parametrize(("law", "parameters", "expected"), LAWS)
def test_var_and_expected_shortfall(law, parameters, expected):
    numbers = {name: float(number) for name, number in (one.split("=") for one in parameters.split(";"))}
    t, p = upper_nodes(LEVELS, deepest=SHALLOW.get(law, DEEPEST))
    losses = QUANTILES[law](t, **numbers)
    low = float(QUANTILES[law](np.array(-np.log(0.06)), **numbers))
    losses, p = np.append(losses, low), np.append(p, 1.0 - p.sum())
    assert [float(row["level"]) for row in expected] == list(LEVELS)
    for row in expected:
        level = float(row["level"])
        found = [value(one, losses, p, sampled=False) for one in (var(level), es(level))]
        wanted = [float(row["var"]), float(row["es"])]
        # rounding of p and of the quantile functions; quadrature and cells are below 1e-15
        assert found == pytest.approx(wanted, rel=1e-12, abs=1e-12 * numbers.get("sd", 1.0))


@pytest.mark.parametrize("row", rows("f_lognormal_995_factor"), ids=lambda row: row["cv_sigma"])
def test_excess_of_a_lognormal_loss_over_its_mean(row):
    """A loss of mean 1 with the coefficient of variation of a solvency formula: 99.5 % quantile and 99 % tail mean.

    Source: the lognormal factor exp(z sqrt(ln(1 + s^2)))/sqrt(1 + s^2) - 1 of a quantitative impact study of
    European insurance supervision (mark: memory); figures by its closed form (mark: own).
    """
    cv = float(row["cv_sigma"])
    sigma = np.sqrt(np.log1p(cv * cv))
    z, p = score_nodes((0.99, 0.995))
    losses = np.exp(sigma * z - sigma * sigma / 2.0)
    quantile = value(var(0.995, above="mean"), losses, p, sampled=False)
    shortfall = value(es(0.99, above="mean"), losses, p, sampled=False)
    assert quantile == pytest.approx(float(row["rho_sigma_var995_minus_mean"]), abs=5e-13)
    assert shortfall == pytest.approx(float(row["es99_minus_mean"]), abs=5e-13)
