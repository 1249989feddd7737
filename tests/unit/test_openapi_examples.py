"""Each example is sent to a running service: the answer is the one kept, and both are what the document says."""

import csv
import io
import json
from functools import cache

import pytest
from jsonschema import Draft202012Validator

from openapi_examples import FOLDER, examples
from service import openapi
from service.payloads import TABLE_READERS, split_multipart
from service.schemas import requests
from tests.serving import alike, running

EXAMPLES = {example.name: example for example in examples()}
MOST_BYTES = 400_000
ANSWERS = {name: said["answer"].__name__ for name, said in openapi.CALCULATIONS.items()}
ASKED = {name: said["request"].__name__ for name, said in openapi.CALCULATIONS.items()}
KINDS = set(json.loads(openapi.committed())["components"]["schemas"]["Measure"]["discriminator"]["mapping"])


@pytest.fixture(scope="module")
def client():
    with running() as client:
        yield client


@cache
def judge(component):
    """Return what judges documents by a component."""
    document = json.loads(openapi.committed())
    return Draft202012Validator(
        {"$ref": f"#/components/schemas/{component}", "components": document["components"]},
        format_checker=Draft202012Validator.FORMAT_CHECKER,
    )


def parsed(example, content):
    if example.accept == "application/json":
        return json.loads(content)
    rows = csv.reader(io.StringIO(content.decode()), quoting=csv.QUOTE_NONNUMERIC)
    return [list(row) for row in rows]


def document_of(example):
    """Return the JSON of a request, if it has any."""
    if example.content_type == "application/json":
        return json.loads(example.body)
    if example.content_type.startswith("multipart/form-data"):
        return json.loads(split_multipart(example.body, example.content_type).request)
    return None


@pytest.mark.parametrize("name", EXAMPLES)
def test_the_answer_is_the_one_kept(client, name):
    example = EXAMPLES[name]
    response = example.send(client)
    assert response.status_code == 200, response.text
    assert response.headers["content-type"].startswith(example.accept)
    if response.content != example.answer:  # another kind of processor may round otherwise, and no more than that
        assert alike(parsed(example, example.answer), parsed(example, response.content)), (
            "another answer than the one kept; if it is meant, run: python -m openapi_examples"
        )
    assert example.send(client).content == response.content


@pytest.mark.parametrize("name", EXAMPLES)
def test_both_are_as_the_document_says(name):
    example = EXAMPLES[name]
    asked = document_of(example)
    if asked is not None:
        judge(ASKED[example.calculation]).validate(asked)
    if example.accept == "application/json":
        judge(ANSWERS[example.calculation]).validate(json.loads(example.answer))


def test_the_judge_refuses_what_is_not_said():
    wrong = json.loads(EXAMPLES["smallest"].body)
    wrong["measures"][0]["level"] = 99.5
    assert not judge("AllocationsRequest").is_valid(wrong)
    answer = json.loads(EXAMPLES["smallest"].answer)
    del answer["provenance"]
    assert not judge("AllocationsAnswer").is_valid(answer)


def test_the_index_and_the_folder_hold_the_same():
    named = [file for example in EXAMPLES.values() for file in (example.request, example.response)]
    there = {file.name for file in FOLDER.iterdir() if ".request." in file.name or ".response." in file.name}
    assert len(named) == len(set(named))
    assert set(named) == there
    assert sum(file.stat().st_size for file in FOLDER.glob("*.*")) < MOST_BYTES
    for example in EXAMPLES.values():
        assert example.request.startswith(f"{example.name}.request.")
        assert example.response.startswith(f"{example.name}.response.")
        assert example.title
        assert example.shows.endswith(".")


def test_every_kind_of_everything_has_an_example():
    asked = [document for example in EXAMPLES.values() if (document := document_of(example)) is not None]
    assert len(EXAMPLES) >= 14
    assert {example.calculation for example in EXAMPLES.values()} == set(ANSWERS)
    assert {measure["kind"] for document in asked for measure in document["measures"]} == KINDS
    rules = {rule for document in asked for rule in document.get("rules", ["euler"])}
    assert rules == set(requests.Rule.__args__)
    media_types = {example.content_type.partition(";")[0] for example in EXAMPLES.values()}
    assert media_types == {"application/json", "multipart/form-data", *TABLE_READERS}
    assert {example.accept for example in EXAMPLES.values()} == {"application/json", "text/csv"}


def test_the_same_numbers_have_the_same_digest_in_every_form():
    def digest(name):
        return json.loads(EXAMPLES[name].answer)["provenance"]["losses_digest"]

    assert digest("packed") == digest("by_sub_portfolio")
    forms = ("five_rules", "every_measure", "csv_table", "multipart", "arrow_stream", "parquet_file")
    assert len({digest(name) for name in forms}) == 1


def test_one_bad_candidate_does_not_spoil_the_others():
    answer = json.loads(EXAMPLES["quote_batch"].answer)
    assert [one["status"] for one in answer["candidates"]] == ["ok", "ok", "ok", "refused"]
    assert answer["refused"] == 1
    problem = answer["candidates"][-1]["problem"]
    assert problem["errors"][0]["pointer"] == "/candidates/3/values"
    verdicts = {one["figures"][0]["within_limit"] for one in answer["candidates"][:3]}
    assert verdicts == {True, False}


@pytest.mark.parametrize("name", EXAMPLES)
def test_the_document_shows_what_can_be_shown(name):
    example = EXAMPLES[name]
    operation = json.loads(openapi.committed())["paths"][f"/v1/{example.calculation}"]["post"]
    media_type = example.content_type.partition(";")[0]
    shown = operation["requestBody"]["content"][media_type].get("examples", {})
    answers = operation["responses"]["200"]["content"][example.accept].get("examples", {})
    if media_type.startswith("application/vnd."):
        assert name not in shown
        assert name not in answers
    else:
        assert shown[name]["summary"] == answers[name]["summary"] == example.title
