"""Nested Archimedean copula: groups of factors that depend more strongly within than across, one generator."""

from collections.abc import Sequence
from dataclasses import dataclass as plain
from typing import Annotated, Literal

import numpy as np
from pydantic import Field
from pydantic.dataclasses import dataclass

from service.errors import Fault
from service.risk.copulas.contract import Array, CopulaFamily, FactorIds, Indices, Sampler, grouped
from service.risk.copulas.generators import GENERATORS, ArchimedeanGenerator, GeneratorName
from service.risk.copulas.inner import inner_dimensions, log_inner
from service.risk.correlation import Repair
from service.risk.correlation.contract import refuse
from service.risk.scores import Law, Scores, UniformScores
from service.risk.streams import Draw
from service.risk.words import STRICT

STRONGEST = 1e3  # beyond it the factors of a group are comonotonic in all but name
LEAST = {"clayton": 0.0, "frank": 0.0, "gumbel": 1.0, "joe": 1.0}
"""Theta without any dependence; the first two generators do not reach it."""

Theta = Annotated[float, Field(gt=0.0, le=STRONGEST)]


@dataclass(frozen=True, kw_only=True, config=STRICT)
class NestedGroup:
    """Factors that depend on one another by a theta of their own."""

    factors: FactorIds
    """Ids of the factors."""
    theta: Theta
    """Strength of the dependence within the group, at least that across groups, without unit."""


@dataclass(frozen=True, kw_only=True, config=STRICT)
class NestedCopula(CopulaFamily):
    """Two factors of a group have the generator's copula with the group's theta, of two groups with the outer theta."""

    family: Literal["nested"]
    """Tag of this copula."""
    generator: GeneratorName
    """The copula of any pair of factors."""
    theta: Theta
    """Strength of the dependence across groups, without unit: above 0; for gumbel and joe 1 or more."""
    groups: Annotated[list[NestedGroup], Field(min_length=1)]
    """Each factor is in one group."""

    def check(self, factor_ids: Sequence[str]) -> None:
        least = LEAST[self.generator]
        faults = []
        if self.theta < least:
            detail = f"theta is at least {least:g} for {self.generator}, not {self.theta!r}"
            faults.append(Fault(detail=detail, code="out_of_range", pointer="/theta"))
        for g, group in enumerate(self.groups):
            if group.theta < max(self.theta, least):
                detail = (
                    f"the theta of a group is at least that across groups, {self.theta!r}, not {group.theta!r}: "
                    "dependence within a group is no weaker than across"
                )
                faults.append(Fault(detail=detail, code="out_of_range", pointer=f"/groups/{g}/theta"))
        refuse(faults)
        grouped(factor_ids, [group.factors for group in self.groups])

    def prepared(self, factor_ids: Sequence[str]) -> Sampler:
        self.check(factor_ids)
        members = grouped(factor_ids, [group.factors for group in self.groups])
        make = GENERATORS[self.generator]
        parts = tuple(
            NestedPart(of, make(group.theta), group.theta) for of, group in zip(members, self.groups, strict=True)
        )
        laws: tuple[Law, ...] = (UniformScores(),) * len(factor_ids)
        return NestedSampler(laws, self.generator, self.theta, make(self.theta), parts)


@plain(frozen=True, slots=True)
class NestedPart:
    """One group: the numbers of its factors, its generator and its theta."""

    members: Indices
    generator: ArchimedeanGenerator
    theta: float


@plain(frozen=True, slots=True)
class NestedSampler:
    """An outer shared variable, an inner one for each group, and an exponential for each factor.

    Notes
    -----
    The inner variables of all generators but Gumbel's take as many numbers as rejection or a sum needs. They come from
    `Draw.generator`, so with Sobol points too they are random.
    """

    laws: tuple[Law, ...]
    name: GeneratorName
    theta: float
    outer: ArchimedeanGenerator
    parts: tuple[NestedPart, ...]
    repair: Repair | None = None

    @property
    def dimensions(self) -> int:
        """The numbers of the outer variable, of the inner ones, then the exponentials."""
        inner = sum(inner_dimensions(self.name, self.theta, part.theta) for part in self.parts)
        return self.outer.dimensions + inner + len(self.laws)

    def correlations(self, factors: Indices) -> Array | None:  # noqa: ARG002  # as the contract
        """Return None: the scores are not normal together."""
        return None

    def scores(self, draw: Draw) -> Scores:
        """Return the logits of psi(E / V) with psi and V of the factor's group."""
        log_outer = self.outer.log_shared(draw)
        log_shared = [log_inner(self.name, self.theta, part.theta, log_outer, draw) for part in self.parts]
        values = draw.exponentials(len(self.laws))
        for part, log_inner_shared in zip(self.parts, log_shared, strict=True):
            for j in part.members:
                row = values[j]
                np.log(row, out=row)
                row -= log_inner_shared
                row[...] = part.generator.logits(row)
        return Scores(values.T, self.laws)
