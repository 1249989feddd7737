"""Distortion and spectral measures, expectiles and the entropic measure against closed forms and quadrature."""

import re

import mpmath
import numpy as np
import pytest
from scipy import optimize, special

from tests.reference.laws import rows
from tests.unit.risk.arithmetic import contributions, measure, value

# Distortion figures of known laws.
#
# The law becomes N cells of equal width h in the normal score z, each one scenario at the middle of its cell
# with the cell's probability. Its figure is the integral of the middles against dg, off by h^2/24 times a
# constant plus terms in h^4: from N and 2N cells the h^2 term is eliminated (Richardson). With h = 75/20000
# the h^4 term is about 1e-12, and far larger where the distorted density reaches out to z = 30
# (proportional hazard 1/2 on a Pareto law of index 3: 1e-8 of the figure).
HALF_WIDTH = 37.5  # Phi(-37.5) = 5e-308
CELLS = 10_000


def _in_cells(quantile, count):
    edges = np.linspace(-HALF_WIDTH, HALF_WIDTH, count + 1)
    middles = (edges[:-1] + edges[1:]) / 2.0
    upper = middles > 0.0
    p = np.where(
        upper,
        special.ndtr(-edges[:-1]) - special.ndtr(-edges[1:]),
        special.ndtr(edges[1:]) - special.ndtr(edges[:-1]),
    )
    return quantile(middles), p


def _minus_log_survival(z):
    return -special.log_ndtr(-z)


QUANTILES = {  # by the normal score
    "normal(0,1)": lambda z: z,
    "lognormal(0,1)": np.exp,
    "exponential(mean 1)": _minus_log_survival,
    "uniform(0,1)": special.ndtr,
    "pareto2(alpha=3;theta=2000)": lambda z: 2000.0 * np.expm1(_minus_log_survival(z) / 3.0),
    "pareto1(alpha=3;xm=1)": lambda z: np.exp(_minus_log_survival(z) / 3.0),
    "weibull(shape=2;scale=1)": lambda z: np.sqrt(_minus_log_survival(z)),
}


def _named(row):
    number = float(re.match(r"[^=]+=([\d.]+)", row["parameter"])[1])
    kind = row["measure"]
    if kind == "wang":
        return measure("wang", shift=number)
    if kind == "proportional_hazard":
        return measure(kind, exponent=1.0 / number)
    return (
        measure("dual_power", exponent=number)
        if kind == "dual_power"
        else measure("exponential_distortion", aversion=number)
    )


@pytest.mark.parametrize(
    "row",
    rows("j_distortion_spectral"),
    ids=lambda row: f"{row['measure']}-{row['parameter'][:12]}-{row['distribution']}",
)
def test_distortion_of_a_law(row):
    """Source: closed forms or quadrature as the file's last column says (mark: own).

    The exponential spectral measure of the normal law for k = 1, 5 and 25 also agrees with the figures printed in
    papers on it, .2781, 1.0816 and 1.9549 (mark: memory); 2.5055 for k = 100 is one unit off in its last digit.
    """
    one, law, expected = _named(row), row["distribution"], float(row["value"])
    if law.startswith("bernoulli"):
        assert value(one, [0.0, 100.0], [0.9, 0.1], sampled=False) == pytest.approx(expected, rel=2e-14)
        return
    coarse, fine = (value(one, *_in_cells(QUANTILES[law], count), sampled=False) for count in (CELLS, 2 * CELLS))
    assert coarse == pytest.approx(expected, rel=1e-5)  # h^2/24 = 2e-6, times the quantile's curvature
    assert (4.0 * fine - coarse) / 3.0 == pytest.approx(expected, rel=1e-11)


# Expectiles of known laws.
#
# The law becomes cells with their exact conditional means, one edge at the expectile expected: E(L - e)+ and
# E(e - L)+ are then those of the law itself at that e, so the expectile of the table is e to rounding if and
# only if it is the law's. Were e wrong by x, the table's would move by about x.
MEAN_EXCESS = {  # law: survival function, E[L; L > x]
    "normal": (lambda x: special.ndtr(-x), lambda x: np.exp(-x * x / 2.0) / np.sqrt(2.0 * np.pi)),
    "uniform": (lambda x: 1.0 - x, lambda x: (1.0 - x * x) / 2.0),
    "exponential": (lambda x: np.exp(-x), lambda x: (1.0 + x) * np.exp(-x)),
}
GRIDS = {
    "normal": np.linspace(-9.0, 9.0, 181),
    "uniform": np.linspace(0.0, 1.0, 101),
    "exponential": np.linspace(0.0, 40.0, 201),
    "student_t": np.sinh(np.linspace(-12.0, 12.0, 241)),
}


