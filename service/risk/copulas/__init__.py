"""Family Copula: each member is at once the numeric object and its schema on the wire."""

from typing import Annotated

from pydantic import Field
from typing_extensions import TypeAliasType

from service.risk.copulas.archimedean import (
    ClaytonCopula,
    FrankCopula,
    GumbelCopula,
    JoeCopula,
    SurvivalClaytonCopula,
)
from service.risk.copulas.contract import CopulaFamily, Sampler
from service.risk.copulas.elliptical import (
    ComonotonicCopula,
    GaussianCopula,
    GaussianSampler,
    GroupedStudentTCopula,
    IndependentCopula,
    StudentTCopula,
    StudentTGroup,
)
from service.risk.copulas.nested import NestedCopula, NestedGroup
from service.risk.correlation import EqualCorrelation, MatrixCorrelation

Copula = TypeAliasType(
    "Copula",
    Annotated[
        IndependentCopula
        | ComonotonicCopula
        | GaussianCopula
        | StudentTCopula
        | GroupedStudentTCopula
        | ClaytonCopula
        | SurvivalClaytonCopula
        | GumbelCopula
        | JoeCopula
        | FrankCopula
        | NestedCopula,
        Field(discriminator="family", description="Any copula, told apart by `family`."),
    ],
)

_PAIRS = [[1.0, 0.5, 0.2], [0.5, 1.0, 0.3], [0.2, 0.3, 1.0]]

TYPICAL: tuple[CopulaFamily, ...] = (
    IndependentCopula(family="independent"),
    ComonotonicCopula(family="comonotonic"),
    GaussianCopula(family="gaussian", correlation=MatrixCorrelation(kind="matrix", values=_PAIRS)),
    StudentTCopula(family="student_t", correlation=EqualCorrelation(kind="equal", value=0.3), df=4.0),
    GroupedStudentTCopula(
        family="grouped_student_t",
        correlation=MatrixCorrelation(kind="matrix", values=_PAIRS),
        groups=[StudentTGroup(factors=["a", "b"], df=3.0), StudentTGroup(factors=["c"], df=10.0)],
    ),
    ClaytonCopula(family="clayton", theta=2.0),
    SurvivalClaytonCopula(family="survival_clayton", theta=2.0),
    GumbelCopula(family="gumbel", theta=2.0),
    JoeCopula(family="joe", theta=2.0),
    FrankCopula(family="frank", theta=5.0),
    NestedCopula(
        family="nested",
        generator="gumbel",
        theta=1.2,
        groups=[NestedGroup(factors=["a", "b"], theta=2.5), NestedGroup(factors=["c"], theta=1.5)],
    ),
)
"""One realistic instance of each, for the factors a, b and c."""

__all__ = [
    "TYPICAL",
    "ClaytonCopula",
    "ComonotonicCopula",
    "Copula",
    "CopulaFamily",
    "FrankCopula",
    "GaussianCopula",
    "GaussianSampler",
    "GroupedStudentTCopula",
    "GumbelCopula",
    "IndependentCopula",
    "JoeCopula",
    "NestedCopula",
    "NestedGroup",
    "Sampler",
    "StudentTCopula",
    "StudentTGroup",
    "SurvivalClaytonCopula",
]
