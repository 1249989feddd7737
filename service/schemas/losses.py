"""The `losses` union: where the losses come from."""

import datetime as dt
import re
from typing import Annotated, Any, Literal, Self

from pydantic import AfterValidator, Field, WithJsonSchema, model_validator
from pydantic.dataclasses import dataclass
from pydantic_core import PydanticCustomError
from typing_extensions import TypeAliasType

from service.risk.components import AnyComponent, ObservedComponent
from service.risk.copulas import Copula, IndependentCopula
from service.risk.covers import Cover
from service.risk.marginals import Marginal
from service.risk.words import STRICT, Text

DATE = re.compile(r"\d{4}-\d{2}-\d{2}")

Number = Annotated[float, Field(json_schema_extra={"format": "double"})]
Count = Annotated[int, Field(ge=1, json_schema_extra={"format": "int64"})]


def _date(value: str) -> str:
    if DATE.fullmatch(value):
        try:
            dt.date.fromisoformat(value)
        except ValueError:
            pass
        else:
            return value
    raise PydanticCustomError("date", "a date is written YYYY-MM-DD")


Date = Annotated[str, AfterValidator(_date), Field(json_schema_extra={"format": "date"})]


def _attribute(name: str) -> str:
    if "/" in name:
        raise PydanticCustomError("attribute", "the name of an attribute holds no '/'")
    return name


def _independent() -> IndependentCopula:
    return IndependentCopula(family="independent")


AttributeName = Annotated[Text, AfterValidator(_attribute)]


@dataclass(frozen=True, kw_only=True, config=STRICT)
class LabelledLosses:
    """What every source of losses may say of itself; a book that does not say it has what its file says."""

    currency: Annotated[Text | None, Field(description="Currency of all amounts; a label, nothing is converted.")] = (
        None
    )
    valuation_date: Annotated[Date | None, Field(description="Valuation date, YYYY-MM-DD; a label.")] = None
    horizon: Annotated[Text | None, Field(description="Horizon of the losses, e.g. `1 year`; a label.")] = None


@dataclass(frozen=True, kw_only=True, config=STRICT)
class DescribedSubPortfolio:
    """What a sub-portfolio is called and belongs to, whatever its losses come from."""

    id: Annotated[Text, Field(description="Its name, unique in the request.")]
    attributes: Annotated[
        dict[AttributeName, Text],
        Field(
            description='What it belongs to, e.g. {"entity": "north", "line": "hull"}; answers can be grouped by it.'
        ),
    ] = Field(default_factory=dict)
    expected_profit: Annotated[
        Number | None,
        Field(
            description="Expected profit as a gain (positive is a profit), in currency; never derived from the losses."
        ),
    ] = None


@dataclass(frozen=True, kw_only=True, config=STRICT)
class BuiltSubPortfolio(DescribedSubPortfolio):
    """A sub-portfolio made of components, which are added; then the sign is applied, then each cover step."""

    sign: Annotated[Literal["loss", "profit"], Field(description="`profit` negates the sum of the components.")] = (
        "loss"
    )
    cover: Annotated[list[Cover], Field(description="Steps that map the running amount in turn.")] = Field(
        default_factory=list
    )


@dataclass(frozen=True, kw_only=True, config=STRICT)
class SubPortfolioColumn(DescribedSubPortfolio):
    """One sub-portfolio: a column of the loss table."""


@dataclass(frozen=True, kw_only=True, config=STRICT)
class PackedTable:
    """The loss table as base64 of little-endian floating-point values in C order."""

    data: Annotated[str, Field(json_schema_extra={"contentEncoding": "base64"})]
    """The values, row after row."""
    dtype: Literal["float64", "float32"]
    """Type of each value."""
    rows: Count
    """Rows of the table as packed (scenarios, unless `layout` is `by_sub_portfolio`)."""
    columns: Count
    """Columns of the table as packed (sub-portfolios, unless `layout` is `by_sub_portfolio`)."""


