"""Query parameters as a request: the same words as in JSON, for bodies that are a table and for URLs."""

import re
from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass
from math import inf
from typing import Any

from service.errors import Fault, InvalidValue
from service.suggestions import hint

NUMBER = re.compile(r"-?(0|[1-9]\d*)(\.\d+)?([eE][-+]?\d+)?")

EXAMPLES: Mapping[str, str] = {
    "level": "0.995",
    "lower_level": "0.95",
    "upper_level": "0.99",
    "multiple": "2",
    "shift": "0.5",
    "exponent": "0.8",
    "aversion": "0.001",
    "return_period": "200",
    "scenarios_per_period": "1",
    "interval_coverage": "0.95",
    "capital": "250000",
    "hurdle_rate": "0.08",
    "cost_of_capital": "0.06",
    "capital_limit": "250000",
    "scale": "1.1",
}
"""A number for each parameter that is one."""

LONGEST_NAME = 170  # characters of a sub-portfolio in the name of a candidate made of it

Pairs = Sequence[tuple[str, str]]


def _number(name: str, value: str) -> float | int:
    if not NUMBER.fullmatch(value):
        raise _fault(name, f"{name} is {value[:40]!r}, not a number such as {EXAMPLES[name]}", "wrong_type")
    return int(value) if re.fullmatch(r"-?\d{1,15}", value) else float(value)


def _boolean(name: str, value: str) -> bool:
    if value not in ("true", "false"):
        raise _fault(name, f"{name} is {value[:40]!r}, not true or false", "wrong_type")
    return value == "true"


def _text(name: str, value: str) -> str:  # noqa: ARG001  # the converters are alike
    return value


def _fault(name: str, detail: str, code: str) -> InvalidValue:
    return InvalidValue(detail, faults=[Fault(detail=detail, code=code, parameter=name)])


@dataclass(frozen=True, slots=True)
class Parameter:
    """Where a query parameter stands in the request document.

    Attributes
    ----------
    field : str
        Name of the member.
    convert : callable
        From its text.
    repeats : bool
        Whether it may stand several times and makes a list.
    """

    field: str
    convert: Callable[[str, str], Any] = _text
    repeats: bool = False


MEASURE_NUMBERS = (
    "lower_level",
    "upper_level",
    "multiple",
    "shift",
    "exponent",
    "aversion",
    "return_period",
    "scenarios_per_period",
)
REQUEST: Mapping[str, Parameter] = {
    "group_by": Parameter("group_by", repeats=True),
    "interval_coverage": Parameter("interval_coverage", _number),
    "include_stand_alone": Parameter("include_stand_alone", _boolean),
    "tail_detail": Parameter("tail_detail", _boolean),
    "reference": Parameter("reference"),
}
ALLOCATIONS: Mapping[str, Parameter] = {
    "rule": Parameter("rules", repeats=True),
    "capital": Parameter("capital", _number),
    "smoothing": Parameter("smoothing"),
}
LOSSES: Mapping[str, Parameter] = {
    "sign": Parameter("sign"),
    "scenarios_are": Parameter("scenarios_are"),
    "scenario_id_column": Parameter("scenario_id_column"),
    "probability_column": Parameter("probability_column"),
    "ignore_columns": Parameter("ignore_columns", repeats=True),
    "currency": Parameter("currency"),
    "valuation_date": Parameter("valuation_date"),
    "horizon": Parameter("horizon"),
}
INCREMENTS: Mapping[str, Parameter] = {
    "interval_coverage": REQUEST["interval_coverage"],
    "reference": REQUEST["reference"],
    "hurdle_rate": Parameter("hurdle_rate", _number),
    "cost_of_capital": Parameter("cost_of_capital", _number),
    "capital_limit": Parameter("capital_limit", _number),
}
COPY: Mapping[str, Parameter] = {"sub_portfolio": Parameter("sub_portfolio"), "scale": Parameter("scale", _number)}
VALUE: Mapping[str, Parameter] = {
    "rule": ALLOCATIONS["rule"],
    "smoothing": ALLOCATIONS["smoothing"],
    "interval_coverage": REQUEST["interval_coverage"],
}
BOOKS: Mapping[str, Mapping[str, Parameter]] = {
    "measures": REQUEST,
    "allocations": {**REQUEST, **ALLOCATIONS},
    "report": {**REQUEST, **ALLOCATIONS},
    "increments": INCREMENTS,
    "value": VALUE,
}
"""The parameters of each question that GET asks a book, besides those of measures."""
CALCULATIONS = ("measures", "allocations")
MEASURE = ("measure", "level", "above", *MEASURE_NUMBERS)
WITHOUT_MEANING = (
    "refresh",
    "bom",
    "chart",
)  # a spreadsheet forces a new pull with the first; the others are of the form


