"""One number of an answer, for a cell of a spreadsheet."""

from collections.abc import Sequence
from dataclasses import dataclass
from typing import Literal, TypeVar, get_args

from service.errors import CallerError, Fault, InvalidValue, NotDefined, NotFound
from service.risk.loss_table import SEPARATOR, SubPortfolio
from service.schemas.results import (
    AllocationResult,
    AllocationRow,
    AllocationsAnswer,
    CandidateFigures,
    Figure,
    GroupRow,
    IncrementsAnswer,
    ValueAnswer,
)
from service.suggestions import hint

Word = TypeVar("Word", bound=str)

Of = Literal["total", "stand_alone", "contribution", "share", "expected_loss"]
Part = Literal["value", "standard_error", "lower", "upper"]
OfIncrement = Literal["increment", "total_with", "contribution", "stand_alone"]
OF: tuple[Of, ...] = get_args(Of)
FIELDS: tuple[Part, ...] = get_args(Part)
OF_INCREMENT: tuple[OfIncrement, ...] = get_args(OfIncrement)
PARAMETERS = ("of", "field", "sub_portfolio", "attribute", "group")
OF_PARTS = ("stand_alone", "contribution", "share")


@dataclass(frozen=True, slots=True, kw_only=True)
class Selection:
    """Which number is asked for."""

    of: Of
    field: Part
    sub_portfolio: str | None = None
    attribute: str | None = None
    group: str | None = None
    """None for those without the attribute."""


def single(pairs: Sequence[tuple[str, str]], names: Sequence[str]) -> dict[str, str]:
    """Return the values of some query parameters.

    Raises
    ------
    InvalidValue
        For one that stands twice.
    """
    given: dict[str, str] = {}
    for name, value in pairs:
        if name in names:
            if name in given:
                raise _refused(name, f"{name} stands here twice", "repeated")
            given[name] = value
    return given


def selection(pairs: Sequence[tuple[str, str]]) -> Selection:
    """Return the selection that query parameters make.

    Raises
    ------
    InvalidValue
    """
    given = single(pairs, PARAMETERS)
    of = chosen(given, "of", OF)
    field = chosen(given, "field", FIELDS, "value")
    sub_portfolio, attribute, group = (given.get(name) for name in PARAMETERS[2:])
    if (attribute is None) != (group is None):
        missing, there = ("attribute", "group") if attribute is None else ("group", "attribute")
        raise _refused(missing, f"{there} goes with {missing}: attribute=line&group=hull", "missing")
    if sub_portfolio is not None and attribute is not None:
        raise _refused("sub_portfolio", "give sub_portfolio, or attribute and group, not both", "not_allowed")
    named = sub_portfolio is not None or attribute is not None
    if of == "total" and named:
        raise _refused("of", "the total is of the whole book: of=stand_alone is of a part", "not_allowed")
    if of in OF_PARTS and not named:
        raise _refused("sub_portfolio", f"of={of} is of a part: name sub_portfolio, or attribute and group", "missing")
    if field != "value" and (of == "share" or (of == "expected_loss" and named)):
        what = "a share" if of == "share" else "the expected loss of a part"
        raise _refused("field", f"{what} is given without an error: field is value", "not_allowed")
    return Selection(of=of, field=field, sub_portfolio=sub_portfolio, attribute=attribute, group=group or None)


def chosen(given: dict[str, str], name: str, words: Sequence[Word], default: Word | None = None) -> Word:
    """Return the word that a parameter gives."""
    value = given.get(name, default)
    found = next((word for word in words if word == value), None)
    if found is None:
        listed = ", ".join(words)
        code = "missing" if value is None else "not_allowed"
        said = "is needed" if value is None else f"is {value[:40]!r}"
        raise _refused(name, f"{name} {said}: one of {listed}", code)
    return found


def check(asked: Selection, parts: Sequence[SubPortfolio]) -> None:
    """Refuse a selection of what the book does not have.

    Raises
    ------
    NotFound
        No such sub-portfolio or group.
    InvalidValue
        No such attribute.
    """
    if asked.sub_portfolio is not None:
        check_sub_portfolio(asked.sub_portfolio, parts)
    if asked.attribute is not None:
        _check_group(asked.attribute, asked.group, parts)


