"""The shared variables of the groups of a nested Archimedean copula, given the one that all groups share.

Given the outer variable V0 the inner one has the Laplace transform exp(-V0 psi0^-1(psi(t))): A. J. McNeil, Sampling
nested Archimedean copulas, J. of Statistical Computation and Simulation 78 (2008) 567-581; for the laws M. Hofert,
Efficiently sampling nested Archimedean copulas, Computational Statistics & Data Analysis 55 (2011) 57-70. With
alpha = theta0 / theta they are

    Gumbel   V0^(1/alpha) times a positive stable variable
    Clayton  a tilted stable variable of time V0
    Joe      a sum of V0 Sibuya variables
    Frank    a sum of V0 Sibuya variables, each tilted by p^k, p = 1 - exp(-theta)

A sum of more than 1000 terms is replaced by the (tilted) stable variable that it tends to. That moves no probability
by more than 3e-5.
"""

from dataclasses import dataclass
from functools import lru_cache

import numpy as np
from numpy.typing import NDArray
from scipy import special

from service.risk.copulas.frailties import (
    LISTED,
    log_positive_stable,
    log_sibuya,
    log_sums,
    log_tilted_stable,
    log_whole,
    stable_draws,
)
from service.risk.copulas.generators import GeneratorName, log_expm1
from service.risk.streams import SMALLEST, Draw

Array = NDArray[np.float64]

MOST_TERMS = 1000  # of a sum that is drawn term by term
STEP = 0.02  # of the logarithms in the table of a tilted tail
FALL = 50.0  # the table ends where the tail has fallen by exp(-50)


def inner_dimensions(generator: GeneratorName, outer: float, inner: float) -> int:
    """Return how many numbers an inner variable takes from a draw, those of its own generator not counted."""
    return 2 if generator == "gumbel" and inner > outer else 0


def log_inner(generator: GeneratorName, outer: float, inner: float, log_outer: Array, draw: Draw) -> Array:
    """Return the logarithms of an inner variable.

    Parameters
    ----------
    generator : str
    outer, inner : float
        The thetas, inner >= outer.
    log_outer : ndarray of shape (n,)
        Logarithms of the outer variable.
    draw : Draw

    Returns
    -------
    ndarray of shape (n,)
    """
    alpha = outer / inner
    if alpha == 1.0:
        return log_outer
    if generator == "gumbel":
        return log_outer / alpha + log_positive_stable(alpha, draw.uniforms(1)[0], draw.exponentials(1)[0])
    if generator == "clayton":
        return log_tilted_stable(alpha, log_outer, draw.generator)
    result = np.empty_like(log_outer)
    few = log_outer <= np.log(MOST_TERMS)
    many = ~few
    counts = np.rint(np.exp(log_outer[few])).astype(np.intp)
    uniforms = np.maximum(draw.generator.random(int(counts.sum())), SMALLEST)
    if generator == "joe":
        result[few] = log_sums(log_sibuya(alpha, uniforms), counts)
        stable = log_positive_stable(alpha, *stable_draws(int(many.sum()), draw.generator))
        result[many] = log_outer[many] / alpha + stable
    else:
        result[few] = log_sums(TiltedSibuya.of(outer, inner)(uniforms), counts)
        times = log_outer[many] - log_expm1(outer)
        result[many] = log_expm1(inner) + log_tilted_stable(alpha, times, draw.generator)
    return result


@dataclass(frozen=True, slots=True)
class TiltedSibuya:
    """A Sibuya variable tilted by p^k: its Laplace transform is (1 - (1 - p exp(-t))^alpha) / (1 - exp(-theta0)).

    Attributes
    ----------
    exceeding : ndarray of shape (LISTED,)
        P(V > k) for k from LISTED down to 1.
    log_tail, log_values : ndarray of shape (m,)
        Beyond: logarithms of P(V > v), ascending, and of v, by integrating the probabilities of neighbouring values.
    """

    exceeding: Array
    log_tail: Array
    log_values: Array

    @classmethod
    def of(cls, outer: float, inner: float) -> "TiltedSibuya":
        """Return the law of the terms of a nested Frank copula with these thetas; made once."""
        return _tilted_sibuya(outer, inner)

    def __call__(self, uniforms: Array) -> Array:
        """Return the logarithms of the variables that the uniforms, as P(V > v), stand for; shape (n,)."""
        values = 1.0 + LISTED - np.searchsorted(self.exceeding, uniforms, side="right")
        result = np.log(values)
        beyond = uniforms < self.exceeding[0]
        if beyond.any():
            result[beyond] = log_whole(np.interp(np.log(uniforms[beyond]), self.log_tail, self.log_values), 0.5)
        return np.asarray(result)


@lru_cache(maxsize=32)
def _tilted_sibuya(outer: float, inner: float) -> TiltedSibuya:
    alpha = outer / inner
    log_p = np.log(-np.expm1(-inner))
    k = np.arange(1.0, LISTED)
    log_probability = np.concatenate([[0.0], np.cumsum(np.log((k - alpha) / (k + 1.0)) + log_p)])
    log_probability += np.log(alpha) + log_p - np.log(-np.expm1(-outer))

    # P(V = v) is (alpha / Gamma(1 - alpha)) v^(-1 - alpha) (1 + alpha (1 + alpha) / (2 v)) p^v / (1 - exp(-theta0))
    first = np.log(LISTED + 0.5)
    last = max(first + STEP, np.log(FALL) - _log_rate(inner))
    logs = np.linspace(first, last, 2 * int(np.ceil((last - first) / STEP)) + 1)
    decline = -np.exp(logs + _log_rate(inner))
    mass = np.exp(decline - alpha * logs) * (1.0 + 0.5 * alpha * (1.0 + alpha) * np.exp(-logs))
    mass *= alpha / special.gamma(1.0 - alpha) / -np.expm1(-outer)
    parts = (logs[2] - logs[0]) / 6.0 * (mass[:-2:2] + 4.0 * mass[1:-1:2] + mass[2::2])  # Simpson's rule
    tail = np.cumsum(parts[::-1])  # from the far end
    seen = tail > 0.0
    beyond = float(tail[-1]) if seen.any() else 0.0

    exceeding = beyond + np.cumsum(np.exp(log_probability[::-1]))[:-1]  # P(V > k), k = LISTED - 1, ..., 1
    exceeding = np.concatenate([[beyond], exceeding])
    return TiltedSibuya(exceeding, np.log(tail[seen]), logs[:-2:2][::-1][seen])


def _log_rate(theta: float) -> float:
    """Return ln(-ln(1 - exp(-theta)))."""
    return float(-theta if theta > FALL else np.log(-np.log1p(-np.exp(-theta))))
