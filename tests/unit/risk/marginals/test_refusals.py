"""Parameters that are refused, and the words that say why."""

import json
import re

import pytest
from pydantic import TypeAdapter, ValidationError
from typing_extensions import TypedDict

from service.risk import marginals as m
from service.validation import refusal


class Factor(TypedDict):
    marginal: m.Marginal


ADAPTER = TypeAdapter(m.Marginal)
LOGNORMAL = {"family": "lognormal", "mu": 6.0, "sigma": 1.0}
PARETO = {"family": "generalized_pareto", "shape": 0.4, "scale": 900.0, "threshold": 2000.0}
SPLICED = {"family": "spliced", "body": LOGNORMAL, "tail": PARETO, "threshold": 2000.0, "tail_probability": 0.05}

REFUSED = [
    (
        {"family": "normal", "mean": 0.0, "standard_deviation": 0.0},
        "/standard_deviation",
        "standard_deviation is above 0, not 0",
    ),
    ({"family": "normal", "mean": 0.0, "standard_deviation": -2.5}, "/standard_deviation", "is above 0, not -2.5"),
    ({"family": "normal", "mean": 1e200, "standard_deviation": 1.0}, "/mean", r"mean is at most 1e\+150 in size"),
    ({"family": "gamma", "shape": 0.0, "scale": 1.0}, "/shape", "shape is above 0, not 0"),
    ({"family": "gamma", "shape": 1e13, "scale": 1.0}, "/shape", r"shape lies between 1e-12 and 1e\+12"),
    ({"family": "gamma", "shape": 1.0, "scale": 1e-200}, "/scale", r"scale lies between 1e-150 and 1e\+150"),
    ({"family": "student_t", "df": -1.0, "location": 0.0, "scale": 1.0}, "/df", "df is above 0, not -1"),
    ({"family": "student_t", "df": 0.1, "location": 0.0, "scale": 1.0}, "", r"beyond 1e\+150 with probability 1e-20"),
    ({"family": "pareto", "shape": 1e-12, "scale": 1.0}, "", "too large to compute with"),
    ({"family": "lognormal", "mu": 0.0, "sigma": 20.0}, "", "a variance that is too large to compute with"),
    ({"family": "lognormal_by_mean", "mean": 0.0, "cv": 1.0}, "/mean", "mean is above 0, not 0"),
    ({"family": "uniform", "lower": 2.0, "upper": 2.0}, "", "lower is below upper, but 2 is not below 2"),
    ({"family": "beta", "a": 1.0, "b": 1.0, "lower": 3.0, "upper": -1.0}, "", "but 3 is not below -1"),
    ({"family": "beta", "a": 1e9, "b": 1.0, "lower": 0.0, "upper": 1.0}, "/a", r"a lies between 1e-06 and 1e\+08"),
    (
        {"family": "inverse_gaussian", "mean": 1.0, "shape": 1e-9},
        "",
        r"shape lies between 1e-08 and 1e\+12 times the mean",
    ),
    ({"family": "empirical", "values": []}, "/values", "at least 1 is needed here"),
    (
        {"family": "empirical", "values": [1.0, 2.0], "probabilities": [1.0]},
        "",
        "there are 1 probabilities of 2 values",
    ),
    (
        {"family": "empirical", "values": [1.0], "probabilities": [0.999]},
        "",
        "the probabilities sum to 1, not to 0.999",
    ),
    ({"family": "empirical", "values": [1.0, 2.0], "probabilities": [-0.5, 1.5]}, "/probabilities/0", "not at least 0"),
    ({"family": "empirical", "values": [1.0, -1e200]}, "", r"values are at most 1e\+150 in size"),
    ({"family": "empirical", "values": [1.0, "2"]}, "/values/1", "a number is needed here"),
    ({"family": "point"}, "/value", "'value' is required"),
    ({"family": "point", "value": 1.0, "values": 1.0}, "/values", "did you mean 'value'"),
    ({"family": "points", "value": 1.0}, "/family", "did you mean 'point'"),
    ({**SPLICED, "tail_probability": 1.0}, "/tail_probability", "tail_probability is above 0 and below 1, not 1"),
    ({**SPLICED, "tail_probability": 0.0}, "/tail_probability", "tail_probability is above 0 and below 1, not 0"),
    ({**SPLICED, "body": SPLICED}, "/body/family", "'spliced' is not one of normal"),
    ({**SPLICED, "tail": SPLICED}, "/tail/family", "'spliced' is not one of normal"),
    ({**SPLICED, "threshold": -1.0}, "", "threshold -1 lies outside the tail, whose values go from 2000 to infinity"),
    ({**SPLICED, "threshold": 1999.0}, "", "threshold 1999 lies outside the tail"),
    (
        {**SPLICED, "body": {"family": "uniform", "lower": 0.0, "upper": 100.0}},
        "",
        "threshold 2000 lies outside the body, whose values go from 0 to 100",
    ),
    (
        {**SPLICED, "tail": LOGNORMAL, "threshold": 0.0},
        "",
        "the body has no probability at or below threshold 0",
    ),
    (
        {**SPLICED, "tail": {"family": "uniform", "lower": 0.0, "upper": 2000.0}},
        "",
        "the tail has no probability beyond threshold 2000",
    ),
    (
        {**SPLICED, "body": {"family": "empirical", "values": [3000.0]}},
        "",
        "the body has no probability at or below threshold 2000",
    ),
]


@pytest.mark.parametrize(
    ("document", "pointer", "words"),
    REFUSED,
    ids=[f"{document['family']}-{number}" for number, (document, _, _) in enumerate(REFUSED)],
)
def test_refused_with_words(document, pointer, words):
    factor = {"marginal": document}
    with pytest.raises(ValidationError) as caught:
        TypeAdapter(Factor).validate_json(json.dumps(factor))
    fault = refusal(caught.value, factor, Factor).faults[0]
    assert fault.pointer == "/marginal" + pointer
    assert re.search(words, fault.detail)


@pytest.mark.parametrize("word", ["NaN", "Infinity", "-Infinity", "1e999"])
def test_numbers_that_are_not_finite(word):
    with pytest.raises(ValidationError, match="finite number"):
        ADAPTER.validate_json(f'{{"family": "exponential", "mean": {word}}}')


def test_too_many_values():
    with pytest.raises(ValidationError, match="at most 1000000 items"):
        ADAPTER.validate_json(json.dumps({"family": "empirical", "values": [1.0] * 1_000_001}))


def test_gaps_are_left_to_discrete_parts():
    body = {"family": "empirical", "values": [10.0, 30.0]}
    law = ADAPTER.validate_json(json.dumps({**SPLICED, "body": body}))
    assert law.support == (10.0, float("inf"))
