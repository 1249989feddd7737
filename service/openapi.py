"""The OpenAPI document: built from the models and the examples, committed, and served as committed.

``python -m service.openapi`` writes it anew; a test holds the committed file equal to what is built.
"""

import json
from collections.abc import Mapping
from pathlib import Path
from typing import Any

from pydantic import TypeAdapter

from service import __version__, problems, query
from service.middleware import SAFE_ID
from service.pages.problems import PROBLEM_PAGES
from service.payloads import TABLE_READERS
from service.representations.formats import FORMATS
from service.schemas.requests import AllocationsRequest, MeasuresRequest
from service.schemas.results import AllocationsAnswer, MeasuresAnswer

Json = dict[str, Any]

COMMITTED = Path(__file__).with_name("openapi.json")
EXAMPLES = Path(__file__).parents[1] / "openapi_examples"
COMPONENTS = "#/components/schemas/"

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
}
ROUND = (
    "\n\nA body that is a table (CSV, Arrow IPC stream or Parquet) has its options as query parameters; "
    "with a JSON or multipart body those parameters are refused. The answer is JSON or CSV by `Accept`; "
    "where a client cannot set headers the path may end in `.json` or `.csv`. The same request gives the "
    "same bytes at any time, so it is safe to repeat. Time spent, in milliseconds, is in the header "
    "`Server-Timing`."
)
REFUSALS = (400, 406, 413, 415, 422, 500, 503)
INFO: Json = {
    "title": "tailrace",
    "version": __version__,
    "summary": "Loss scenarios in, risk measures and capital allocations out.",
    "description": "Post a table of loss scenarios; get risk measures, the contribution of each "
    "sub-portfolio and how sure each figure is. A loss is positive. Amounts are in one currency per "
    "request. Levels are in the open interval from 0 to 1: 0.995, not 99.5. Unknown fields and parameters "
    "are refused. No figure is rounded.",
    "contact": {"name": "The tailrace project"},
    "license": {"name": "Apache 2.0", "identifier": "Apache-2.0"},
}
TAGS = [
    {
        "name": "calculations",
        "description": "Pure functions of their request: nothing is kept on the server.",
    },
    {
        "name": "service",
        "description": "What the service says of itself: limits, problems, health and metrics.",
    },
]


def committed() -> bytes:
    """Return the document as committed."""
    return COMMITTED.read_bytes()


def build(examples: Path = EXAMPLES) -> Json:
    """Return the document, with the request and response pairs of the folder `examples`."""
    schemas = _schemas()
    pairs = _examples(examples)
    return {
        "openapi": "3.1.0",
        "info": INFO,
        "servers": [{"url": "/", "description": "This server"}],
        "tags": TAGS,
        "paths": {
            **{f"/v1/{name}": {"post": _calculation(name, schemas, pairs)} for name in CALCULATIONS},
            **_service_paths(),
        },
        "components": {
            "schemas": dict(sorted((schemas | PROBLEM_SCHEMAS).items())),
            "responses": {f"Problem{status}": _refusal(status) for status in sorted({*REFUSALS, 404})},
            "headers": {
                "RequestId": {
                    "description": "The request's `X-Request-ID`, or one made here.",
                    "schema": {"type": "string"},
                }
            },
        },
    }


def _schemas() -> Json:
    """Return the components of all requests and answers."""
    adapters = [
        (name, mode, TypeAdapter(calculation[kind]))
        for name, calculation in CALCULATIONS.items()
        for kind, mode in MODES.items()
    ]
    _, found = TypeAdapter.json_schemas(adapters, ref_template=COMPONENTS + "{model}")
    schemas = {name: _tidy(schema) for name, schema in found["$defs"].items()}
    _inherit_descriptions(schemas["AllocationsRequest"], schemas["MeasuresRequest"])
    return schemas


def _inherit_descriptions(heir: Json, parent: Json) -> None:
    """Describe the fields of `heir` that it has from `parent`, where the generator lost them."""
    for name, field in parent["properties"].items():
        if "description" in field:
            heir["properties"][name].setdefault("description", field["description"])


