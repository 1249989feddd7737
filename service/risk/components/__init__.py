"""Family Component: from factor values, and draws of its own, to the loss of a sub-portfolio."""

from typing import Annotated

from pydantic import Field
from typing_extensions import TypeAliasType

from service.risk.components.aggregate import AggregateLaw, QuantileBound
from service.risk.components.claims import CompoundComponent, IdiosyncraticComponent
from service.risk.components.contract import Block, Component, FactorSet, PreparedComponent
from service.risk.components.credit_pool import (
    CreditObligor,
    CreditPoolComponent,
    FactorLoading,
    conditional_probability,
)
from service.risk.components.frequencies import (
    TYPICAL_FREQUENCIES,
    BinomialFrequency,
    ClaimFrequency,
    FrequencyLaw,
    NegativeBinomialFrequency,
    PoissonFrequency,
)
from service.risk.components.of_factors import (
    ConstantComponent,
    DeltaGammaComponent,
    FactorExposure,
    FactorPair,
    LinearComponent,
    RevaluationGridComponent,
)
from service.risk.covers import LayerCover
from service.risk.marginals import LognormalMarginal

AnyComponent = TypeAliasType(
    "AnyComponent",
    Annotated[
        ConstantComponent
        | LinearComponent
        | DeltaGammaComponent
        | RevaluationGridComponent
        | IdiosyncraticComponent
        | CompoundComponent
        | CreditPoolComponent,
        Field(discriminator="kind", description="Any component, told apart by `kind`."),
    ],
)

ObservedComponent = TypeAliasType(
    "ObservedComponent",
    Annotated[
        ConstantComponent | LinearComponent | DeltaGammaComponent | RevaluationGridComponent,
        Field(
            discriminator="kind",
            description="Any component that depends on factors alone, told apart by `kind`: for observed changes.",
        ),
    ],
)

TYPICAL: tuple[Component, ...] = (
    ConstantComponent(kind="constant", amount=10.0),
    LinearComponent(kind="linear", exposures=[FactorExposure(factor="rates", amount=100.0)]),
    DeltaGammaComponent(
        kind="delta_gamma",
        delta=[FactorExposure(factor="rates", amount=-50.0)],
        gamma=[FactorPair(first="rates", second="equity", amount=20.0)],
    ),
    RevaluationGridComponent(
        kind="revaluation_grid",
        factor="equity",
        points=[-3.0, -1.0, 0.0, 2.0],
        losses=[250.0, 60.0, 0.0, -40.0],
        beyond="linear",
    ),
    IdiosyncraticComponent(kind="idiosyncratic", marginal=LognormalMarginal(family="lognormal", mu=3.0, sigma=0.8)),
    CompoundComponent(
        kind="compound",
        frequency=PoissonFrequency(family="poisson", mean=4.0),
        severity=LognormalMarginal(family="lognormal", mu=3.0, sigma=1.2),
        claim_cover=[LayerCover(kind="layer", attachment=20.0, limit=200.0)],
    ),
    CreditPoolComponent(
        kind="credit_pool",
        obligors=[
            CreditObligor(
                count=100,
                exposure=10.0,
                default_probability=0.02,
                loss_given_default=0.45,
                loadings=[FactorLoading(factor="equity", weight=0.4)],
            )
        ],
    ),
)
"""One realistic instance of each; their factors are `rates` and `equity`."""

__all__ = [
    "TYPICAL",
    "TYPICAL_FREQUENCIES",
    "AggregateLaw",
    "AnyComponent",
    "BinomialFrequency",
    "Block",
    "ClaimFrequency",
    "Component",
    "CompoundComponent",
    "ConstantComponent",
    "CreditObligor",
    "CreditPoolComponent",
    "DeltaGammaComponent",
    "FactorExposure",
    "FactorLoading",
    "FactorPair",
    "FactorSet",
    "FrequencyLaw",
    "IdiosyncraticComponent",
    "LinearComponent",
    "NegativeBinomialFrequency",
    "ObservedComponent",
    "PoissonFrequency",
    "PreparedComponent",
    "QuantileBound",
    "RevaluationGridComponent",
    "conditional_probability",
]
