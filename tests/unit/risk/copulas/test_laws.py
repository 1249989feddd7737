"""The laws of the copulas: margins, Kendall's tau and C(u, u) deep in both tails, at n = 2^20.

Each check is 4 standard errors wide (or a Kolmogorov-Smirnov distance as rare): a false alarm rate of 6e-5.
"""

from functools import partial

import numpy as np
import pytest
from scipy import special

from service.risk.copulas import (
    ClaytonCopula,
    ComonotonicCopula,
    FrankCopula,
    GaussianCopula,
    GroupedStudentTCopula,
    GumbelCopula,
    IndependentCopula,
    JoeCopula,
    NestedCopula,
    NestedGroup,
    StudentTCopula,
    StudentTGroup,
    SurvivalClaytonCopula,
)
from service.risk.correlation import EqualCorrelation, LoadingsCorrelation, MatrixCorrelation
from tests.unit.risk.copulas import closed_forms as forms
from tests.unit.risk.copulas.closed_forms import KS_LIMIT, assert_share, assert_tau, kolmogorov, sample

DEEP = 1e-3
FARTHER = 1e-4  # where the margins are counted in both tails
HALF = EqualCorrelation(kind="equal", value=0.5)
OPPOSED = EqualCorrelation(kind="equal", value=-0.4)
LOADED = LoadingsCorrelation(kind="loadings", values=[[0.8, 0.0], [0.5, 0.5]])
MATRIX = MatrixCorrelation(kind="matrix", values=[[1.0, -0.7], [-0.7, 1.0]])
SINGULAR = MatrixCorrelation(kind="matrix", values=[[1.0, 1.0, 0.6], [1.0, 1.0, 0.6], [0.6, 0.6, 1.0]])

PAIR = ("a", "b")
FOUR = ("a", "b", "c", "d")


def pair(copula, tau, closed, *, ids=PAIR, of=(0, 1)):
    return copula, ids, [(of, tau, closed)]


def gaussian(correlation, rho, **place):
    copula = GaussianCopula(family="gaussian", correlation=correlation)
    return pair(copula, forms.tau_elliptical(rho), partial(forms.gaussian, rho=rho), **place)


def student(df, correlation, rho):
    copula = StudentTCopula(family="student_t", correlation=correlation, df=df)
    return pair(copula, forms.tau_elliptical(rho), partial(forms.student, df=df, rho=rho))


def grouped(df_even, df_odd):
    groups = [StudentTGroup(factors=["c", "a"], df=df_even), StudentTGroup(factors=["b", "d"], df=df_odd)]
    copula = GroupedStudentTCopula(family="grouped_student_t", correlation=HALF, groups=groups)
    pairs = [((0, 2), df_even), ((1, 3), df_odd)]
    return copula, FOUR, [(of, forms.tau_elliptical(0.5), partial(forms.student, df=df, rho=0.5)) for of, df in pairs]


def archimedean(cls, family, theta):
    closed = partial(forms.ARCHIMEDEAN[family], theta=theta)
    return pair(cls(family=family, theta=theta), forms.TAU[family](theta), closed)


def turned(theta):
    copula = SurvivalClaytonCopula(family="survival_clayton", theta=theta)
    return pair(copula, forms.tau_clayton(theta), lambda u, v: u + v - 1.0 + forms.clayton(1.0 - u, 1.0 - v, theta))


def nested(generator, outer, inner):
    groups = [NestedGroup(factors=["b", "d"], theta=inner), NestedGroup(factors=["c", "a"], theta=outer)]
    copula = NestedCopula(family="nested", generator=generator, theta=outer, groups=groups)
    pairs = [((1, 3), inner), ((0, 3), outer), ((0, 2), outer)]
    closed = forms.ARCHIMEDEAN[generator]
    return copula, FOUR, [(of, forms.TAU[generator](theta), partial(closed, theta=theta)) for of, theta in pairs]


CASES = {
    "independent": pair(IndependentCopula(family="independent"), 0.0, lambda u, v: u * v),
    "comonotonic": pair(ComonotonicCopula(family="comonotonic"), 1.0, min),
    "gaussian equal": gaussian(HALF, 0.5),
    "gaussian equal below 0": gaussian(OPPOSED, -0.4),
    "gaussian loadings": gaussian(LOADED, 0.4),
    "gaussian matrix": gaussian(MATRIX, -0.7),
    "gaussian singular": gaussian(SINGULAR, 0.6, ids=("a", "b", "c"), of=(1, 2)),
    "student_t 1": student(1.0, HALF, 0.5),
    "student_t 4": student(4.0, MATRIX, -0.7),
    "student_t 300": student(300.0, HALF, 0.5),
    "grouped_student_t": grouped(3.0, 12.0),
    "clayton 0.3": archimedean(ClaytonCopula, "clayton", 0.3),
    "clayton 4": archimedean(ClaytonCopula, "clayton", 4.0),
    "survival_clayton": turned(2.0),
    "gumbel 1.1": archimedean(GumbelCopula, "gumbel", 1.1),
    "gumbel 3": archimedean(GumbelCopula, "gumbel", 3.0),
    "joe 1.3": archimedean(JoeCopula, "joe", 1.3),
    "joe 6": archimedean(JoeCopula, "joe", 6.0),
    "frank 2": archimedean(FrankCopula, "frank", 2.0),
    "frank 30": archimedean(FrankCopula, "frank", 30.0),
    "frank below 0": archimedean(FrankCopula, "frank", -8.0),
    "nested clayton": nested("clayton", 0.5, 3.0),
    "nested gumbel": nested("gumbel", 1.3, 2.5),
    "nested joe": nested("joe", 1.4, 3.0),
    "nested frank": nested("frank", 2.0, 9.0),
}


