"""The operations that GET books: their parameters and the forms of their answers."""

from collections.abc import Iterator, Mapping
from typing import Any

from service import pulls, query, values
from service.openapi.calculations import CHART, WORDS_OF_FORMS
from service.openapi.parts import BOM, COMPONENTS, REFRESH, REQUEST_ID, Json, parameter, reference, refusals
from service.representations.formats import FORMS_OF_BOOKS, Form
from service.routes.books import PATHS
from service.schemas.requests import AllocationsRequest, IncrementsRequest, ScaledCopy
from service.schemas.results import (
    AllocationsAnswer,
    BookDescription,
    BooksAnswer,
    IncrementsAnswer,
    MeasuresAnswer,
    ValueAnswer,
)

ANSWERS: Mapping[str, Any] = {
    "books": BooksAnswer,
    "book": BookDescription,
    "measures": MeasuresAnswer,
    "allocations": AllocationsAnswer,
    "increments": IncrementsAnswer,
    "value": ValueAnswer,
}
OWN_ANSWERS = (BooksAnswer, BookDescription, ValueAnswer)
"""Those that no calculation has."""
PARTS = (ScaledCopy,)
SAID: Mapping[str, tuple[str, str, str]] = {
    "books": (
        "listBooks",
        "The books on this server",
        "Lists the books that the server keeps, damaged ones with their reason. In CSV a book is a row.",
    ),
    "book": (
        "getBook",
        "What a book is",
        "Describes one book, never its data. In CSV each sub-portfolio has a row for each of its attributes.",
    ),
    "measures": (
        "getBookMeasures",
        "Risk measures of a book",
        "Computes what `POST /v1/measures` computes, of a book. Without `measure` the measures are those of the book.",
    ),
    "allocations": (
        "getBookAllocations",
        "Risk measures of a book, split among its sub-portfolios",
        (
            "Computes what `POST /v1/allocations` computes, of a book. What is not asked for is as the book says: "
            "measures, rules, groups, labels. XML is for one measure and one rule."
        ),
    ),
    "increments": (
        "getBookIncrements",
        "What more or less of a sub-portfolio would change",
        (
            "Computes what `POST /v1/increments` computes, for one candidate: a sub-portfolio's losses times `scale` "
            "less 1. As text it is one number of one measure."
        ),
    ),
    "value": (
        "getBookValue",
        "One number of a book",
        (
            "Answers exactly one number, for a cell of a spreadsheet: as text the shortest decimal that reads back as "
            "the same, without a line end. A number that does not exist is refused. All cells of a sheet that ask the "
            "measures of the book cost one computation. `measure` and `rule` may be left out where there is only one."
        ),
    ),
    "report": (
        "getBookReport",
        "A printable page on a book",
        (
            "Writes the allocations of a book as a page that people read: with pictures, errors in words, method and "
            "provenance. It is the only form that rounds."
        ),
    ),
}
FORMS = (
    "\n\nThe form of the answer goes by `Accept`; where a client cannot set headers, the path may end in {suffixes}, "
    "which wins. The answer has a strong `ETag`: with `If-None-Match` nothing is computed where nothing has changed. "
    "`HEAD` checks the parameters and computes nothing."
)
STATUSES = (404, 406, 422, 500, 503)
PATTERN = "^[A-Za-z0-9][A-Za-z0-9_-]{0,63}$"
NO_TEXT: Json = {"type": "string", "const": ""}
WORDS: Mapping[str, tuple[str, Json]] = {
    "of": ("What the number is of.", {"type": "string", "enum": list(values.OF)}),
    "field": (
        "Which number of the figure: its value, its standard error, or an end of its interval.",
        {"type": "string", "enum": list(values.FIELDS), "default": "value"},
    ),
    "sub_portfolio": ("The sub-portfolio.", {"type": "string"}),
    "attribute": ("The attribute of a group, with `group`; `entity/line` crosses two.", {"type": "string"}),
    "group": ("The group; an empty one is of those without the attribute.", {"type": "string"}),
    "scale": (
        "Size of the sub-portfolio afterwards as a multiple of its size now, without unit: 1.1 is ten per cent more.",
        {"type": "number", "format": "double", "minimum": 0.0},
    ),
}
NUMBERED = {"type": "string", "enum": list(values.OF_INCREMENT)}


def operations(schemas: Json) -> dict[str, Json]:
    """Return the operations by path; `schemas` are all components."""
    return {path: {"get": _operation(kind, path, schemas)} for kind, path in PATHS.items()}


