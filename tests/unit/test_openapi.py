"""The document: equal to the committed one, complete, and of clean names."""

import json
import re

import pytest

from service import openapi, problems
from service.app import create_app
from service.routes.doors import Door
from service.settings import Settings

DOCUMENT = openapi.build()
UNDOCUMENTED = re.compile(r"/|/openapi\.json|/docs(/.*)?|/v1/\w+\.\w+")


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
    waiting, seen = ["MeasuresRequest", "AllocationsRequest"], set()
    while waiting:
        name = waiting.pop()
        if name in seen:
            continue
        seen.add(name)
        text = json.dumps(DOCUMENT["components"]["schemas"][name])
        assert "null" not in text.replace("not null", ""), name
        waiting += re.findall(r'"#/components/schemas/(\w+)"', text)
    assert {"Measure", "ScenarioLosses", "PackedTable"} <= seen


def test_operation_ids_and_tags():
    operations = [operation for methods in DOCUMENT["paths"].values() for operation in methods.values()]
    names = [operation["operationId"] for operation in operations]
    assert len(set(names)) == len(names)
    assert {tag for operation in operations for tag in operation["tags"]} == {tag["name"] for tag in DOCUMENT["tags"]}


@pytest.mark.parametrize("path", ["/v1/measures", "/v1/allocations"])
def test_calculations_promise_their_problems(path):
    operation = DOCUMENT["paths"][path]["post"]
    assert operation["responses"].keys() == {"200", "400", "406", "413", "415", "422", "500", "503"}
    assert {"application/json", "multipart/form-data", "text/csv"} < operation["requestBody"]["content"].keys()
    assert operation["responses"]["200"]["content"].keys() == {"application/json", "text/csv"}
    for status in operation["responses"].keys() - {"200"}:
        response = DOCUMENT["components"]["responses"][f"Problem{status}"]
        assert response["content"].keys() == {problems.MEDIA_TYPE}
    assert "Retry-After" in DOCUMENT["components"]["responses"]["Problem503"]["headers"]


def test_examples_come_in_pairs(tmp_path):
    (tmp_path / "the_smallest.request.json").write_text('{"losses": {}}')
    (tmp_path / "the_smallest.response.json").write_text('{"measures": []}')
    operation = openapi.build(tmp_path)["paths"]["/v1/measures"]["post"]
    asked = operation["requestBody"]["content"]["application/json"]["examples"]
    answered = operation["responses"]["200"]["content"]["application/json"]["examples"]
    assert asked == {"the_smallest": {"summary": "The smallest", "value": {"losses": {}}}}
    assert answered["the_smallest"]["value"] == {"measures": []}
