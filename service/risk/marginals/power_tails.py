"""Marginals whose tail is a power: Pareto, Lomax, Burr XII."""

import math
from typing import Literal

import numpy as np
from pydantic.dataclasses import dataclass
from scipy import special

from service.risk.marginals.contract import MarginalLaw, Scale, Shape
from service.risk.marginals.moments import Array
from service.risk.marginals.special_functions import (
    decayed,
    exp,
    expm1,
    log_gamma_1p,
    log_gamma_bend,
    log_gamma_ratio,
    log_upper,
    square,
)
from service.risk.words import STRICT

BENT = 0.05  # part of the radius of convergence of a series within which its terms are used
UNDERFLOW = 600.0  # ln of a number whose reciprocal is still well above the smallest one
BEND_ORDERS = np.arange(2, 22)


@dataclass(frozen=True, kw_only=True, config=STRICT)
class ParetoMarginal(MarginalLaw):
    """The Pareto law that starts at its scale: P(X > x) = (scale/x)^shape."""

    family: Literal["pareto"]
    """Tag of this law."""
    shape: Shape
    """Tail index, above 0, without unit; moments of this order and beyond do not exist."""
    scale: Scale
    """Lowest value, above 0, in the unit of the factor."""

    def _quantile(self, lower: Array, upper: Array) -> Array:
        return self.scale * np.exp(-log_upper(lower, upper) / self.shape)

    def _below(self, values: Array) -> Array:
        return -np.expm1(-self.shape * np.log1p((values - self.scale) / self.scale))

    def _beyond(self, values: Array) -> Array:
        return np.exp(-self.shape * np.log1p((values - self.scale) / self.scale))

    @property
    def support(self) -> tuple[float, float]:
        return (self.scale, math.inf)

    @property
    def mean(self) -> float:
        return self.scale * self.shape / (self.shape - 1.0) if self.shape > 1.0 else math.inf

    @property
    def variance(self) -> float:
        return _power_variance(self.shape, self.scale)

    @property
    def upper_tail_index(self) -> float:
        return self.shape

    @property
    def exponential_moment(self) -> float:
        return 0.0

    def _limited_mean(self, limit: float) -> float:
        return self.scale * (1.0 + decayed(self.shape - 1.0, math.log(limit / self.scale)))


@dataclass(frozen=True, kw_only=True, config=STRICT)
class LomaxMarginal(MarginalLaw):
    """The Lomax law, a Pareto law moved to start at 0: P(X > x) = (1 + x/scale)^-shape."""

    family: Literal["lomax"]
    """Tag of this law."""
    shape: Shape
    """Tail index, above 0, without unit; moments of this order and beyond do not exist."""
    scale: Scale
    """Scale, above 0, in the unit of the factor."""

    def _quantile(self, lower: Array, upper: Array) -> Array:
        return self.scale * np.expm1(-log_upper(lower, upper) / self.shape)

    def _below(self, values: Array) -> Array:
        return -np.expm1(-self.shape * np.log1p(values / self.scale))

    def _beyond(self, values: Array) -> Array:
        return np.exp(-self.shape * np.log1p(values / self.scale))

    @property
    def support(self) -> tuple[float, float]:
        return (0.0, math.inf)

    @property
    def mean(self) -> float:
        return self.scale / (self.shape - 1.0) if self.shape > 1.0 else math.inf

    @property
    def variance(self) -> float:
        return _power_variance(self.shape, self.scale)

    @property
    def upper_tail_index(self) -> float:
        return self.shape

    @property
    def exponential_moment(self) -> float:
        return 0.0

    def _limited_mean(self, limit: float) -> float:
        return self.scale * decayed(self.shape - 1.0, math.log1p(limit / self.scale))


def _power_variance(shape: float, scale: float) -> float:
    if shape <= 2.0:  # noqa: PLR2004  # the second moment
        return math.inf
    return (scale / (shape - 1.0)) ** 2 * (shape / (shape - 2.0))


@dataclass(frozen=True, kw_only=True, config=STRICT)
class BurrXIIMarginal(MarginalLaw):
    """The Burr XII law: P(X > x) = (1 + (x/scale)^c)^-d."""

    family: Literal["burr_xii"]
    """Tag of this law."""
    c: Shape
    """First shape, above 0, without unit: the exponent near 0."""
    d: Shape
    """Second shape, above 0, without unit; c × d is the tail index."""
    scale: Scale
    """Scale, above 0, in the unit of the factor."""

    def _quantile(self, lower: Array, upper: Array) -> Array:
        # (x/scale)^c = exp(r) - 1 with r = -ln(upper)/d, by its logarithm lest it overflow
        r = -log_upper(lower, upper) / self.d
        return self.scale * np.exp((r + np.log(-np.expm1(-r))) / self.c)

    def _below(self, values: Array) -> Array:
        return -np.expm1(-self.d * self._log_1p_power(values))

    def _beyond(self, values: Array) -> Array:
        return np.exp(-self.d * self._log_1p_power(values))

    def _log_1p_power(self, values: Array) -> Array:
        return np.logaddexp(0.0, self.c * np.log(values / self.scale))

    @property
    def support(self) -> tuple[float, float]:
        return (0.0, math.inf)

    @property
    def mean(self) -> float:
        return self.scale * exp(self._log_moment(1.0 / self.c)) if self.c * self.d > 1.0 else math.inf

    @property
    def variance(self) -> float:
        x = 1.0 / self.c
        if not self.c * self.d > 2.0:  # noqa: PLR2004  # the second moment
            return math.inf
        return square(self.mean) * expm1(self._bend(x))

    def _log_moment(self, x: float) -> float:
        """Return ln E (X/scale)^(c x) = ln(gamma(1 + x) gamma(d - x) / gamma(d))."""
        return log_gamma_1p(x) - log_gamma_ratio(self.d, x)

    def _bend(self, x: float) -> float:
        """Return ln E Y² - 2 ln E Y with Y = (X/scale), x = 1/c, without loss where c is large."""
        if x > BENT * min(self.d, 1.0):
            return self._log_moment(2.0 * x) - 2.0 * self._log_moment(x)
        # Taylor's series of ln gamma(d - x) about d
        orders = BEND_ORDERS
        terms = special.polygamma(orders - 1, self.d) * (-x) ** orders / special.factorial(orders) * (2.0**orders - 2.0)
        return log_gamma_bend(x) + float(np.sum(terms))

    @property
    def upper_tail_index(self) -> float:
        return self.c * self.d

    @property
    def exponential_moment(self) -> float:
        return 0.0

    def _limited_mean(self, limit: float) -> float:
        """Return mean × P(B <= y/(1 + y)) + limit × P(X > limit), y = (limit/scale)^c, B beta(1 + 1/c, d - 1/c)."""
        x = 1.0 / self.c
        if not self.d > x:
            return MarginalLaw._limited_mean(self, limit)  # noqa: SLF001  # the one that needs no mean
        log_y, rest = self.c * math.log(limit / self.scale), self.d - x
        if log_y > UNDERFLOW:  # then the incomplete beta function is its leading power
            log_term = log_gamma_1p(rest) + log_gamma_1p(x) - log_gamma_1p(self.d)
            part = -math.expm1(-rest * log_y - log_term)
        elif log_y > 0.0:
            part = float(special.betaincc(rest, 1.0 + x, special.expit(-log_y)))
        else:
            part = float(special.betainc(1.0 + x, rest, special.expit(log_y)))
        return self.mean * part + limit * float(self._beyond(np.array(limit)))
