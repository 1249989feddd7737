"""The OpenAPI document: built from the models and the examples, committed, and served as committed.

``python -m service.openapi`` writes it anew; a test holds the committed file equal to what is built.
"""

import json
from collections.abc import Mapping
from pathlib import Path
from typing import Any, get_args, get_type_hints

from pydantic import TypeAdapter
from pydantic.dataclasses import is_pydantic_dataclass
from typing_extensions import TypeAliasType

from service import __version__
from service.openapi import books, calculations
from service.openapi.calculations import CALCULATIONS
from service.openapi.examples import read_examples
from service.openapi.parts import COMPONENT_HEADERS, COMPONENTS, SCHEMAS, Json, reference, refusal, service_paths

HERE = Path(__file__).parent
COMMITTED = HERE.with_suffix(".json")
EXAMPLES = HERE.parents[1] / "openapi_examples"

INFO: Json = {
    "title": "tailrace",
    "version": __version__,
    "summary": "Loss scenarios in, risk measures and capital allocations out.",
    "description": "Post a table of loss scenarios, a factor model or observed changes; get risk measures, the "
    "contribution of each sub-portfolio and how sure each figure is. A loss is positive. Amounts are in one currency "
    "per request. Levels are in the open interval from 0 to 1: 0.995, not 99.5. Unknown fields and parameters "
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
        "name": "books",
        "description": "Losses that the server keeps under a name, for spreadsheets, pages and programs that GET.",
    },
    {
        "name": "service",
        "description": "What the service says of itself: limits, problems, health and metrics.",
    },
]
MODES: Mapping[str, Any] = {"request": "validation", "answer": "serialization"}
FORMATS_OF_NUMBERS = {"number": "double", "integer": "int64"}


def committed() -> bytes:
    """Return the document as committed."""
    return COMMITTED.read_bytes()


def build(examples: Path = EXAMPLES) -> Json:
    """Return the document, with the requests and answers that the folder `examples` lists."""
    schemas = _schemas()
    computing = {
        f"/v1/{name}": {"post": calculations.operation(name, schemas, read_examples(examples, name))}
        for name in CALCULATIONS
    }
    statuses = {*calculations.REFUSALS, 404}.union(*calculations.MORE_REFUSALS.values())
    return {
        "openapi": "3.1.0",
        "info": INFO,
        "servers": [{"url": "/", "description": "This server"}],
        "tags": TAGS,
        "paths": {**computing, **books.operations(schemas), **service_paths()},
        "components": {
            "schemas": dict(sorted(schemas.items())),
            "responses": {f"Problem{status}": refusal(status) for status in sorted(statuses)},
            "headers": COMPONENT_HEADERS,
        },
    }


def written(node: Any, indent: str = "") -> str:
    """Return JSON to be read and compared: a member a line, but lists without objects on one line."""
    deeper = indent + " "
    if isinstance(node, dict) and node:
        members = (f"{deeper}{json.dumps(name)}: {written(value, deeper)}" for name, value in node.items())
        return "{\n" + ",\n".join(members) + f"\n{indent}}}"
    if isinstance(node, list) and any(isinstance(one, dict | list) for one in node):
        return "[\n" + ",\n".join(deeper + written(one, deeper) for one in node) + f"\n{indent}]"
    return json.dumps(node, ensure_ascii=False)


def _schemas() -> Json:
    """Return the components: of all requests and answers, and those that no model makes."""
    adapters = [
        (name, mode, TypeAdapter(calculation[kind]))
        for name, calculation in CALCULATIONS.items()
        for kind, mode in MODES.items()
    ]
    adapters += [(part.__name__, "validation", TypeAdapter(part)) for part in (*calculations.PARTS, *books.PARTS)]
    adapters += [(answer.__name__, "serialization", TypeAdapter(answer)) for answer in books.OWN_ANSWERS]
    _, found = TypeAdapter.json_schemas(adapters, ref_template=COMPONENTS + "{model}")
    schemas = {name: _tidy(schema) for name, schema in found["$defs"].items()} | SCHEMAS
    for model in _models(*(calculation["request"] for calculation in CALCULATIONS.values())):
        _inherit_descriptions(schemas[model.__name__], model)
    problem = schemas["CandidateResult"]["properties"]["problem"]
    problem["anyOf"] = [reference("CandidateProblem"), {"type": "null"}]
    return schemas


def _models(*roots: Any) -> set[type]:
    """Return every model with fields that the types `roots` are made of."""
    found: set[type] = set()
    waiting = list(roots)
    while waiting:
        kind = waiting.pop()
        if isinstance(kind, TypeAliasType):
            waiting.append(kind.__value__)
        elif not is_pydantic_dataclass(kind):
            waiting += get_args(kind)
        elif kind not in found:
            found.add(kind)
            waiting += get_type_hints(kind, include_extras=True).values()
    return found


def _inherit_descriptions(schema: Json, model: type) -> None:
    """Describe the fields of `model` that it has from a base, where the generator lost them."""
    for name, field in schema["properties"].items():
        told = (base.__dict__.get("__pydantic_fields__", {}).get(name) for base in model.__mro__)
        description = next((one.description for one in told if one is not None and one.description), None)
        if description is not None and "$ref" not in field:
            field.setdefault("description", description)


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
