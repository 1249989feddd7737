"""The spliced marginal: one law up to a threshold, another beyond it."""

import math
from functools import cached_property
from typing import Annotated, Literal

import numpy as np
from pydantic import AfterValidator, Field
from pydantic.dataclasses import dataclass
from pydantic_core import PydanticCustomError
from typing_extensions import TypeAliasType

from service.risk.marginals.bounded import BetaMarginal, UniformMarginal
from service.risk.marginals.contract import OUT_OF_RANGE, Amount, MarginalLaw, refusal
from service.risk.marginals.discrete import DiscreteMarginal, EmpiricalMarginal, PointMarginal
from service.risk.marginals.extremes import (
    GeneralizedExtremeValueMarginal,
    GeneralizedParetoMarginal,
    GumbelMarginal,
)
from service.risk.marginals.inverse_gaussian import InverseGaussianMarginal
from service.risk.marginals.moments import Array, deficit_moments, excess_moments
from service.risk.marginals.positive import (
    ExponentialMarginal,
    GammaMarginal,
    LognormalByMeanMarginal,
    LognormalMarginal,
    WeibullMarginal,
)
from service.risk.marginals.power_tails import BurrXIIMarginal, LomaxMarginal, ParetoMarginal
from service.risk.marginals.two_sided import LogisticMarginal, NormalMarginal, StudentTMarginal
from service.risk.score_tables import Atoms, Piece
from service.risk.words import STRICT

LEAST_MASS = 1e-200  # of what is left of the body and of the tail; less has too few digits to be scaled up

SplicePart = TypeAliasType(
    "SplicePart",
    Annotated[
        NormalMarginal
        | StudentTMarginal
        | LognormalMarginal
        | LognormalByMeanMarginal
        | GammaMarginal
        | WeibullMarginal
        | ParetoMarginal
        | LomaxMarginal
        | GeneralizedParetoMarginal
        | GumbelMarginal
        | GeneralizedExtremeValueMarginal
        | ExponentialMarginal
        | UniformMarginal
        | BetaMarginal
        | InverseGaussianMarginal
        | BurrXIIMarginal
        | LogisticMarginal
        | EmpiricalMarginal
        | PointMarginal,
        Field(discriminator="family", description="Any marginal that is not spliced itself, told apart by `family`."),
    ],
)


def _probability(value: float) -> float:
    if 0.0 < value < 1.0:
        return value
    detail = "tail_probability is above 0 and below 1, not {value}"
    raise PydanticCustomError(OUT_OF_RANGE, detail, {"value": f"{value:.6g}"})


Probability = Annotated[
    float,
    AfterValidator(_probability),
    Field(json_schema_extra={"exclusiveMinimum": 0.0, "exclusiveMaximum": 1.0}),
]