def check_sub_portfolio(name: str, parts: Sequence[SubPortfolio]) -> None:
    """Refuse a sub-portfolio that the book does not have.

    Raises
    ------
    NotFound
    """
    ids = [one.id for one in parts]
    if name not in ids:
        detail = f"the book has no sub-portfolio {name[:80]!r}{hint(name[:80], ids)}"
        raise NotFound.of(Fault(detail=detail, code=NotFound.code, parameter="sub_portfolio"))


def _check_group(attribute: str, group: str | None, parts: Sequence[SubPortfolio]) -> None:
    names = attribute.split(SEPARATOR)
    attributes = dict.fromkeys(name for one in parts for name in one.attributes)
    unknown = next((name[:80] for name in names if name not in attributes), None)
    if unknown is not None:
        detail = f"no sub-portfolio has the attribute {unknown!r}{hint(unknown, attributes)}"
        raise _refused("attribute", detail, "unknown_attribute")
    values = [[one.attributes.get(name) for name in names] for one in parts]
    groups = dict.fromkeys(None if None in of else SEPARATOR.join(map(str, of)) for of in values)
    if group not in groups:
        said = (group or "")[:80]
        known = hint(said, [one for one in groups if one is not None])
        detail = f"no group of {attribute[:80]!r} is named {said!r}{known}"
        raise NotFound.of(Fault(detail=detail, code=NotFound.code, parameter="group"))


def value_of(asked: Selection, answer: AllocationsAnswer, number: int) -> ValueAnswer:
    """Return the number asked for, of the allocation `number`.

    Raises
    ------
    NotDefined
        The number is null; the sentence says why.
    """
    result = answer.allocations[number]
    found = _found(asked, answer, result)
    value = _part(found, asked.field) if isinstance(found, Figure) else found
    if value is None:
        raise NotDefined(_why(asked.field, answer))
    of_measure = asked.of != "expected_loss"
    return ValueAnswer(
        value=value + 0.0,
        of=asked.of,
        field=asked.field,
        measure=result.measure if of_measure else None,
        rule=result.rule if asked.of in ("contribution", "share") else None,
        sub_portfolio=asked.sub_portfolio,
        attribute=asked.attribute,
        group=asked.group,
        labels=answer.labels,
        provenance=answer.provenance,
    )


def increment_value(of: OfIncrement, field: Part, answer: IncrementsAnswer) -> float:
    """Return one number of the answer on one candidate and one measure.

    Raises
    ------
    InvalidValue
        There are several measures.
    NotDefined
    """
    candidate = answer.candidates[0]
    if candidate.problem is not None:
        raise NotDefined(str(candidate.problem["detail"]))
    if len(candidate.figures) != 1:
        raise one_measure([figures.measure for figures in candidate.figures])
    figures: CandidateFigures = candidate.figures[0]
    value = _part(getattr(figures, of), field)
    if value is None:
        raise NotDefined(_why(field, answer))
    return value + 0.0


def one_measure(names: Sequence[str]) -> CallerError:
    """Return the error of a single number that is asked of several measures."""
    detail = (
        f"one number is of one measure, such as measure=expected_shortfall&level=0.99; these are {', '.join(names)}"
    )
    return _refused("measure", detail, "missing")


def _found(asked: Selection, answer: AllocationsAnswer, result: AllocationResult) -> Figure | float | None:
    row: AllocationRow | GroupRow
    if asked.sub_portfolio is not None:
        row = next(one for one in result.sub_portfolios if one.id == asked.sub_portfolio)
    elif asked.attribute is not None:
        groups = (one for one in result.groups if one.attribute == asked.attribute)
        row = next(one for one in groups if one.group == asked.group)
    else:
        return answer.expected_loss if asked.of == "expected_loss" else result.total
    found: Figure | float | None = getattr(row, asked.of)
    return found


def _part(figure: Figure, field: Part) -> float | None:
    if field in ("lower", "upper"):
        return None if figure.interval is None else float(getattr(figure.interval, field))
    value: float | None = getattr(figure, field)
    return value


def _why(field: str, answer: AllocationsAnswer | IncrementsAnswer) -> str:
    """Return why a number is null, in the words of the notes."""
    codes = ("population", "no_error") if field != "value" else ("ratio_not_defined",)
    words = [note.detail for note in answer.notes if note.code in codes]
    return f"there is no {field} here: {words[0]}" if words else f"there is no {field} here"


def _refused(parameter: str, detail: str, code: str) -> CallerError:
    return InvalidValue.of(Fault(detail=detail, code=code, parameter=parameter))
