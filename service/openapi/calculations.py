"""The operations that compute: their bodies, parameters, answers and examples."""

from collections.abc import Iterator, Mapping
from typing import Any

from service import query
from service.openapi.examples import JSON, MULTIPART, Examples, Shown
from service.openapi.parts import BOM, COMPONENTS, HEADERS, REFRESH, REQUEST_ID, Json, parameter, reference, refusals
from service.payloads import CSV, TABLE_READERS
from service.representations.charts import CHARTS
from service.representations.formats import FORMS as FORMS_OF
from service.schemas.requests import (
    AllocationsRequest,
    Candidate,
    ComparisonsRequest,
    IncrementsRequest,
    MeasuresRequest,
)
from service.schemas.results import AllocationsAnswer, ComparisonsAnswer, IncrementsAnswer, MeasuresAnswer

CALCULATIONS: Mapping[str, Json] = {
    "measures": {
        "request": MeasuresRequest,
        "answer": MeasuresAnswer,
        "operationId": "computeMeasures",
        "summary": "Risk measures of a portfolio",
        "description": "Computes risk measures of the total loss and, unless told otherwise, of each "
        "sub-portfolio and group alone, each with its standard error and interval.",
    },
    "allocations": {
        "request": AllocationsRequest,
        "answer": AllocationsAnswer,
        "operationId": "computeAllocations",
        "summary": "Risk measures split among sub-portfolios",
        "description": "Computes what each sub-portfolio and group contributes to each risk measure by "
        "each rule, with standard errors and intervals, and spreads capital in the ratio of the "
        "contributions if asked.",
    },
    "increments": {
        "request": IncrementsRequest,
        "answer": IncrementsAnswer,
        "operationId": "computeIncrements",
        "summary": "What one more deal would change",
        "description": "Computes for each candidate what it would change in each risk measure of the book, with "
        "the error of the difference, and whether it earns its cost and keeps within a limit. Each candidate is "
        "judged alone: one that is refused has its problem in its own entry and does not spoil the others.",
    },
    "comparisons": {
        "request": ComparisonsRequest,
        "answer": ComparisonsAnswer,
        "operationId": "computeComparisons",
        "summary": "Why the capital moved between two books",
        "description": "Computes how each risk measure and each contribution changed between two books, split into "
        "new, gone and changed sub-portfolios. Where both books have the same scenarios the errors are those of the "
        "differences scenario by scenario.",
    },
}
BODIES: Mapping[str, tuple[str, ...]] = {
    **dict.fromkeys(query.CALCULATIONS, (JSON, MULTIPART, *TABLE_READERS)),
    "increments": (JSON, MULTIPART),
    "comparisons": (JSON,),
}
"""Calculation to the media types of its body."""
PARTS: tuple[Any, ...] = (Candidate,)
"""Models that are validated apart from the request that they stand in."""

TABLES = (
    "\n\nA body that is a table (CSV, Arrow IPC stream or Parquet) has its options as query parameters; "
    "with a JSON or multipart body those parameters are refused."
)
FORMS = (
    "\n\nThe form of the answer goes by `Accept`; where a client cannot set headers the path may end in the suffix of "
    "the form, such as `.csv`. Where `text/event-stream` alone has the highest weight, the answer is a stream of "
    "events: `progress` (once at the start, then at most five a second), and at the end exactly one `result`, whose "
    "data are the JSON answer, or one `problem`. A stream with neither has failed. The stream begins with the first "
    "piece of work, or after ten seconds of waiting: what is refused before has its ordinary status, what fails later "
    "is a `problem`. "
    "Every ten seconds without an event a comment line shows that the connection lives. A caller who leaves stops "
    "the work.\n\nThe same request gives the same bytes at any time, so it is safe to repeat. Time spent, in "
    "milliseconds, is in the header `Server-Timing`."
)
REFUSALS = (400, 404, 406, 413, 415, 422, 500, 503)
MORE_REFUSALS: Mapping[str, tuple[int, ...]] = {"increments": (409,)}
EVENTS = "text/event-stream"
WORDS_OF_FORMS: Mapping[str, str] = {
    "csv": "RFC 4180 with a header line: texts quoted, numbers bare. In the total of an allocation share, stand-alone "
    "figure and expected profit are sums over the sub-portfolios.",
    "xml": "For one measure (and rule): a `row` for each row of the CSV, its cells as attributes; at most 32767 "
    "characters.",
    "arrow": "Arrow IPC stream of the columns of the CSV.",
    "svg": "A picture with real text; `chart` says which.",
    "png": "The same picture as PNG.",
    "txt": "One number.",
    "html": "A page that fetches nothing.",
}
CHART = parameter(
    "chart",
    "For a picture: which; contributions of one measure and rule, else the distribution, if absent.",
    {"type": "string", "enum": list(CHARTS)},
)


