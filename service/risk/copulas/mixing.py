"""Gamma variables as a function of a normal score: one number drives any number of them, monotonically."""

from dataclasses import dataclass
from functools import lru_cache

import numpy as np
from numpy.typing import NDArray
from scipy import special

Array = NDArray[np.float64]

NEWTON_STEPS = 4
TINY = 1e-12  # eta over exp(y) - 1 is 1 up to rounding
FARTHEST = 9.0  # normal scores of the table; beyond it, once in 4e18 draws, the quantile is computed
INTERVALS = 4096  # of the table: the error is below 1e-11
LARGE_SHAPE = 1e5  # from here on an asymptotic inversion is used, with an error below 1e-11


def log_gamma_quantile(shape: float, scores: Array) -> Array:
    """Return the logarithm of the gamma quantile (scale 1) of the probability Phi(score)."""
    if shape > LARGE_SHAPE:
        return np.asarray(np.log(shape) + _log_ratio(shape, scores)[0])
    nearer = special.ndtr(-np.abs(scores))
    below = special.gammaincinv(shape, nearer)
    above = special.gammainccinv(shape, nearer)
    return np.asarray(np.log(np.where(scores < 0.0, below, above)))


def _log_ratio(shape: float, scores: Array) -> tuple[Array, Array]:
    """Return y = ln(quantile / shape) for a large shape, and its slope over the score.

    y solves exp(y) - 1 - y = eta^2 / 2 with the sign of eta, where eta = x - (1/3 - x/36) / shape up to terms in
    shape^-2, x = score / sqrt(shape): N. M. Temme, Asymptotic inversion of incomplete gamma functions, Mathematics of
    Computation 58 (1992) 755-764.
    """
    x = scores / np.sqrt(shape)
    eta = x - (1.0 / 3.0 - x / 36.0) / shape
    y = eta.copy()
    for _ in range(NEWTON_STEPS):
        step = (np.expm1(y) - y - 0.5 * eta**2) / np.where(y == 0.0, 1.0, np.expm1(y))
        y -= step
    steepness = np.divide(eta, np.expm1(y), out=np.ones_like(y), where=np.abs(y) > TINY)
    return y, steepness * (1.0 + 1.0 / (36.0 * shape)) / np.sqrt(shape)


@dataclass(frozen=True, slots=True)
class LogGamma:
    """Cubic table of the logarithm of a gamma quantile over the normal score.

    Attributes
    ----------
    shape : float
        0.25 or more.
    coefficients : ndarray of shape (4, INTERVALS)
        Of the powers of the place within the interval, from 0 to 3.
    """

    shape: float
    coefficients: Array

    @classmethod
    def of(cls, shape: float) -> "LogGamma":
        """Return the table for a shape; made once."""
        return _table(shape)

    def __call__(self, scores: Array) -> Array:
        """Return the logarithms of the quantiles of Phi(scores); same shape."""
        place = (scores + FARTHEST) * (INTERVALS / (2.0 * FARTHEST))
        interval = np.clip(place.astype(np.intp), 0, INTERVALS - 1)
        place -= interval
        values = self.coefficients[3].take(interval)
        for power in (2, 1, 0):
            values *= place
            values += self.coefficients[power].take(interval)
        beyond = np.abs(scores) > FARTHEST
        if beyond.any():
            values[beyond] = log_gamma_quantile(self.shape, scores[beyond])
        return values


@lru_cache(maxsize=64)
def _table(shape: float) -> LogGamma:
    """Return the Hermite cubics through the quantiles at the nodes, with their slopes phi(z) / (q f(q))."""
    nodes = np.linspace(-FARTHEST, FARTHEST, INTERVALS + 1)
    logs = log_gamma_quantile(shape, nodes)
    if shape > LARGE_SHAPE:
        slopes = _log_ratio(shape, nodes)[1]
    else:
        log_density = shape * logs - np.exp(logs) - special.gammaln(shape)  # of the logarithm
        slopes = np.exp(-0.5 * nodes**2 - 0.5 * np.log(2.0 * np.pi) - log_density)
    slopes = slopes * (2.0 * FARTHEST / INTERVALS)
    rise, start, end = np.diff(logs), slopes[:-1], slopes[1:]
    cubics = [logs[:-1], start, 3.0 * rise - 2.0 * start - end, start + end - 2.0 * rise]
    return LogGamma(shape, np.ascontiguousarray(np.stack(cubics)))