Rows = Annotated[
    Any,
    WithJsonSchema(
        {
            "type": "array",
            "minItems": 1,
            "items": {"type": "array", "minItems": 1, "items": {"type": "number", "format": "double"}},
        }
    ),
]
"""The table itself is decoded apart from the rest of the request and never passes through the model."""


@dataclass(frozen=True, kw_only=True, config=STRICT)
class ScenarioLosses(LabelledLosses):
    """A table of loss scenarios that the caller sends: exactly one of `values`, `packed` and `part`."""

    kind: Literal["scenarios"]
    """Tag of this source."""
    sub_portfolios: Annotated[list[SubPortfolioColumn] | None, Field(min_length=1)] = None
    """One per column, in order. Needed for `values` and `packed`; for a table with a header they may add attributes."""
    values: Rows = None
    """The losses as rows, in currency: a row per scenario (or per sub-portfolio, see `layout`)."""
    packed: PackedTable | None = None
    """The losses as packed binary values, in currency."""
    part: Literal["table"] | None = None
    """The losses stand in the part `table` of a multipart request, as CSV, Arrow IPC stream or Parquet."""
    layout: Literal["by_scenario", "by_sub_portfolio"] = "by_scenario"
    """Whether a row of `values` or `packed` is a scenario or a sub-portfolio."""
    sign: Literal["loss", "profit"] = "loss"
    """Whether a positive value is a loss or a profit; profits are negated on entry."""
    probabilities: list[Annotated[Number, Field(ge=0.0)]] | None = None
    """Probability of each scenario, without unit, summing to 1; equal if absent."""
    scenarios_are: Literal["sample", "population"] = "sample"
    """`sample`: draws, so figures have errors; `population`: the whole distribution, so they have none."""
    scenario_ids: list[Text] | None = None
    """Label of each scenario, unique."""
    scenario_id_column: Text | None = None
    """Column of a table with a header that holds the labels of the scenarios."""
    probability_column: Text | None = None
    """Column of a table with a header that holds the probabilities."""
    ignore_columns: list[Text] | None = None
    """Columns of a table with a header that are left out."""

    @model_validator(mode="after")
    def _one_table(self) -> Self:
        given = [name for name in ("values", "packed", "part") if getattr(self, name) is not None]
        if len(given) != 1:
            words = " and ".join(given) if given else "none"
            raise PydanticCustomError(
                "table",
                "exactly one of values, packed and part holds the table, not {given}",
                {"given": words},
            )
        if self.part is None:
            _no_header(self)
        elif self.layout != "by_scenario":
            raise PydanticCustomError("table", "a table with a header is always laid out by_scenario")
        return self


def _no_header(losses: ScenarioLosses) -> None:
    """Refuse what only a table with a header can have."""
    if losses.sub_portfolios is None:
        raise PydanticCustomError("unnamed_columns", "sub_portfolios must name the columns of the table")
    for name in ("scenario_id_column", "probability_column", "ignore_columns"):
        if getattr(losses, name) is not None:
            raise PydanticCustomError("table", "{name} is for tables with a header (part: table)", {"name": name})


@dataclass(frozen=True, kw_only=True, config=STRICT)
class Factor:
    """One factor: a quantity that losses depend on."""

    id: Text
    """Its name, unique in the request."""
    marginal: Marginal
    """Its probability law, in its own unit."""


@dataclass(frozen=True, kw_only=True, config=STRICT)
class FactorSubPortfolio(BuiltSubPortfolio):
    """One sub-portfolio of a factor spec: components are added, the sign applied, then each cover step."""

    components: Annotated[list[AnyComponent], Field(min_length=1)]
    """What its loss is made of; the parts are added."""


@dataclass(frozen=True, kw_only=True, config=STRICT)
class StopWhen:
    """When a simulation has been long enough."""

    relative_standard_error: Annotated[Number, Field(gt=0.0, lt=1.0)]
    """Largest standard error of any measure of the total, as a part of its figure, that is good enough."""
    max_scenarios: Count
    """Scenarios after which it stops in any case; with `sobol` the last eight times a power of two within it."""