def operation(name: str, schemas: Json, examples: Examples) -> Json:
    """Return the operation of one calculation.

    Parameters
    ----------
    name : str
    schemas : dict
        All components.
    examples : Examples
        Of this calculation.
    """
    said = CALCULATIONS[name]
    tables = CSV in BODIES[name]
    return {
        "operationId": said["operationId"],
        "tags": ["calculations"],
        "summary": said["summary"],
        "description": said["description"] + (TABLES if tables else "") + FORMS,
        "parameters": [*((*_table_parameters(name, schemas), CHART) if tables else ()), BOM, REFRESH, *HEADERS],
        "requestBody": {
            "description": "The request, or the table alone with its options as query parameters."
            if tables
            else "The request.",
            "required": True,
            "content": dict(_asked(name, reference(said["request"].__name__), examples.requests)),
        },
        "responses": {
            "200": {
                "description": "The figures, each with its error.",
                "headers": {
                    "X-Request-ID": REQUEST_ID,
                    "Server-Timing": {
                        "description": "Milliseconds spent to read, wait, decode, compute and write; not of a stream.",
                        "schema": {"type": "string"},
                    },
                },
                "content": dict(_answered(name, reference(said["answer"].__name__), examples.answers)),
            },
            **refusals(*REFUSALS, *MORE_REFUSALS.get(name, ())),
        },
    }


def _asked(name: str, request: Json, examples: Shown) -> Iterator[tuple[str, Json]]:
    """Yield the media types of a body."""
    for media_type in BODIES[name]:
        content = {
            JSON: {"schema": request},
            MULTIPART: _multipart(request),
        }.get(media_type) or {"schema": _table(media_type)}
        yield media_type, content | _shown(examples, media_type)


def _answered(name: str, answer: Json, examples: Shown) -> Iterator[tuple[str, Json]]:
    """Yield the media types of an answer."""
    for form in FORMS_OF[name]:
        schema = answer if form.suffix == "json" else {"type": "string", "description": WORDS_OF_FORMS[form.suffix]}
        if form.suffix in ("arrow", "png"):
            schema = {**schema, "contentMediaType": form.media_type}
        yield form.media_type, {"schema": schema} | _shown(examples, form.media_type)
    events = {"oneOf": [reference("Progress"), answer, reference("Problem")], "description": "Data of one event."}
    words = "Events `progress`, then one `result` or `problem`; the data of each are JSON on one line."
    yield (
        EVENTS,
        {"schema": {"type": "string", "description": words, "contentMediaType": EVENTS, "contentSchema": events}},
    )


def _shown(examples: Shown, media_type: str) -> Json:
    shown = examples.get(media_type)
    return {"examples": shown} if shown else {}


def _table_parameters(name: str, schemas: Json) -> list[Json]:
    """Return the query parameters of a body that is a table, described as the fields that they stand for."""
    request = schemas[CALCULATIONS[name]["request"].__name__]["properties"]
    losses = schemas["ScenarioLosses"]["properties"]
    parameters = [
        parameter(
            "measure",
            "Kinds of measure to compute, with a body that is a table; may repeat.",
            {"type": "array", "items": {"type": "string", "enum": sorted(_kinds(schemas))}},
        ),
        parameter(
            "level",
            "Confidence levels in (0, 1), without unit; may repeat: every measure is computed at every level.",
            {"type": "array", "items": _undescribed(_measure_field("level", schemas))},
        ),
    ]
    parameters += [
        _field_parameter(field, _measure_field(field, schemas)) for field in ("above", *query.MEASURE_NUMBERS)
    ]
    tables = [(query.REQUEST, request), (query.LOSSES, losses)]
    if name == "allocations":
        tables.insert(1, (query.ALLOCATIONS, request))
    for table, fields in tables:
        parameters += [_field_parameter(word, fields[spec.field]) for word, spec in table.items()]
    return parameters


def _kinds(schemas: Json) -> list[str]:
    return list(schemas["Measure"]["discriminator"]["mapping"])


def _measure_field(field: str, schemas: Json) -> Json:
    """Return the schema of a field of any measure."""
    members = (schemas[option["$ref"].removeprefix(COMPONENTS)] for option in schemas["Measure"]["oneOf"])
    found: Json = next(member["properties"][field] for member in members if field in member["properties"])
    return found


def _field_parameter(name: str, field: Json) -> Json:
    schema = {key: value for key, value in field.items() if key not in ("description", "default")}
    return parameter(name, f"{field.get('description', name)} For a body that is a table.", schema)


def _undescribed(field: Json) -> Json:
    return {key: value for key, value in field.items() if key != "description"}


def _multipart(asked: Json) -> Json:
    """Return the body of two parts."""
    return {
        "schema": {
            "type": "object",
            "required": ["request", "table"],
            "properties": {
                "request": {**asked, "description": "The request; its `losses` say `part: table`."},
                "table": {
                    **_table("application/octet-stream"),
                    "description": "The loss table, with a header.",
                },
            },
        },
        "encoding": {
            "request": {"contentType": JSON},
            "table": {"contentType": ", ".join(TABLE_READERS)},
        },
    }


def _table(media_type: str) -> Json:
    """Return the schema of content that is no JSON."""
    if media_type.startswith("text/"):
        return {
            "type": "string",
            "description": "A header line of sub-portfolio ids, then one line per scenario.",
        }
    return {"type": "string", "contentMediaType": media_type, "description": "One column per sub-portfolio."}