def _student_t(df):
    constant = np.exp(special.gammaln((df + 1.0) / 2.0) - special.gammaln(df / 2.0)) / np.sqrt(df * np.pi)

    def upper(x):
        return constant * df / (df - 1.0) * (1.0 + x * x / df) ** ((1.0 - df) / 2.0)

    return lambda x: special.stdtr(df, -x), upper


def _cells_cut_at(law, cut):
    """Return conditional means and probabilities of cells, one of whose edges is `cut`."""
    family = law.split("(")[0]
    if family == "student_t":
        survival, upper = _student_t(float(re.search(r"df=(\d+)", law)[1]))
    else:
        survival, upper = MEAN_EXCESS[family]
    edges = np.union1d(GRIDS[family], [cut])
    s, m = survival(edges), upper(edges)
    bounded = family in ("uniform", "exponential")
    s, m = np.append(s, 0.0), np.append(m, 0.0)
    if not bounded:
        s, m = np.append(1.0, s), np.append(0.0, m)
    p, parts = -np.diff(s), -np.diff(m)
    kept = p > 1e-300
    return parts[kept] / p[kept], p[kept]


@pytest.mark.parametrize("row", rows("j_expectiles"), ids=lambda row: f"{row['distribution'][:15]}-{row['tau']}")
def test_expectile_of_a_law(row):
    """Source: closed forms (uniform, exponential, t with 2 degrees of freedom) or root finding (mark: own).

    That the expectiles of the t law with 2 degrees of freedom are its quantiles is Koenker's (1993; mark: memory).
    """
    expected = float(row["expectile"])
    losses, p = _cells_cut_at(row["distribution"], expected)
    # 14 digits are given; differences of survival probabilities in the cells leave 1e-15 of the weights
    assert value(measure("expectile", level=float(row["tau"])), losses, p, sampled=False) == pytest.approx(
        expected, rel=2e-13
    )


def _quantile_and_shortfall(law, level):
    if law == "normal":
        z = special.ndtri(level)
        return z, np.exp(-z * z / 2.0) / np.sqrt(2.0 * np.pi) / (1.0 - level)
    if law.startswith("uniform"):
        return level, (1.0 + level) / 2.0
    df = float(re.search(r"df=(\d+)", law)[1])
    t = special.stdtrit(df, level)
    return t, _student_t(df)[1](t) / (1.0 - level)


@pytest.mark.parametrize(
    "row", rows("j_expectile_level_matching"), ids=lambda row: f"{row['distribution'][:15]}-{row['level']}"
)
def test_levels_at_which_expectiles_meet_quantiles_and_tail_means(row):
    """Source: our own root finding (mark: own); .99855 for the normal 99 % quantile is also Bellini and
    Di Bernardino's (2017; mark: memory).
    """
    law = (
        row["distribution"].replace("normal", "normal(0,1)") if row["distribution"] == "normal" else row["distribution"]
    )
    for column, target in zip(
        ("tau_expectile_equals_var", "tau_expectile_equals_es"),
        _quantile_and_shortfall(row["distribution"], float(row["level"])),
        strict=True,
    ):
        tau = float(row[column])
        losses, p = _cells_cut_at(law, target)
        found, moved = (
            value(measure("expectile", level=one), losses, p, sampled=False) for one in (tau, tau - (1.0 - tau) / 8.0)
        )
        # tau has 12 decimals: half a unit of the last times the slope in tau (taken from a step, doubled)
        slope = 2.0 * (found - moved) / ((1.0 - tau) / 8.0)
        assert found == pytest.approx(target, abs=0.5e-12 * slope + 1e-12)


# A sample of our own, with ties: every measure of the whole distribution against 30-digit arithmetic.
mpmath.mp.dps = 30
SAMPLE = np.array([12.5, -3.0, 0.0, 0.0, 7.25, 0.0, 41.0, 3.5, -3.0, 100.0, 0.5, 7.25])
WEIGHTS = np.array([0.1, 0.05, 0.2, 0.1, 0.025, 0.125, 0.05, 0.1, 0.1, 0.01, 0.09, 0.05])
DISTORTIONS = {
    ("wang", "shift"): (0.0, 0.5, 3.0),
    ("proportional_hazard", "exponent"): (1.0, 0.8, 0.25),
    ("dual_power", "exponent"): (1.0, 1.5, 20.0),
    ("exponential_distortion", "aversion"): (1e-12, 1.0, 300.0),
}


