"""Marginals between two ends: uniform and beta."""

import math
from typing import Annotated, Literal

import numpy as np
from pydantic import AfterValidator, Field, ValidationInfo
from pydantic.dataclasses import dataclass
from scipy import special

from service.risk.marginals.contract import Amount, MarginalLaw, between, refusal
from service.risk.marginals.moments import Array, Flags
from service.risk.marginals.special_functions import log_gamma_1p, log_gamma_ratio
from service.risk.words import STRICT

LEAST_SHAPE, MOST_SHAPE = 1e-6, 1e8  # of a beta law; beyond, SciPy's functions lose digits
SMALLEST_NORMAL = float(np.finfo(np.float64).tiny)
POWER = 1e-8  # y max(1, b) up to which P(Y <= y) is a power of y times 1 + O(y)
TRUSTED = 1e-19  # probability down to which SciPy's inverse needs no help
MOST_STEPS = 100  # of Newton's method or of halving
CONVERGED = 1e-15


def _beta_shape(value: float, info: ValidationInfo) -> float:
    return between(value, info, LEAST_SHAPE, MOST_SHAPE)


BetaShape = Annotated[
    float, AfterValidator(_beta_shape), Field(json_schema_extra={"minimum": LEAST_SHAPE, "maximum": MOST_SHAPE})
]


@dataclass(frozen=True, kw_only=True, config=STRICT)
class UniformMarginal(MarginalLaw):
    """The uniform law between two ends."""

    family: Literal["uniform"]
    """Tag of this law."""
    lower: Amount
    """Lower end, in the unit of the factor."""
    upper: Amount
    """Upper end, above the lower one, in the unit of the factor."""

    def _check(self) -> None:
        check_ends(self.lower, self.upper)

    def _quantile(self, lower: Array, upper: Array) -> Array:
        width = self.upper - self.lower
        return np.where(lower < upper, self.lower + width * lower, self.upper - width * upper)

    def _below(self, values: Array) -> Array:
        return (values - self.lower) / (self.upper - self.lower)

    def _beyond(self, values: Array) -> Array:
        return (self.upper - values) / (self.upper - self.lower)

    @property
    def support(self) -> tuple[float, float]:
        return (self.lower, self.upper)

    @property
    def mean(self) -> float:
        return 0.5 * (self.lower + self.upper)

    @property
    def variance(self) -> float:
        return (self.upper - self.lower) ** 2 / 12.0

    def _limited_mean(self, limit: float) -> float:
        share = (limit - self.lower) / (self.upper - self.lower)
        return limit - 0.5 * share * (limit - self.lower)


@dataclass(frozen=True, kw_only=True, config=STRICT)
class BetaMarginal(MarginalLaw):
    """The beta law between two ends."""

    family: Literal["beta"]
    """Tag of this law."""
    a: BetaShape
    """First shape, above 0, without unit: the exponent at the lower end."""
    b: BetaShape
    """Second shape, above 0, without unit: the exponent at the upper end."""
    lower: Amount = 0.0
    """Lower end, in the unit of the factor."""
    upper: Amount = 1.0
    """Upper end, above the lower one, in the unit of the factor."""

    def _check(self) -> None:
        check_ends(self.lower, self.upper)

    def _quantile(self, lower: Array, upper: Array) -> Array:
        width = self.upper - self.lower
        share = beta_quantile(self.a, self.b, lower, upper)
        values = np.array(self.lower + width * share)
        far = ~(share < 0.5)  # noqa: PLR2004  # measured from the nearer end, which NaN is not near
        values[far] = self.upper - width * beta_quantile(self.b, self.a, upper[far], lower[far])
        return values

    def _below(self, values: Array) -> Array:
        near, share = self._share(values)
        return np.where(near, special.betainc(self.a, self.b, share), special.betaincc(self.b, self.a, share))

    def _beyond(self, values: Array) -> Array:
        near, share = self._share(values)
        return np.where(near, special.betaincc(self.a, self.b, share), special.betainc(self.b, self.a, share))

    def _share(self, values: Array) -> tuple[Flags, Array]:
        """Return whether the lower end is the nearer one, and the distance from the nearer one over the width."""
        width = self.upper - self.lower
        near = np.asarray(values - self.lower < self.upper - values)
        return near, np.clip(np.where(near, values - self.lower, self.upper - values) / width, 0.0, 1.0)

    @property
    def support(self) -> tuple[float, float]:
        return (self.lower, self.upper)

    @property
    def mean(self) -> float:
        total = self.a + self.b
        return self.lower * (self.b / total) + self.upper * (self.a / total)

    @property
    def variance(self) -> float:
        total = self.a + self.b
        return (self.upper - self.lower) ** 2 * (self.a / total) * (self.b / total) / (total + 1.0)

    def _limited_mean(self, limit: float) -> float:
        near, share = self._share(np.array(limit))
        if near:
            part = float(special.betainc(self.a + 1.0, self.b, share))
        else:
            part = float(special.betaincc(self.b, self.a + 1.0, share))
        mean = (self.upper - self.lower) * (self.a / (self.a + self.b))
        return self.lower + mean * part + (limit - self.lower) * float(self._beyond(np.array(limit)))


