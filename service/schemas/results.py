"""One result model per calculation.

Plain dataclasses: they are written once, by us, so nothing is validated at run time; their types make the
OpenAPI document and a test holds every answer against it.
"""

from dataclasses import dataclass
from typing import Annotated, Any, Literal

from pydantic import Field

from service.representations.table import Column, Table

Money = Annotated[float, Field(json_schema_extra={"format": "double"})]
Whole = Annotated[int, Field(json_schema_extra={"format": "int64"})]

NoteCode = Literal[
    "population",
    "no_error",
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
]


@dataclass(frozen=True, slots=True)
class Note:
    """Something the caller may want to know about a figure."""

    code: Annotated[
        NoteCode,
        Field(
            description="`population`: the scenarios are the whole distribution, so no figure has an error. "
            "`no_error`: too few scenarios carry the figure for an error to be given. "
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
            "`driven_sum`: how exact the quantile function of a driven compound is."
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
class AllocationRow:
    """What one sub-portfolio contributes."""

    id: Annotated[str, Field(description="The sub-portfolio.")]
    contribution: Annotated[Figure, Field(description="Its part of the total.")]
    share: Annotated[Money | None, Field(description="Contribution over total, without unit.")]
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


@dataclass(frozen=True, slots=True)
class GroupRow:
    """What one group contributes: the sum of its members, or as one where the rule says so."""

    attribute: Annotated[str, Field(description="Attribute or crossing, e.g. `entity/line`.")]
    group: Annotated[str | None, Field(description="Its value, e.g. `north/hull`; null for those without it.")]
    contribution: Annotated[Figure, Field(description="Its part of the total.")]
    share: Annotated[Money | None, Field(description="Contribution over total, without unit.")]
    stand_alone: Annotated[Figure | None, Field(description="The measure of its summed loss; null if not asked for.")]
    diversification_benefit: Annotated[
        Money | None, Field(description="1 - contribution / stand-alone figure, without unit.")
    ]
    expected_loss: Annotated[Money, Field(description="Its mean loss, in currency.")]
    expected_profit: Annotated[
        Money | None, Field(description="Sum of its members', in currency; null if one has none.")
    ]
    return_on_capital: Annotated[
        Money | None,
        Field(
            description="Expected profit over allocated capital (over the contribution where no capital is given), "
            "without unit."
        ),
    ]
    allocated_capital: Annotated[Money | None, Field(description="Share times the capital to spread, in currency.")]


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
                    *_spread(figure),
                    figure.tail_scenarios,
                    self.labels.currency,
                )
                for scope, attribute, name, figure in parts
            ]
        return Table(MEASURES_COLUMNS, rows)


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
        """Return one row for the total, each sub-portfolio and each group of every allocation."""
        rows: list[tuple[object, ...]] = []
        for result in self.allocations:
            head = (result.measure, result.rule)
            total = (*_spread(result.total), None, None, None, self.expected_loss.value, None)
            tail = (result.return_on_capital, result.capital, self.labels.currency)
            rows.append((*head, "total", None, None, *total, *tail))
            rows += [(*head, "sub_portfolio", None, one.id, *self._row(one)) for one in result.sub_portfolios]
            rows += [(*head, "group", one.attribute, one.group, *self._row(one)) for one in result.groups]
        return Table(ALLOCATIONS_COLUMNS, rows)

    def _row(self, row: AllocationRow | GroupRow) -> tuple[object, ...]:
        return (
            *_spread(row.contribution),
            row.share,
            None if row.stand_alone is None else row.stand_alone.value,
            row.diversification_benefit,
            row.expected_loss,
            row.expected_profit,
            row.return_on_capital,
            row.allocated_capital,
            self.labels.currency,
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
    figures: Annotated[list[CandidateFigures], Field(description="One per measure, in the order asked.")]
    problem: Annotated[
        dict[str, Any] | None,
        Field(description="Why it was refused; null if it was judged."),
    ]


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
                rows.append((one.id, one.status, *[None] * 14, str(one.problem["detail"]), self.labels.currency))
            rows += [
                (
                    one.id,
                    one.status,
                    figures.measure,
                    *_spread(figures.increment),
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
                )
                for figures in one.figures
            ]
        return Table(INCREMENTS_COLUMNS, rows)


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
            rows.append((one.measure, "total", None, None, *totals, *_spread(one.change), currency))
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
                    *_spread(part.change),
                    currency,
                )
                for part in one.sub_portfolios
            ]
        return Table(COMPARISONS_COLUMNS, rows)


@dataclass(frozen=True, slots=True)
class BookSubPortfolio:
    """A sub-portfolio of a book."""

    id: Annotated[str, Field(description="Its name.")]
    attributes: Annotated[dict[str, str], Field(description="What it belongs to, by the name of the attribute.")]
    expected_profit: Annotated[Money | None, Field(description="Expected profit as a gain, in currency.")]


BookState = Literal["ready", "damaged"]


@dataclass(frozen=True, slots=True)
class BookSummary:
    """A book in the list of books."""

    name: Annotated[str, Field(description="Its name.")]
    state: Annotated[BookState, Field(description="Whether it can be used.")]
    reason: Annotated[str | None, Field(description="Why it is damaged; null for one that can be used.")]
    kind: Annotated[str | None, Field(description="`scenarios`, `factors` or `history`; null if damaged.")]
    sub_portfolios: Annotated[Whole | None, Field(description="How many sub-portfolios it has; null if damaged.")]
    scenarios: Annotated[Whole | None, Field(description="How many scenarios it has or is simulated with.")]
    labels: Annotated[Labels | None, Field(description="Its labels; null if damaged.")]
    digest: Annotated[str | None, Field(description="Its `losses_digest`; null if damaged.")]


