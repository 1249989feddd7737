"""The document: equal to the committed one, complete, and of clean names."""

import json
import re

import pytest

from service import openapi, problems
from service.app import create_app
from service.payloads import TABLE_READERS
from service.routes.doors import Door
from service.settings import Settings

DOCUMENT = openapi.build()
UNDOCUMENTED = re.compile(r"/|/spreadsheets(/.*)?|/openapi\.json|/docs(/.*)?|/v1/[\w/{}]+\.\w+")


def schemas(node, where=""):
    """Yield place and schema of every schema in the document."""
    if isinstance(node, dict):
        if node.keys() & {"type", "$ref", "oneOf", "anyOf"} and "in" not in node:
            yield where, node
        for key, value in node.items():
            if key not in ("example", "examples", "default"):
                yield from schemas(value, f"{where}/{key}")
    elif isinstance(node, list):
        for number, value in enumerate(node):
            yield from schemas(value, f"{where}/{number}")


def test_the_committed_document_is_what_is_built():
    assert json.loads(openapi.committed()) == DOCUMENT, "run: python -m service.openapi"


def test_every_door_is_described():
    routes = [route for route in create_app(Settings()).router.routes if isinstance(route.endpoint, Door)]
    paths = {route.path for route in routes}
    assert {path for path in paths if not UNDOCUMENTED.fullmatch(path)} == DOCUMENT["paths"].keys()


def test_names_of_components_are_clean():
    for name in DOCUMENT["components"]["schemas"]:
        assert re.fullmatch(r"[A-Z][A-Za-z0-9]*", name)
        assert "Inner" not in name
        assert not name.endswith(("Input", "Output"))


def test_everything_is_described():
    for name, component in DOCUMENT["components"]["schemas"].items():
        assert component.get("description") or "oneOf" in component, name
        for field, schema in component.get("properties", {}).items():
            assert schema.get("description") or "$ref" in schema, f"{name}.{field}"
    for path, methods in DOCUMENT["paths"].items():
        for operation in methods.values():
            assert operation["summary"], path
            assert operation["description"], path
            for parameter in operation.get("parameters", ()):
                assert parameter["description"], (path, parameter["name"])


def test_numbers_have_formats_and_nothing_a_title():
    for where, schema in schemas(DOCUMENT):
        kinds = schema.get("type", ())
        kinds = {kinds} if isinstance(kinds, str) else set(kinds)
        if kinds & {"number", "integer"}:
            assert schema["format"] in ("double", "int64"), where
        assert not isinstance(schema.get("title"), str) or where == "/info", where


def test_references_lead_somewhere():
    for reference in set(re.findall(r'"\$ref": "([^"]+)"', json.dumps(DOCUMENT))):
        node = DOCUMENT
        for step in reference.removeprefix("#/").split("/"):
            node = node[step]
        assert node


def test_optional_fields_of_requests_are_absent_not_null():
    waiting, seen = [calculation["request"].__name__ for calculation in openapi.CALCULATIONS.values()], set()
    while waiting:
        name = waiting.pop()
        if name in seen:
            continue
        seen.add(name)
        text = json.dumps(DOCUMENT["components"]["schemas"][name])
        assert "null" not in text.replace("not null", ""), name
        waiting += re.findall(r'"#/components/schemas/(\w+)"', text)
    assert {"Measure", "ScenarioLosses", "PackedTable", "Candidate", "FactorLosses"} <= seen


def test_operation_ids_and_tags():
    operations = [operation for methods in DOCUMENT["paths"].values() for operation in methods.values()]
    names = [operation["operationId"] for operation in operations]
    assert len(set(names)) == len(names)
    assert {tag for operation in operations for tag in operation["tags"]} == {tag["name"] for tag in DOCUMENT["tags"]}


REFUSALS = {"400", "404", "406", "413", "415", "422", "500", "503"}
BODIES = {"application/json", "multipart/form-data"}
FLAT = {"application/json", "text/csv", "text/event-stream"}
FIGURES = FLAT | {"application/xml", "application/vnd.apache.arrow.stream", "image/svg+xml", "image/png"}


