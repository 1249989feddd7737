"""From what the models found wrong to an error in a person's words that points into the caller's document."""

from collections.abc import Callable, Iterator, Mapping, Sequence
from functools import cache
from typing import Any

from pydantic import TypeAdapter, ValidationError

from service.errors import CallerError, Fault, InvalidValue
from service.suggestions import suggestion

MOST_FAULTS = 50  # a table of wrong cells is one mistake, not a thousand
LONGEST_ECHO = 40  # characters of an offending value that come back
TAGS = ("kind", "family")
MISSING = "Field required"  # as the models say it; a check of ours that something is missing has its own words

Document = Any
Step = str | int

CODES = {
    "missing": "a required field is not there",
    "unknown_field": "there is no field of this name",
    "unknown_parameter": "there is no query parameter of this name",
    "wrong_type": "a number is needed, not a text, or the like",
    "not_finite": "NaN and infinities are refused",
    "out_of_range": "a number is too small or too large",
    "not_allowed": "not one of the words allowed here, or not allowed together with another field",
    "wrong_count": "a list is too short or too long",
    "wrong_text": "a text does not look as it must",
}
"""The codes that this file gives to faults; checks with a rule of their own have codes of their own."""


def refusal(error: ValidationError, document: Document, model: Any = None) -> InvalidValue:
    """Return what `error` found in `document` as an error of the domain.

    Parameters
    ----------
    error : ValidationError
    document : dict
        The caller's document as decoded; the pointers are found by walking it.
    model : type, optional
        What the document was validated as; names of fields to suggest come from it.
    """
    found = error.errors(include_url=False)
    faults = [fault for each in found[:MOST_FAULTS] for fault in _faults(each, document, model)]
    if len(found) == 1:
        return InvalidValue(faults[0].detail, faults=faults)
    more = f"; the first {MOST_FAULTS} are listed" if len(found) > MOST_FAULTS else ""
    return InvalidValue(f"{len(found)} values are not allowed{more}.", faults=faults)


def pointer(steps: Sequence[Step]) -> str:
    """Return the RFC 6901 pointer of `steps`."""
    return "".join("/" + str(step).replace("~", "~0").replace("/", "~1") for step in steps)


def echo(value: object) -> str:
    """Return a scalar as the caller wrote it, cut to a bearable length; of anything else only what it is."""
    if value is None or isinstance(value, bool):
        return {None: "null", True: "true", False: "false"}[value]
    if isinstance(value, str):
        return f"'{value[:LONGEST_ECHO]}…'" if len(value) > LONGEST_ECHO else f"'{value}'"
    if isinstance(value, int | float):
        return repr(value) if isinstance(value, float) or abs(value) < 10**LONGEST_ECHO else "this number"
    return "an object" if isinstance(value, Mapping) else "a list" if isinstance(value, list) else "this"


def _faults(found: Mapping[str, Any], document: Document, model: Any) -> Iterator[Fault]:
    """Yield the fault (or those that a check of ours raised) of one finding."""
    steps = locate(found["loc"], document)
    context = found.get("ctx", {})
    raised = context.get("error")
    if isinstance(raised, CallerError):
        for fault in raised.faults or (Fault(detail=raised.detail, code=raised.code),):
            yield fault.beneath(pointer(steps))
        return
    kind = found["type"]
    if kind in WORDS and not (kind == "missing" and found["msg"] != MISSING):
        code, words = WORDS[kind]
        if kind in ("union_tag_invalid", "union_tag_not_found"):
            steps = [*steps, context["discriminator"].strip("'")]
        detail = words(found["input"], {**context, "field": echo(steps[-1] if steps else "")})
    else:
        code, detail = _unlisted(found, str(steps[-1]) if steps else "")
    if code == "unknown_field":
        detail += suggestion(str(steps[-1]), _fields(model, steps[:-1], document))
    yield Fault(detail=detail, code=code, pointer=pointer(steps))


def _unlisted(found: Mapping[str, Any], field: str) -> tuple[str, str]:
    """Return code and words of a finding about `field` without a row in `WORDS`."""
    kind, context = found["type"], found.get("ctx", {})
    if kind == "value_error":
        return "not_allowed", str(context["error"])
    if kind.endswith(("_type", "_parsing", "_from_float")):
        needed = next((words for start, words in NEEDED.items() if kind.startswith(start)), "another type")
        if kind.startswith("float") and field.endswith("level"):
            needed = LEVEL
        return "wrong_type", f"{needed} is needed here, not {echo(found['input'])}"
    if found["msg"].startswith("Input "):
        return "not_allowed", f"the value {found['msg'].removeprefix('Input ')}"
    return kind, found["msg"]