def allowed(calculation: str) -> tuple[str, ...]:
    """Return the names of the parameters of a calculation on a table."""
    special = ALLOCATIONS if calculation == "allocations" else {}
    return (*MEASURE, *REQUEST, *special, *LOSSES, *WITHOUT_MEANING)


def table_request(pairs: Pairs, calculation: str) -> dict[str, Any]:
    """Return the request document of a table body whose options are query parameters.

    Raises
    ------
    InvalidValue
        For an unknown or repeated parameter, or one that is no number.
    """
    refuse_unknown(pairs, allowed(calculation))
    document = _members(pairs, REQUEST)
    if calculation == "allocations":
        document |= _members(pairs, ALLOCATIONS)
    document["losses"] = {"kind": "scenarios", "part": "table", **_members(pairs, LOSSES)}
    document["measures"] = measures(pairs)
    return document


def book_request(pairs: Pairs, asked: str, name: str, defaults: Mapping[str, Any]) -> dict[str, Any]:
    """Return the request document that GET makes of query parameters and of what a book asks for by itself.

    Parameters
    ----------
    pairs : sequence of (str, str)
        Only those of the request.
    asked : str
        A key of `BOOKS`.
    name : str
        Of the book.
    defaults : mapping
        Members of its allocation request.

    Raises
    ------
    InvalidValue
        For a repeated parameter, or one that is no number.
    """
    fields = {"measures", "reference", *(parameter.field for parameter in BOOKS[asked].values())}
    if "capital" in fields:
        fields.add("capital_measure")
    document = {key: value for key, value in defaults.items() if key in fields}
    given = _members(pairs, BOOKS[asked])
    if given.get("group_by") == [""]:
        given["group_by"] = []  # no groups, though the book has some
    if "capital" in given:
        document.pop("capital_measure", None)
    document |= given
    if any(key in MEASURE for key, _ in pairs):
        document["measures"] = measures(pairs)
    return {**document, "losses": {"kind": "book", "name": name}}


def scaled_copy(pairs: Pairs) -> dict[str, Any]:
    """Return the candidate that `sub_portfolio` and `scale` make.

    Raises
    ------
    InvalidValue
    """
    copy = _members(pairs, COPY)
    for name, example in (("sub_portfolio", "sub_portfolio=hull"), ("scale", "scale=1.1")):
        if name not in copy:
            raise _fault(name, f"{name} is needed, e.g. {example}", "missing")
    if not 0 <= copy["scale"] < inf:
        raise _fault("scale", f"scale is {copy['scale']:.15g}; it is at least 0, and 1 is the size now", "out_of_range")
    return {"id": f"{copy['sub_portfolio'][:LONGEST_NAME]} x {copy['scale']:.15g}", "scaled": copy}


def measures(pairs: Pairs) -> list[dict[str, Any]]:
    """Return the measures that `measure`, `level` and the other parameters of measures name.

    `measure` and `level` may repeat: their product, measure by measure. The others stand once and apply
    to every measure.
    """
    kinds = [value for name, value in pairs if name == "measure"]
    if not kinds:
        detail = "name a measure, e.g. measure=expected_shortfall&level=0.99"
        raise _fault("measure", detail, "missing")
    levels = [{"level": _number(name, value)} for name, value in pairs if name == "level"] or [{}]
    others = _members(pairs, {name: Parameter(name, _number) for name in MEASURE_NUMBERS})
    others |= _members(pairs, {"above": Parameter("above")})
    return [{"kind": kind, **level, **others} for kind in kinds for level in levels]


def refuse_unknown(pairs: Pairs, names: Sequence[str]) -> None:
    """Refuse parameters that are not among `names`."""
    unknown = next((name for name, _ in pairs if name not in names), None)
    if unknown is not None:
        name = unknown[:80]
        raise _fault(name, f"unknown query parameter {name!r}{hint(name, names)}", "unknown_parameter")


def _members(pairs: Pairs, parameters: Mapping[str, Parameter]) -> dict[str, Any]:
    members: dict[str, Any] = {}
    for name, value in pairs:
        parameter = parameters.get(name)
        if parameter is None:
            continue
        if parameter.repeats:
            members.setdefault(parameter.field, []).append(parameter.convert(name, value))
        elif parameter.field in members:
            raise _fault(name, f"{name} stands here twice", "repeated")
        else:
            members[parameter.field] = parameter.convert(name, value)
    return members


def parameter_at(pointer: str) -> str:
    """Return the query parameter that made what stands at `pointer` in the document."""
    steps = pointer.strip("/").split("/")
    if steps[0] == "measures":
        named = steps[2] if len(steps) > 2 else "measure"  # noqa: PLR2004  # /measures/0/level
        return "measure" if named in ("kind", "measure") else named
    if steps[0] == "losses":
        return steps[1] if len(steps) > 1 else "measure"
    if steps[0] == "candidates":
        return "scale" if steps[-1] == "scale" else "sub_portfolio"
    return "rule" if steps[0] == "rules" else steps[0]
