"""Marginals of extreme value theory: Gumbel, generalized extreme value, generalized Pareto."""

import math
from typing import Literal

import numpy as np
from pydantic.dataclasses import dataclass
from scipy import special

from service.risk.marginals.contract import Amount, MarginalLaw, Scale, SignedShape
from service.risk.marginals.moments import Array
from service.risk.marginals.special_functions import (
    decayed,
    exp,
    expm1,
    log_gamma_1p,
    log_gamma_bend,
    log_upper,
    square,
)
from service.risk.words import STRICT

SMALL_SHAPE = 0.01  # below it the closed form of the limited mean loses more digits than quadrature
NO_SHAPE = 1e-17  # shapes up to it are 0 to rounding
SERIES = np.arange(1.0, 25.0)  # orders of the series of Ein on [0, 1]; the last term is below 1e-24


def gumbel_score(lower: Array, upper: Array) -> Array:
    """Return -ln(-ln(lower)), the quantile of the standard Gumbel law of maxima."""
    return -np.log(-log_upper(upper, lower))


def scaled_exponential(shape: float, score: Array) -> Array:
    """Return (exp(shape × score) - 1)/shape, which is the score where the shape is 0."""
    return np.asarray(score * special.exprel(shape * score))


def scaled_logarithm(shape: float, distance: Array) -> Array:
    """Return ln(1 + shape × distance)/shape, which is the distance where the shape is 0."""
    stretch = shape * distance
    return np.where(np.abs(stretch) < NO_SHAPE, distance, np.log1p(stretch) / (shape or 1.0))


@dataclass(frozen=True, kw_only=True, config=STRICT)
class GumbelMarginal(MarginalLaw):
    """The Gumbel law of maxima: P(X <= x) = exp(-exp(-(x - location)/scale))."""

    family: Literal["gumbel"]
    """Tag of this law."""
    location: Amount
    """Mode, in the unit of the factor."""
    scale: Scale
    """Scale, above 0, in the unit of the factor; the standard deviation is π/√6 times as large."""

    def _quantile(self, lower: Array, upper: Array) -> Array:
        return self.location + self.scale * gumbel_score(lower, upper)

    def _below(self, values: Array) -> Array:
        return np.exp(-np.exp((self.location - values) / self.scale))

    def _beyond(self, values: Array) -> Array:
        return -np.expm1(-np.exp((self.location - values) / self.scale))

    @property
    def support(self) -> tuple[float, float]:
        return (-math.inf, math.inf)

    @property
    def mean(self) -> float:
        return self.location + self.scale * float(np.euler_gamma)

    @property
    def variance(self) -> float:
        return (math.pi * self.scale) ** 2 / 6.0

    @property
    def exponential_moment(self) -> float:
        return 1.0 / self.scale

    def _limited_mean(self, limit: float) -> float:
        """Return limit - scale E1(s), s = exp(-score), or from Ein(s) = E1(s) + ln s + γ where s < 1."""
        score = (limit - self.location) / self.scale
        if score < 0.0:
            return limit - self.scale * float(special.exp1(np.exp(-score)))
        s = math.exp(-score)
        ein = -float(np.sum((-s) ** SERIES / (SERIES * special.factorial(SERIES))))
        return self.mean - self.scale * ein


