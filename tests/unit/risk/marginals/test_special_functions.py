"""Functions with more digits than SciPy's, against arithmetic of many digits."""

import math

import mpmath as mp
import numpy as np
import pytest

from service.risk.marginals import special_functions as special
from service.risk.marginals.large_gamma import LARGE_SHAPE, large_quantile, large_score

DIGITS = 40


@pytest.mark.parametrize("x", [-0.99, -0.3, -0.051, -0.05, -1e-3, -1e-9, 0.0, 1e-12, 1e-3, 0.05, 0.051, 0.7, 3.0, 80.0])
def test_log_gamma_1p(x):
    with mp.workdps(DIGITS):
        expected = float(mp.loggamma(1 + mp.mpf(x)))
    assert special.log_gamma_1p(x) == pytest.approx(expected, rel=1e-14, abs=1e-300)


@pytest.mark.parametrize("x", [-0.49, -0.3, -0.051, -0.05, -1e-3, -1e-9, 1e-12, 1e-3, 0.05, 0.051, 0.7, 3.0, 80.0])
def test_log_gamma_bend(x):
    with mp.workdps(DIGITS):
        expected = float(mp.loggamma(1 + 2 * mp.mpf(x)) - 2 * mp.loggamma(1 + mp.mpf(x)))
    assert special.log_gamma_bend(x) == pytest.approx(expected, rel=5e-13)


@pytest.mark.parametrize("a", [0.6, 5.0, 29.0, 31.0, 1e3, 1e5, 1e9, 1e12])
@pytest.mark.parametrize("x", [1e-9, 0.01, 0.5, -0.5, -300.0])
def test_log_gamma_ratio(a, x):
    with mp.workdps(DIGITS):
        expected = float(mp.loggamma(mp.mpf(a)) - mp.loggamma(mp.mpf(a) - mp.mpf(x)))
    # below 30 there is the rounding error of ln gamma, which is at most 100 there
    assert special.log_gamma_ratio(a, x) == pytest.approx(expected, rel=1e-14, abs=1e-18 if a > 30.0 else 1e-13)


@pytest.mark.parametrize("t", [-0.999, -0.5, -0.2, -0.19, -1e-5, 1e-9, 1e-3, 0.19, 0.2, 3.0, 1e9])
def test_log_excess(t):
    with mp.workdps(DIGITS):
        expected = float(mp.mpf(t) - mp.log1p(mp.mpf(t)))
    assert float(special.log_excess(np.array(t))) == pytest.approx(expected, rel=2e-14)


def test_log_upper_is_accurate_on_both_sides():
    lower, upper = np.array([1e-300, 1e-17, 0.5, 1.0]), np.array([1.0, 1.0, 0.5, 1e-300])
    expected = [-1e-300, -1e-17, math.log(0.5), math.log(1e-300)]
    with np.errstate(divide="ignore"):  # the side that is not taken
        np.testing.assert_allclose(special.log_upper(lower, upper), expected, rtol=1e-15)


@pytest.mark.parametrize(
    ("rate", "length", "expected"),
    [
        (0.0, 3.0, 3.0),
        (2.0, 3.0, -math.expm1(-6.0) / 2.0),
        (-0.5, 4.0, math.expm1(2.0) / 0.5),
        (1e-14, 7.0, 7.0 * (1.0 - 3.5e-14)),
        (4.0, math.inf, 0.25),
        (0.0, math.inf, math.inf),
        (-1.0, math.inf, math.inf),
    ],
)
def test_decayed(rate, length, expected):
    assert special.decayed(rate, length) == pytest.approx(expected, rel=1e-14)


@pytest.mark.parametrize("shape", [LARGE_SHAPE, 1e6, 1e9, 1e12])
def test_large_gamma_scores_lead_back(shape):
    tails = 10.0 ** -np.array([300.0, 100.0, 16.0, 4.0, 1.0])
    scores = large_score(shape, large_quantile(shape, tails, 1.0 - tails))
    again = np.array([-37.0471, -21.2735, -8.2221, -3.7190, -1.2816])
    np.testing.assert_allclose(scores, again, atol=1e-4 + 1e-16 * math.sqrt(shape))  # values have 16 digits