def _g(kind, number):
    normal = mpmath.ncdf
    inverse = lambda s: mpmath.sqrt(2) * mpmath.erfinv(2 * s - 1)  # noqa: E731  # a formula
    number = mpmath.mpf(number)
    return {
        "wang": lambda s: s if s in (0, 1) else normal(inverse(s) + number),
        "proportional_hazard": lambda s: s**number,
        "dual_power": lambda s: 1 - (1 - s) ** number,
        "exponential_distortion": lambda s: mpmath.expm1(-number * s) / mpmath.expm1(-number),
    }[kind]


def _exact_weights(p):
    return [mpmath.mpf(1) / len(SAMPLE)] * len(SAMPLE) if p is None else [mpmath.mpf(str(one)) for one in p]


@pytest.mark.parametrize("p", [None, WEIGHTS], ids=["equal", "weighted"])
@pytest.mark.parametrize(
    ("kind", "parameter", "number"),
    [(*name, number) for name, numbers in DISTORTIONS.items() for number in numbers],
)
def test_distortion_of_a_sample(kind, parameter, number, p):
    """Source: the definition, sum x [g(P(L >= x)) - g(P(L > x))] over the distinct losses (Wang 1996)."""
    g, weights = _g(kind, number), _exact_weights(p)
    expected = mpmath.mpf(0)
    for x in sorted(set(SAMPLE)):
        at_least = mpmath.fsum(w for w, one in zip(weights, SAMPLE, strict=True) if one >= x)
        above = mpmath.fsum(w for w, one in zip(weights, SAMPLE, strict=True) if one > x)
        at_least = min(at_least, mpmath.mpf(1))
        expected += mpmath.mpf(float(x)) * (g(at_least) - g(above))
    assert value(measure(kind, **{parameter: number}), SAMPLE, p) == pytest.approx(float(expected), abs=1e-13 * 100.0)


@pytest.mark.parametrize("p", [None, WEIGHTS], ids=["equal", "weighted"])
@pytest.mark.parametrize("level", [0.001, 0.25, 0.5, 0.75, 0.99, 0.999999])
def test_expectile_of_a_sample(level, p):
    """Source: the first-order condition, solved by Brent's method."""
    weights = np.full(SAMPLE.size, 1.0 / SAMPLE.size) if p is None else p

    def balance(e):
        return level * weights @ np.maximum(SAMPLE - e, 0.0) - (1.0 - level) * weights @ np.maximum(e - SAMPLE, 0.0)

    expected = optimize.brentq(balance, SAMPLE.min(), SAMPLE.max(), xtol=1e-14, rtol=1e-15)
    assert value(measure("expectile", level=level), SAMPLE, p) == pytest.approx(expected, abs=1e-13 * 100.0)


RANGE = float(SAMPLE.max() - SAMPLE.min())


@pytest.mark.parametrize("p", [None, WEIGHTS], ids=["equal", "weighted"])
@pytest.mark.parametrize("reach", [1e-6, 30.0, 1000.0])
def test_entropic_and_its_contributions(reach, p):
    """Source: ln E[exp(a L)]/a, and the Aumann-Shapley integral of E[X_i exp(t a L)]/E[exp(t a L)] over t in [0, 1],
    by adaptive quadrature with 30 digits; aversion times the range of the losses is `reach`.
    """
    aversion = reach / RANGE
    rng = np.random.default_rng(11)
    first = np.round(rng.normal(size=SAMPLE.size) * 8.0) / 4.0
    columns = np.stack([first, SAMPLE - first], axis=1)
    weights, a = _exact_weights(p), mpmath.mpf(aversion)
    weights = [w / mpmath.fsum(weights) for w in weights]
    top = mpmath.mpf(float(SAMPLE.max()))
    total = [mpmath.mpf(float(x)) for x in SAMPLE]

    def mean(t, column):
        gibbs = [w * mpmath.exp(t * a * (x - top)) for w, x in zip(weights, total, strict=True)]
        return mpmath.fdot(gibbs, column) / mpmath.fsum(gibbs)

    expected = (
        top + mpmath.log(mpmath.fsum(w * mpmath.exp(a * (x - top)) for w, x in zip(weights, total, strict=True))) / a
    )
    edges = [0, *(mpmath.mpf(2) ** -k for k in range(max(0, int(np.log2(max(reach, 1.0)))) + 2, -1, -1))]
    column = [mpmath.mpf(float(x)) for x in first]
    part = mpmath.quad(lambda t: mean(t, column), edges)
    one = measure("entropic", aversion=aversion)
    scale = RANGE + 100.0
    assert value(one, columns, p) == pytest.approx(float(expected), abs=1e-13 * scale)
    assert contributions("euler", one, columns, p) == pytest.approx(
        [float(part), float(expected - part)], abs=1e-13 * scale
    )
