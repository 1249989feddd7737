"""Components with draws of their own from a law: idiosyncratic, and compound sums of claims."""

import math
from dataclasses import dataclass as plain
from dataclasses import replace
from functools import lru_cache
from typing import Literal

import numpy as np
from pydantic import Field, TypeAdapter
from pydantic.dataclasses import dataclass
from scipy import special

from service.errors import Fault, pointing
from service.risk.components.aggregate import AggregateLaw, ClaimSizes, aggregate_law
from service.risk.components.contract import (
    Array,
    Block,
    Component,
    FactorSet,
    Growth,
    PreparedComponent,
    growth_along,
    refuse,
    tails_of,
    unknown_factors,
)
from service.risk.components.frequencies import ClaimFrequency, FrequencyLaw
from service.risk.covers import (
    CedeLayerCover,
    ClaimTerms,
    Cover,
    CoverStep,
    LayerCover,
    QuotaShareCover,
    Tails,
    check_cover,
    covered,
    preimage,
    tails_after,
)
from service.risk.marginals import DiscreteMarginal, Marginal, MarginalLaw
from service.risk.score_tables import ScoreTable, Scratch
from service.risk.scores import NormalScores
from service.risk.words import STRICT, Text

PIECE = 1 << 16  # claims drawn at a time, 0.5 MB
FARTHEST_SCORE = 37.0  # normal scores beyond have a probability that binary64 cannot tell from 0
SCORE_STEP = 1.0 / 64.0  # of the trapezoidal rule over normal scores, exact to rounding for smooth integrands
HALVINGS = 60  # of the interval in which an exponential rate is looked for
CACHED = 32  # laws of sums kept; each is a few hundred kilobytes


@dataclass(frozen=True, kw_only=True, config=STRICT)
class IdiosyncraticComponent(Component):
    """A draw of its own from a law, independent of everything else."""

    kind: Literal["idiosyncratic"]
    """Tag of this component."""
    marginal: Marginal
    """Law of the loss, in currency."""

    @property
    def own_draws(self) -> bool:
        return True

    @property
    def draws_per_scenario(self) -> float:
        return 1.0

    @property
    def independent(self) -> bool:
        return True

    def prepared(self, factors: FactorSet) -> PreparedComponent:  # noqa: ARG002  # as the contract
        return _Idiosyncratic(ScoreTable.of(self.marginal, NormalScores()))

    def tails(self, factors: FactorSet) -> Tails:  # noqa: ARG002  # as the contract
        return tails_of(self.marginal)

    def mean(self, factors: FactorSet) -> float | None:  # noqa: ARG002  # as the contract
        return self.marginal.mean if math.isfinite(self.marginal.mean) else None


@plain(frozen=True, slots=True)
class _Idiosyncratic:
    table: ScoreTable

    def losses(self, block: Block, out: Array) -> None:
        block.generator.standard_normal(out=out)
        self.table.values(out, out=out)


@dataclass(frozen=True, kw_only=True, config=STRICT)
class CompoundComponent(Component):
    """The sum of a random number of independent claims.

    Without a `driver` number and sizes are drawn. With one, the loss is the sum's own quantile function
    at the factor's uniform, so that the sum is as dependent on other factors as the factor is.
    """

    kind: Literal["compound"]
    """Tag of this component."""
    frequency: ClaimFrequency
    """Law of the number of claims in a scenario."""
    severity: Marginal
    """Law of the size of a claim, in currency."""
    claim_cover: list[Cover] = Field(default_factory=list)
    """Steps that map each claim; a layer here may also have terms on the year's sum of what it pays."""
    driver: Text | None = None
    """Id of the factor whose uniform drives the sum; the sum is independent of all factors if absent."""

    @property
    def used_scores(self) -> tuple[str, ...]:
        return () if self.driver is None else (self.driver,)

    @property
    def own_draws(self) -> bool:
        return self.driver is None

    @property
    def independent(self) -> bool:
        return self.driver is None

    @property
    def draws_per_scenario(self) -> float:
        return 1.0 + self.frequency.expected if self.driver is None else 0.0

    def check(self, factors: FactorSet) -> None:
        with pointing("/claim_cover"):
            check_cover(self.claim_cover, of_claims=True, least=self.severity.support[0])
        if self.driver is None:
            return
        refuse(unknown_factors([("/driver", self.driver)], factors))
        least = float(self._least_claim)
        if least < 0.0:
            detail = f"with a driver no claim may be negative, but claims go down to {least:.6g}"
            refuse([Fault(detail=detail, code="negative_claims", pointer="/severity")])

    @property
    def _least_claim(self) -> float:
        reach = self.severity.support
        for step in self.claim_cover:
            reach = step.reach(reach)
        return reach[0]

    def prepared(self, factors: FactorSet) -> PreparedComponent:
        terms = ClaimTerms.of(self.claim_cover)
        if self.driver is not None:
            return _Driven(factors.positions[self.driver], self.law_of_sum, terms)
        return _Drawn(self.frequency, ScoreTable.of(self.severity, NormalScores()), terms)

    @property
    def law_of_sum(self) -> AggregateLaw:
        """The law of the sum of the claims after `claim_cover`, before the terms of the year; cached."""
        return _law_of_sum(_ADAPTER.dump_json(replace(self, driver=None)))

    def tails(self, factors: FactorSet) -> Tails:  # noqa: ARG002  # as the contract
        """Return the tails of the sum: the claims' own index, and a rate that the number of claims may lower.

        Embrechts, Klüppelberg and Mikosch, Modelling Extremal Events, 1997, theorem 1.3.9 (index); E[exp(tS)]
        is the generating function of the number at E[exp(tY)].
        """
        terms = ClaimTerms.of(self.claim_cover)
        claim = tails_after(terms.of_claim, tails_of(self.severity))
        growth = self.frequency.growth
        upper, lower = claim.upper_exponential, claim.lower_exponential
        if math.isfinite(growth) and not (terms.of_year is not None and terms.of_year.annual_limit is not None):
            amounts = covered(terms.of_claim, self._typical_claims)
            upper, lower = _rate(amounts, upper, growth), _rate(-amounts, lower, growth)
        return terms.year_tails(Tails(claim.upper_index, claim.lower_index, upper, lower))

    def growth(self, factors: FactorSet, factor: float) -> Growth:
        if self.driver is None:
            return Growth()
        return growth_along(self.driver, self.tails(factors).bounded_below(), factor, factor)  # no claim is negative

    @property
    def _typical_claims(self) -> Array:
        scores = _scores()
        return self.severity.quantile(special.ndtr(scores), special.ndtr(-scores))

    def mean(self, factors: FactorSet) -> float | None:  # noqa: ARG002  # as the contract
        """Return expected number × expected claim, where the cover is quota shares and at most one layer."""
        terms = ClaimTerms.of(self.claim_cover)
        if terms.of_year is not None or not math.isfinite(self.severity.mean):
            return None
        claim = _expected_claim(terms.of_claim, self.severity)
        return None if claim is None else self.frequency.expected * claim


