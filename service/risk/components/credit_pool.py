"""Component credit_pool: obligors that default where a normal index of the factors falls below a threshold.

Given the factors, defaults are independent, with the conditional probability of Vasicek (Loan portfolio
value, Risk 15(12), 2002, 160-162) for any number of factors. Obligors of a kind are drawn as one binomial
number. Different obligors with similar conditional probabilities share a bound on them: the few that
default below the bound are drawn as points of a Poisson process, each kept in the ratio of its obligor's
own rate to the bound's (thinning: Lewis and Shedler, Naval Research Logistics Quarterly 26, 1979, 403-413).
"""

import math
from collections.abc import Iterator, Sequence
from dataclasses import dataclass as plain
from typing import Annotated, Literal

import numpy as np
from numpy.random import Generator
from pydantic import Field
from pydantic.dataclasses import dataclass
from scipy import special

from service.errors import Fault
from service.risk.components.contract import (
    Array,
    Block,
    Component,
    FactorSet,
    Indices,
    PreparedComponent,
    once,
    refuse,
    unknown_factors,
)
from service.risk.words import STRICT, Text

TINY = 1e-300  # in place of a share of 0 of the obligor's own in the index
LENGTH_SLACK = 1e-9  # w'Rw may pass 1 by rounding of the weights
CLOSE = 1.2  # spread of the conditional index, at factors 2 standard deviations out, within one bucket
FAR = 2.0  # those standard deviations
DENSE = 8  # a bucket of fewer entries is drawn obligor by obligor
MANY = 32  # obligors of one kind from which they are drawn as one number
LIKELY = 0.25  # bound on the conditional probability above which a bucket is drawn obligor by obligor
PIECE = 1 << 17  # obligors × scenarios at a time, 1 MB


@dataclass(frozen=True, kw_only=True, config=STRICT)
class FactorLoading:
    """How an obligor's index depends on a factor."""

    factor: Text
    """Id of the factor; its normal score enters the index."""
    weight: float
    """Weight of the normal score, without unit; negative where the factor rises in bad times."""


@dataclass(frozen=True, kw_only=True, config=STRICT)
class CreditObligor:
    """One obligor, or several of a kind that default independently given the factors."""

    count: Annotated[int, Field(ge=1, json_schema_extra={"format": "int64"})] = 1
    """Number of obligors of this kind."""
    exposure: Annotated[float, Field(ge=0.0)]
    """Exposure at default of each, in currency."""
    default_probability: Annotated[float, Field(gt=0.0, lt=1.0)]
    """Probability of default over the horizon, between 0 and 1."""
    loss_given_default: Annotated[float, Field(ge=0.0, le=1.0)]
    """Part of the exposure that is lost in a default, between 0 and 1."""
    loadings: list[FactorLoading] = Field(default_factory=list)
    """Weights w of the factors' normal scores Z in the index; defaults are independent without any."""

    @property
    def weights(self) -> dict[str, float]:
        """Summed weight by factor."""
        sums: dict[str, float] = {}
        for one in self.loadings:
            sums[one.factor] = sums.get(one.factor, 0.0) + one.weight
        return sums


