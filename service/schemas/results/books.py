"""Answers about books, and the single number of a spreadsheet cell."""

from dataclasses import dataclass
from typing import Annotated, Literal

from pydantic import Field

from service.representations.table import Table
from service.schemas.results.shared import (
    Labels,
    Money,
    Provenance,
    Whole,
    money_columns,
    ratio_columns,
    text_columns,
)


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


BOOKS_COLUMNS = (
    *text_columns("name", "state", "kind"),
    *ratio_columns("sub_portfolios", "scenarios"),
    *text_columns("currency", "valuation_date", "horizon", "reference", "digest", "reason"),
)
BOOK_COLUMNS = (*text_columns("id", "attribute", "group"), *money_columns("expected_profit"))
