"""Euler contributions of multivariate laws with known answers.

Source of the figures: closed forms (mark: own), after Tasche (1999/2000) that contributions to value at risk are
E[X_i | S = q] and to expected shortfall E[X_i | S > q] (mark: memory).

Each law is a population: nodes of a quadrature of the total S (see `laws`), and for each of them the columns
given S by a second rule whose conditional means are exact. All rows of one node have the same total up to
rounding, so they also try how ties are found. Tolerances are rounding alone unless they say otherwise.
"""

from itertools import groupby

import numpy as np
import pytest
from scipy import linalg, special

from tests.reference.laws import CELL, gauss, panels, rows, score_nodes, upper_nodes
from tests.unit.risk.arithmetic import alone, contributions, es, measure, value, var

CASES = {
    key: list(found)
    for key, found in groupby(rows("b_euler_contributions"), lambda r: (r["case"], r["measure"], r["level"]))
}


def _levels(case):
    return sorted({float(level) for name, _, level in CASES if name == case and level})


def _check(case, losses, p, *, tolerance):
    """Compare totals and contributions of every measure and level in the file."""
    of_case = {key: found for key, found in CASES.items() if key[0] == case}
    assert of_case
    for (_, kind, level), expected in of_case.items():
        one = measure("standard_deviation") if kind == "sd" else {"var": var, "es": es}[kind](float(level))
        total = float(expected[0]["total"])
        assert value(one, losses, p, sampled=False) == pytest.approx(total, rel=tolerance), (kind, level)
        found = contributions("euler", one, losses, p, sampled=False, smoothing="none")
        wanted = [float(row["contribution"]) for row in expected]
        assert found == pytest.approx(wanted, abs=tolerance * total), (kind, level)


MEAN = np.array([1.0, 2.0, 0.5])
SCALE = np.array([1.0, 2.0, 3.0])
DISPERSION = np.array([[1.0, 0.5, 0.2], [0.5, 1.0, -0.1], [0.2, -0.1, 1.0]]) * np.outer(SCALE, SCALE)


def _elliptical(radial, p):
    """Return rows given the standardised total: the regression on it, plus and minus the roots of what is left."""
    against = DISPERSION.sum(axis=1)
    left = DISPERSION - np.outer(against, against) / against.sum()
    sizes, axes = linalg.eigh(left)
    roots = (axes * np.sqrt(np.maximum(sizes, 0.0)))[:, 1:]  # the first is the direction of the total itself
    signs = np.array([[1.0, 1.0], [1.0, -1.0], [-1.0, 1.0], [-1.0, -1.0]]) @ roots.T
    centre = MEAN + np.outer(radial, against / np.sqrt(against.sum()))
    losses = (centre[:, None, :] + signs[None, :, :]).reshape(-1, 3)
    return losses, np.repeat(p / 4.0, 4)


def test_normal():
    _check("mvn3", *_elliptical(*score_nodes(_levels("mvn3"))), tolerance=2e-13)


def test_student_t_with_four_degrees_of_freedom():
    """The dispersion matrix is not the covariance: standard deviations are sqrt(2) larger."""
    z, p = score_nodes(_levels("mvt3_df4"))
    kept = np.abs(z) < 11.0  # beyond, 4e-28 of mass and 1e-13 of the variance
    z, p = z[kept], p[kept]
    t = np.sign(z) * -special.stdtrit(4.0, special.ndtr(-np.abs(z)))
    _check("mvt3_df4", *_elliptical(t, p), tolerance=1e-12)


def _beta(a, b, count):
    """Return nodes and weights for means under a beta law."""
    x, w = special.roots_jacobi(count, b - 1.0, a - 1.0)
    return (1.0 + x) / 2.0, w / w.sum()


def test_gammas_of_one_scale():
    """S is gamma, and the shares X_i/S are independent of it (Dirichlet): their means are a_i/sum(a)."""
    shapes, scale, case = (0.5, 1.5, 3.0), 2.0, "gamma_same_scale"
    t, p = upper_nodes(_levels(case), deepest=100.0)
    total = np.append(scale * special.gammainccinv(sum(shapes), np.exp(-t)), 1.0)
    p = np.append(p, 1.0 - p.sum())
    first, first_p = _beta(shapes[0], shapes[1] + shapes[2], 3)
    second, second_p = _beta(shapes[1], shapes[2], 3)
    b, c = (grid.reshape(-1) for grid in np.meshgrid(first, second, indexing="ij"))
    shares = np.stack([b, (1.0 - b) * c, (1.0 - b) * (1.0 - c)], axis=1)
    losses = (total[:, None, None] * shares[None, :, :]).reshape(-1, 3)
    _check(case, losses, np.outer(p, np.outer(first_p, second_p)).reshape(-1), tolerance=2e-12)