def _operation(kind: str, path: str, schemas: Json) -> Json:
    name, summary, description = SAID[kind]
    forms = FORMS_OF_BOOKS[kind]
    suffixes = ", ".join(f"`.{form.suffix}`" for form in forms)
    return {
        "operationId": name,
        "tags": ["books"],
        "summary": summary,
        "description": description + FORMS.format(suffixes=suffixes),
        "parameters": list(_parameters(kind, path, schemas)),
        "responses": {
            "200": {
                "description": summary,
                "headers": {"X-Request-ID": REQUEST_ID, "ETag": _header("Strong tag of this very form of the answer.")},
                "content": {form.media_type: {"schema": _content(kind, form)} for form in forms},
            },
            "304": {
                "description": "The caller has this answer already.",
                "headers": {"X-Request-ID": REQUEST_ID, "ETag": _header("Its tag.")},
            },
            **refusals(*(status for status in STATUSES if status != 404 or kind != "books")),  # noqa: PLR2004
        },
    }


def _content(kind: str, form: Form) -> Json:
    """Return the schema of an answer in one form."""
    if form.suffix == "json":
        return reference(ANSWERS[kind].__name__)
    words = WORDS_OF_FORMS[form.suffix]
    binary = {"contentMediaType": form.media_type} if form.suffix in ("arrow", "png") else {}
    return {"type": "string", "description": words, **binary}


def _parameters(kind: str, path: str, schemas: Json) -> Iterator[Json]:
    if "{name}" in path:
        text = {"type": "string", "pattern": PATTERN}
        yield {**parameter("name", "Name of the book.", text, "path"), "required": True}
    known = pulls.PARAMETERS[kind]
    for name in known:
        words, schema = _described(name, kind, schemas)
        required = name in ("sub_portfolio", "scale") if kind == "increments" else name == "of"
        yield {**parameter(name, words, schema), **({"required": True} if required else {})}
    if kind == "increments":
        yield parameter("of", "As text alone: which figure; `increment` if absent.", NUMBERED)
        words, schema = WORDS["field"]
        yield parameter("field", f"As text alone. {words}", schema)
    suffixes = {form.suffix for form in FORMS_OF_BOOKS[kind]}
    if "svg" in suffixes:
        yield CHART
    if "csv" in suffixes:
        yield BOM
    yield REFRESH
    yield parameter("If-None-Match", "Tags of the answers that the caller has.", {"type": "string"}, "header")


def _described(name: str, kind: str, schemas: Json) -> tuple[str, Json]:
    """Return what a parameter means, and its schema, from the field that it stands for."""
    if name == "measure":
        kinds = {"type": "string", "enum": sorted(schemas["Measure"]["discriminator"]["mapping"])}
        if kind == "value":
            return "Kind of the measure; needed where the book has several.", kinds
        return "Kinds of measure; may repeat. Those of the book if absent.", {"type": "array", "items": kinds}
    if name == "level":
        item = {key: value for key, value in _measure_field("level", schemas).items() if key != "description"}
        if kind == "value":
            return "Confidence level in (0, 1), without unit.", item
        words = "Confidence levels in (0, 1), without unit; may repeat: every measure is computed at every level."
        return words, {"type": "array", "items": item}
    if name in query.MEASURE:
        field = _measure_field(name, schemas)
    elif name in WORDS:
        return WORDS[name]
    else:
        model = IncrementsRequest if kind == "increments" else AllocationsRequest
        fields = schemas[model.__name__]["properties"]
        field = fields[query.BOOKS[kind][name].field]
        if kind == "value" and name == "rule":
            field = {"description": "Allocation rule of a contribution or a share.", **field["items"]}
        if name == "group_by":
            words = f"{field['description']} Empty for none; those of the book if absent."
            field = {**field, "description": words, "items": {"anyOf": [field["items"], NO_TEXT]}}
    schema = {key: value for key, value in field.items() if key not in ("description", "default")}
    return field.get("description", name), schema


def _measure_field(field: str, schemas: Json) -> Json:
    """Return the schema of a field of any measure."""
    members = (schemas[option["$ref"].removeprefix(COMPONENTS)] for option in schemas["Measure"]["oneOf"])
    found: Json = next(member["properties"][field] for member in members if field in member["properties"])
    return found


def _header(words: str) -> Json:
    return {"description": words, "schema": {"type": "string"}}
