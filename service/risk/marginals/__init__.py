"""Family Marginal: each member is at once the law of a factor or a loss and its schema on the wire."""

from typing import Annotated

from pydantic import Field
from typing_extensions import TypeAliasType

from service.risk.marginals.bounded import BetaMarginal, UniformMarginal
from service.risk.marginals.contract import MarginalLaw
from service.risk.marginals.discrete import DiscreteMarginal, EmpiricalMarginal, PointMarginal
from service.risk.marginals.extremes import (
    GeneralizedExtremeValueMarginal,
    GeneralizedParetoMarginal,
    GumbelMarginal,
)
from service.risk.marginals.inverse_gaussian import InverseGaussianMarginal
from service.risk.marginals.positive import (
    ExponentialMarginal,
    GammaMarginal,
    LognormalByMeanMarginal,
    LognormalMarginal,
    WeibullMarginal,
)
from service.risk.marginals.power_tails import BurrXIIMarginal, LomaxMarginal, ParetoMarginal
from service.risk.marginals.spliced import SplicedMarginal, SplicePart
from service.risk.marginals.two_sided import LogisticMarginal, NormalMarginal, StudentTMarginal

Marginal = TypeAliasType(
    "Marginal",
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
        | PointMarginal
        | SplicedMarginal,
        Field(discriminator="family", description="Any marginal, told apart by `family`."),
    ],
)

TYPICAL: tuple[MarginalLaw, ...] = (
    NormalMarginal(family="normal", mean=0.02, standard_deviation=0.15),
    StudentTMarginal(family="student_t", df=4.0, location=0.0, scale=0.01),
    LognormalMarginal(family="lognormal", mu=7.0, sigma=1.5),
    LognormalByMeanMarginal(family="lognormal_by_mean", mean=1000.0, cv=0.8),
    GammaMarginal(family="gamma", shape=2.0, scale=500.0),
    WeibullMarginal(family="weibull", shape=0.7, scale=1000.0),
    ParetoMarginal(family="pareto", shape=2.5, scale=1000.0),
    LomaxMarginal(family="lomax", shape=3.0, scale=2000.0),
    GeneralizedParetoMarginal(family="generalized_pareto", shape=0.3, scale=700.0, threshold=1000.0),
    GumbelMarginal(family="gumbel", location=100.0, scale=20.0),
    GeneralizedExtremeValueMarginal(family="generalized_extreme_value", shape=0.1, location=100.0, scale=20.0),
    ExponentialMarginal(family="exponential", mean=1000.0),
    UniformMarginal(family="uniform", lower=-50.0, upper=150.0),
    BetaMarginal(family="beta", a=2.0, b=5.0, lower=0.0, upper=1.0),
    InverseGaussianMarginal(family="inverse_gaussian", mean=1000.0, shape=1500.0),
    BurrXIIMarginal(family="burr_xii", c=2.0, d=1.5, scale=1000.0),
    LogisticMarginal(family="logistic", location=0.0, scale=0.1),
    EmpiricalMarginal(
        family="empirical", values=[0.0, 120.0, 80.0, 1500.0, 240.0], probabilities=[0.5, 0.2, 0.15, 0.01, 0.14]
    ),
    PointMarginal(family="point", value=250.0),
    SplicedMarginal(
        family="spliced",
        body=LognormalMarginal(family="lognormal", mu=6.0, sigma=1.0),
        tail=GeneralizedParetoMarginal(family="generalized_pareto", shape=0.4, scale=900.0, threshold=2000.0),
        threshold=2000.0,
        tail_probability=0.05,
    ),
)
"""One realistic instance of each."""

__all__ = [
    "TYPICAL",
    "BetaMarginal",
    "BurrXIIMarginal",
    "DiscreteMarginal",
    "EmpiricalMarginal",
    "ExponentialMarginal",
    "GammaMarginal",
    "GeneralizedExtremeValueMarginal",
    "GeneralizedParetoMarginal",
    "GumbelMarginal",
    "InverseGaussianMarginal",
    "LogisticMarginal",
    "LognormalByMeanMarginal",
    "LognormalMarginal",
    "LomaxMarginal",
    "Marginal",
    "MarginalLaw",
    "NormalMarginal",
    "ParetoMarginal",
    "PointMarginal",
    "SplicePart",
    "SplicedMarginal",
    "StudentTMarginal",
    "UniformMarginal",
    "WeibullMarginal",
]
