"""The gamma law with a large shape: a normal score and a few corrections.

SciPy's lower incomplete gamma function and its inverse lose digits from a shape of about 5e5 on. There the
value is a short series in the normal score z (Cornish and Fisher, Revue de l'Institut International de
Statistique 5, 1938, 307-320), whose first neglected term is below 1e-14 of the value for |z| < 38.
"""

import math

import numpy as np
from scipy import special

from service.risk.marginals.moments import Array
from service.risk.marginals.special_functions import log_excess, stirling_rest

LARGE_SHAPE = 3e5
TERMS = (
    (3.0, (1.0, -1.0)),
    (36.0, (1.0, -7.0)),
    (810.0, (-3.0, -7.0, 16.0)),
    (38_880.0, (9.0, 256.0, -433.0)),
    (204_120.0, (12.0, -243.0, -923.0, 1_472.0)),
    (146_966_400.0, (-3_753.0, -4_353.0, 289_517.0, 289_717.0)),
)
"""Divisor and coefficients, highest first, of the corrections by descending powers of the root of the shape.

They are polynomials in z², the second, fourth and sixth times z, and solve f(x) dx = φ(z) dz power by power.
"""
FARTHEST_SCORE = 40.0  # normal scores beyond have probability 0 in binary64
STEPS = 5  # of Newton's method from the leading term; each squares an error that starts below 1e-1


def large_quantile(shape: float, lower: Array, upper: Array) -> Array:
    """Return the quantiles of the gamma law with scale 1."""
    score = np.where(lower < upper, special.ndtri(lower), -special.ndtri(upper))
    return shape + _distance(shape, np.clip(score, -FARTHEST_SCORE, FARTHEST_SCORE))


def large_score(shape: float, values: Array) -> Array:
    """Return the normal scores of values of the gamma law with scale 1."""
    distance = values - shape
    score = np.clip(distance / math.sqrt(shape), -FARTHEST_SCORE, FARTHEST_SCORE)
    for _ in range(STEPS):
        step = (_distance(shape, score) - distance) / (math.sqrt(shape) + 2.0 / 3.0 * score)
        score = np.clip(score - step, -FARTHEST_SCORE, FARTHEST_SCORE)
    return score


def large_term(shape: float, value: float) -> float:
    """Return x^a exp(-x) / gamma(a + 1) for a = shape, x = value.

    Its logarithm is -a (t - ln(1 + t)) - ln(2 pi a)/2 - Stirling's rest, with t = x/a - 1.
    """
    excess = float(log_excess(np.array(value / shape - 1.0)))
    return math.exp(-shape * excess - stirling_rest(shape)) / math.sqrt(2.0 * math.pi * shape)


def _distance(shape: float, z: Array) -> Array:
    """Return how far the value with normal score z lies above `shape`."""
    root = math.sqrt(shape)
    square = z * z
    total = np.zeros_like(z)
    for number in range(len(TERMS) - 1, -1, -1):
        scale, coefficients = TERMS[number]
        term = np.zeros_like(z)
        for coefficient in coefficients:
            term = term * square + coefficient
        total = total / root + (term * z if number % 2 else term) / scale
    return total + root * z