def check_ends(lower: float, upper: float) -> None:
    """Refuse ends that are not in order."""
    if not lower < upper:
        raise refusal("lower is below upper, but {lower} is not below {upper}", lower=lower, upper=upper)


def beta_quantile(a: float, b: float, lower: Array, upper: Array) -> Array:
    """Return the quantiles of the beta law on (0, 1), accurate relative to themselves.

    Far out SciPy's inverse fails for some shapes: near 0 the leading power of y takes over, and what lies
    between is improved by Newton's method on the logarithms.
    """
    y = np.array(np.where(lower < upper, special.betaincinv(a, b, lower), special.betainccinv(a, b, upper)))
    # P(Y <= y) = y^a / (a B(a, b)) × (1 + a (1 - b)/(a + 1) y + ...)
    power = np.exp((np.log(lower) + log_gamma_1p(a) - log_gamma_ratio(a + b, a)) / a)
    leading = power * max(1.0, b) < POWER
    first = np.where(power < SMALLEST_NORMAL, 0.0, power)[leading]
    y[leading] = first * (1.0 + (b - 1.0) / (a + 1.0) * first)
    far = (np.minimum(lower, upper) < TRUSTED) & (lower > 0.0) & (upper > 0.0) & ~leading
    if np.any(far):
        y[far] = _refined(a, b, lower[far], upper[far], y[far])
    return y


def _refined(a: float, b: float, lower: Array, upper: Array, start: Array) -> Array:
    """Return the quantiles by Newton's method for ln y on the logarithm of the nearer tail, kept in a bracket."""
    under = lower < upper
    wanted = np.log(np.minimum(lower, upper))
    low, high = np.full(start.shape, math.log(SMALLEST_NORMAL)), np.zeros(start.shape)
    x = np.where((start > 0.0) & (start < 1.0), np.log(start), 0.5 * low)
    for _ in range(MOST_STEPS):
        y = np.exp(x)
        tail = np.where(under, special.betainc(a, b, y), special.betaincc(a, b, y))
        gap = np.where(under, np.log(tail) - wanted, wanted - np.log(tail))  # increases in x
        low, high = np.where(gap < 0.0, x, low), np.where(gap > 0.0, x, high)
        slope = np.exp(a * x + b * np.log1p(-y) - special.betaln(a, b)) / tail
        new = x - gap / slope
        new = np.where((new > low) & (new < high), new, np.where(gap == 0.0, x, 0.5 * (low + high)))
        done, x = bool(np.all(np.abs(new - x) <= CONVERGED * np.maximum(np.abs(x), 1.0))), new
        if done:
            break
    return np.exp(x)