def _sum_of_two_gammas(case, first, second):
    """Return the population of two independent gammas (shape, scale), by the total and the first one's share.

    The density of the total and the share b given it come from one Gauss-Jacobi rule in b, with 60 nodes exact to
    binary64 for the exponential that is left. The cells at the quantiles are cut in the total.
    """
    (a, scale), (c, other) = first, second
    share, weight = _beta(a, c, 60)
    wide = max(scale, other)
    norm = scale**a * other**c * special.gamma(a + c)

    def density(s):
        inner = np.exp(-s[:, None] * (share / scale + (1.0 - share) / other)) * weight
        return s[:, None] ** (a + c - 1.0) * inner / norm

    def add(nodes, mass):
        points.append(nodes)
        masses.append(mass)

    points, masses, start = [], [], 0.0
    for level in _levels(case):
        q = float(CASES[case, "var", f"{level:g}"][0]["total"])
        at_q = density(np.array([q]))
        cut = q - CELL / at_q.sum()
        edges = panels(start or q / 2.0, cut, 0.5 * wide)
        if start == 0.0:  # where the density is a broken power of s: panels that halve
            edges = np.concatenate([[0.0], q * 0.5 ** np.arange(30.0, 1.0, -1.0), edges])
        nodes, weights = gauss(edges)
        add(nodes, weights[:, None] * density(nodes))
        nodes, weights = gauss(np.array([cut, q]))
        add(np.array([q]), at_q * (weights @ density(nodes)).sum() / at_q.sum())
        start = q
    nodes, weights = gauss(panels(start, start + 60.0 * wide, wide))
    add(nodes, weights[:, None] * density(nodes))
    s, p = np.concatenate(points), np.concatenate(masses)
    losses = np.stack([s[:, None] * share, s[:, None] * (1.0 - share)], axis=-1)
    return losses.reshape(-1, 2), p.reshape(-1)


def test_gammas_of_two_scales():
    losses, p = _sum_of_two_gammas("gamma_diff_scale", (2.0, 1.0), (1.5, 3.0))
    assert p.sum() == pytest.approx(1.0, abs=1e-12)
    # quantiles are given to 15 digits: 1e-13 of mass against their cells of 1e-9, and rounding of the sums
    _check("gamma_diff_scale", losses, p / p.sum(), tolerance=5e-12)


def test_two_exponentials():
    losses, p = _sum_of_two_gammas("exp_mean1_exp_mean2", (1.0, 1.0), (1.0, 2.0))
    assert p.sum() == pytest.approx(1.0, abs=1e-12)
    _check("exp_mean1_exp_mean2", losses, p / p.sum(), tolerance=5e-12)


def test_comonotone():
    """Exponential, lognormal and Pareto losses driven by one factor: contributions are the stand-alone figures."""
    case = "comonotone_exp_lognormal_pareto"
    t, p = upper_nodes(_levels(case), deepest=55.0)  # beyond, 1e-16 of the Pareto tail means
    t, p = np.append(t, 0.5), np.append(p, 1.0 - p.sum())
    losses = np.stack([t, np.exp(-special.ndtri_exp(-t)), np.exp(t / 3.0)], axis=1)
    _check(case, losses, p, tolerance=1e-12)
    for level in _levels(case):
        for one in (var(level), es(level)):
            wanted = alone(one, losses, p, sampled=False).values
            assert contributions("euler", one, losses, p, sampled=False, smoothing="none") == pytest.approx(
                wanted, rel=1e-12
            )


# correlations of risk modules, in the order of the file's columns
SOLVENCY = {
    "bscr": [[4, 1, 1, 1, 1], [1, 4, 1, 1, 2], [1, 1, 4, 1, 0], [1, 1, 1, 4, 0], [1, 2, 0, 0, 4]],
    "market_A=0_": [
        [4, 0, 0, 0, 0, 1],
        [0, 4, 3, 3, 0, 1],
        [0, 3, 4, 2, 0, 1],
        [0, 3, 2, 4, 0, 1],
        [0, 0, 0, 0, 4, 0],
        [1, 1, 1, 1, 0, 4],
    ],
    "market_A=0.5_": [
        [4, 2, 2, 2, 0, 1],
        [2, 4, 3, 3, 0, 1],
        [2, 3, 4, 2, 0, 1],
        [2, 3, 2, 4, 0, 1],
        [0, 0, 0, 0, 4, 0],
        [1, 1, 1, 1, 0, 4],
    ],
    "nonlife": [[4, 1, 0], [1, 4, 0], [0, 0, 4]],
}


@pytest.mark.parametrize(
    "row", rows("f_solvency2_aggregation"), ids=lambda row: f"{row['matrix'][:13]}-{row['components']}"
)
def test_square_root_aggregation(row):
    """Charges aggregated by the square root of their correlated squares are a standard deviation.

    Source: matrices and formula in directive 2009/138/EC, annex IV, and delegated regulation (EU) 2015/35, articles
    114 and 164 (mark: seen; non-life as article 114); aggregates and Euler shares SCR_i (Corr SCR)_i / total (own).
    The population has the covariance exactly: plus and minus sqrt(d) times each column of a root of the matrix.
    """
    charges = np.array([float(one) for one in row["components"].split(";")])
    matrix = next(np.array(found) / 4.0 for name, found in SOLVENCY.items() if row["matrix"].startswith(name))
    root = np.linalg.cholesky(matrix * np.outer(charges, charges)) * np.sqrt(charges.size)
    losses = np.concatenate([root.T, -root.T]) + 1000.0
    one = measure("standard_deviation")
    assert value(one, losses, sampled=False) == pytest.approx(float(row["aggregate"]), rel=2e-13)
    wanted = [float(part) for part in row["euler_contributions"].split("|")]  # twelve digits
    assert contributions("euler", one, losses, sampled=False) == pytest.approx(wanted, rel=5e-12)