@pytest.mark.parametrize(("copula", "ids", "pairs"), CASES.values(), ids=CASES)
def test_margins_tau_and_both_corners(copula, ids, pairs):
    columns = sorted({column for of, _, _ in pairs for column in of})
    sampled = dict(zip(columns, zip(*sample(copula, ids, columns=columns), strict=True), strict=True))
    for lower, upper in sampled.values():
        assert kolmogorov(lower) < KS_LIMIT
        assert_share(lower < FARTHER, FARTHER)
        assert_share(upper < FARTHER, FARTHER)
        np.testing.assert_allclose(lower + upper, 1.0, rtol=0.0, atol=4e-16)
    for (i, j), tau, closed in pairs:
        (first, first_upper), (second, second_upper) = sampled[i], sampled[j]
        assert_tau(first, second, tau)
        assert_share((first <= DEEP) & (second <= DEEP), closed(DEEP, DEEP))
        corner = closed(1.0 - DEEP, 1.0 - DEEP) - 1.0 + 2.0 * DEEP
        assert_share((first_upper < DEEP) & (second_upper < DEEP), corner)
        for u, v in ((0.5, 0.5), (0.2, 0.7)):
            assert_share((first <= u) & (second <= v), closed(u, v))


def test_one_number_drives_the_groups_of_a_grouped_student_t():
    correlation = MatrixCorrelation(kind="matrix", values=[[1.0, 0.0], [0.0, 1.0]])
    groups = [StudentTGroup(factors=["a"], df=2.0), StudentTGroup(factors=["b"], df=6.0)]
    copula = GroupedStudentTCopula(family="grouped_student_t", correlation=correlation, groups=groups)
    lower, upper = sample(copula, PAIR)

    def both_below(u):
        """Return E[Phi(q_a / W_a) Phi(q_b / W_b)], the mixing variables W quantiles of the same uniform."""
        q = [special.stdtrit(df, u) for df in (2.0, 6.0)]

        def given(p):
            roots = [np.sqrt(2.0 * special.gammaincinv(df / 2.0, p) / df) for df in (2.0, 6.0)]
            return special.ndtr(q[0] * roots[0]) * special.ndtr(q[1] * roots[1])

        return forms.integral(given, 1.0)

    for u in (DEEP, 0.02):
        assert_share((lower[0] <= u) & (lower[1] <= u), both_below(u))
        assert_share((upper[0] < u) & (upper[1] < u), both_below(u))


def test_groups_with_the_same_df_are_one_student_t():
    groups = [StudentTGroup(factors=["b"], df=5.0), StudentTGroup(factors=["a"], df=5.0)]
    split = GroupedStudentTCopula(family="grouped_student_t", correlation=HALF, groups=groups)
    whole = StudentTCopula(family="student_t", correlation=HALF, df=5.0)
    first, second = (sample(copula, PAIR, scenarios=4096) for copula in (split, whole))
    np.testing.assert_array_equal(first, second)


def test_many_factors_share_one_variable():
    """The diagonal of a Gumbel copula of d factors is u^(d^(1/theta))."""
    ids = [str(number) for number in range(8)]
    lower, _ = sample(GumbelCopula(family="gumbel", theta=2.0), ids, scenarios=1 << 17)
    assert_share(np.all(lower <= 0.8, axis=0), 0.8 ** (8.0**0.5))


def test_nested_groups_meet_in_the_nested_formula():
    """C(u) = C0(C1(u, u), C2(u, u)) for two groups of two."""
    groups = [NestedGroup(factors=["a", "b"], theta=4.0), NestedGroup(factors=["c", "d"], theta=2.0)]
    for generator in ("clayton", "gumbel", "joe", "frank"):
        copula = NestedCopula(family="nested", generator=generator, theta=1.5, groups=groups)
        lower, _ = sample(copula, ("a", "b", "c", "d"), scenarios=1 << 18)
        closed = forms.ARCHIMEDEAN[generator]
        for u in (0.1, 0.6):
            expected = closed(closed(u, u, 4.0), closed(u, u, 2.0), 1.5)
            assert_share(np.all(lower <= u, axis=0), expected)