@dataclass(frozen=True, kw_only=True, config=STRICT)
class SplicedMarginal(MarginalLaw):
    """A body cut to values up to the threshold and a tail cut to values beyond it, with a probability each."""

    family: Literal["spliced"]
    """Tag of this law."""
    body: SplicePart
    """Law of the values up to the threshold, given that they are."""
    tail: SplicePart
    """Law of the values beyond the threshold, given that they are."""
    threshold: Amount
    """Where the tail begins, in the unit of the factor."""
    tail_probability: Probability
    """Probability of a value beyond the threshold, above 0 and below 1."""

    def _check(self) -> None:
        outside = {"body": self.threshold > self.body.support[1], "tail": self.threshold < self.tail.support[0]}
        for name, part in (("body", self.body), ("tail", self.tail)):
            if outside[name] and not isinstance(part, DiscreteMarginal):  # whose values have gaps anyway
                detail = "threshold {threshold} lies outside the {name}, whose values go from {low} to {high}"
                raise refusal(detail, threshold=self.threshold, name=name, low=part.support[0], high=part.support[1])
        if not self._kept >= LEAST_MASS:
            raise refusal("the body has no probability at or below threshold {threshold}", threshold=self.threshold)
        if not self._left >= LEAST_MASS:
            raise refusal("the tail has no probability beyond threshold {threshold}", threshold=self.threshold)

    @cached_property
    def _kept(self) -> float:
        """Probability that the body keeps."""
        return float(self.body.below(np.array(self.threshold)))

    @cached_property
    def _left(self) -> float:
        """Probability that the tail keeps."""
        return float(self.tail.beyond(np.array(self.threshold)))

    @property
    def _body_probability(self) -> float:
        return 1.0 - self.tail_probability

    def _quantile(self, lower: Array, upper: Array) -> Array:
        mass, rest = self.tail_probability, self._body_probability
        in_tail = (upper < mass) if mass <= rest else (lower > rest)
        cut = float(self.body.beyond(np.array(self.threshold)))
        share = np.clip(np.where(in_tail, 1.0, lower / rest), 0.0, 1.0)
        left = np.clip(np.where(in_tail, 0.0, (upper - mass) / rest), 0.0, 1.0)
        body = np.minimum(self.body.quantile(share * self._kept, cut + left * self._kept), self.threshold)
        start = float(self.tail.below(np.array(self.threshold)))
        left = np.clip(np.where(in_tail, upper / mass, 1.0), 0.0, 1.0)
        share = np.clip(np.where(in_tail, (lower - rest) / mass, 0.0), 0.0, 1.0)
        tail = np.maximum(self.tail.quantile(start + share * self._left, left * self._left), self.threshold)
        return np.where(in_tail, tail, body)

    def below(self, values: Array) -> Array:
        values = np.asarray(values, dtype=np.float64)
        return np.where(values <= self.threshold, self._body_below(values), 1.0 - self._tail_beyond(values))

    def beyond(self, values: Array) -> Array:
        values = np.asarray(values, dtype=np.float64)
        mass, rest = self.tail_probability, self._body_probability
        at = np.minimum(values, self.threshold)
        near = self.body.beyond(at) - self.body.beyond(np.array(self.threshold))
        far = self._kept - self.body.below(at)
        between = rest * np.where(self.body.below(at) < 0.5, far, near) / self._kept  # noqa: PLR2004  # the median
        return np.where(values <= self.threshold, np.minimum(mass + between, 1.0), self._tail_beyond(values))

    def _body_below(self, values: Array) -> Array:
        return self._body_probability * self.body.below(np.minimum(values, self.threshold)) / self._kept

    def _tail_beyond(self, values: Array) -> Array:
        return self.tail_probability * self.tail.beyond(np.maximum(values, self.threshold)) / self._left

    @property
    def support(self) -> tuple[float, float]:
        return (self.body.support[0], self.tail.support[1])

    @property
    def mean(self) -> float:
        return self._centre[0]

    @property
    def variance(self) -> float:
        return self._centre[1]

    @cached_property
    def _centre(self) -> tuple[float, float]:
        """Mean and variance, from the moments of both parts about the threshold."""
        index = min(self.upper_tail_index, self.lower_tail_index)
        if index <= 1.0:
            return math.inf, math.inf
        deficit, excess = deficit_moments(self.body, self.threshold), excess_moments(self.tail, self.threshold)
        below, beyond = self._body_probability / self._kept, self.tail_probability / self._left
        first = beyond * excess[0] - below * deficit[0]
        if index <= 2.0:  # noqa: PLR2004  # the second moment
            return self.threshold + first, math.inf
        return self.threshold + first, below * deficit[1] + beyond * excess[1] - first * first

    def _limited_mean(self, limit: float) -> float:
        at = min(limit, self.threshold)
        mean = at - self._body_probability / self._kept * (at - self.body.limited_mean(at))
        return mean if limit <= at else mean + self.layer_mean(at, limit)

    def layer_mean(self, start: float, stop: float) -> float:
        """Return the integral of P(X > x) over the layer, from both parts."""
        total, low, high = 0.0, max(start, self.threshold), min(stop, self.threshold)
        if start < high:
            weight = self._body_probability / self._kept  # P(X <= x) is so many times that of the body
            total += (high - start) * (1.0 - weight) + weight * self.body.layer_mean(start, high)
        if stop > low:
            total += self.tail_probability / self._left * self.tail.layer_mean(low, stop)
        return total

    @property
    def upper_tail_index(self) -> float:
        return self.tail.upper_tail_index

    @property
    def lower_tail_index(self) -> float:
        return self.body.lower_tail_index

    @property
    def exponential_moment(self) -> float:
        return self.tail.exponential_moment

    @property
    def lower_exponential_moment(self) -> float:
        return self.body.lower_exponential_moment

    @property
    def pieces(self) -> tuple[Piece, ...]:
        rest, mass = self._body_probability, self.tail_probability
        return (Piece(rest, mass, self._body_atoms), Piece(1.0, 0.0, self._tail_atoms))

    @property
    def _body_atoms(self) -> Atoms | None:
        if not isinstance(self.body, DiscreteMarginal):
            return None
        rest, mass, whole = self._body_probability, self.tail_probability, self.body.atoms
        kept = whole.part(slice(0, int(np.searchsorted(whole.values, self.threshold, side="right"))))
        left = (kept.upper - kept.upper[-1]) / self._kept
        return Atoms(kept.values, rest * kept.masses / self._kept, rest * kept.lower / self._kept, mass + rest * left)

    @property
    def _tail_atoms(self) -> Atoms | None:
        if not isinstance(self.tail, DiscreteMarginal):
            return None
        rest, mass, whole = self._body_probability, self.tail_probability, self.tail.atoms
        first = int(np.searchsorted(whole.values, self.threshold, side="right"))
        kept = whole.part(slice(first, None))
        before = whole.lower[first - 1] if first else 0.0
        share = (kept.lower - before) / self._left
        return Atoms(kept.values, mass * kept.masses / self._left, rest + mass * share, mass * kept.upper / self._left)
