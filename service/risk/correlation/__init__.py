"""Family Correlation: forms in which a correlation matrix is given, their checks and what normals are made by."""

from typing import Annotated

from pydantic import Field
from typing_extensions import TypeAliasType

from service.risk.correlation.contract import CorrelationForm, Mixing
from service.risk.correlation.low_rank import EqualCorrelation, LoadingsCorrelation
from service.risk.correlation.matrices import (
    MOST_FACTORS,
    KendallTauCorrelation,
    MatrixCorrelation,
    SpearmanRhoCorrelation,
)
from service.risk.correlation.nearest import Repair
from service.risk.correlation.roots import Root

Correlation = TypeAliasType(
    "Correlation",
    Annotated[
        MatrixCorrelation | KendallTauCorrelation | SpearmanRhoCorrelation | LoadingsCorrelation | EqualCorrelation,
        Field(discriminator="kind", description="Any form of a correlation matrix, told apart by `kind`."),
    ],
)

TYPICAL: tuple[CorrelationForm, ...] = (
    MatrixCorrelation(kind="matrix", values=[[1.0, 0.5, 0.2], [0.5, 1.0, 0.3], [0.2, 0.3, 1.0]]),
    KendallTauCorrelation(kind="kendall_tau", values=[[1.0, 0.4, 0.1], [0.4, 1.0, 0.2], [0.1, 0.2, 1.0]]),
    SpearmanRhoCorrelation(kind="spearman_rho", values=[[1.0, 0.4, 0.1], [0.4, 1.0, 0.2], [0.1, 0.2, 1.0]]),
    LoadingsCorrelation(kind="loadings", values=[[0.7, 0.1], [0.5, 0.4], [-0.3, 0.2]]),
    EqualCorrelation(kind="equal", value=0.3),
)
"""One realistic instance of each, for three factors."""

__all__ = [
    "MOST_FACTORS",
    "TYPICAL",
    "Correlation",
    "CorrelationForm",
    "EqualCorrelation",
    "KendallTauCorrelation",
    "LoadingsCorrelation",
    "MatrixCorrelation",
    "Mixing",
    "Repair",
    "Root",
    "SpearmanRhoCorrelation",
]
