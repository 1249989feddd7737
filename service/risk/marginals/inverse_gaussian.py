"""The inverse Gaussian marginal: both tails without overflow or cancellation, and the quantile by Newton's method."""

import math
from typing import Literal

import numpy as np
from pydantic.dataclasses import dataclass
from pydantic_core import PydanticCustomError
from scipy import special

from service.risk.marginals.contract import OUT_OF_RANGE, MarginalLaw, Scale
from service.risk.marginals.moments import Array, Flags
from service.risk.words import STRICT

NODES, WEIGHTS = np.polynomial.legendre.leggauss(20)
ROOT_HALF = math.sqrt(0.5)
LEAST_RATIO, MOST_RATIO = 1e-8, 1e12  # of shape over mean
MOST_STEPS = 60  # of Newton's method; the worst laws take some 20
CONVERGED = 1e-7  # relative error of a probability, which the step then taken squares


@dataclass(frozen=True, kw_only=True, config=STRICT)
class InverseGaussianMarginal(MarginalLaw):
    """The inverse Gaussian law: the time at which a Brownian motion with drift first reaches a level.

    With φ = shape/mean, y = x/mean, a = √(φ/y)(y - 1) and b = √(φ/y)(y + 1) it is
    P(X <= x) = Φ(a) + exp(2φ) Φ(-b) and P(X > x) = Φ(-a) - exp(2φ) Φ(-b). Since b² = a² + 4φ both are
    exp(-a²/2)/2 times a sum, or a difference, of scaled complementary error functions of |a|/√2 and b/√2
    (Seshadri, The Inverse Gaussian Distribution, 1999, section 2.1).
    """

    family: Literal["inverse_gaussian"]
    """Tag of this law."""
    mean: Scale
    """Mean, above 0, in the unit of the factor."""
    shape: Scale
    """Shape, above 0, in the unit of the factor: the variance is mean³/shape."""

    def _check(self) -> None:
        if not LEAST_RATIO <= self.shape / self.mean <= MOST_RATIO:
            context = {"least": f"{LEAST_RATIO:g}", "most": f"{MOST_RATIO:g}"}
            raise PydanticCustomError(OUT_OF_RANGE, "shape lies between {least} and {most} times the mean", context)

    def _quantile(self, lower: Array, upper: Array) -> Array:
        """Solve for ln y by Newton's method on the logarithm of the nearer tail.

        It is concave in ln y, so that steps that start where there is too little probability never pass the
        root; P(X <= x) <= 2 Φ(a) for a < 0 and P(X > x) <= Φ(-a) give such starts.
        """
        under = lower < upper
        near = np.where(under, lower, upper)
        start = np.where(under, special.ndtri(0.5 * near), -special.ndtri(near))
        half = 0.5 * start / math.sqrt(self.shape / self.mean)
        root = np.sqrt(half * half + 1.0)
        log_y = 2.0 * np.where(half < 0.0, -np.log(root - half), np.log(root + half))
        wanted = np.log(near)
        for _ in range(MOST_STEPS):
            y = np.exp(log_y)
            a, factor = self._factor(y, under)
            gap = np.where(near > 0.0, np.log(factor) - 0.5 * a * a - wanted, 0.0)
            step = gap * factor * np.sqrt(2.0 * math.pi * y * self.mean / self.shape)  # over y × density / tail
            log_y += np.where(under, -step, step)
            if np.all(np.abs(gap) <= CONVERGED):
                break
        return self.mean * np.exp(log_y)

    def _below(self, values: Array) -> Array:
        a, factor = self._factor(values / self.mean, np.asarray(values < self.mean))
        tail = np.exp(-0.5 * a * a) * factor
        return np.where(values < self.mean, tail, 1.0 - tail)

    def _beyond(self, values: Array) -> Array:
        a, factor = self._factor(values / self.mean, np.asarray(values < self.mean))
        tail = np.exp(-0.5 * a * a) * factor
        return np.where(values < self.mean, 1.0 - tail, tail)

    def _factor(self, y: Array, under: Flags) -> tuple[Array, Array]:
        """Return a and the tail (below where `under`, else beyond) over exp(-a²/2), y being x/mean."""
        root = np.sqrt(self.shape / self.mean / y)
        a, b = root * (y - 1.0), root * (y + 1.0)
        together = 0.5 * (special.erfcx(ROOT_HALF * np.abs(a)) + special.erfcx(ROOT_HALF * b))
        apart = 0.5 * _difference(np.abs(a), 2.0 * root)
        rest = np.exp(0.5 * np.minimum(a * a, 1e3)) - together  # 1 - P(X <= x) where a < 0
        return a, np.where(under, together, np.where(a < 0.0, rest, apart))

    @property
    def support(self) -> tuple[float, float]:
        return (0.0, math.inf)

    @property
    def variance(self) -> float:
        return self.mean * self.mean * (self.mean / self.shape)

    @property
    def exponential_moment(self) -> float:
        return self.shape / (2.0 * self.mean) / self.mean

    def _limited_mean(self, limit: float) -> float:
        """Return mean (Φ(a) - exp(2φ) Φ(-b)) + limit P(X > limit)."""
        y = limit / self.mean
        root = math.sqrt(self.shape / self.mean / y)
        a, b = root * (y - 1.0), root * (y + 1.0)
        if a < 0.0:
            part = 0.5 * math.exp(-0.5 * a * a) * float(_difference(np.array(-a), np.array(2.0 * root * y)))
        else:
            part = float(special.ndtr(a)) - 0.5 * math.exp(-0.5 * a * a) * float(special.erfcx(ROOT_HALF * b))
        return self.mean * part + limit * float(self._beyond(np.array(limit)))


def _difference(start: Array, width: Array) -> Array:
    """Return M(start) - M(start + width) with M(t) = erfcx(t/√2), for start and width of 0 or more.

    Where the two are close the difference is the integral of -M'(t) = √(2/π) - t M(t) between them.
    """
    apart = special.erfcx(ROOT_HALF * start) - special.erfcx(ROOT_HALF * (start + width))
    close = width < np.maximum(1.0, 0.5 * start)
    t = start[..., None] + np.where(close, width, 0.0)[..., None] * (0.5 + 0.5 * NODES)
    slope = math.sqrt(2.0 / math.pi) - t * special.erfcx(ROOT_HALF * t)
    return np.where(close, 0.5 * width * np.sum(slope * WEIGHTS, axis=-1), apart)
