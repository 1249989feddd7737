"""Copulas by simulation against distribution functions, rank correlations and tail dependence.

Source of the figures: our own closed forms and one-dimensional integrals, the Student t ones by two independent
integrals that agree to 12 digits (mark: own); the table of tail dependence coefficients was recalled to two decimals
(mark: memory) and its formula is that of P. Embrechts, A. McNeil and D. Straumann, Correlation and dependence in risk
management: properties and pitfalls (2002).

Simulated figures are held within 4 standard errors: a false alarm rate of 6e-5 each.
"""

from itertools import groupby

import numpy as np
import pytest
from scipy import special

from service.risk.copulas import (
    ClaytonCopula,
    FrankCopula,
    GaussianCopula,
    GumbelCopula,
    JoeCopula,
    StudentTCopula,
)
from service.risk.correlation import EqualCorrelation, MatrixCorrelation
from tests.reference.laws import rows
from tests.unit.risk.copulas import closed_forms as forms
from tests.unit.risk.copulas.closed_forms import assert_mean, assert_share, assert_tau, sample

PAIR = ("a", "b")
ARCHIMEDEAN = {"clayton": ClaytonCopula, "gumbel": GumbelCopula, "frank": FrankCopula, "joe": JoeCopula}


def copula_of(family, parameter, df=None):
    if family in ARCHIMEDEAN:
        return ARCHIMEDEAN[family](family=family, theta=parameter)
    correlation = MatrixCorrelation(kind="matrix", values=[[1.0, parameter], [parameter, 1.0]])
    if family == "gaussian":
        return GaussianCopula(family="gaussian", correlation=correlation)
    return StudentTCopula(family="student_t", correlation=correlation, df=df)


def numbers(text):
    return {name: float(number) for name, number in (one.split("=") for one in text.split(";"))}


def by(rows_, *columns):
    found = groupby(rows_, lambda row: tuple(row[column] for column in columns))
    return [pytest.param(*key, list(group), id="-".join(key)) for key, group in found]


CDF = sorted(rows("l_copula_cdf_points"), key=lambda row: row["copula"])


@pytest.mark.parametrize(("family", "parameter", "points"), by(CDF, "copula", "parameter"))
def test_distribution_functions(family, parameter, points):
    (strength,) = numbers(parameter).values()
    (u, v), _ = sample(copula_of(family, strength), PAIR)
    closed = forms.ARCHIMEDEAN.get(family, forms.gaussian)
    for point in points:
        at, expected = (float(point["u"]), float(point["v"])), float(point["C"])
        assert closed(*at, strength) == pytest.approx(expected, rel=1e-11)
        assert_share((u <= at[0]) & (v <= at[1]), expected)


@pytest.mark.parametrize(("family", "parameter", "points"), by(rows("l_t_copula_cdf_points"), "copula", "parameter"))
def test_student_t_distribution_functions(family, parameter, points):
    given = numbers(parameter)
    (u, v), (u_upper, v_upper) = sample(copula_of(family, given["rho"], given["df"]), PAIR, scenarios=1 << 19)
    for point in points:
        at, expected = (float(point["u"]), float(point["v"])), float(point["C"])
        assert forms.student(*at, **given) == pytest.approx(expected, rel=1e-10)
        assert_share((u <= at[0]) & (v <= at[1]), expected)
        if at[0] == at[1] == 0.01:  # the copula is the same turned round
            assert_share((u_upper < 0.01) & (v_upper < 0.01), expected)


@pytest.mark.parametrize("row", rows("l_copula_tau_tail"), ids=lambda row: f"{row['copula']}-{row['kendall_tau']}")
def test_rank_correlations(row):
    family, _, df = row["copula"].partition("(df=")
    copula = copula_of(family, float(row["parameter"]), float(df.rstrip(")")) if df else None)
    (u, v), _ = sample(copula, PAIR, scenarios=1 << 17)
    assert_tau(u, v, float(row["kendall_tau"]))
    if row["spearman_rho"]:
        assert_mean(12.0 * (u - 0.5) * (v - 0.5), float(row["spearman_rho"]))


@pytest.mark.parametrize("row", rows("l_t_tail_dependence"), ids=lambda row: f"{row['df']}-{row['rho']}")
def test_tail_dependence_of_the_student_t_copula(row):
    """The figures are limits: at u the formula's own argument of df + 1 is reached from the conditional law."""
    df, rho, expected = (float(row[name]) for name in ("df", "rho", "lambda"))
    limit = 2.0 * special.stdtr(df + 1.0, -np.sqrt((df + 1.0) * (1.0 - rho) / (1.0 + rho)))
    assert limit == pytest.approx(expected, rel=1e-10)
    assert round(expected, 2) == float(row["published_2dp_memory"])
    u = 1e-9
    assert forms.student(u, u, df, rho) / u == pytest.approx(expected, rel=0.05 if df < 10 else 0.5, abs=1e-4)


def test_tail_dependence_is_met_by_simulation():
    """C(u, u) / u at u = 2^-10 of t copulas with 2 degrees of freedom, where it is within 3 % of its limit."""
    for rho in (0.0, 0.5):
        copula = StudentTCopula(family="student_t", correlation=EqualCorrelation(kind="equal", value=rho), df=2.0)
        (u, v), (u_upper, v_upper) = sample(copula, PAIR)
        expected = forms.student(2.0**-10, 2.0**-10, 2.0, rho)
        assert_share((u <= 2.0**-10) & (v <= 2.0**-10), expected)
        assert_share((u_upper < 2.0**-10) & (v_upper < 2.0**-10), expected)
