"""Marginals on the whole line that are symmetric: normal, Student t, logistic."""

import math
from typing import Literal

import numpy as np
from pydantic.dataclasses import dataclass
from scipy import special

from service.risk.marginals.contract import Amount, MarginalLaw, Scale, Shape
from service.risk.marginals.moments import Array
from service.risk.marginals.special_functions import log_gamma_ratio
from service.risk.score_tables import Affine
from service.risk.scores import NormalScores, StudentScores, UniformScores
from service.risk.words import STRICT

LINE = (-math.inf, math.inf)
PURE_POWER = 40.0  # ln(x²/df) from which on the tail of Student's t is a power of x to rounding
CAUCHY = 1.0


def normal_density(x: float) -> float:
    """Return the standard normal density."""
    return math.exp(-0.5 * x * x) / math.sqrt(2.0 * math.pi)


@dataclass(frozen=True, kw_only=True, config=STRICT)
class NormalMarginal(MarginalLaw):
    """The normal law."""

    family: Literal["normal"]
    """Tag of this law."""
    mean: Amount
    """Mean, in the unit of the factor."""
    standard_deviation: Scale
    """Standard deviation, above 0, in the unit of the factor."""

    def _quantile(self, lower: Array, upper: Array) -> Array:
        score = np.where(lower < upper, special.ndtri(lower), -special.ndtri(upper))
        return self.mean + self.standard_deviation * score

    def _below(self, values: Array) -> Array:
        return np.asarray(special.ndtr((values - self.mean) / self.standard_deviation))

    def _beyond(self, values: Array) -> Array:
        return np.asarray(special.ndtr((self.mean - values) / self.standard_deviation))

    @property
    def support(self) -> tuple[float, float]:
        return LINE

    @property
    def variance(self) -> float:
        return self.standard_deviation**2

    def _limited_mean(self, limit: float) -> float:
        x = (limit - self.mean) / self.standard_deviation
        if x < 0.0:
            return limit - self.standard_deviation * (x * float(special.ndtr(x)) + normal_density(x))
        return self.mean - self.standard_deviation * (normal_density(x) - x * float(special.ndtr(-x)))

    @property
    def affine(self) -> Affine:
        return Affine(NormalScores(), self.mean, self.standard_deviation)


@dataclass(frozen=True, kw_only=True, config=STRICT)
class StudentTMarginal(MarginalLaw):
    """Student's t law, moved and stretched."""

    family: Literal["student_t"]
    """Tag of this law."""
    df: Shape
    """Degrees of freedom, above 0, without unit; moments of this order and beyond do not exist."""
    location: Amount
    """Median, in the unit of the factor."""
    scale: Scale
    """Factor on the standard law, above 0, in the unit of the factor; it is not the standard deviation."""

    def _quantile(self, lower: Array, upper: Array) -> Array:
        near = np.minimum(lower, upper)
        # Far out P(T > t) is B^-1 df^-1 (df/t²)^(df/2), with B = B(df/2, 1/2), but for a factor 1 + O(df/t²).
        log_ratio = -2.0 / self.df * (np.log(near) + math.log(self.df) + self._log_beta)
        far = math.sqrt(self.df) * np.exp(0.5 * log_ratio)
        size = np.where(log_ratio > PURE_POWER, far, np.abs(special.stdtrit(self.df, near)))
        return self.location + self.scale * np.copysign(size, lower - upper)

    def _below(self, values: Array) -> Array:
        return self._under((values - self.location) / self.scale)

    def _beyond(self, values: Array) -> Array:
        return self._under((self.location - values) / self.scale)

    def _under(self, t: Array) -> Array:
        """Return P(T <= t) of the standard law."""
        if self.df == CAUCHY:  # stdtr loses digits around 0 there
            return np.arctan2(1.0, -t) / np.pi
        log_ratio = 2.0 * np.log(np.abs(t)) - math.log(self.df)
        power = np.exp(-0.5 * self.df * log_ratio - math.log(self.df) - self._log_beta)
        far = np.where(t < 0.0, power, 1.0 - power)
        return np.where(log_ratio > PURE_POWER, far, special.stdtr(self.df, t))

    @property
    def _log_beta(self) -> float:
        """Ln B(df/2, 1/2)."""
        return 0.5 * math.log(math.pi) - log_gamma_ratio(0.5 * self.df + 0.5, 0.5)

    @property
    def support(self) -> tuple[float, float]:
        return LINE

    @property
    def mean(self) -> float:
        return self.location if self.df > 1.0 else math.inf

    @property
    def variance(self) -> float:
        if self.df <= 2.0:  # noqa: PLR2004  # the second moment
            return math.inf
        return self.scale**2 * self.df / (self.df - 2.0)

    @property
    def upper_tail_index(self) -> float:
        return self.df

    @property
    def lower_tail_index(self) -> float:
        return self.df

    @property
    def exponential_moment(self) -> float:
        return 0.0

    @property
    def lower_exponential_moment(self) -> float:
        return 0.0

    def _limited_mean(self, limit: float) -> float:
        t = abs(limit - self.location) / self.scale
        tail = float(self._under(np.array(-t)))
        root = t / math.sqrt(self.df)
        bend = math.log1p(root * root) if root < 1.0 else 2.0 * math.log(math.hypot(1.0, root))
        # E (T - t)+ = (df + t²)/(df - 1) × density - t P(T > t), on both sides
        log_term = 0.5 * math.log(self.df) - self._log_beta - 0.5 * (self.df - 1.0) * bend
        beyond = math.exp(log_term) / (self.df - 1.0) - t * tail
        return min(limit, self.location) - self.scale * beyond

    @property
    def affine(self) -> Affine:
        return Affine(StudentScores(self.df), self.location, self.scale)


@dataclass(frozen=True, kw_only=True, config=STRICT)
class LogisticMarginal(MarginalLaw):
    """The logistic law."""

    family: Literal["logistic"]
    """Tag of this law."""
    location: Amount
    """Mean and median, in the unit of the factor."""
    scale: Scale
    """Scale, above 0, in the unit of the factor; the standard deviation is π/√3 times as large."""

    def _quantile(self, lower: Array, upper: Array) -> Array:
        near = np.minimum(lower, upper)
        return self.location + self.scale * np.copysign(np.abs(special.logit(near)), lower - upper)

    def _below(self, values: Array) -> Array:
        return np.asarray(special.expit((values - self.location) / self.scale))

    def _beyond(self, values: Array) -> Array:
        return np.asarray(special.expit((self.location - values) / self.scale))

    @property
    def support(self) -> tuple[float, float]:
        return LINE

    @property
    def mean(self) -> float:
        return self.location

    @property
    def variance(self) -> float:
        return (math.pi * self.scale) ** 2 / 3.0

    @property
    def exponential_moment(self) -> float:
        return 1.0 / self.scale

    @property
    def lower_exponential_moment(self) -> float:
        return 1.0 / self.scale

    def _limited_mean(self, limit: float) -> float:
        x = (limit - self.location) / self.scale
        return (limit if x < 0.0 else self.location) - self.scale * math.log1p(math.exp(-abs(x)))

    @property
    def affine(self) -> Affine:
        return Affine(UniformScores(), self.location, self.scale)