def _tidy(schema: Any) -> Any:
    """Return a schema without invented titles, with number formats, and with absent for null in requests.

    Only the optional fields of requests have null as their default.
    """
    if isinstance(schema, list):
        return [_tidy(item) for item in schema]
    if not isinstance(schema, dict):
        return schema
    tidy = {key: _tidy(value) for key, value in schema.items() if key != "title" or isinstance(value, dict)}
    if "default" in tidy and tidy["default"] is None:
        del tidy["default"]
        options = [option for option in tidy.pop("anyOf", ()) if option != {"type": "null"}]
        tidy = {**(options[0] if options else {}), **tidy}
    if tidy.get("type") in FORMATS_OF_NUMBERS:
        tidy.setdefault("format", FORMATS_OF_NUMBERS[tidy["type"]])
    return tidy


def _calculation(name: str, schemas: Json, pairs: Json) -> Json:
    """Return the operation of one calculation."""
    said = CALCULATIONS[name]
    asked, answered = ({"$ref": COMPONENTS + said[kind].__name__} for kind in MODES)
    shown = pairs.get(name, {})
    return {
        "operationId": said["operationId"],
        "tags": ["calculations"],
        "summary": said["summary"],
        "description": said["description"] + ROUND,
        "parameters": [*_table_parameters(name, schemas), *HEADERS],
        "requestBody": {
            "description": "The request, or the table alone with its options as query parameters.",
            "required": True,
            "content": {
                "application/json": {"schema": asked, **_shown(shown, "request")},
                "multipart/form-data": _multipart(asked),
                **{media_type: {"schema": _bytes(media_type)} for media_type in TABLE_READERS},
            },
        },
        "responses": {
            "200": {
                "description": "The figures, each with its error.",
                "headers": {
                    "X-Request-ID": {"$ref": "#/components/headers/RequestId"},
                    "Server-Timing": {
                        "description": "Milliseconds spent to read, wait, decode, compute and write.",
                        "schema": {"type": "string"},
                    },
                },
                "content": {
                    form.media_type: (
                        {"schema": answered, **_shown(shown, "response")}
                        if form.suffix == "json"
                        else {"schema": {"type": "string", "description": "RFC 4180 with a header line."}}
                    )
                    for form in FORMATS.values()
                },
            },
            **{str(status): {"$ref": f"#/components/responses/Problem{status}"} for status in REFUSALS},
        },
    }


