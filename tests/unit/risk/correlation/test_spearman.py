"""Spearman's rho of the Student t copula."""

import numpy as np
import pytest
from scipy import integrate, special

from service.risk.correlation.spearman import spearman_rhos, student_correlations
from service.risk.streams import stream


@pytest.mark.parametrize("df", [0.5, 1.0, 2.5, 4.0, 30.0, 1e6])
def test_correlations_have_the_rhos_they_are_made_for(df):
    correlations = np.linspace(-1.0, 1.0, 101)
    rhos, slopes = spearman_rhos(correlations[1:-1], df)
    np.testing.assert_allclose(student_correlations(rhos, df), correlations[1:-1], rtol=0.0, atol=5e-9)
    assert np.all(slopes > 0.0)
    np.testing.assert_array_equal(student_correlations(np.array([-1.0, 0.0, 1.0]), df), [-1.0, 0.0, 1.0])


@pytest.mark.parametrize("df", [0.5, 3.0, 100.0])
def test_equal_factors_have_rho_1(df):
    assert spearman_rhos(np.array([1.0]), df)[0][0] == pytest.approx(1.0, abs=1e-9)


def test_many_degrees_of_freedom_are_gaussian():
    rhos = np.array([-0.9, -0.3, 0.2, 0.7])
    np.testing.assert_allclose(student_correlations(rhos, 1e6), 2.0 * np.sin(np.pi * rhos / 6.0), rtol=0.0, atol=1e-7)


def test_the_integral_over_the_copula_gives_the_same():
    """rho_S = 12 E[U V] - 3, with the conditional mean of V given the first score by quadrature."""
    df, correlation = 4.0, 0.6
    nodes, weights = special.roots_legendre(200)
    p = (1.0 + nodes) / 2.0
    q = special.stdtrit(df + 1.0, p)
    inner_weights = weights / 2.0

    def given(x):
        own = np.sqrt((1.0 - correlation**2) * (df + x**2) / (df + 1.0))
        return float(np.sum(inner_weights * special.stdtr(df, correlation * x + own * q)))

    def integrand(u):
        return u * given(special.stdtrit(df, u))

    expected = 12.0 * integrate.quad(integrand, 0.0, 1.0, limit=200)[0] - 3.0
    assert spearman_rhos(np.array([correlation]), df)[0][0] == pytest.approx(expected, abs=1e-6)


def test_draws_have_the_rho():
    """n = 2^20, 4 standard errors: false alarm 6e-5."""
    df, n = 2.0, 1 << 20
    generator = stream(1, "test", 0)
    correlation = float(student_correlations(np.array([0.45]), df)[0])
    first, own = generator.standard_normal((2, n))
    second = correlation * first + np.sqrt(1.0 - correlation**2) * own
    root = np.sqrt(df / generator.chisquare(df, n))
    u, v = special.stdtr(df, first * root), special.stdtr(df, second * root)
    draws = 12.0 * (u - 0.5) * (v - 0.5)
    assert abs(draws.mean() - 0.45) < 4.0 * draws.std() / np.sqrt(n)
