"""Copulas of normals: independent, comonotonic, Gaussian, Student t and grouped Student t."""

from collections.abc import Sequence
from dataclasses import dataclass as plain
from typing import Annotated, Literal

import numpy as np
from pydantic import Field
from pydantic.dataclasses import dataclass

from service.errors import InvalidValue, pointing
from service.risk.copulas.contract import Array, CopulaFamily, FactorIds, Indices, Sampler, grouped
from service.risk.copulas.mixing import LogGamma
from service.risk.correlation import Correlation, Mixing, Repair, Root, SpearmanRhoCorrelation
from service.risk.scores import Law, NormalScores, Scores, StudentScores
from service.risk.streams import Draw
from service.risk.words import STRICT

DF = "Degrees of freedom, without unit; few give strong dependence in both tails, many approach the Gaussian copula."
DegreesOfFreedom = Annotated[float, Field(ge=0.5, le=1e6, description=DF)]


@dataclass(frozen=True, kw_only=True, config=STRICT)
class IndependentCopula(CopulaFamily):
    """Factors independent of one another."""

    family: Literal["independent"]
    """Tag of this copula."""

    def prepared(self, factor_ids: Sequence[str]) -> Sampler:
        return IndependentSampler((NormalScores(),) * len(factor_ids))


@dataclass(frozen=True, kw_only=True, config=STRICT)
class ComonotonicCopula(CopulaFamily):
    """All factors increasing functions of one number."""

    family: Literal["comonotonic"]
    """Tag of this copula."""

    def prepared(self, factor_ids: Sequence[str]) -> Sampler:
        return ComonotonicSampler((NormalScores(),) * len(factor_ids))


@dataclass(frozen=True, kw_only=True, config=STRICT)
class GaussianCopula(CopulaFamily):
    """The copula of a multivariate normal law."""

    family: Literal["gaussian"]
    """Tag of this copula."""
    correlation: Correlation
    """Correlation of the normal scores."""

    def check(self, factor_ids: Sequence[str]) -> None:
        with pointing("/correlation"):
            self.correlation.check(len(factor_ids))

    def prepared(self, factor_ids: Sequence[str]) -> Sampler:
        with pointing("/correlation"):
            root = self.correlation.root(len(factor_ids), Mixing())
        return GaussianSampler((NormalScores(),) * len(factor_ids), root)


@dataclass(frozen=True, kw_only=True, config=STRICT)
class StudentTCopula(CopulaFamily):
    """The copula of a multivariate Student t law: normals divided by the root of one common gamma variable.

    S. Demarta and A. J. McNeil, The t copula and related copulas, International Statistical Review 73 (2005) 111-129.
    """

    family: Literal["student_t"]
    """Tag of this copula."""
    correlation: Correlation
    """Correlation of the normals before they are divided."""
    df: DegreesOfFreedom

    def check(self, factor_ids: Sequence[str]) -> None:
        with pointing("/correlation"):
            self.correlation.check(len(factor_ids))

    def prepared(self, factor_ids: Sequence[str]) -> Sampler:
        with pointing("/correlation"):
            root = self.correlation.root(len(factor_ids), Mixing(df=self.df))
        laws = (StudentScores(self.df),) * len(factor_ids)
        return StudentSampler(laws, root, ((None, LogGamma.of(self.df / 2.0)),))


@dataclass(frozen=True, kw_only=True, config=STRICT)
class StudentTGroup:
    """Factors that share their degrees of freedom."""

    factors: FactorIds
    """Ids of the factors."""
    df: DegreesOfFreedom


