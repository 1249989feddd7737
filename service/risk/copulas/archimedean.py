"""Archimedean copulas: Clayton and its survival copula, Gumbel, Joe and Frank."""

from collections.abc import Sequence
from dataclasses import dataclass as plain
from typing import Annotated, Literal

import numpy as np
from pydantic import AfterValidator, Field
from pydantic.dataclasses import dataclass
from pydantic_core import PydanticCustomError

from service.errors import InvalidValue
from service.risk.copulas.contract import Array, CopulaFamily, Indices, Sampler
from service.risk.copulas.generators import ArchimedeanGenerator, Clayton, Frank, Gumbel, Joe
from service.risk.correlation import Repair
from service.risk.scores import Law, Scores, UniformScores
from service.risk.streams import Draw
from service.risk.words import STRICT

STRONGEST = 1e6  # beyond it the factors are comonotonic in all but name


def _some(theta: float) -> float:
    if theta == 0.0:
        raise PydanticCustomError("out_of_range", "theta is not 0: factors without dependence are family independent")
    return theta


Positive = Annotated[float, Field(gt=0.0, le=STRONGEST)]
FromOne = Annotated[float, Field(ge=1.0, le=STRONGEST)]
NotZero = Annotated[float, Field(ge=-STRONGEST, le=STRONGEST), AfterValidator(_some)]


@dataclass(frozen=True, kw_only=True, config=STRICT)
class ClaytonCopula(CopulaFamily):
    """Dependence in the lower tail: Kendall's tau is theta / (theta + 2)."""

    family: Literal["clayton"]
    """Tag of this copula."""
    theta: Positive
    """Strength of the dependence, above 0, without unit."""

    def prepared(self, factor_ids: Sequence[str]) -> Sampler:
        return ArchimedeanSampler.of(Clayton(self.theta), len(factor_ids))


@dataclass(frozen=True, kw_only=True, config=STRICT)
class SurvivalClaytonCopula(CopulaFamily):
    """Clayton's copula turned round, with dependence in the upper tail: Kendall's tau is theta / (theta + 2)."""

    family: Literal["survival_clayton"]
    """Tag of this copula."""
    theta: Positive
    """Strength of the dependence, above 0, without unit."""

    def prepared(self, factor_ids: Sequence[str]) -> Sampler:
        factors = len(factor_ids)
        return ArchimedeanSampler.of(Clayton(self.theta), factors, turned=tuple(range(factors)))


@dataclass(frozen=True, kw_only=True, config=STRICT)
class GumbelCopula(CopulaFamily):
    """Dependence in the upper tail: Kendall's tau is 1 − 1/theta."""

    family: Literal["gumbel"]
    """Tag of this copula."""
    theta: FromOne
    """Strength of the dependence, 1 (none) or more, without unit."""

    def prepared(self, factor_ids: Sequence[str]) -> Sampler:
        return ArchimedeanSampler.of(Gumbel(self.theta), len(factor_ids))


@dataclass(frozen=True, kw_only=True, config=STRICT)
class JoeCopula(CopulaFamily):
    """Strong dependence in the upper tail and hardly any in the lower one."""

    family: Literal["joe"]
    """Tag of this copula."""
    theta: FromOne
    """Strength of the dependence, 1 (none) or more, without unit."""

    def prepared(self, factor_ids: Sequence[str]) -> Sampler:
        return ArchimedeanSampler.of(Joe(self.theta), len(factor_ids))


@dataclass(frozen=True, kw_only=True, config=STRICT)
class FrankCopula(CopulaFamily):
    """Dependence in the middle and in neither tail; for two factors also opposed."""

    family: Literal["frank"]
    """Tag of this copula."""
    theta: NotZero
    """Strength of the dependence, not 0, without unit; below 0 for two factors alone, which are then opposed."""

    def check(self, factor_ids: Sequence[str]) -> None:
        if self.theta < 0.0 and len(factor_ids) > 2:  # noqa: PLR2004  # a pair
            detail = f"theta is below 0 for two factors alone: {len(factor_ids)} cannot all be opposed to one another"
            raise InvalidValue.at("/theta", detail, code="out_of_range")

    def prepared(self, factor_ids: Sequence[str]) -> Sampler:
        """Return the sampler; below 0 the second factor is turned round: C(u, v; -theta) = u - C(u, 1 - v; theta)."""
        self.check(factor_ids)
        turned = (1,) if self.theta < 0.0 and len(factor_ids) > 1 else ()
        return ArchimedeanSampler.of(Frank(abs(self.theta)), len(factor_ids), turned=turned)


@plain(frozen=True, slots=True)
class ArchimedeanSampler:
    """One shared variable, and an exponential for each factor.

    Attributes
    ----------
    laws : tuple of Law
    generator : ArchimedeanGenerator
    turned : tuple of int
        Factors whose uniform u becomes 1 - u.
    """

    laws: tuple[Law, ...]
    generator: ArchimedeanGenerator
    turned: tuple[int, ...] = ()
    repair: Repair | None = None

    @classmethod
    def of(cls, generator: ArchimedeanGenerator, factors: int, *, turned: tuple[int, ...] = ()) -> "ArchimedeanSampler":
        """Return the sampler of so many factors."""
        return cls((UniformScores(),) * factors, generator, turned)

    @property
    def dimensions(self) -> int:
        """The numbers of the shared variable, then the exponentials."""
        return self.generator.dimensions + len(self.laws)

    def correlations(self, factors: Indices) -> Array | None:  # noqa: ARG002  # as the contract
        """Return None: the scores are not normal together."""
        return None

    def scores(self, draw: Draw) -> Scores:
        """Return the logits of psi(E / V)."""
        log_shared = self.generator.log_shared(draw)
        values = draw.exponentials(len(self.laws))
        for row in values:  # a row fits the cache, and so do all steps on it
            np.log(row, out=row)
            np.subtract(row, log_shared, out=row)
            row[...] = self.generator.logits(row)
        for j in self.turned:
            np.negative(values[j], out=values[j])
        return Scores(values.T, self.laws)
