"""Gamma variables of a normal score."""

import numpy as np
import pytest
from scipy import special

from service.risk.copulas.elliptical import inverse_root
from service.risk.copulas.mixing import FARTHEST, LARGE_SHAPE, LogGamma, _log_ratio, log_gamma_quantile


@pytest.mark.parametrize("shape", [0.25, 0.5, 1.0, 2.0, 50.0, 1e4, 5e5, 1e12])
def test_the_table_is_the_quantile(shape):
    scores = np.random.Generator(np.random.Philox(1)).uniform(-9.5, 9.5, 20_000)
    table, exact = LogGamma.of(shape)(scores), log_gamma_quantile(shape, scores)
    np.testing.assert_allclose(table, exact, rtol=0.0, atol=1e-10)


@pytest.mark.parametrize("shape", [0.25, 2.0, 1e4])
def test_the_quantile_inverts_the_distribution_function_in_both_tails(shape):
    scores = np.array([-8.5, -3.0, 0.0, 3.0, 8.5])
    quantiles = np.exp(log_gamma_quantile(shape, scores))
    np.testing.assert_allclose(special.gammainc(shape, quantiles)[:3], special.ndtr(scores[:3]), rtol=1e-9)
    np.testing.assert_allclose(special.gammaincc(shape, quantiles)[2:], special.ndtr(-scores[2:]), rtol=1e-9)


def test_the_inversion_for_large_shapes_takes_over_smoothly():
    scores = np.linspace(-9.0, 9.0, 19)
    large, slope = _log_ratio(LARGE_SHAPE, scores)
    np.testing.assert_allclose(
        large + np.log(LARGE_SHAPE), log_gamma_quantile(LARGE_SHAPE, scores), rtol=0.0, atol=1e-11
    )
    np.testing.assert_allclose(slope, np.full(19, LARGE_SHAPE**-0.5), rtol=0.02)
    assert np.all(np.isfinite(log_gamma_quantile(1e300, scores)))


def test_scores_beyond_the_table_are_computed():
    scores = np.array([-FARTHEST - 1.0, FARTHEST + 1.0])
    np.testing.assert_array_equal(LogGamma.of(2.0)(scores), log_gamma_quantile(2.0, scores))


def test_the_inverse_root_makes_a_student_t_of_a_normal():
    """E[W^2] = df / (df - 2), by quadrature over the score."""
    scores, weights = special.roots_hermitenorm(120)
    roots = inverse_root(LogGamma.of(5.0), scores)
    assert np.sum(weights * roots**2) / weights.sum() == pytest.approx(10.0 / 8.0, rel=1e-9)