@dataclass(frozen=True, kw_only=True, config=STRICT)
class GroupedStudentTCopula(CopulaFamily):
    """Student t copula with degrees of freedom by group: one uniform drives the mixing variables of all groups.

    S. Daul, E. De Giorgi, F. Lindskog and A. J. McNeil, The grouped t-copula with an application to credit risk, Risk
    16(11), 2003, 73-76.
    """

    family: Literal["grouped_student_t"]
    """Tag of this copula."""
    correlation: Correlation
    """Correlation of the normals before they are divided; not given as Spearman's rho."""
    groups: Annotated[list[StudentTGroup], Field(min_length=1)]
    """Each factor is in one group."""

    def check(self, factor_ids: Sequence[str]) -> None:
        if isinstance(self.correlation, SpearmanRhoCorrelation):
            detail = (
                "Spearman's rho does not determine the correlations of a grouped Student t copula: "
                "give kendall_tau, matrix, loadings or equal"
            )
            raise InvalidValue.at("/correlation/kind", detail, code="not_allowed")
        with pointing("/correlation"):
            self.correlation.check(len(factor_ids))
        grouped(factor_ids, [group.factors for group in self.groups])

    def prepared(self, factor_ids: Sequence[str]) -> Sampler:
        self.check(factor_ids)
        with pointing("/correlation"):
            root = self.correlation.root(len(factor_ids), Mixing())
        members = grouped(factor_ids, [group.factors for group in self.groups])
        df = np.empty(len(factor_ids))
        for of, group in zip(members, self.groups, strict=True):
            df[of] = group.df
        gammas = tuple((of, LogGamma.of(group.df / 2.0)) for of, group in zip(members, self.groups, strict=True))
        return StudentSampler(tuple(StudentScores(number) for number in df.tolist()), root, gammas)


@plain(frozen=True, slots=True)
class IndependentSampler:
    """Independent normals, one per factor."""

    laws: tuple[Law, ...]
    repair: Repair | None = None

    @property
    def dimensions(self) -> int:
        """One normal per factor."""
        return len(self.laws)

    def correlations(self, factors: Indices) -> Array:
        """Return 1 for a factor with itself, else 0."""
        return np.where(factors[:, None] == factors, 1.0, 0.0)

    def scores(self, draw: Draw) -> Scores:
        """Return the normals."""
        return Scores(draw.normals(len(self.laws)).T, self.laws)


@plain(frozen=True, slots=True)
class ComonotonicSampler:
    """One normal for all factors."""

    laws: tuple[Law, ...]
    repair: Repair | None = None
    dimensions: int = 1

    def correlations(self, factors: Indices) -> Array | None:  # noqa: ARG002  # as the contract
        """Return None: all correlations would be 1, and no index can be built on that."""
        return None

    def scores(self, draw: Draw) -> Scores:
        """Return the normal, once for each factor."""
        values = draw.empty(len(self.laws))
        values[...] = draw.normals(1)
        return Scores(values.T, self.laws)


@plain(frozen=True, slots=True)
class GaussianSampler:
    """Correlated normals."""

    laws: tuple[Law, ...]
    root: Root

    @property
    def dimensions(self) -> int:
        """The normals of the root."""
        return self.root.dimensions

    @property
    def repair(self) -> Repair | None:
        """What was done to the correlations."""
        return self.root.repair

    def correlations(self, factors: Indices) -> Array:
        """Return those of the root."""
        return self.root.correlations(factors)

    def scores(self, draw: Draw) -> Scores:
        """Return the correlated normals."""
        return Scores(self.root.normals(draw).T, self.laws)


@plain(frozen=True, slots=True)
class StudentSampler:
    """Correlated normals over the root of a gamma variable, or of several that increase together.

    Attributes
    ----------
    laws : tuple of Law
    root : Root
    groups : tuple of (Indices or None, LogGamma)
        The gamma variable of each group of factors; None stands for all factors.
    """

    laws: tuple[Law, ...]
    root: Root
    groups: tuple[tuple[Indices | None, LogGamma], ...]

    @property
    def dimensions(self) -> int:
        """The number that drives the gamma variables, then the normals of the root."""
        return 1 + self.root.dimensions

    @property
    def repair(self) -> Repair | None:
        """What was done to the correlations."""
        return self.root.repair

    def correlations(self, factors: Indices) -> Array | None:  # noqa: ARG002  # as the contract
        """Return None: the factors share a gamma variable besides."""
        return None

    def scores(self, draw: Draw) -> Scores:
        """Return the normals times the inverse root."""
        driver = draw.normals(1)[0]
        values = self.root.normals(draw)
        for members, gamma in self.groups:
            factor = inverse_root(gamma, driver)
            if members is None:
                values *= factor
            else:
                for j in members:
                    values[j] *= factor
        return Scores(values.T, self.laws)


def inverse_root(gamma: LogGamma, scores: Array) -> Array:
    """Return 1 / sqrt(gamma variable / its mean), i.e. sqrt(df / chi-square), at the normal scores."""
    logs = gamma(scores)
    logs -= np.log(gamma.shape)
    logs *= -0.5
    return np.exp(logs, out=logs)
