"""One request model per calculation."""

from collections.abc import Sequence
from decimal import Decimal
from typing import Annotated, Any, Literal, Self

from pydantic import AfterValidator, Field, GetCoreSchemaHandler, GetPydanticSchema, model_validator
from pydantic.dataclasses import dataclass
from pydantic_core import CoreSchema, PydanticCustomError, core_schema

from service.risk.components import AnyComponent
from service.risk.covers import Cover
from service.risk.measures import Measure, Smoothing
from service.risk.words import STRICT, Text
from service.schemas.losses import AttributeName, Losses, Number

MOST_MEASURES = 32

Rule = Literal["euler", "proportional_stand_alone", "covariance", "with_without", "shapley"]


def _usual_rules() -> list[Rule]:
    return ["euler"]


def _distinct(values: Sequence[object]) -> Sequence[object]:
    repeated = next((value for number, value in enumerate(values) if value in values[:number]), None)
    if repeated is not None:
        raise PydanticCustomError("repeated", "{value} stands here twice", {"value": str(repeated)})
    return values


def _distinct_names(measures: Sequence[Measure]) -> Sequence[Measure]:
    _distinct([measure.name for measure in measures])
    return measures


Measures = Annotated[list[Measure], Field(min_length=1, max_length=MOST_MEASURES), AfterValidator(_distinct_names)]
Coverage = Annotated[Number, Field(gt=0.0, lt=1.0)]


@dataclass(frozen=True, kw_only=True, config=STRICT)
class MeasuresRequest:
    """What is asked of `POST /v1/measures`."""

    losses: Losses
    """Where the losses come from."""
    measures: Measures
    """The risk measures to compute, 1 to 32, with distinct names."""
    group_by: Annotated[list[Text], AfterValidator(_distinct)] = Field(default_factory=list)
    """Attributes to group by; `entity/line` crosses two."""
    interval_coverage: Coverage = 0.95
    """Nominal coverage of the intervals, without unit."""
    include_stand_alone: bool = True
    """Whether to compute each sub-portfolio (and group) alone."""
    tail_detail: bool = False
    """Whether to list the ten worst scenarios."""
    reference: Text | None = None
    """Label of this request; comes back unchanged."""


@dataclass(frozen=True, kw_only=True, config=STRICT)
class AllocationsRequest(MeasuresRequest):
    """What is asked of `POST /v1/allocations`."""

    rules: Annotated[list[Rule], Field(min_length=1), AfterValidator(_distinct)] = Field(
        default_factory=_usual_rules, description="Allocation rules, each applied to each measure."
    )
    capital: Annotated[Number, Field(gt=0.0)] | None = None
    """Amount to spread in the ratio of the contributions, in currency."""
    capital_measure: Measure | None = None
    """Measure whose figure is spread in the ratio of the contributions."""
    smoothing: Smoothing = "auto"
    """`auto`: contributions to a quantile are smoothed over neighbouring scenarios; `none`: they are not."""

    @model_validator(mode="after")
    def _one_capital(self) -> Self:
        if self.capital is not None and self.capital_measure is not None:
            raise PydanticCustomError("capital", "give capital or capital_measure, not both")
        return self


MOST_CANDIDATES = 1000


@dataclass(frozen=True, kw_only=True, config=STRICT)
class ScaledCopy:
    """So much more, or less, of a sub-portfolio that is in the book: its losses times `scale` less 1."""

    sub_portfolio: Text
    """The sub-portfolio."""
    scale: Annotated[Number, Field(ge=0.0)]
    """Its size afterwards as a multiple of its size now, without unit: 1.1 is ten per cent more, 0 is none."""

    @property
    def step(self) -> float:
        """What is added, as a multiple; exact in decimals, so that 1.1 adds 0.1."""
        return float(Decimal(repr(float(self.scale))) - 1)


@dataclass(frozen=True, kw_only=True, config=STRICT)
class Candidate:
    """One deal that might be added to the book, or taken from it with the opposite sign."""

    id: Text
    """Its name, unique in the request and not that of a sub-portfolio."""
    values: Annotated[list[Number] | None, Field(min_length=1)] = None
    """Its loss in each scenario, in the order of the base's scenarios, in currency; or `components`, or `scaled`."""
    components: Annotated[list[AnyComponent] | None, Field(min_length=1)] = None
    """What its loss is made of, on the factors of the base; the parts are added."""
    scaled: ScaledCopy | None = None
    """A part of a sub-portfolio of the book is its loss; its expected profit is that part too unless given."""
    sign: Literal["loss", "profit"] = "loss"
    """`profit` negates the sum of the components."""
    cover: list[Cover] = Field(default_factory=list)
    """Steps that map the running amount of the components in turn."""
    attributes: dict[AttributeName, Text] = Field(default_factory=dict)
    """What it belongs to; comes back in no figure."""
    expected_profit: Number | None = None
    """Expected profit as a gain, in currency."""

    @model_validator(mode="after")
    def _one_loss(self) -> Self:
        if [self.values, self.components, self.scaled].count(None) != 2:  # noqa: PLR2004  # all but one
            raise PydanticCustomError("candidate", "exactly one of values, components and scaled says what it loses")
        if self.components is None and (self.cover or self.sign != "loss"):
            raise PydanticCustomError("candidate", "sign and cover go with components")
        return self


def _unjudged(_source: Any, handler: GetCoreSchemaHandler) -> CoreSchema:
    return core_schema.no_info_wrap_validator_function(lambda value, _judge: value, handler(Candidate))


CandidateDocument = Annotated[Any, GetPydanticSchema(_unjudged)]
"""A candidate as sent: each is judged alone, so that a bad one does not spoil the others."""


@dataclass(frozen=True, kw_only=True, config=STRICT)
class IncrementsRequest:
    """What is asked of `POST /v1/increments`."""

    losses: Losses
    """The book as it is."""
    measures: Measures
    """The risk measures to compute, 1 to 32, with distinct names."""
    candidates: Annotated[list[CandidateDocument], Field(min_length=1, max_length=MOST_CANDIDATES)]
    """The deals to try, 1 to 1000, each alone."""
    base_digest: Annotated[str | None, Field(pattern=r"^sha-256:[0-9a-f]{64}$")] = None
    """`losses_digest` of the book that is meant; another book is refused with status 409."""
    hurdle_rate: Number | None = None
    """Least return on capital, without unit, for `meets_hurdle`."""
    cost_of_capital: Annotated[Number | None, Field(ge=0.0)] = None
    """Cost of capital per horizon, without unit, for `required_profit`."""
    capital_limit: Number | None = None
    """Amount, in currency, that the measure of the enlarged book should not pass."""
    interval_coverage: Coverage = 0.95
    """Nominal coverage of the intervals, without unit."""
    reference: Text | None = None
    """Label of this request; comes back unchanged."""


@dataclass(frozen=True, kw_only=True, config=STRICT)
class ComparisonsRequest:
    """What is asked of `POST /v1/comparisons`."""

    before: Losses
    """The book as it was."""
    after: Losses
    """The book as it is."""
    measures: Measures
    """The risk measures to compare, 1 to 32, with distinct names."""
    same_scenarios: bool | None = None
    """Whether both books have the same scenarios in order; found from labels, seeds or changes if absent."""
    interval_coverage: Coverage = 0.95
    """Nominal coverage of the intervals, without unit."""
    reference: Text | None = None
    """Label of this request; comes back unchanged."""
