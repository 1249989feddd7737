"""Parts of the document that no model makes: parameters, headers, problems, and what the service says of itself."""

from typing import Any

from service import problems
from service.pages.problems import PROBLEM_PAGES

Json = dict[str, Any]

COMPONENTS = "#/components/schemas/"
FIRST_ERROR = 400


def parameter(name: str, description: str, schema: Json, place: str = "query") -> Json:
    """Return a parameter of an operation."""
    return {"name": name, "in": place, "description": description, "schema": schema}


def described(kind: str | list[str], description: str, **more: Any) -> Json:
    """Return the schema of one field."""
    return {"type": kind, "description": description, **more}


def reference(name: str) -> Json:
    """Return a reference to the schema `name`."""
    return {"$ref": COMPONENTS + name}


def refusals(*statuses: int) -> Json:
    """Return the problems that an operation may answer, by status."""
    return {str(status): {"$ref": f"#/components/responses/Problem{status}"} for status in sorted(statuses)}


def refusal(status: int) -> Json:
    """Return the response of one status: the problems that it stands for."""
    codes = [code for code, known in problems.STATUSES.items() if known == status]
    headers: Json = {"X-Request-ID": REQUEST_ID}
    if status == problems.STATUSES["busy"]:
        headers["Retry-After"] = {
            "description": "Seconds after which to send the same request again.",
            "schema": {"type": "integer", "format": "int64", "minimum": 1},
        }
    return {
        "description": " ".join(f"`{code}`: {PROBLEM_PAGES[code].title}." for code in codes),
        "headers": headers,
        "content": {problems.MEDIA_TYPE: {"schema": reference("Problem")}},
    }


def service_paths() -> Json:
    """Return the paths beside the calculations."""
    code = parameter("code", "Code of the problem.", {"type": "string", "enum": list(problems.STATUSES)}, "path")
    code = {**code, "required": True}
    record, state, limit = (_json(reference(name)) for name in ("ProblemRecord", "State", "LimitRecord"))
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


def _read(operation: str, summary: str, content: Json, *statuses: int) -> Json:
    """Return an operation that reads something about the service."""
    return {
        "operationId": operation,
        "tags": ["service"],
        "summary": summary,
        "description": f"{summary}. Computes nothing.",
        "responses": {
            "200": {"description": summary, "headers": {"X-Request-ID": REQUEST_ID}, "content": content},
            **refusals(*statuses),
        },
    }


def _object(description: str, required: str, **properties: Json) -> Json:
    return {
        "type": "object",
        "description": description,
        "required": required.split(),
        "properties": properties,
    }


REQUEST_ID = {"$ref": "#/components/headers/RequestId"}
COMPONENT_HEADERS: Json = {
    "RequestId": {
        "description": "The request's `X-Request-ID`, or one made here.",
        "schema": {"type": "string"},
    }
}
BOM = parameter("bom", "1: a CSV answer begins with the byte order mark.", {"type": "string", "enum": ["0", "1"]})
REFRESH = parameter("refresh", "Ignored; a client may vary it to force a new request.", {"type": "string"})
HEADERS = [
    parameter(
        "X-Request-ID",
        "Name of this request in logs and answers: at most 128 letters, digits and `._=+/-`; another is replaced.",
        {"type": "string"},
        "header",
    ),
    parameter(
        "Prefer",
        "`wait=SECONDS` lowers the computing time allowed, in seconds.",
        {"type": "string"},
        "header",
    ),
    parameter(
        "Content-Digest",
        "`sha-256=:BASE64:` of the body (RFC 9530); a body that does not match is refused.",
        {"type": "string", "pattern": "^sha-(256|512)=:[A-Za-z0-9+/]+=*:$"},
        "header",
    ),
]
_PROBLEM_FIELDS: Json = {
    "type": described("string", "Address of the page that explains it: `/problems/` and its code."),
    "title": described("string", "The kind of problem in a few words."),
    "status": described("integer", "HTTP status.", format="int64"),
    "detail": described("string", "This very problem in a sentence."),
    "errors": described("array", "What is wrong and where.", items=reference("ProblemError")),
    "limit": reference("PassedLimit"),
}
SCHEMAS: Json = {
    "Problem": _object(
        "What went wrong (RFC 9457).",
        "type title status detail instance errors",
        **_PROBLEM_FIELDS,
        instance=described("string", "The request id, as in `X-Request-ID`."),
    ),
    "CandidateProblem": _object(
        "Why a candidate was refused: a problem document without `instance`. Pointers are into the whole request.",
        "type title status detail errors",
        **_PROBLEM_FIELDS,
    ),
    "ProblemError": _object(
        "One thing that is wrong, and where it stands in the request.",
        "code detail",
        code=described("string", "What is wrong, for programs."),
        detail=described("string", "What is wrong, for people."),
        pointer=described("string", "JSON pointer (RFC 6901) into the request document."),
        parameter=described("string", "Name of the query parameter."),
        header=described("string", "Name of the request header."),
        part=described("string", "`body`, or the name of the part that holds the table."),
        row=described("integer", "Row of the table, counted from 1 without the header line.", format="int64"),
        column=described("string", "Header of the table's column, or its number counted from 1."),
    ),
    "PassedLimit": _object(
        "The limit that was passed.",
        "name allowed asked setting",
        name=described("string", "Name of the limit."),
        allowed=described("number", "What is allowed, in the unit that `GET /v1/limits` tells.", format="double"),
        asked=described(["number", "null"], "What was asked, in the same unit; null if unknown.", format="double"),
        setting=described("string", "Environment variable that sets it."),
    ),
    "Progress": _object(
        "Data of the event `progress`: how far a calculation is. Later events never tell less.",
        "fraction scenarios_done scenarios eta_seconds",
        fraction=described("number", "Part of the work that is done, 0 to 1, without unit.", format="double"),
        scenarios_done=described(
            ["integer", "null"], "The same in scenarios; null until the request is read.", format="int64"
        ),
        scenarios=described(
            ["integer", "null"], "Scenarios of the request; null until the request is read.", format="int64"
        ),
        eta_seconds=described(
            ["number", "null"],
            "Seconds that the rest may take, judged by the part done so far; null before any part is done.",
            format="double",
        ),
    ),
    "LimitRecord": _object(
        "A limit of this server.",
        "name value unit setting",
        name=described("string", "Name of the limit."),
        value=described("number", "What is allowed, in `unit`.", format="double"),
        unit=described("string", "Unit of the value."),
        setting=described("string", "Environment variable that sets it."),
    ),
    "ProblemRecord": _object(
        "What the service says of a problem.",
        "type code status title meaning remedy",
        type=described("string", "Address of its page."),
        code=described("string", "Its code."),
        status=described("integer", "HTTP status that it comes with.", format="int64"),
        title=described("string", "The problem in a few words."),
        meaning=described("string", "What it means."),
        remedy=described("string", "What to do."),
    ),
    "State": _object(
        "State of the process.",
        "status",
        status=described("string", "`alive` or `ready`.", enum=["alive", "ready"]),
    ),
}
