"""Family RiskMeasure: each member is at once the numeric object and its schema on the wire."""

from typing import Annotated

from pydantic import Field
from typing_extensions import TypeAliasType

from service.risk.measures.contract import (
    ContributionWeights,
    LocatedMeasure,
    RiskMeasure,
    Smoothing,
    full_influence,
    full_values,
    means,
)
from service.risk.measures.distortions import DualPower, ExponentialDistortion, ProportionalHazard, Wang
from service.risk.measures.moments import Entropic, Expectile, StandardDeviation
from service.risk.measures.quantile_based import ExpectedShortfall, RangeValueAtRisk, ReturnLevel, ValueAtRisk

Measure = TypeAliasType(
    "Measure",
    Annotated[
        ValueAtRisk
        | ExpectedShortfall
        | RangeValueAtRisk
        | StandardDeviation
        | Expectile
        | Wang
        | ProportionalHazard
        | DualPower
        | ExponentialDistortion
        | Entropic
        | ReturnLevel,
        Field(discriminator="kind", description="Any measure, told apart by `kind`."),
    ],
)

TYPICAL: tuple[RiskMeasure, ...] = (
    ValueAtRisk(kind="value_at_risk", level=0.995),
    ExpectedShortfall(kind="expected_shortfall", level=0.99),
    RangeValueAtRisk(kind="range_value_at_risk", lower_level=0.95, upper_level=0.99),
    StandardDeviation(kind="standard_deviation", multiple=3.0),
    Expectile(kind="expectile", level=0.99),
    Wang(kind="wang", shift=0.5),
    ProportionalHazard(kind="proportional_hazard", exponent=0.8),
    DualPower(kind="dual_power", exponent=3.0),
    ExponentialDistortion(kind="exponential_distortion", aversion=5.0),
    Entropic(kind="entropic", aversion=0.01),
    ReturnLevel(kind="return_level", return_period=200.0),
)
"""One realistic instance of each."""

__all__ = [
    "TYPICAL",
    "ContributionWeights",
    "DualPower",
    "Entropic",
    "ExpectedShortfall",
    "Expectile",
    "ExponentialDistortion",
    "LocatedMeasure",
    "Measure",
    "ProportionalHazard",
    "RangeValueAtRisk",
    "ReturnLevel",
    "RiskMeasure",
    "Smoothing",
    "StandardDeviation",
    "ValueAtRisk",
    "Wang",
    "full_influence",
    "full_values",
    "means",
]