def _expected_claim(steps: tuple[CoverStep, ...], severity: MarginalLaw) -> float | None:
    """Return E[Y] by limited means E[min(X, d)]; None where the steps are too many for a closed form."""
    claim, scale, layered = severity.mean, 1.0, False
    for step in steps:
        if isinstance(step, QuotaShareCover):
            scale *= step.retained
            continue
        if layered or scale != 1.0 or not isinstance(step, LayerCover | CedeLayerCover):
            return None
        top = severity.mean if step.limit is None else severity.limited_mean(step.attachment + step.limit)
        within = step.share * (top - severity.limited_mean(step.attachment))
        claim, layered = within if isinstance(step, LayerCover) else claim - within, True
    return scale * claim


def _scores() -> Array:
    return np.arange(-FARTHEST_SCORE, FARTHEST_SCORE + SCORE_STEP, SCORE_STEP)


def _rate(amounts: Array, most: float, growth: float) -> float:
    """Return up to which t E[exp(t Y)] is at most `growth`, for Y at a grid of normal scores and t below `most`."""
    if most == 0.0:
        return 0.0
    largest = float(np.max(amounts))
    if largest <= 0.0:
        return most
    weights = np.exp(-0.5 * _scores() ** 2) * (SCORE_STEP / math.sqrt(2.0 * math.pi))

    def moment(rate: float) -> float:
        with np.errstate(over="ignore"):
            return float(np.exp(rate * amounts) @ weights)

    low, high = 0.0, most
    if math.isinf(high):
        high = 1.0 / largest
        while moment(high) <= growth:
            low, high = high, 2.0 * high
    for _ in range(HALVINGS):
        rate = 0.5 * (low + high)
        low, high = (rate, high) if moment(rate) <= growth else (low, rate)
    return low


@plain(frozen=True, slots=True)
class _Drawn:
    frequency: FrequencyLaw
    table: ScoreTable
    terms: ClaimTerms

    def losses(self, block: Block, out: Array) -> None:
        generator = block.generator
        counts = self.frequency.drawn(generator, block.scenarios)
        ends = np.cumsum(counts)
        out.fill(0.0)
        scenarios = np.flatnonzero(counts)  # those with claims, whose claims lie from `first` on
        first = ends[scenarios] - counts[scenarios]
        claims = int(ends[-1]) if ends.size else 0
        held, scratch = np.empty(min(PIECE, claims)), Scratch()
        for start in range(0, claims, PIECE):
            block.pause()
            piece = held[: min(PIECE, claims - start)]
            generator.standard_normal(out=piece)
            self.table.values(piece, out=piece, scratch=scratch)
            covered(self.terms.of_claim, piece, out=piece)
            low = int(np.searchsorted(first, start, side="right")) - 1
            high = int(np.searchsorted(first, start + piece.size))
            out[scenarios[low:high]] += np.add.reduceat(piece, np.maximum(first[low:high] - start, 0))
        self.terms.year(out)


@plain(frozen=True, slots=True)
class _Driven:
    column: int
    law: AggregateLaw
    terms: ClaimTerms

    def losses(self, block: Block, out: Array) -> None:
        out[:] = self.law.quantile(block.uniform(self.column))
        self.terms.year(out)


_ADAPTER: TypeAdapter[CompoundComponent] = TypeAdapter(CompoundComponent)


@lru_cache(maxsize=CACHED)
def _law_of_sum(component: bytes) -> AggregateLaw:
    compound = _ADAPTER.validate_json(component)
    severity, steps = compound.severity, ClaimTerms.of(compound.claim_cover).of_claim

    def beyond(amounts: Array) -> Array:
        needed = preimage(steps, amounts)
        finite = np.isfinite(needed)
        return np.where(finite, severity.beyond(np.where(finite, needed, 0.0)), np.where(needed > 0.0, 0.0, 1.0))

    def quantile_above(probability: float) -> float:
        claim = severity.quantile(np.array([1.0 - probability]), np.array([probability]))
        return float(covered(steps, claim)[0])

    reach: tuple[float, float] = severity.support
    for step in steps:
        reach = step.reach(reach)
    atoms = covered(steps, severity.atoms.values) if isinstance(severity, DiscreteMarginal) else None
    sizes = ClaimSizes(beyond, quantile_above, atoms, reach[1])
    return aggregate_law(compound.frequency, sizes)