@dataclass(frozen=True, kw_only=True, config=STRICT)
class CreditPoolComponent(Component):
    """Losses of obligors that default where w′Z + √(1 − w′Rw)·ε < Φ⁻¹(PD), so a low factor means default."""

    kind: Literal["credit_pool"]
    """Tag of this component."""
    obligors: Annotated[list[CreditObligor], Field(min_length=1)]
    """The obligors."""

    @property
    def used_scores(self) -> tuple[str, ...]:
        return once(loading.factor for one in self.obligors for loading in one.loadings)

    @property
    def own_draws(self) -> bool:
        return True

    @property
    def independent(self) -> bool:
        return not self.used_scores

    @property
    def draws_per_scenario(self) -> float:
        return float(sum(min(one.count * one.default_probability, 1.0) + 0.1 for one in self.obligors))

    def check(self, factors: FactorSet) -> None:
        named = [
            (f"/obligors/{number}/loadings/{place}/factor", loading.factor)
            for number, one in enumerate(self.obligors)
            for place, loading in enumerate(one.loadings)
        ]
        refuse(unknown_factors(named, factors))
        faults = []
        correlations = _Correlations(factors)
        for number, one in enumerate(self.obligors):
            weights = one.weights
            correlation = correlations.of(tuple(weights))
            pointer = f"/obligors/{number}/loadings"
            if correlation is None:
                detail = (
                    "more than one loading needs a gaussian or independent copula among the factors: with any other "
                    "the index is not normal and the default probability would not be met"
                )
                faults.append(Fault(detail=detail, code="not_normal", pointer=pointer))
                continue
            length = _length(weights, correlation)
            if length > 1.0 + LENGTH_SLACK:
                detail = f"the weights explain {length:.6g} of the variance of the index, more than all of it"
                faults.append(Fault(detail=detail, code="out_of_range", pointer=pointer))
        refuse(faults)

    def prepared(self, factors: FactorSet) -> PreparedComponent:
        entries = list(_entries(self.obligors, factors))
        buckets = []
        for pattern in dict.fromkeys(entry.columns for entry in entries):
            alike = [entry for entry in entries if entry.columns == pattern]
            buckets += [_Bucket.of(part) for part in _split(alike)]
        return _Pool(tuple(buckets))

    def mean(self, factors: FactorSet) -> float | None:  # noqa: ARG002  # as the contract
        """Return the sum of count × exposure × default probability × loss given default."""
        return math.fsum(
            one.count * one.exposure * one.default_probability * one.loss_given_default for one in self.obligors
        )


def conditional_probability(threshold: Array, weights: Array, own: Array, scores: Array) -> Array:
    """Return Φ((threshold - weights @ scores) / own): the default probability given the factors' normal scores.

    Parameters
    ----------
    threshold, own : ndarray of shape (g,)
        Φ⁻¹(PD) and √(1 − w′Rw) of each obligor.
    weights : ndarray of shape (g, k)
    scores : ndarray of shape (k, n)

    Returns
    -------
    ndarray of shape (g, n)
    """
    distance = threshold[:, None] - weights @ scores
    return np.asarray(special.ndtr(distance / np.maximum(own, TINY)[:, None]))


class _Correlations:
    """Correlations of the normal scores of sets of factors, each looked up once."""

    def __init__(self, factors: FactorSet) -> None:
        self._factors = factors
        self._known: dict[tuple[str, ...], Array | None] = {}

    def of(self, names: tuple[str, ...]) -> Array | None:
        """Return the matrix (k, k), or None where there is more than a correlation."""
        if len(names) <= 1:
            return np.eye(len(names))
        if names not in self._known:
            self._known[names] = self._factors.correlation(self._factors.columns(names))
        return self._known[names]


def _length(weights: dict[str, float], correlation: Array) -> float:
    w = np.array(list(weights.values()))
    return float(w @ correlation @ w)


@plain(frozen=True, slots=True)
class _Entry:
    """Obligors of a kind: they default where ε < start - slopes @ Z."""

    columns: tuple[int, ...]
    start: float
    slopes: tuple[float, ...]
    amount: float
    count: int


def _entries(obligors: Sequence[CreditObligor], factors: FactorSet) -> Iterator[_Entry]:
    """Yield the kinds of obligors that can lose something, those of one kind together."""
    correlations = _Correlations(factors)
    counts: dict[tuple[tuple[int, ...], float, tuple[float, ...], float], int] = {}
    for one in obligors:
        amount = one.exposure * one.loss_given_default
        if amount == 0.0:
            continue
        weights = dict(sorted((name, weight) for name, weight in one.weights.items() if weight != 0.0))
        correlation = correlations.of(tuple(weights))
        if correlation is None:
            raise LookupError(tuple(weights))
        own = max(math.sqrt(max(1.0 - _length(weights, correlation), 0.0)), TINY)
        columns = tuple(factors.positions[name] for name in weights)
        start = float(special.ndtri(one.default_probability)) / own
        kind = columns, start, tuple(weight / own for weight in weights.values()), amount
        counts[kind] = counts.get(kind, 0) + one.count
    for kind, count in counts.items():
        yield _Entry(*kind, count)