@dataclass(frozen=True, kw_only=True, config=STRICT)
class GeneralizedExtremeValueMarginal(MarginalLaw):
    """The generalized extreme value law of maxima: P(X <= x) = exp(-(1 + shape (x - location)/scale)^(-1/shape))."""

    family: Literal["generalized_extreme_value"]
    """Tag of this law."""
    shape: SignedShape
    """Shape, without unit: above 0 a heavy tail with index 1/shape, 0 the Gumbel law, below 0 an upper end."""
    location: Amount
    """Value with 1/e below, in the unit of the factor."""
    scale: Scale
    """Scale, above 0, in the unit of the factor."""

    def _quantile(self, lower: Array, upper: Array) -> Array:
        return self.location + self.scale * scaled_exponential(self.shape, gumbel_score(lower, upper))

    def _below(self, values: Array) -> Array:
        return np.exp(-self._rate(values))

    def _beyond(self, values: Array) -> Array:
        return -np.expm1(-self._rate(values))

    def _rate(self, values: Array) -> Array:
        return np.exp(-scaled_logarithm(self.shape, (values - self.location) / self.scale))

    @property
    def support(self) -> tuple[float, float]:
        return _ends(self.shape, self.location, self.scale, lowest=-math.inf)

    @property
    def mean(self) -> float:
        """Location + scale (gamma(1 - shape) - 1)/shape."""
        if self.shape >= 1.0:
            return math.inf
        if abs(self.shape) < NO_SHAPE:
            return self.location + self.scale * float(np.euler_gamma)
        return self.location + self.scale * expm1(log_gamma_1p(-self.shape)) / self.shape

    @property
    def variance(self) -> float:
        """Scale² (gamma(1 - 2 shape) - gamma(1 - shape)²)/shape²."""
        x = -self.shape
        if x <= -0.5:  # noqa: PLR2004  # the second moment
            return math.inf
        if abs(x) < NO_SHAPE:
            return (math.pi * self.scale) ** 2 / 6.0
        return square(exp(log_gamma_1p(x)) * self.scale) * (expm1(log_gamma_bend(x)) / square(x))

    @property
    def upper_tail_index(self) -> float:
        return 1.0 / self.shape if self.shape > 0.0 else math.inf

    @property
    def exponential_moment(self) -> float:
        return _upper_rate(self.shape, self.scale)

    @property
    def lower_exponential_moment(self) -> float:
        """Of the lower tail exp(-|shape x|^(1/|shape|)) where the shape is below 0."""
        if self.shape > -1.0:
            return math.inf
        return 1.0 / self.scale if self.shape == -1.0 else 0.0

    def _limited_mean(self, limit: float) -> float:
        """Return mean - (scale/shape)(γ(1 - shape, s) - (1 - exp(-s)) s^-shape), s = -ln P(X <= limit)."""
        if abs(self.shape) <= SMALL_SHAPE or self.shape >= 1.0:
            return MarginalLaw._limited_mean(self, limit)  # noqa: SLF001  # the one without closed form
        s = float(self._rate(np.array(limit)))
        order = 1.0 - self.shape
        partial = float(special.gammainc(order, s)) * math.exp(log_gamma_1p(-self.shape))
        stretched = 1.0 + self.shape * (limit - self.location) / self.scale
        if s > 1.0:  # then little is below, and the mean would cancel
            rest = float(special.gammaincc(order, s)) * math.exp(log_gamma_1p(-self.shape))
            return limit - self.scale / self.shape * (stretched * math.exp(-s) - rest)
        return self.mean - self.scale / self.shape * (partial + math.expm1(-s) * stretched)


@dataclass(frozen=True, kw_only=True, config=STRICT)
class GeneralizedParetoMarginal(MarginalLaw):
    """The generalized Pareto law of excesses: P(X > x) = (1 + shape (x - threshold)/scale)^(-1/shape)."""

    family: Literal["generalized_pareto"]
    """Tag of this law."""
    shape: SignedShape
    """Shape, without unit: above 0 a heavy tail with index 1/shape, 0 exponential, below 0 an upper end."""
    scale: Scale
    """Scale, above 0, in the unit of the factor."""
    threshold: Amount
    """Lowest value, in the unit of the factor."""

    def _quantile(self, lower: Array, upper: Array) -> Array:
        return self.threshold + self.scale * scaled_exponential(self.shape, -log_upper(lower, upper))

    def _below(self, values: Array) -> Array:
        return -np.expm1(-scaled_logarithm(self.shape, (values - self.threshold) / self.scale))

    def _beyond(self, values: Array) -> Array:
        return np.exp(-scaled_logarithm(self.shape, (values - self.threshold) / self.scale))

    @property
    def support(self) -> tuple[float, float]:
        return _ends(self.shape, self.threshold, self.scale, lowest=self.threshold)

    @property
    def mean(self) -> float:
        return self.threshold + self.scale / (1.0 - self.shape) if self.shape < 1.0 else math.inf

    @property
    def variance(self) -> float:
        if self.shape >= 0.5:  # noqa: PLR2004  # the second moment
            return math.inf
        return (self.scale / (1.0 - self.shape)) ** 2 / (1.0 - 2.0 * self.shape)

    @property
    def upper_tail_index(self) -> float:
        return 1.0 / self.shape if self.shape > 0.0 else math.inf

    @property
    def exponential_moment(self) -> float:
        return _upper_rate(self.shape, self.scale)

    def _limited_mean(self, limit: float) -> float:
        score = scaled_logarithm(self.shape, np.array((limit - self.threshold) / self.scale))
        return self.threshold + self.scale * decayed(1.0 - self.shape, float(score))


def _ends(shape: float, origin: float, scale: float, *, lowest: float) -> tuple[float, float]:
    """Return the support of a law of x with 1 + shape (x - origin)/scale > 0 and x > lowest."""
    if shape == 0.0:
        return (lowest, math.inf)
    with np.errstate(over="ignore"):
        end = float(np.float64(origin) - np.float64(scale) / shape)
    return (max(lowest, end), math.inf) if shape > 0.0 else (lowest, end)


def _upper_rate(shape: float, scale: float) -> float:
    if shape > 0.0:
        return 0.0
    return 1.0 / scale if shape == 0.0 else math.inf
