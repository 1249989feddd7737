"""From pydantic's findings to faults: pointers, codes and words."""

import json
from typing import Annotated, Literal

import pytest
from pydantic import BaseModel, ConfigDict, Field, TypeAdapter, ValidationError, field_validator
from pydantic_core import PydanticCustomError

from service.errors import InvalidValue
from service.schemas.requests import AllocationsRequest
from service.validation import MOST_FAULTS, echo, locate, pointer, refusal

LOSSES = {"kind": "scenarios", "sub_portfolios": [{"id": "a"}], "values": [[1]]}
SOUND = {"losses": LOSSES, "measures": [{"kind": "value_at_risk", "level": 0.5}]}


def faults(document, model=AllocationsRequest):
    with pytest.raises(ValidationError) as caught:
        TypeAdapter(model).validate_json(json.dumps(document))
    error = refusal(caught.value, document, model)
    assert isinstance(error, InvalidValue)
    assert error.detail
    for fault in error.faults:
        assert "pydantic" not in fault.detail
        assert "Input" not in fault.detail
    return {fault.pointer: (fault.code, fault.detail) for fault in error.faults}


@pytest.mark.parametrize(
    ("change", "where", "code", "words"),
    [
        ({"losses": None}, "/losses", "wrong_type", "an object is needed here, not null"),
        ({"losses": []}, "/losses", "wrong_type", "an object is needed here, not a list"),
        ({"measures": []}, "/measures", "wrong_count", "at least 1 is needed here"),
        ({"rules": ["eulr"]}, "/rules/0", "not_allowed", "did you mean 'euler'?"),
        ({"capital": -1}, "/capital", "out_of_range", "-1 is not greater than 0"),
        ({"capital": "5"}, "/capital", "wrong_type", "a number is needed here, not '5'"),
        ({"capital": True}, "/capital", "wrong_type", "a number is needed here, not true"),
        ({"capital": float("nan")}, "/capital", "not_finite", "a finite number is needed here"),
        ({"tail_detail": "yes"}, "/tail_detail", "wrong_type", "true or false is needed here, not 'yes'"),
        ({"capitol": 1}, "/capitol", "unknown_field", "did you mean 'capital'?"),
        ({"zz": 1}, "/zz", "unknown_field", "there is no field 'zz'"),
        ({"a/b~c": 1}, "/a~1b~0c", "unknown_field", "there is no field 'a/b~c'"),
        ({"measures": [{"level": 0.5}]}, "/measures/0/kind", "missing", "'kind' says what this is"),
        ({"measures": [{"kind": "value_at_risk"}]}, "/measures/0/level", "missing", "'level' is required"),
        ({"measures": [{"kind": "wangg", "shift": 1}]}, "/measures/0/kind", "not_allowed", "did you mean 'wang'?"),
        (
            {"measures": [{"kind": "value_at_risk", "level": "99.5%"}]},
            "/measures/0/level",
            "wrong_type",
            "a number between 0 and 1, such as 0.995, is needed here, not '99.5%'",
        ),
        ({"measures": [{"kind": "VaR"}]}, "/measures/0/kind", "not_allowed", "did you mean 'value_at_risk'?"),
        ({"measures": [{"kind": "wang", "shift": -1}]}, "/measures/0/shift", "out_of_range", "-1 is not at least 0"),
        (
            {"capital_measure": {"kind": "wang", "shft": 1, "shift": 1}},
            "/capital_measure/shft",
            "unknown_field",
            "did you mean 'shift'?",
        ),
        (
            {"losses": {**LOSSES, "sub_portfolios": [{"id": "a", "attribute": {}}]}},
            "/losses/sub_portfolios/0/attribute",
            "unknown_field",
            "did you mean 'attributes'?",
        ),
    ],
)
def test_place_code_and_words(change, where, code, words):
    found = faults({**SOUND, **change})
    assert where in found
    assert found[where][0] == code
    assert words in found[where][1]


def test_a_missing_field_points_at_its_name():
    assert faults({}).keys() == {"/losses", "/measures"}


def test_a_long_text_comes_back_cut():
    detail = faults({**SOUND, "capital": "x" * 5000})["/capital"][1]
    assert len(detail) < 100


def test_many_faults_are_cut_and_counted():
    document = {**SOUND, "rules": ["x"] * 1000}
    with pytest.raises(ValidationError) as caught:
        TypeAdapter(AllocationsRequest).validate_json(json.dumps(document))
    error = refusal(caught.value, document)
    assert len(error.faults) == MOST_FAULTS
    assert error.detail.startswith("1000 values are not allowed; the first")


class Inner(BaseModel):
    model_config = ConfigDict(extra="forbid")
    kind: Literal["factors"]
    factors: list[int] = []
    simulation: dict[str, int] = {}


class Other(BaseModel):
    kind: Literal["other"]


class Outer(BaseModel):
    losses: Annotated[Inner | Other, Field(discriminator="kind")]
    size: int = Field(default=0, le=3)
    name: str = ""

    @field_validator("name")
    @classmethod
    def check(cls, value):
        if value == "ours":
            raise InvalidValue.at("/deep", "not this one", code="own_code")
        if value == "plain":
            raise ValueError("in plain words")
        if value == "half":
            raise PydanticCustomError("missing", "the other half is missing")
        return value


def test_a_tag_that_is_also_a_field_of_its_object():
    losses = {"kind": "factors", "factors": [1, "x"], "simulation": {"seed": "y"}, "more": 1}
    found = faults({"losses": losses}, Outer)
    assert found.keys() == {"/losses/factors/1", "/losses/simulation/seed", "/losses/more"}


def test_checks_of_ours_keep_their_faults():
    sound = {"losses": {"kind": "other"}}
    assert faults({**sound, "name": "ours"}, Outer) == {"/name/deep": ("own_code", "not this one")}
    assert faults({**sound, "name": "plain"}, Outer) == {"/name": ("not_allowed", "in plain words")}
    assert faults({**sound, "name": "half"}, Outer) == {"/name": ("missing", "the other half is missing")}
    assert faults({**sound, "size": 4}, Outer) == {"/size": ("out_of_range", "4 is not at most 3")}
    assert faults({**sound, "size": 0.5}, Outer)["/size"][0] == "wrong_type"


@pytest.mark.parametrize(
    ("location", "document", "steps"),
    [
        ((), {}, []),
        (("a", 0, "b"), {"a": [{"b": 1}]}, ["a", 0, "b"]),
        (("a", "function-after[f(), int]"), {"a": 1}, ["a"]),
        (("a", 5), {"a": [1]}, ["a"]),
        (("m", "normal", "normal"), {"m": {"family": "normal", "normal": 1}}, ["m", "normal"]),
    ],
)
def test_locate(location, document, steps):
    assert locate(location, document) == steps


def test_pointer_escapes():
    assert pointer(["a/b", "~", 0]) == "/a~1b/~0/0"
    assert pointer([]) == ""


@pytest.mark.parametrize(
    ("value", "words"),
    [
        (None, "null"),
        (True, "true"),
        (0.1, "0.1"),
        (10**400, "this number"),
        ("abc", "'abc'"),
        ("y" * 41, f"'{'y' * 40}…'"),
        ({}, "an object"),
        ([], "a list"),
        (object(), "this"),
    ],
)
def test_echo(value, words):
    assert echo(value) == words