def _table_parameters(name: str, schemas: Json) -> list[Json]:
    """Return the query parameters of a body that is a table, described as the fields that they stand for."""
    request = schemas[CALCULATIONS[name]["request"].__name__]["properties"]
    losses = schemas["ScenarioLosses"]["properties"]
    parameters = [
        _parameter(
            "measure",
            "Kinds of measure to compute, with a body that is a table; may repeat.",
            {"type": "array", "items": {"type": "string", "enum": sorted(_kinds(schemas))}},
        ),
        _parameter(
            "level",
            "Confidence levels in (0, 1), without unit; may repeat: every measure is computed at every level.",
            {"type": "array", "items": _unbounded(_measure_field("level", schemas))},
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
    return [*parameters, *WORDS_WITHOUT_MEANING]


def _kinds(schemas: Json) -> list[str]:
    return list(schemas["Measure"]["discriminator"]["mapping"])


def _measure_field(field: str, schemas: Json) -> Json:
    """Return the schema of a field of any measure."""
    members = (schemas[option["$ref"].rpartition("/")[2]] for option in schemas["Measure"]["oneOf"])
    found: Json = next(member["properties"][field] for member in members if field in member["properties"])
    return found


def _field_parameter(name: str, field: Json) -> Json:
    schema = {key: value for key, value in field.items() if key not in ("description", "default")}
    return _parameter(name, f"{field.get('description', name)} For a body that is a table.", schema)


def _unbounded(field: Json) -> Json:
    return {key: value for key, value in field.items() if key != "description"}


def _parameter(name: str, description: str, schema: Json, place: str = "query") -> Json:
    return {"name": name, "in": place, "description": description, "schema": schema}


def _multipart(asked: Json) -> Json:
    """Return the body of two parts."""
    return {
        "schema": {
            "type": "object",
            "required": ["request", "table"],
            "properties": {
                "request": {**asked, "description": "The request; its `losses` say `part: table`."},
                "table": {
                    **_bytes("application/octet-stream"),
                    "description": "The loss table, with a header.",
                },
            },
        },
        "encoding": {
            "request": {"contentType": "application/json"},
            "table": {"contentType": ", ".join(TABLE_READERS)},
        },
    }


def _bytes(media_type: str) -> Json:
    """Return the schema of content that is no JSON."""
    if media_type.startswith("text/"):
        return {
            "type": "string",
            "description": "A header line of sub-portfolio ids, then one line per scenario.",
        }
    return {"type": "string", "contentMediaType": media_type, "description": "One column per sub-portfolio."}


def _examples(folder: Path) -> Json:
    """Return calculation to name to request and response, from the pairs of JSON files in `folder`."""
    pairs: Json = {}
    for file in sorted(folder.glob("*.request.json")):
        name = file.name.removesuffix(".request.json")
        answer = json.loads(file.with_name(f"{name}.response.json").read_bytes())
        calculation = next(one for one in CALCULATIONS if one in answer)
        pairs.setdefault(calculation, {})[name] = {
            "request": json.loads(file.read_bytes()),
            "response": answer,
        }
    return pairs


def _shown(pairs: Json, part: str) -> Json:
    examples = {
        name: {"summary": name.replace("_", " ").capitalize(), "value": pair[part]} for name, pair in pairs.items()
    }
    return {"examples": examples} if examples else {}


def _refusal(status: int) -> Json:
    """Return the response of one status: the problems that it stands for."""
    codes = [code for code, known in problems.STATUSES.items() if known == status]
    headers: Json = {"X-Request-ID": {"$ref": "#/components/headers/RequestId"}}
    if status == problems.STATUSES["busy"]:
        headers["Retry-After"] = {
            "description": "Seconds after which to send the same request again.",
            "schema": {"type": "integer", "format": "int64", "minimum": 1},
        }
    return {
        "description": " ".join(f"`{code}`: {PROBLEM_PAGES[code].title}." for code in codes),
        "headers": headers,
        "content": {problems.MEDIA_TYPE: {"schema": {"$ref": COMPONENTS + "Problem"}}},
    }


def _service_paths() -> Json:
    """Return the paths beside the calculations."""
    code = _parameter("code", "Code of the problem.", {"enum": list(problems.STATUSES)}, "path")
    code = {**code, "required": True, "schema": {"type": "string", **code["schema"]}}
    record, state, limit = (_json({"$ref": COMPONENTS + name}) for name in ("ProblemRecord", "State", "LimitRecord"))
    page = {"text/html": {"schema": {"type": "string"}}}
    text = {"text/plain": {"schema": {"type": "string"}}}
    operations = {
        "/v1/limits": _read("getLimits", "Limits of this server", _listed(limit)),
        "/problems": _read("listProblems", "All problems", {**_listed(record), **page}),
        "/problems/{code}": _read("getProblem", "What a problem means and what to do", {**record, **page}, 404),
        "/healthz": _read("getHealth", "Whether the process lives", state),
        "/readyz": _read("getReadiness", "Whether it can take work", state, 503),
        "/metrics": _read("getMetrics", "Metrics of this process, for Prometheus", text),
    }
    operations["/problems/{code}"]["parameters"] = [code]
    return {path: {"get": operation} for path, operation in operations.items()}


def _json(schema: Json) -> Json:
    return {"application/json": {"schema": schema}}


def _listed(content: Json) -> Json:
    return _json({"type": "array", "items": content["application/json"]["schema"]})


def _read(operation: str, summary: str, content: Json, *refusals: int) -> Json:
    """Return an operation that reads something about the service."""
    return {
        "operationId": operation,
        "tags": ["service"],
        "summary": summary,
        "description": f"{summary}. Computes nothing.",
        "responses": {
            "200": {
                "description": summary,
                "headers": {"X-Request-ID": {"$ref": "#/components/headers/RequestId"}},
                "content": content,
            },
            **{str(status): {"$ref": f"#/components/responses/Problem{status}"} for status in refusals},
        },
    }


def _object(description: str, required: str, **properties: Json) -> Json:
    return {
        "type": "object",
        "description": description,
        "required": required.split(),
        "properties": properties,
    }


def _described(kind: str | list[str], description: str, **more: Any) -> Json:
    return {"type": kind, "description": description, **more}


MODES: Mapping[str, Any] = {"request": "validation", "answer": "serialization"}
FORMATS_OF_NUMBERS = {"number": "double", "integer": "int64"}
WORDS_WITHOUT_MEANING = [
    _parameter("bom", "1: a CSV answer begins with the byte order mark.", {"type": "string", "enum": ["0", "1"]}),
    _parameter("refresh", "Ignored; a client may vary it to force a new request.", {"type": "string"}),
]
HEADERS = [
    _parameter(
        "X-Request-ID",
        "Name of this request in logs and answers: at most 128 letters, digits and `._=+/-`; another is replaced.",
        {"type": "string", "pattern": f"^{SAFE_ID.pattern.decode()}$"},
        "header",
    ),
    _parameter(
        "Prefer",
        "`wait=SECONDS` lowers the computing time allowed, in seconds.",
        {"type": "string"},
        "header",
    ),
    _parameter(
        "Content-Digest",
        "`sha-256=:BASE64:` of the body (RFC 9530); a body that does not match is refused.",
        {"type": "string", "pattern": "^sha-(256|512)=:[A-Za-z0-9+/]+=*:$"},
        "header",
    ),
]
PROBLEM_SCHEMAS: Json = {
    "Problem": _object(
        "What went wrong (RFC 9457).",
        "type title status detail instance errors",
        type=_described("string", "Address of the page that explains it: `/problems/` and its code."),
        title=_described("string", "The kind of problem in a few words."),
        status=_described("integer", "HTTP status.", format="int64"),
        detail=_described("string", "This very problem in a sentence."),
        instance=_described("string", "The request id, as in `X-Request-ID`."),
        errors=_described("array", "What is wrong and where.", items={"$ref": COMPONENTS + "ProblemError"}),
        limit={"$ref": COMPONENTS + "PassedLimit"},
    ),
    "ProblemError": _object(
        "One thing that is wrong, and where it stands in the request.",
        "code detail",
        code=_described("string", "What is wrong, for programs."),
        detail=_described("string", "What is wrong, for people."),
        pointer=_described("string", "JSON pointer (RFC 6901) into the request document."),
        parameter=_described("string", "Name of the query parameter."),
        header=_described("string", "Name of the request header."),
        part=_described("string", "`body`, or the name of the part that holds the table."),
        row=_described("integer", "Row of the table, counted from 1 without the header line.", format="int64"),
        column=_described("string", "Header of the table's column, or its number counted from 1."),
    ),
    "PassedLimit": _object(
        "The limit that was passed.",
        "name allowed asked setting",
        name=_described("string", "Name of the limit."),
        allowed=_described("number", "What is allowed, in the unit that `GET /v1/limits` tells.", format="double"),
        asked=_described(["number", "null"], "What was asked, in the same unit; null if unknown.", format="double"),
        setting=_described("string", "Environment variable that sets it."),
    ),
    "LimitRecord": _object(
        "A limit of this server.",
        "name value unit setting",
        name=_described("string", "Name of the limit."),
        value=_described("number", "What is allowed, in `unit`.", format="double"),
        unit=_described("string", "Unit of the value."),
        setting=_described("string", "Environment variable that sets it."),
    ),
    "ProblemRecord": _object(
        "What the service says of a problem.",
        "type code status title meaning remedy",
        type=_described("string", "Address of its page."),
        code=_described("string", "Its code."),
        status=_described("integer", "HTTP status that it comes with.", format="int64"),
        title=_described("string", "The problem in a few words."),
        meaning=_described("string", "What it means."),
        remedy=_described("string", "What to do."),
    ),
    "State": _object(
        "State of the process.",
        "status",
        status=_described("string", "`alive` or `ready`.", enum=["alive", "ready"]),
    ),
}


if __name__ == "__main__":
    COMMITTED.write_text(json.dumps(build(), indent=1, ensure_ascii=False) + "\n", encoding="utf-8")
