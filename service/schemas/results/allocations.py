"""Answer of `POST /v1/allocations`."""

from dataclasses import dataclass
from typing import Annotated

from pydantic import Field

from service.representations.sums import share_of_all, sum_alone, sum_profit
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


@dataclass(frozen=True)
class _Part:
    """What one part of the book contributes."""

    contribution: Annotated[Figure, Field(description="Its part of the total.")]
    share: Annotated[
        Money | None,
        Field(description="Contribution over the sum of all (the total, if the rule adds up), without unit."),
    ]
    stand_alone: Annotated[Figure | None, Field(description="The measure of its loss alone; null if not asked for.")]
    diversification_benefit: Annotated[
        Money | None, Field(description="1 - contribution / stand-alone figure, without unit.")
    ]
    expected_loss: Annotated[Money, Field(description="Its mean loss, in currency.")]
    expected_profit: Annotated[Money | None, Field(description="As given in the request, in currency.")]
    return_on_capital: Annotated[
        Money | None,
        Field(
            description="Expected profit over allocated capital (over the contribution where no capital is given), "
            "without unit."
        ),
    ]
    allocated_capital: Annotated[Money | None, Field(description="Share times the capital to spread, in currency.")]


@dataclass(frozen=True)
class _SubPortfolio:
    """Which sub-portfolio it is."""

    id: Annotated[str, Field(description="The sub-portfolio.")]


@dataclass(frozen=True)
class _Group:
    """Which group it is."""

    attribute: Annotated[str, Field(description="Attribute or crossing, e.g. `entity/line`.")]
    group: Annotated[str | None, Field(description="Its value, e.g. `north/hull`; null for those without it.")]


@dataclass(frozen=True)
class AllocationRow(_Part, _SubPortfolio):
    """What one sub-portfolio contributes."""


@dataclass(frozen=True)
class GroupRow(_Part, _Group):
    """What one group contributes: the sum of its members, or as one where the rule says so."""


@dataclass(frozen=True, slots=True)
class SmoothingWindow:
    """The scenarios over which contributions to a quantile were smoothed."""

    lower: Annotated[Money, Field(description="Smallest total in the window, in currency.")]
    upper: Annotated[Money, Field(description="Largest total in the window, in currency.")]
    scenarios: Annotated[Whole, Field(description="Scenarios in the window.")]


@dataclass(frozen=True, slots=True)
class AllocationResult:
    """One measure, split among the sub-portfolios by one rule."""

    measure: Annotated[str, Field(description="Name of the measure.")]
    rule: Annotated[str, Field(description="Allocation rule.")]
    total: Annotated[Figure, Field(description="The measure of the total loss.")]
    sub_portfolios: Annotated[list[AllocationRow], Field(description="One row per sub-portfolio, in order.")]
    groups: Annotated[list[GroupRow], Field(description="One row per group.")]
    capital: Annotated[Money | None, Field(description="The capital spread, in currency; null if none is given.")]
    return_on_capital: Annotated[
        Money | None,
        Field(description="Sum of expected profits over the capital (over the total where no capital is given)."),
    ]
    window: Annotated[
        SmoothingWindow | None,
        Field(description="For smoothed contributions to a quantile: the scenarios used."),
    ]
    residual: Annotated[
        Money | None,
        Field(description="Total less the sum of contributions, in currency, for a rule that does not add up."),
    ]


@dataclass(frozen=True, slots=True)
class AllocationsAnswer:
    """Answer of `POST /v1/allocations`."""

    allocations: Annotated[
        list[AllocationResult], Field(description="Measures in the order asked and, within each, rules.")
    ]
    expected_loss: Annotated[Figure, Field(description="Mean of the total loss.")]
    scenarios: Annotated[Whole, Field(description="Number of scenarios.")]
    tail: Annotated[Tail | None, Field(description="The worst scenarios; null if not asked for.")]
    labels: Annotated[Labels, Field(description="Labels of the request, unchanged.")]
    notes: Annotated[list[Note], Field(description="What the caller may want to know.")]
    provenance: Annotated[Provenance, Field(description="What an auditor needs to repeat the figures.")]

    def table(self) -> Table:
        """Return one row for the total, each sub-portfolio and each group of every allocation.

        In the row of a total the share, the stand-alone figure and the expected profit are sums over the
        sub-portfolios.
        """
        rows: list[tuple[object, ...]] = []
        for result in self.allocations:
            head = (result.measure, result.rule)
            rows.append((*head, "total", None, None, *self._total(result)))
            rows += [(*head, "sub_portfolio", None, one.id, *self._row(one)) for one in result.sub_portfolios]
            rows += [(*head, "group", one.attribute, one.group, *self._row(one)) for one in result.groups]
        return Table(ALLOCATIONS_COLUMNS, rows)

    def _total(self, result: AllocationResult) -> tuple[object, ...]:
        return (
            *ends_of(result.total),
            share_of_all(result),
            sum_alone(result.sub_portfolios),
            None,
            self.expected_loss.value,
            sum_profit(result.sub_portfolios),
            result.return_on_capital,
            result.capital,
            self.labels.currency,
        )

    def _row(self, row: AllocationRow | GroupRow) -> tuple[object, ...]:
        return (
            *ends_of(row.contribution),
            row.share,
            None if row.stand_alone is None else row.stand_alone.value,
            row.diversification_benefit,
            row.expected_loss,
            row.expected_profit,
            row.return_on_capital,
            row.allocated_capital,
            self.labels.currency,
        )


ALLOCATIONS_COLUMNS = (
    *text_columns("measure", "rule", "scope", "attribute", "id"),
    *money_columns("contribution", "standard_error", "lower", "upper"),
    *ratio_columns("share"),
    *money_columns("stand_alone"),
    *ratio_columns("diversification_benefit"),
    *money_columns("expected_loss", "expected_profit"),
    *ratio_columns("return_on_capital"),
    *money_columns("allocated_capital"),
    *text_columns("currency"),
)
