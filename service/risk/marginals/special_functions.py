"""Functions that SciPy lacks, or has with too few digits where a parameter is extreme."""

import math

import numpy as np
from numpy.typing import NDArray
from scipy import special

Array = NDArray[np.float64]

NEAR_ONE = 0.05  # |x| up to which ln gamma(1 + x) is summed as a series; beyond it SciPy loses no digits
TERMS = 24  # of the series; the last is below 0.1^24
ZETA = special.zeta(np.arange(2.0, TERMS + 2.0))  # zeta(2), zeta(3), ...
SHORT = 0.2  # |t| below which t - ln(1 + t) is summed as a series
STIRLING_FROM = 30.0  # argument from which four terms of Stirling's series are exact to rounding
LARGEST_LOGARITHM = 709.0  # exp(710) is beyond the range of binary64


def log_upper(lower: Array, upper: Array) -> Array:
    """Return ln of the upper probability, accurate on both sides; `upper` = 1 - `lower`."""
    return np.where(lower < upper, np.log1p(-lower), np.log(upper))


def log_gamma_1p(x: float) -> float:
    """Return ln gamma(1 + x) for x > -1, without loss near x = 0."""
    if abs(x) > NEAR_ONE:
        return float(special.gammaln(1.0 + x))
    orders = np.arange(2.0, TERMS + 2.0)
    return float(-np.euler_gamma * x + np.sum(ZETA * (-x) ** orders / orders))


def log_gamma_bend(x: float) -> float:
    """Return ln gamma(1 + 2x) - 2 ln gamma(1 + x) for x > -1/2, without loss near x = 0."""
    if abs(x) > NEAR_ONE:
        return float(special.gammaln(1.0 + 2.0 * x) - 2.0 * special.gammaln(1.0 + x))
    orders = np.arange(2.0, TERMS + 2.0)
    return float(np.sum(ZETA * (-x) ** orders * (2.0**orders - 2.0) / orders))


def log_gamma_ratio(a: float, x: float) -> float:
    """Return ln(gamma(a) / gamma(a - x)) for a > max(x, 0), without loss where a is large.

    The two logarithms are subtracted term by term in Stirling's series (Abramowitz and Stegun 6.1.41).
    """
    low = a - x
    if min(a, low) < STIRLING_FROM:
        return float(special.gammaln(a) - special.gammaln(low))
    main = x * math.log(a) - (low - 0.5) * math.log1p(-x / a) - x
    return main + stirling_rest(a) - stirling_rest(low)


def stirling_rest(a: float) -> float:
    """Return ln gamma(a) - ((a - 1/2) ln a - a + ln(2 pi)/2) for a of `STIRLING_FROM` or more."""
    square = 1.0 / (a * a)
    return (1.0 / 12.0 - square * (1.0 / 360.0 - square * (1.0 / 1260.0 - square / 1680.0))) / a


def log_excess(ratio: Array) -> Array:
    """Return t - ln(1 + t), for t > -1, without loss near t = 0."""
    small = np.abs(ratio) < SHORT
    t = np.where(small, ratio, 0.0)
    # with s = t/(2 + t): ln(1 + t) = 2 (s + s^3/3 + s^5/5 + ...) and t - 2 s = t s
    s = t / (2.0 + t)
    square = s * s
    total = np.zeros_like(s)
    for order in range(17, 1, -2):
        total = square * (1.0 / order + total)
    near = s * (t - 2.0 * total)
    return np.where(small, near, ratio - np.log1p(ratio))


def exp(x: float) -> float:
    """Return exp(x), infinity where that is beyond the range of binary64."""
    return math.exp(x) if x < LARGEST_LOGARITHM else math.inf


def expm1(x: float) -> float:
    """Return exp(x) - 1, infinity where that is beyond the range of binary64."""
    return math.expm1(x) if x < LARGEST_LOGARITHM else math.inf


def square(x: float) -> float:
    """Return x², infinity where that is beyond the range of binary64."""
    return x * x


def decayed(rate: float, length: float) -> float:
    """Return the integral of exp(-rate s) over s from 0 to `length`, which may be infinite for a positive rate."""
    if math.isinf(length):
        return 1.0 / rate if rate > 0.0 else math.inf
    return float(length * special.exprel(-rate * length))
