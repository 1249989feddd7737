"""Answer of `POST /v1/measures`."""

from dataclasses import dataclass
from typing import Annotated

from pydantic import Field

from service.representations.table import Table
from service.schemas.results.shared import (
    Figure,
    Labels,
    Money,
    Note,
    Provenance,
    Tail,
    Whole,
    ends_of,
    money_columns,
    ratio_columns,
    text_columns,
)


@dataclass(frozen=True, slots=True)
class StandAloneFigure:
    """The measure of one sub-portfolio alone."""

    id: Annotated[str, Field(description="The sub-portfolio.")]
    figure: Annotated[Figure, Field(description="The measure of its loss alone.")]


@dataclass(frozen=True, slots=True)
class GroupFigure:
    """The measure of the summed loss of one group alone."""

    attribute: Annotated[str, Field(description="Attribute or crossing, e.g. `entity/line`.")]
    group: Annotated[str | None, Field(description="Its value, e.g. `north/hull`; null for those without it.")]
    figure: Annotated[Figure, Field(description="The measure of the group's summed loss.")]


@dataclass(frozen=True, slots=True)
class MeasureResult:
    """One measure of the whole book, and of each part alone."""

    measure: Annotated[str, Field(description="Name of the measure.")]
    total: Annotated[Figure, Field(description="The measure of the total loss.")]
    stand_alone: Annotated[
        list[StandAloneFigure], Field(description="Each sub-portfolio alone; empty if not asked for.")
    ]
    groups: Annotated[list[GroupFigure], Field(description="Each group alone; empty if not asked for.")]
    diversification_benefit: Annotated[
        Money | None, Field(description="1 - total / sum of the stand-alone figures, without unit.")
    ]
    diversification_amount: Annotated[
        Money | None, Field(description="Sum of the stand-alone figures less the total, in currency.")
    ]


@dataclass(frozen=True, slots=True)
class MeasuresAnswer:
    """Answer of `POST /v1/measures`."""

    measures: Annotated[list[MeasureResult], Field(description="One result per measure, in the order asked.")]
    expected_loss: Annotated[Figure, Field(description="Mean of the total loss.")]
    scenarios: Annotated[Whole, Field(description="Number of scenarios.")]
    tail: Annotated[Tail | None, Field(description="The worst scenarios; null if not asked for.")]
    labels: Annotated[Labels, Field(description="Labels of the request, unchanged.")]
    notes: Annotated[list[Note], Field(description="What the caller may want to know.")]
    provenance: Annotated[Provenance, Field(description="What an auditor needs to repeat the figures.")]

    def table(self) -> Table:
        """Return one row per figure: the total, each sub-portfolio alone, each group alone."""
        rows: list[tuple[object, ...]] = []
        for result in self.measures:
            parts: list[tuple[str, str | None, str | None, Figure]] = [("total", None, None, result.total)]
            parts += [("sub_portfolio", None, one.id, one.figure) for one in result.stand_alone]
            parts += [("group", one.attribute, one.group, one.figure) for one in result.groups]
            rows += [
                (
                    result.measure,
                    scope,
                    attribute,
                    name,
                    *ends_of(figure),
                    figure.tail_scenarios,
                    self.labels.currency,
                )
                for scope, attribute, name, figure in parts
            ]
        return Table(MEASURES_COLUMNS, rows)


MEASURES_COLUMNS = (
    *text_columns("measure", "scope", "attribute", "id"),
    *money_columns("value", "standard_error", "lower", "upper"),
    *ratio_columns("tail_scenarios"),
    *text_columns("currency"),
)
