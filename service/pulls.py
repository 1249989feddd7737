"""What GET asks of a book: from query parameters to a request, its digest, and the answer."""

from collections.abc import Mapping, Sequence
from dataclasses import asdict, dataclass
from typing import Any

from service import calculate, intake, query, values
from service.books import Book
from service.calculate import Answer, Describe, Drawing
from service.canonical import canonical_request
from service.errors import Fault, InvalidValue, pointing
from service.executors import Work
from service.intake import Intake
from service.provenance import document_digest
from service.query import Pairs
from service.risk.loss_table import SubPortfolio, groups_of
from service.risk.measures import RiskMeasure
from service.schemas.requests import ComparisonsRequest, MeasuresRequest
from service.settings import Settings

CALCULATION: Mapping[str, str] = {"value": "allocations", "report": "allocations"}
"""What is computed for questions that are no calculation by name."""
PARAMETERS: Mapping[str, tuple[str, ...]] = {
    **{kind: (*query.MEASURE, *names) for kind, names in query.BOOKS.items()},
    "increments": (*query.COPY, *query.MEASURE, *query.INCREMENTS),
    "value": (*values.PARAMETERS, *query.MEASURE, *query.VALUE),
    "books": (),
    "book": (),
}
"""The parameters of each question, besides those of the form."""
FEW_GROUPS = 64  # groups that every cell of a sheet asks for, so that all cells ask the same
BYTES_PER_ROW = 1500  # of an answer in memory, about


@dataclass(frozen=True, slots=True, eq=False)
class Asked:
    """A request that GET made.

    Attributes
    ----------
    intake : Intake
        Resolved.
    digest : str
        Of the canonical request.
    number : int
        For a single number: the allocation that it is of.
    """

    intake: Intake
    digest: str
    number: int = 0

    def answer(self, work: Work, settings: Settings, describe: Describe, *, drawn: bool) -> Answer | Drawing:
        """Compute it; with `drawn`, what its pictures show too.

        Raises
        ------
        TailraceError
            Naming parameters.
        """
        with intake.in_parameters():
            if drawn:
                return calculate.drawing(self.intake, work, settings)
            return calculate.answer(self.intake, work, settings, describe)


def size_of(answered: Answer | Drawing) -> int:
    """Return the bytes that an answer takes, about."""
    return BYTES_PER_ROW * (2 + len(answer_in(answered).table().rows))


def answer_in(answered: Answer | Drawing) -> Answer:
    """Return the answer itself."""
    return answered.answer if isinstance(answered, Drawing) else answered


def ask(kind: str, pairs: Pairs, book: Book, settings: Settings) -> Asked:
    """Return what query parameters ask of a book, checked as far as can be without computing.

    Parameters
    ----------
    kind : str
        `measures`, `allocations`, `increments`, `value` or `report`.
    pairs : sequence of (str, str)
        Known parameters of the request alone.
    book : Book
    settings : Settings

    Raises
    ------
    InvalidValue
    NotFound
        The book has no such sub-portfolio or group.
    """
    document = query.book_request(pairs, kind, book.name, book.defaults)
    if kind == "value":
        return _value(pairs, document, book, min(FEW_GROUPS, settings.max_groups))
    if kind == "increments":
        document["candidates"] = [query.scaled_copy(pairs)]
        values.check_sub_portfolio(document["candidates"][0]["scaled"]["sub_portfolio"], book.source.sub_portfolios)
    if kind == "report":
        document.setdefault("tail_detail", True)
    return _asked(kind, document, book)


def _asked(kind: str, document: dict[str, Any], book: Book, number: int = 0) -> Asked:
    taken = book.asked(intake.read_query(CALCULATION.get(kind, kind), document))
    if isinstance(taken.request, MeasuresRequest):
        with intake.in_parameters(), pointing("/group_by"):
            groups_of(book.source.sub_portfolios, taken.request.group_by)
    return Asked(taken, document_digest(canonical_request(taken, book.source)), number)


def _value(pairs: Pairs, document: dict[str, Any], book: Book, few: int) -> Asked:
    """Return the request of one number: the same for as many cells of a sheet as can be; `few` groups come free."""
    asked = values.selection(pairs)
    values.check(asked, book.source.sub_portfolios)
    usual = book.request
    measure, rule = 0, usual.rules[0]
    if any(name in query.MEASURE for name, _ in pairs):
        measure = _measure(document, book)
    elif asked.of != "expected_loss" and len(usual.measures) > 1:
        raise values.one_measure([one.name for one in usual.measures])
    if any(name == "rule" for name, _ in pairs):
        rule = document["rules"][0]
    elif asked.of in ("contribution", "share") and len(usual.rules) > 1:
        detail = f"one number is of one rule: name it, rule={' or rule='.join(usual.rules)}"
        raise InvalidValue.of(Fault(detail=detail, code="missing", parameter="rule"))
    if len(document.get("rules", ())) > 1 and any(name == "rule" for name, _ in pairs):
        raise InvalidValue.of(Fault(detail="one number is of one rule", code="repeated", parameter="rule"))
    document["rules"] = [rule]
    document["group_by"] = _attributes(asked.attribute, book, few)
    return _asked("value", document, book, measure)


def _measure(document: dict[str, Any], book: Book) -> int:
    """Let a document ask for the measures of the book if the one named is among them; return its place."""
    taken = intake.read_query("allocations", document)
    if isinstance(taken.request, ComparisonsRequest):
        raise TypeError("a comparison is not asked of one book")
    named = taken.request.measures
    if len(named) != 1:
        raise values.one_measure([one.name for one in named])
    usual = [_unnamed(one) for one in book.request.measures]
    if _unnamed(named[0]) not in usual:
        return 0
    document["measures"] = book.defaults["measures"]
    return usual.index(_unnamed(named[0]))


def _unnamed(measure: RiskMeasure) -> dict[str, Any]:
    return asdict(measure) | {"label": None}


def _attributes(asked: str | None, book: Book, few: int) -> list[str]:
    """Return the attributes to group by: those of the book, all if they make few groups, and the one asked for."""
    parts: Sequence[SubPortfolio] = book.source.sub_portfolios
    names = list(dict.fromkeys(name for one in parts for name in one.attributes))
    all_ = list(dict.fromkeys([*book.request.group_by, *names]))
    free = all_ if len(groups_of(parts, all_)) <= few else book.request.group_by
    return list(dict.fromkeys([*free, *([asked] if asked else ())]))
