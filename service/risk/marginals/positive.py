"""Marginals of positive amounts with all moments: lognormal, gamma, Weibull, exponential, inverse Gaussian."""

import math
from typing import Literal

import numpy as np
from pydantic.dataclasses import dataclass
from scipy import special

from service.risk.marginals.contract import Amount, MarginalLaw, Scale, Shape
from service.risk.marginals.large_gamma import LARGE_SHAPE, large_quantile, large_score, large_term
from service.risk.marginals.moments import Array
from service.risk.marginals.special_functions import exp, expm1, log_gamma_1p, log_gamma_bend, log_upper, square
from service.risk.score_tables import Affine
from service.risk.scores import NormalScores
from service.risk.words import STRICT

HALF_LINE = (0.0, math.inf)
SMALL_CV = 1e-8  # coefficient of variation up to which it is sigma to rounding


@dataclass(frozen=True, kw_only=True, config=STRICT)
class _Lognormal(MarginalLaw):
    """What both ways of naming the parameters share; members bring the law of the logarithm."""

    @property
    def _log_mean(self) -> float:
        raise NotImplementedError

    @property
    def _log_deviation(self) -> float:
        raise NotImplementedError

    def _quantile(self, lower: Array, upper: Array) -> Array:
        score = np.where(lower < upper, special.ndtri(lower), -special.ndtri(upper))
        return np.exp(self._log_mean + self._log_deviation * score)

    def _below(self, values: Array) -> Array:
        return np.asarray(special.ndtr((np.log(values) - self._log_mean) / self._log_deviation))

    def _beyond(self, values: Array) -> Array:
        return np.asarray(special.ndtr((self._log_mean - np.log(values)) / self._log_deviation))

    @property
    def support(self) -> tuple[float, float]:
        return HALF_LINE

    @property
    def variance(self) -> float:
        return square(self.mean) * expm1(self._log_deviation**2)

    @property
    def exponential_moment(self) -> float:
        return 0.0

    def _limited_mean(self, limit: float) -> float:
        score = (math.log(limit) - self._log_mean) / self._log_deviation
        return self.mean * float(special.ndtr(score - self._log_deviation)) + limit * float(special.ndtr(-score))

    @property
    def affine(self) -> Affine:
        return Affine(NormalScores(), self._log_mean, self._log_deviation, exponential=True)


@dataclass(frozen=True, kw_only=True, config=STRICT)
class LognormalMarginal(_Lognormal):
    """The law of exp(N), N normal."""

    family: Literal["lognormal"]
    """Tag of this law."""
    mu: Amount
    """Mean of the logarithm of the factor, without unit."""
    sigma: Scale
    """Standard deviation of the logarithm of the factor, above 0, without unit."""

    @property
    def _log_mean(self) -> float:
        return self.mu

    @property
    def _log_deviation(self) -> float:
        return self.sigma

    @property
    def mean(self) -> float:
        return exp(self.mu + 0.5 * self.sigma**2)


@dataclass(frozen=True, kw_only=True, config=STRICT)
class LognormalByMeanMarginal(_Lognormal):
    """The lognormal law by its own mean and coefficient of variation."""

    family: Literal["lognormal_by_mean"]
    """Tag of this law."""
    mean: Scale
    """Mean of the factor itself, above 0, in its unit."""
    cv: Scale
    """Coefficient of variation: standard deviation over mean, above 0, without unit."""

    @property
    def _log_mean(self) -> float:
        return math.log(self.mean) - 0.5 * self._log_deviation**2

    @property
    def _log_deviation(self) -> float:
        return self.cv if self.cv < SMALL_CV else math.sqrt(math.log1p(self.cv**2))

    @property
    def variance(self) -> float:
        return square(self.mean * self.cv)