def locate(location: Sequence[Step], document: Document) -> list[Step]:
    """Return the steps of `location` that stand in the document.

    A location also names the union members that were gone through, and those are not in the document:
    at an object whose tag (`kind` or `family`) is the step itself, the step is the tag. The last step is
    kept beneath an object: it is the name of a missing field.
    """
    steps: list[Step] = []
    node, tagged = document, False
    for number, step in enumerate(location):
        if isinstance(node, dict):
            if not tagged and steps and step in [node.get(tag) for tag in TAGS]:
                tagged = True
                continue
            if step in node:
                node = node[step]
            elif number == len(location) - 1:
                node = None
            else:
                continue
        elif isinstance(node, list) and isinstance(step, int) and step < len(node):
            node = node[step]
        else:
            continue
        steps.append(step)
        tagged = False
    return steps


def _fields(model: Any, steps: Sequence[Step], document: Document) -> list[str]:
    """Return the names of the fields that `model` has where the steps lead in the document."""
    if model is None:
        return []
    whole = _schema(model)
    schema, node = whole, document
    for step in [*steps, None]:
        schema = _member(schema, whole, node)
        if step is None:
            break
        schema = schema.get("properties", {}).get(step) or schema.get("items") or {}
        node = node[step]
    return list(schema.get("properties", {}))


@cache
def _schema(model: Any) -> dict[str, Any]:
    return TypeAdapter(model).json_schema()


def _member(schema: dict[str, Any], whole: dict[str, Any], node: Document) -> dict[str, Any]:
    """Return the schema of the object `node` behind references, null alternatives and unions."""
    while "properties" not in schema:
        mapping = schema.get("discriminator", {}).get("mapping", {})
        tag = next((node[tag] for tag in TAGS if isinstance(node, dict) and node.get(tag) in mapping), None)
        options = [one for one in schema.get("anyOf", []) if one.get("type") != "null"]
        reference = mapping.get(tag) or schema.get("$ref")
        if reference:
            schema = whole["$defs"][reference.rpartition("/")[2]]
        elif options:
            schema = options[0]
        else:
            break
    return schema


Words = Callable[[Any, Mapping[str, Any]], str]


def _range(words: str, bound: str) -> tuple[str, Words]:
    return "out_of_range", lambda value, context: f"{echo(value)} is not {words} {context[bound]:g}"


def _count(words: str, bound: str) -> tuple[str, Words]:
    def say(_value: object, context: Mapping[str, Any]) -> str:
        return f"{words} {context[bound]} {'is' if context[bound] == 1 else 'are'} needed here"

    return "wrong_count", say


def _choice(expected: str) -> Words:
    def say(value: object, context: Mapping[str, Any]) -> str:
        offered = context[expected].replace(" or ", ", ")
        known = [word.strip().strip("'") for word in offered.split(",")]
        wrong = context.get("tag", value)
        return f"{echo(wrong)} is not one of {', '.join(known)}{suggestion(str(wrong), known)}"

    return say


NEEDED = {
    "float": "a number",
    "int": "a whole number",
    "string": "a text",
    "bool": "true or false",
    "list": "a list",
    "date": "a date as YYYY-MM-DD",
    "dict": "an object",
    "model": "an object",
    "dataclass": "an object",
    "none": "null",
}
"""How the name of a type finding starts, and what is needed there."""
LEVEL = "a number between 0 and 1, such as 0.995,"

_REQUIRED: tuple[str, Words] = ("missing", lambda _value, context: f"{context['field']} is required")
_UNKNOWN: tuple[str, Words] = ("unknown_field", lambda _value, context: f"there is no field {context['field']}")

WORDS: dict[str, tuple[str, Words]] = {
    "missing": _REQUIRED,
    "union_tag_not_found": (
        "missing",
        lambda _value, context: f"{context['discriminator']} says what this is",
    ),
    "union_tag_invalid": ("not_allowed", _choice("expected_tags")),
    "literal_error": ("not_allowed", _choice("expected")),
    "enum": ("not_allowed", _choice("expected")),
    "extra_forbidden": _UNKNOWN,
    "unexpected_keyword_argument": _UNKNOWN,
    "finite_number": ("not_finite", lambda _value, _context: "a finite number is needed here"),
    "greater_than": _range("greater than", "gt"),
    "greater_than_equal": _range("at least", "ge"),
    "less_than": _range("less than", "lt"),
    "less_than_equal": _range("at most", "le"),
    "too_short": _count("at least", "min_length"),
    "too_long": _count("at most", "max_length"),
    "string_too_short": (
        "wrong_text",
        lambda _value, context: f"at least {context['min_length']} characters are needed",
    ),
    "string_too_long": (
        "wrong_text",
        lambda _value, context: f"at most {context['max_length']} characters are allowed",
    ),
    "string_pattern_mismatch": (
        "wrong_text",
        lambda value, _context: f"{echo(value)} is not written as it must be",
    ),
    "missing_keyword_only_argument": _REQUIRED,
    "missing_argument": _REQUIRED,
}
"""Type of a finding to our code and words; these know the input, and the context with the name of the `field`."""