@dataclass(frozen=True, kw_only=True, config=STRICT)
class SimulationPlan:
    """How many scenarios are simulated, and how."""

    scenarios: Count = 100_000
    """Number of scenarios; with `sobol` the next eight times a power of two."""
    seed: Annotated[int, Field(ge=0, le=2**53 - 1, json_schema_extra={"format": "int64"})] = 1
    """Seed of all draws, from 0 to 2^53 - 1."""
    method: Literal["random", "sobol"] = "random"
    """Independent random draws, or Sobol points in eight independent scramblings."""
    stop_when: StopWhen | None = None
    """If given, the number of scenarios is doubled until the error is small enough, twice in a row."""


@dataclass(frozen=True, kw_only=True, config=STRICT)
class FactorLosses(LabelledLosses):
    """A factor model that the service simulates."""

    kind: Literal["factors"]
    """Tag of this source."""
    factors: list[Factor]
    """The factors; may be empty if no component refers to one."""
    sub_portfolios: Annotated[list[FactorSubPortfolio], Field(min_length=1)]
    """The sub-portfolios and what their losses are made of."""
    dependence: Copula = Field(default_factory=_independent)
    """Copula of the factors; independent if absent."""
    simulation: SimulationPlan = Field(default_factory=SimulationPlan)
    """How it is simulated."""


@dataclass(frozen=True, kw_only=True, config=STRICT)
class HistorySubPortfolio(BuiltSubPortfolio):
    """One sub-portfolio whose loss is a function of observed factor changes."""

    components: Annotated[list[ObservedComponent], Field(min_length=1)]
    """What its loss is made of; the parts are added."""


@dataclass(frozen=True, kw_only=True, config=STRICT)
class HorizonScalingRule:
    """How changes of one period become changes over the horizon."""

    periods: Count
    """Periods of the horizon."""
    method: Literal["overlapping", "square_root_of_time"]
    """Sums of so many consecutive changes, or each change times the square root of their number."""


@dataclass(frozen=True, kw_only=True, config=STRICT)
class HistoryLosses(LabelledLosses):
    """Observed factor changes are the scenarios: exactly one of `changes`, `packed` and `part` holds them."""

    kind: Literal["history"]
    """Tag of this source."""
    factors: Annotated[list[Text], Field(min_length=1)]
    """Names of the factors, one per column of the changes."""
    sub_portfolios: Annotated[list[HistorySubPortfolio], Field(min_length=1)]
    """The sub-portfolios and what their losses are made of."""
    changes: Annotated[list[list[Number]] | None, Field(min_length=1)] = None
    """Change of each factor in each period, a row per period, oldest first, in the factors' units."""
    packed: PackedTable | None = None
    """The changes as packed binary values, a row per period."""
    part: Literal["table"] | None = None
    """The changes stand in the part `table` of a multipart request; its columns are named by the factors."""
    decay: Annotated[Number | None, Field(gt=0.0, le=1.0)] = None
    """Weight of a period relative to the next more recent one; equal weights if absent."""
    horizon_scaling: HorizonScalingRule | None = None
    """How the changes are brought to a longer horizon."""

    @model_validator(mode="after")
    def _one_table(self) -> Self:
        given = [name for name in ("changes", "packed", "part") if getattr(self, name) is not None]
        if len(given) != 1:
            words = " and ".join(given) if given else "none"
            raise PydanticCustomError(
                "table", "exactly one of changes, packed and part holds the changes, not {given}", {"given": words}
            )
        return self


BookName = Annotated[str, Field(pattern=r"^[A-Za-z0-9][A-Za-z0-9_-]{0,63}$")]


@dataclass(frozen=True, kw_only=True, config=STRICT)
class BookLosses(LabelledLosses):
    """A book that the server keeps: losses under a name. `GET /v1/books` lists them."""

    kind: Literal["book"]
    """Tag of this source."""
    name: BookName
    """Name of the book."""


Losses = TypeAliasType(
    "Losses",
    Annotated[
        ScenarioLosses | FactorLosses | HistoryLosses | BookLosses,
        Field(discriminator="kind", description="Any source of losses, told apart by `kind`."),
    ],
)
