"""Answer of `POST /v1/comparisons`."""

from dataclasses import dataclass
from typing import Annotated, Literal

from pydantic import Field

from service.representations.table import Table
from service.schemas.results.shared import (
    Figure,
    Labels,
    Money,
    Note,
    Provenance,
    Whole,
    ends_of,
    money_columns,
    text_columns,
)


@dataclass(frozen=True, slots=True)
class ChangedPart:
    """How the contribution of one sub-portfolio changed."""

    id: Annotated[str, Field(description="The sub-portfolio.")]
    state: Annotated[
        Literal["new", "gone", "changed"],
        Field(description="Whether it is in the book after alone, before alone, or in both."),
    ]
    before: Annotated[Money | None, Field(description="Its Euler contribution before, in currency; null if new.")]
    after: Annotated[Money | None, Field(description="Its Euler contribution after, in currency; null if gone.")]
    change: Annotated[Figure, Field(description="After less before, nothing counting as 0.")]


@dataclass(frozen=True, slots=True)
class ChangeByState:
    """What the sub-portfolios of one state contribute to the change of the total."""

    state: Annotated[Literal["new", "gone", "changed"], Field(description="New, gone or changed sub-portfolios.")]
    sub_portfolios: Annotated[Whole, Field(description="How many there are.")]
    change: Annotated[Money, Field(description="Sum of their changes, in currency.")]


@dataclass(frozen=True, slots=True)
class ComparisonResult:
    """How one measure changed between two books."""

    measure: Annotated[str, Field(description="Name of the measure.")]
    before: Annotated[Figure, Field(description="The measure of the book before.")]
    after: Annotated[Figure, Field(description="The measure of the book after.")]
    change: Annotated[Figure, Field(description="After less before.")]
    sub_portfolios: Annotated[
        list[ChangedPart], Field(description="Those after, in order, then those gone; their changes add up.")
    ]
    by_state: Annotated[list[ChangeByState], Field(description="The change split into new, gone and changed.")]


@dataclass(frozen=True, slots=True)
class ComparedBook:
    """One of the two books."""

    losses_digest: Annotated[str, Field(description="`sha-256:` and hex over its losses.")]
    scenarios: Annotated[Whole, Field(description="Its scenarios.")]
    valuation_date: Annotated[str | None, Field(description="Its valuation date, YYYY-MM-DD.")]
    horizon: Annotated[str | None, Field(description="Horizon of its losses.")]


@dataclass(frozen=True, slots=True)
class ComparisonsAnswer:
    """Answer of `POST /v1/comparisons`."""

    comparisons: Annotated[list[ComparisonResult], Field(description="One per measure, in the order asked.")]
    same_scenarios: Annotated[
        bool,
        Field(
            description="Whether errors are of differences scenario by scenario; else the samples count as independent."
        ),
    ]
    before: Annotated[ComparedBook, Field(description="The book before.")]
    after: Annotated[ComparedBook, Field(description="The book after.")]
    labels: Annotated[Labels, Field(description="Labels of the request and of the book after, unchanged.")]
    notes: Annotated[list[Note], Field(description="What the caller may want to know.")]
    provenance: Annotated[Provenance, Field(description="What an auditor needs; the losses are those after.")]

    def table(self) -> Table:
        """Return one row for the total, each state and each sub-portfolio of every measure."""
        rows: list[tuple[object, ...]] = []
        currency = self.labels.currency
        for one in self.comparisons:
            totals = (one.before.value, one.after.value)
            rows.append((one.measure, "total", None, None, *totals, *ends_of(one.change), currency))
            rows += [
                (one.measure, "state", None, part.state, None, None, part.change, None, None, None, currency)
                for part in one.by_state
            ]
            rows += [
                (
                    one.measure,
                    "sub_portfolio",
                    part.id,
                    part.state,
                    part.before,
                    part.after,
                    *ends_of(part.change),
                    currency,
                )
                for part in one.sub_portfolios
            ]
        return Table(COMPARISONS_COLUMNS, rows)


COMPARISONS_COLUMNS = (
    *text_columns("measure", "scope", "id", "state"),
    *money_columns("before", "after", "change", "standard_error", "lower", "upper"),
    *text_columns("currency"),
)