@dataclass(frozen=True, slots=True)
class BooksAnswer:
    """Answer of `GET /v1/books`."""

    books: Annotated[list[BookSummary], Field(description="All books, by name.")]

    def table(self) -> Table:
        """Return one row per book."""
        rows: list[tuple[object, ...]] = []
        for one in self.books:
            labels = one.labels or Labels(None, None, None, None)
            head = (one.name, one.state, one.kind, one.sub_portfolios, one.scenarios)
            known = (labels.currency, labels.valuation_date, labels.horizon, labels.reference)
            rows.append((*head, *known, one.digest, one.reason))
        return Table(BOOKS_COLUMNS, rows)


@dataclass(frozen=True, slots=True)
class BookDescription:
    """Answer of `GET /v1/books/{name}`: what a book is, never its data."""

    name: Annotated[str, Field(description="Its name.")]
    state: Annotated[BookState, Field(description="Whether it can be used.")]
    reason: Annotated[str | None, Field(description="Why it is damaged; null for one that can be used.")]
    kind: Annotated[str | None, Field(description="`scenarios`, `factors` or `history`; null if damaged.")]
    sub_portfolios: Annotated[list[BookSubPortfolio], Field(description="Its sub-portfolios, in order.")]
    scenarios: Annotated[Whole | None, Field(description="How many scenarios it has or is simulated with.")]
    labels: Annotated[Labels | None, Field(description="Its labels; null if damaged.")]
    digest: Annotated[str | None, Field(description="Its `losses_digest`; null if damaged.")]
    measures: Annotated[list[str], Field(description="Measures that it is asked for where a request names none.")]
    rules: Annotated[list[str], Field(description="Allocation rules, likewise.")]
    group_by: Annotated[list[str], Field(description="Attributes to group by, likewise.")]

    def table(self) -> Table:
        """Return one row per sub-portfolio and attribute; one without attributes has one row."""
        rows: list[tuple[object, ...]] = []
        for one in self.sub_portfolios:
            pairs: list[tuple[str | None, str | None]] = [*one.attributes.items()]
            rows += [(one.id, *pair, one.expected_profit) for pair in pairs or [(None, None)]]
        return Table(BOOK_COLUMNS, rows)

    def summary(self) -> BookSummary:
        """Return its entry in the list of books."""
        count = len(self.sub_portfolios) if self.state == "ready" else None
        head = (self.name, self.state, self.reason, self.kind, count)
        return BookSummary(*head, self.scenarios, self.labels, self.digest)


@dataclass(frozen=True, slots=True)
class ValueAnswer:
    """Answer of `GET /v1/books/{name}/value`: one number and what it is."""

    value: Annotated[Money, Field(description="The number, in currency; a share is without unit.")]
    of: Annotated[str, Field(description="What it is of.")]
    field: Annotated[str, Field(description="Which number of the figure it is.")]
    measure: Annotated[str | None, Field(description="Name of the measure; null for an expected loss.")]
    rule: Annotated[str | None, Field(description="Allocation rule; null for what is not allocated.")]
    sub_portfolio: Annotated[str | None, Field(description="The sub-portfolio, if it is of one.")]
    attribute: Annotated[str | None, Field(description="The attribute of the group, if it is of one.")]
    group: Annotated[str | None, Field(description="The group, if it is of one; null for those without the attribute.")]
    labels: Annotated[Labels, Field(description="Labels of the book.")]
    provenance: Annotated[Provenance, Field(description="What an auditor needs to repeat the number.")]


def _spread(figure: Figure) -> tuple[float, float | None, float | None, float | None]:
    """Return value, standard error and both ends of the interval."""
    ends = (None, None) if figure.interval is None else (figure.interval.lower, figure.interval.upper)
    return (figure.value, figure.standard_error, *ends)


def _text(*names: str) -> tuple[Column, ...]:
    return tuple(Column(name=name, unit=None, kind="text") for name in names)


def _money(*names: str) -> tuple[Column, ...]:
    return tuple(Column(name=name, unit="currency", kind="number") for name in names)


def _ratio(*names: str) -> tuple[Column, ...]:
    return tuple(Column(name=name, unit=None, kind="number") for name in names)


BOOKS_COLUMNS = (
    *_text("name", "state", "kind"),
    *_ratio("sub_portfolios", "scenarios"),
    *_text("currency", "valuation_date", "horizon", "reference", "digest", "reason"),
)
BOOK_COLUMNS = (*_text("id", "attribute", "group"), *_money("expected_profit"))
MEASURES_COLUMNS = (
    *_text("measure", "scope", "attribute", "id"),
    *_money("value", "standard_error", "lower", "upper"),
    *_ratio("tail_scenarios"),
    *_text("currency"),
)
ALLOCATIONS_COLUMNS = (
    *_text("measure", "rule", "scope", "attribute", "id"),
    *_money("contribution", "standard_error", "lower", "upper"),
    *_ratio("share"),
    *_money("stand_alone"),
    *_ratio("diversification_benefit"),
    *_money("expected_loss", "expected_profit"),
    *_ratio("return_on_capital"),
    *_money("allocated_capital"),
    *_text("currency"),
)
INCREMENTS_COLUMNS = (
    *_text("id", "status", "measure"),
    *_money("increment", "standard_error", "lower", "upper", "total_with", "contribution", "contribution_error"),
    *_money("stand_alone"),
    *_ratio("diversification_benefit", "return_on_capital"),
    *_money("required_profit"),
    *_text("meets_hurdle", "within_limit", "problem", "currency"),
)
COMPARISONS_COLUMNS = (
    *_text("measure", "scope", "id", "state"),
    *_money("before", "after", "change", "standard_error", "lower", "upper"),
    *_text("currency"),
)