def _split(entries: list[_Entry]) -> Iterator[list[_Entry]]:
    """Yield the entries in groups that are close enough for one bound, or few; those of many obligors alone."""
    yield from ([entry] for entry in entries if entry.count >= MANY)
    few = [entry for entry in entries if entry.count < MANY]
    groups = [few] if few else []
    while groups:
        group = groups.pop()
        rows = np.array([(entry.start, *(FAR * slope for slope in entry.slopes)) for entry in group])
        spreads = np.ptp(rows, axis=0)
        if spreads.sum() <= CLOSE or len(group) <= DENSE:
            yield group
            continue
        widest = int(np.argmax(spreads))
        middle = 0.5 * (rows[:, widest].min() + rows[:, widest].max())
        below = rows[:, widest] <= middle
        groups.append([entry for entry, low in zip(group, below, strict=True) if not low])
        groups.append([entry for entry, low in zip(group, below, strict=True) if low])


@plain(frozen=True, slots=True)
class _Bucket:
    """Entries with the same factors.

    Attributes
    ----------
    columns : ndarray of shape (k,)
    start, amounts : ndarray of shape (g,)
    slopes : ndarray of shape (k, g)
    counts : ndarray of shape (g,)
    places : ndarray of shape (number of obligors,)
        The entry of each obligor; empty for a single entry.
    """

    columns: Indices
    start: Array
    slopes: Array
    amounts: Array
    counts: Indices
    places: Indices

    @classmethod
    def of(cls, entries: list[_Entry]) -> "_Bucket":
        counts = np.array([entry.count for entry in entries], dtype=np.intp)
        return cls(
            np.array(entries[0].columns, dtype=np.intp),
            np.array([entry.start for entry in entries]),
            np.array([entry.slopes for entry in entries]).reshape(len(entries), -1).T.copy(),
            np.array([entry.amount for entry in entries]),
            counts,
            np.repeat(np.arange(len(entries)), counts) if len(entries) > DENSE else np.empty(0, dtype=np.intp),
        )

    def add(self, scores: Array, block: Block, out: Array) -> None:
        """Add the losses given normal scores (k, n) to `out` (n,)."""
        if self.start.size <= DENSE:
            self._one_by_one(scores, np.arange(out.size), block, out)
            return
        bound = special.ndtr(self._highest(scores))
        likely = bound > LIKELY
        self._one_by_one(scores[:, likely], np.flatnonzero(likely), block, out)
        rate = -np.log1p(-np.where(likely, 0.0, bound))
        self._thinned(scores, rate, block.generator, out)

    def _highest(self, scores: Array) -> Array:
        """Return a bound on start - slopes @ Z over the entries, shape (n,)."""
        highest = np.full(scores.shape[1], self.start.max())
        for slopes, score in zip(self.slopes, scores, strict=True):
            highest -= np.minimum(slopes.min() * score, slopes.max() * score)
        return highest

    def _one_by_one(self, scores: Array, scenarios: Indices, block: Block, out: Array) -> None:
        """Draw the number of defaults of each entry in the scenarios given."""
        generator = block.generator
        rows = max(PIECE // self.start.size, 1)
        for start in range(0, scenarios.size, rows):
            block.pause()
            part = slice(start, start + rows)
            index = self.start - scores[:, part].T @ self.slopes
            chance = special.ndtr(index)
            if self.counts.max() == 1:
                defaults = (generator.random(chance.shape) < chance).astype(float)
            else:
                defaults = generator.binomial(self.counts, chance).astype(float)
            out[scenarios[part]] += defaults @ self.amounts

    def _thinned(self, scores: Array, rate: Array, generator: Generator, out: Array) -> None:
        """Draw the obligors that default as kept points of a process with `rate` (n,) for each obligor."""
        obligors = self.places.size
        points = generator.poisson(obligors * rate)
        scenarios = np.repeat(np.arange(rate.size), points)
        hits = generator.integers(obligors, size=scenarios.size)
        entries = self.places[hits]
        index = self.start[entries]
        for slopes, score in zip(self.slopes, scores, strict=True):
            index -= slopes[entries] * score[scenarios]
        own = -np.log1p(-special.ndtr(index))
        kept = generator.random(scenarios.size) * rate[scenarios] < own
        hit = np.unique(scenarios[kept] * obligors + hits[kept])  # an obligor defaults once
        losses = self.amounts[self.places[hit % obligors]]
        out += np.bincount(hit // obligors, losses, minlength=out.size)


@plain(frozen=True, slots=True)
class _Pool:
    buckets: tuple[_Bucket, ...]

    def losses(self, block: Block, out: Array) -> None:
        out.fill(0.0)
        for bucket in self.buckets:
            block.pause()
            bucket.add(block.normal_scores(bucket.columns), block, out)