@dataclass(frozen=True, kw_only=True, config=STRICT)
class GammaMarginal(MarginalLaw):
    """The gamma law."""

    family: Literal["gamma"]
    """Tag of this law."""
    shape: Shape
    """Shape, above 0, without unit: the mean is shape × scale, the variance shape × scale²."""
    scale: Scale
    """Scale, above 0, in the unit of the factor."""

    def _quantile(self, lower: Array, upper: Array) -> Array:
        if self.shape > LARGE_SHAPE:
            return self.scale * large_quantile(self.shape, lower, upper)
        small = special.gammaincinv(self.shape, lower)
        return self.scale * np.where(lower < upper, small, special.gammainccinv(self.shape, upper))

    def _below(self, values: Array) -> Array:
        x = values / self.scale
        if self.shape > LARGE_SHAPE:
            return np.asarray(special.ndtr(large_score(self.shape, x)))
        return np.asarray(special.gammainc(self.shape, x))

    def _beyond(self, values: Array) -> Array:
        x = values / self.scale
        if self.shape > LARGE_SHAPE:
            return np.asarray(special.ndtr(-large_score(self.shape, x)))
        return np.asarray(special.gammaincc(self.shape, x))

    @property
    def support(self) -> tuple[float, float]:
        return HALF_LINE

    @property
    def mean(self) -> float:
        return self.shape * self.scale

    @property
    def variance(self) -> float:
        return self.shape * self.scale**2

    @property
    def exponential_moment(self) -> float:
        return 1.0 / self.scale

    def _limited_mean(self, limit: float) -> float:
        """Return mean × P(X' <= limit) + limit × P(X > limit), X' with a shape one larger."""
        x = limit / self.scale
        below = float(self._below(np.array(limit)))
        if self.shape > LARGE_SHAPE:
            below -= large_term(self.shape, x)
        else:
            below = float(special.gammainc(self.shape + 1.0, x))
        return self.mean * below + limit * float(self._beyond(np.array(limit)))


@dataclass(frozen=True, kw_only=True, config=STRICT)
class WeibullMarginal(MarginalLaw):
    """The Weibull law: P(X > x) = exp(-(x/scale)^shape)."""

    family: Literal["weibull"]
    """Tag of this law."""
    shape: Shape
    """Exponent, above 0, without unit; below 1 the tail is heavier than exponential."""
    scale: Scale
    """Scale, above 0, in the unit of the factor: the value with 1/e beyond."""

    def _quantile(self, lower: Array, upper: Array) -> Array:
        return self.scale * np.exp(np.log(-log_upper(lower, upper)) / self.shape)

    def _below(self, values: Array) -> Array:
        return -np.expm1(-self._power(values))

    def _beyond(self, values: Array) -> Array:
        return np.exp(-self._power(values))

    def _power(self, values: Array) -> Array:
        return np.exp(self.shape * np.log(values / self.scale))

    @property
    def support(self) -> tuple[float, float]:
        return HALF_LINE

    @property
    def mean(self) -> float:
        return self.scale * exp(log_gamma_1p(1.0 / self.shape))

    @property
    def variance(self) -> float:
        return square(self.mean) * expm1(log_gamma_bend(1.0 / self.shape))

    @property
    def exponential_moment(self) -> float:
        if self.shape == 1.0:
            return 1.0 / self.scale
        return math.inf if self.shape > 1.0 else 0.0

    def _limited_mean(self, limit: float) -> float:
        power = float(self._power(np.array(limit)))
        return self.mean * float(special.gammainc(1.0 + 1.0 / self.shape, power)) + limit * math.exp(-power)


@dataclass(frozen=True, kw_only=True, config=STRICT)
class ExponentialMarginal(MarginalLaw):
    """The exponential law."""

    family: Literal["exponential"]
    """Tag of this law."""
    mean: Scale
    """Mean, above 0, in the unit of the factor; also the standard deviation."""

    def _quantile(self, lower: Array, upper: Array) -> Array:
        return -self.mean * log_upper(lower, upper)

    def _below(self, values: Array) -> Array:
        return -np.expm1(-values / self.mean)

    def _beyond(self, values: Array) -> Array:
        return np.exp(-values / self.mean)

    @property
    def support(self) -> tuple[float, float]:
        return HALF_LINE

    @property
    def variance(self) -> float:
        return self.mean**2

    @property
    def exponential_moment(self) -> float:
        return 1.0 / self.mean

    def _limited_mean(self, limit: float) -> float:
        return -self.mean * math.expm1(-limit / self.mean)
