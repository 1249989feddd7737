"""Answer of `POST /v1/increments`."""

from dataclasses import dataclass
from typing import Annotated, Any, Literal

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
    ratio_columns,
    text_columns,
)


@dataclass(frozen=True, slots=True)
class Moved:
    """How the contribution of one sub-portfolio moves when a candidate joins."""

    id: Annotated[str, Field(description="The sub-portfolio.")]
    before: Annotated[Money, Field(description="Its Euler contribution to the book as it is, in currency.")]
    after: Annotated[Money, Field(description="Its Euler contribution to the enlarged book, in currency.")]


@dataclass(frozen=True, slots=True)
class CandidateFigures:
    """What one candidate changes in one measure."""

    measure: Annotated[str, Field(description="Name of the measure.")]
    total_with: Annotated[Figure, Field(description="The measure of the enlarged book.")]
    increment: Annotated[
        Figure, Field(description="With less without; its error is that of the difference on the same scenarios.")
    ]
    contribution: Annotated[Figure, Field(description="Euler contribution of the candidate inside the enlarged book.")]
    stand_alone: Annotated[Figure, Field(description="The measure of the candidate alone.")]
    diversification_benefit: Annotated[
        Money | None, Field(description="1 - increment / stand-alone figure, without unit.")
    ]
    return_on_capital: Annotated[Money | None, Field(description="Expected profit over increment, without unit.")]
    required_profit: Annotated[Money | None, Field(description="Cost of capital times increment, in currency.")]
    meets_hurdle: Annotated[
        bool | None,
        Field(description="Whether the expected profit is at least hurdle rate times increment; null without both."),
    ]
    within_limit: Annotated[
        bool | None, Field(description="Whether the measure of the enlarged book is at most `capital_limit`.")
    ]
    moved: Annotated[list[Moved], Field(description="How the contributions of the others move, in order.")]


@dataclass(frozen=True, slots=True)
class CandidateResult:
    """What one candidate changes, or why it was refused."""

    id: Annotated[str | None, Field(description="The candidate; null if it has no readable name.")]
    status: Annotated[Literal["ok", "refused"], Field(description="Whether it was judged.")]
    expected_profit: Annotated[
        Money | None,
        Field(
            description="Its expected profit as a gain: as given, or its part of that of what it scales, in currency."
        ),
    ]
    figures: Annotated[list[CandidateFigures], Field(description="One per measure, in the order asked.")]
    problem: Annotated[
        dict[str, Any] | None,
        Field(description="Why it was refused; null if it was judged."),
    ]

    @property
    def reason(self) -> str | None:
        """Why it was refused in a sentence that says where: what `problem` holds, without line breaks."""
        if self.problem is None:
            return None
        faults = [f"{one['pointer']}: {one['detail']}" for one in self.problem["errors"] if one.get("pointer")]
        return "; ".join(faults) or str(self.problem["detail"])


@dataclass(frozen=True, slots=True)
class BaseFigure:
    """One measure of the book as it is."""

    measure: Annotated[str, Field(description="Name of the measure.")]
    total: Annotated[Figure, Field(description="The measure of the total loss.")]


@dataclass(frozen=True, slots=True)
class IncrementsAnswer:
    """Answer of `POST /v1/increments`."""

    base: Annotated[list[BaseFigure], Field(description="The book as it is, one per measure.")]
    candidates: Annotated[list[CandidateResult], Field(description="One per candidate, in the order asked.")]
    refused: Annotated[Whole, Field(description="How many candidates were refused.")]
    labels: Annotated[Labels, Field(description="Labels of the request, unchanged.")]
    notes: Annotated[list[Note], Field(description="What the caller may want to know.")]
    provenance: Annotated[Provenance, Field(description="What an auditor needs to repeat the figures.")]

    def table(self) -> Table:
        """Return one row per candidate and measure; a refused candidate has one row with its reason."""
        rows: list[tuple[object, ...]] = []
        for one in self.candidates:
            if one.problem is not None:
                rows.append((one.id, one.status, *[None] * 14, one.reason, self.labels.currency, None))
            rows += [
                (
                    one.id,
                    one.status,
                    figures.measure,
                    *ends_of(figures.increment),
                    figures.total_with.value,
                    figures.contribution.value,
                    figures.contribution.standard_error,
                    figures.stand_alone.value,
                    figures.diversification_benefit,
                    figures.return_on_capital,
                    figures.required_profit,
                    None if figures.meets_hurdle is None else str(figures.meets_hurdle).lower(),
                    None if figures.within_limit is None else str(figures.within_limit).lower(),
                    None,
                    self.labels.currency,
                    one.expected_profit,
                )
                for figures in one.figures
            ]
        return Table(INCREMENTS_COLUMNS, rows)


INCREMENTS_COLUMNS = (
    *text_columns("id", "status", "measure"),
    *money_columns("increment", "standard_error", "lower", "upper", "total_with", "contribution", "contribution_error"),
    *money_columns("stand_alone"),
    *ratio_columns("diversification_benefit", "return_on_capital"),
    *money_columns("required_profit"),
    *text_columns("meets_hurdle", "within_limit", "problem", "currency"),
    *money_columns("expected_profit"),
)