@pytest.mark.parametrize(
    ("path", "statuses", "bodies"),
    [
        ("/v1/measures", REFUSALS, BODIES | TABLE_READERS.keys()),
        ("/v1/allocations", REFUSALS, BODIES | TABLE_READERS.keys()),
        ("/v1/increments", REFUSALS | {"409"}, BODIES),
        ("/v1/comparisons", REFUSALS, {"application/json"}),
    ],
)
def test_calculations_promise_their_bodies_answers_and_problems(path, statuses, bodies):
    operation = DOCUMENT["paths"][path]["post"]
    assert operation["responses"].keys() == statuses | {"200"}
    assert operation["requestBody"]["content"].keys() == bodies
    assert operation["responses"]["200"]["content"].keys() == (FIGURES if "text/csv" in bodies else FLAT)
    for status in statuses:
        response = DOCUMENT["components"]["responses"][f"Problem{status}"]
        assert response["content"].keys() == {problems.MEDIA_TYPE}
    assert "Retry-After" in DOCUMENT["components"]["responses"]["Problem503"]["headers"]
    assert "losses_changed" in DOCUMENT["components"]["responses"]["Problem409"]["description"]


def test_increments_have_no_parameters_of_a_table():
    parameters = {one["name"] for one in DOCUMENT["paths"]["/v1/increments"]["post"]["parameters"]}
    assert parameters == {"bom", "refresh", "X-Request-ID", "Prefer", "Content-Digest"}
    assert {"measure", "level", "rule"} < {
        one["name"] for one in DOCUMENT["paths"]["/v1/allocations"]["post"]["parameters"]
    }


def test_a_refused_candidate_has_a_typed_problem():
    components = DOCUMENT["components"]["schemas"]
    problem = components["CandidateResult"]["properties"]["problem"]
    assert {"$ref": "#/components/schemas/CandidateProblem"} in problem["anyOf"]
    assert components["Problem"]["properties"].keys() == components["CandidateProblem"]["properties"].keys() | {
        "instance"
    }
    candidates = components["IncrementsRequest"]["properties"]["candidates"]
    assert candidates["items"] == {"$ref": "#/components/schemas/Candidate"}


def test_examples_are_shown_under_their_media_types(tmp_path):
    row = {"title": "The smallest", "shows": "One measure.", "calculation": "measures", "query": ""}
    files = {
        "small.request.json": b'{"losses": {}}',
        "small.response.json": b'{"measures": []}',
        "table.request.csv": b"a,b\n1,2\n",
        "table.response.csv": b'"measure"\r\n',
        "bytes.request.arrow": b"\xff\xff\xff\xff",
    }
    for name, content in files.items():
        (tmp_path / name).write_bytes(content)
    small = {"name": "small", "request": "small.request.json", "response": "small.response.json"}
    table = {"name": "table", "request": "table.request.csv", "response": "table.response.csv"}
    unseen = {"name": "bytes", "request": "bytes.request.arrow", "response": "small.response.json"}
    json_type, csv_type = "application/json", "text/csv"
    index = [
        row | small | {"content_type": json_type, "accept": json_type},
        row | table | {"content_type": csv_type, "accept": csv_type, "query": "measure=wang&shift=1"},
        row | unseen | {"content_type": "application/vnd.apache.arrow.stream", "accept": json_type},
    ]
    (tmp_path / "index.json").write_text(json.dumps(index))
    paths = openapi.build(tmp_path)["paths"]
    asked = paths["/v1/measures"]["post"]["requestBody"]["content"]
    answered = paths["/v1/measures"]["post"]["responses"]["200"]["content"]
    assert asked[json_type]["examples"] == {
        "small": {"summary": "The smallest", "description": "One measure.", "value": {"losses": {}}}
    }
    assert answered[json_type]["examples"].keys() == {"small"}
    assert asked[csv_type]["examples"]["table"]["value"] == "a,b\n1,2\n"
    assert asked[csv_type]["examples"]["table"]["description"] == "One measure. Query: `measure=wang&shift=1`."
    assert answered[csv_type]["examples"]["table"]["value"] == '"measure"\r\n'
    assert "examples" not in asked["application/vnd.apache.arrow.stream"]
    assert "examples" not in paths["/v1/allocations"]["post"]["requestBody"]["content"][json_type]


def test_the_document_is_written_to_be_read_and_compared():
    document = {"a": [1, 2.5, "é"], "b": [[1, 2], [3, 4]], "c": {}, "d": [{"e": None}], "f": {"g": []}}
    text = openapi.written(document)
    assert json.loads(text) == document
    assert text.splitlines()[1:6] == [' "a": [1, 2.5, "é"],', ' "b": [', "  [1, 2],", "  [3, 4]", " ],"]
