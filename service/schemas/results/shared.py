"""What every answer is made of: figures with their errors, notes, labels, provenance, the tail."""

from dataclasses import dataclass
from typing import Annotated, Literal

from pydantic import Field

from service.representations.table import Column

Money = Annotated[float, Field(json_schema_extra={"format": "double"})]
Whole = Annotated[int, Field(json_schema_extra={"format": "int64"})]

NoteCode = Literal[
    "population",
    "no_error",
    "infinite_variance",
    "tied_quantile",
    "thin_tail",
    "few_scenarios",
    "ratio_not_defined",
    "smoothed_quantile",
    "does_not_add_up",
    "sampled_shapley",
    "no_expected_profit",
    "sobol_points",
    "stopped",
    "overlapping_periods",
    "square_root_of_time",
    "correlation_repaired",
    "driven_sum",
    "column_taken",
    "low_level",
    "high_rate",
    "labels_differ",
    "samples_overlap",
]


@dataclass(frozen=True, slots=True)
class Note:
    """Something the caller may want to know about a figure."""

    code: Annotated[
        NoteCode,
        Field(
            description="`population`: the scenarios are the whole distribution, so no figure has an error. "
            "`no_error`: too few scenarios carry the figure for an error to be given. "
            "`infinite_variance`: no error exists, since the law of a loss has too few moments for it. "
            "`tied_quantile`: the quantile is one of many equal losses: what is built on it has a wide interval or no "
            "error. "
            "`thin_tail`: the error is given but rests on few tail scenarios. "
            "`few_scenarios`: a few scenarios carry most of the error of a figure; its interval may be too narrow. "
            "`ratio_not_defined`: a ratio is null since its denominator is not positive. "
            "`smoothed_quantile`: contributions to a quantile were smoothed over the window given. "
            "`does_not_add_up`: the contributions of this rule do not add up to the total; see `residual`. "
            "`sampled_shapley`: a sample of orders of entry stands for all of them; the error includes it. "
            "`no_expected_profit`: some sub-portfolios have no expected profit, so the total has no return on capital. "
            "`sobol_points`: how many Sobol points were taken for the scenarios asked for. "
            "`stopped`: why a simulation with `stop_when` ended. "
            "`overlapping_periods`: sums of overlapping periods depend on each other, and errors allow for it. "
            "`square_root_of_time`: changes were multiplied by the square root of the number of periods. "
            "`correlation_repaired`: how far the nearest correlation matrix lies from the one given. "
            "`driven_sum`: how exact the quantile function of a driven compound is. "
            "`column_taken`: a column with the name of a total, label or weight was taken as a sub-portfolio. "
            "`low_level`: a confidence level below 0.5, which may be meant as the probability of the tail. "
            "`high_rate`: a rate of 1 or more, which may be meant in percent. "
            "`labels_differ`: two books that are compared differ in their horizon, or go back in time. "
            "`samples_overlap`: two books that are compared share some scenarios, which their errors do not know of."
        ),
    ]
    detail: Annotated[str, Field(description="The same in a sentence.")]
    pointer: Annotated[str | None, Field(description="RFC 6901 pointer to the part of the request it is about.")]


@dataclass(frozen=True, slots=True)
class Interval:
    """Confidence interval of a figure, for the error of sampling only."""

    lower: Annotated[Money, Field(description="Lower end, in currency.")]
    upper: Annotated[Money, Field(description="Upper end, in currency.")]
    coverage: Annotated[Money, Field(description="Nominal coverage, without unit.")]
    method: Annotated[str, Field(description="How the interval was made.")]


@dataclass(frozen=True, slots=True)
class Figure:
    """A figure and how sure it is. The error is that of sampling only, never of the model."""

    value: Annotated[Money, Field(description="The figure, in currency.")]
    standard_error: Annotated[
        Money | None, Field(description="Standard error, in currency; null where it cannot be estimated.")
    ]
    interval: Annotated[Interval | None, Field(description="Confidence interval; null where it cannot be estimated.")]
    tail_scenarios: Annotated[
        Money | None,
        Field(
            description="Effective number of scenarios that carry the figure: those beyond the quantile, or for "
            "measures of the whole distribution those that carry its error variance."
        ),
    ]


@dataclass(frozen=True, slots=True)
class SubPortfolioLoss:
    """The loss of one sub-portfolio in one scenario."""

    id: Annotated[str, Field(description="The sub-portfolio.")]
    value: Annotated[Money, Field(description="Its loss, in currency.")]


@dataclass(frozen=True, slots=True)
class TailScenario:
    """One of the worst scenarios."""

    number: Annotated[Whole, Field(description="Its number, counted from 0.")]
    scenario_id: Annotated[str | None, Field(description="Its label, if one was given.")]
    probability: Annotated[Money, Field(description="Its probability, without unit.")]
    total: Annotated[Money, Field(description="Its total loss, in currency.")]
    losses: Annotated[list[SubPortfolioLoss], Field(description="Its loss by sub-portfolio, in order.")]


@dataclass(frozen=True, slots=True)
class TailFactor:
    """A factor's mean in the tail of the total."""

    id: Annotated[str, Field(description="The factor.")]
    mean: Annotated[Money, Field(description="Its mean given the tail, in its own unit.")]
    normal_score: Annotated[Money, Field(description="Its mean normal score given the tail, without unit.")]


@dataclass(frozen=True, slots=True)
class Tail:
    """The worst scenarios of the total."""

    level: Annotated[Money, Field(description="Confidence level beyond which factors are averaged.")]
    scenarios: Annotated[list[TailScenario], Field(description="The ten worst, worst first.")]
    factors: Annotated[list[TailFactor], Field(description="For factor and history sources; else empty.")]


@dataclass(frozen=True, slots=True)
class Labels:
    """Labels of the request, unchanged."""

    currency: Annotated[str | None, Field(description="Currency of all amounts.")]
    valuation_date: Annotated[str | None, Field(description="Valuation date, YYYY-MM-DD.")]
    horizon: Annotated[str | None, Field(description="Horizon of the losses.")]
    reference: Annotated[str | None, Field(description="Label of the request.")]


@dataclass(frozen=True, slots=True)
class Provenance:
    """What an auditor needs to repeat the figures."""

    service_version: Annotated[str, Field(description="Version of tailrace.")]
    request_digest: Annotated[str, Field(description="`sha-256:` and hex over the canonical request.")]
    losses_digest: Annotated[
        str,
        Field(
            description="`sha-256:` and hex over the ids, losses and probabilities, however they were sent: the same "
            "numbers have the same digest."
        ),
    ]
    method: Annotated[str, Field(description="How the figures came about.")]
    seed: Annotated[Whole | None, Field(description="Seed of the simulation; null where nothing was simulated.")]
    scenarios: Annotated[Whole, Field(description="Scenarios behind the figures.")]


def ends_of(figure: Figure) -> tuple[float, float | None, float | None, float | None]:
    """Return value, standard error and both ends of the interval."""
    ends = (None, None) if figure.interval is None else (figure.interval.lower, figure.interval.upper)
    return (figure.value, figure.standard_error, *ends)


def text_columns(*names: str) -> tuple[Column, ...]:
    """Return columns of texts."""
    return tuple(Column(name=name, unit=None, kind="text") for name in names)


def money_columns(*names: str) -> tuple[Column, ...]:
    """Return columns of amounts in currency."""
    return tuple(Column(name=name, unit="currency", kind="number") for name in names)


def ratio_columns(*names: str) -> tuple[Column, ...]:
    """Return columns of plain numbers."""
    return tuple(Column(name=name, unit=None, kind="number") for name in names)
