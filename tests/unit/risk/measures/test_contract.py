"""The family of measures: tags, parameters, names and what is refused."""

import json
from typing import get_args

import numpy as np
import pytest
from pydantic import ValidationError

from service.risk.measures import TYPICAL, Measure, full_influence, full_values
from tests.unit.risk.arithmetic import MEASURE, measure, ordered


def test_typical_has_one_of_each():
    members = get_args(get_args(Measure.__value__)[0])
    assert [type(one) for one in TYPICAL] == list(members)
    assert len({one.name for one in TYPICAL}) == len(members)


@pytest.mark.parametrize("one", TYPICAL, ids=lambda one: one.kind)
def test_a_measure_is_what_it_is_on_the_wire(one):
    sent = json.dumps({"kind": one.kind, **one.parameters})
    assert MEASURE.validate_json(sent) == one
    assert MEASURE.validate_json(MEASURE.dump_json(one)) == one
    with pytest.raises(ValidationError, match="unexpected_keyword"):
        measure(one.kind, **one.parameters, colour=1)
    with pytest.raises(ValidationError):
        measure(one.kind, **dict.fromkeys(one.parameters or {"multiple": 1}, "0.5"))
    with pytest.raises(ValidationError):
        MEASURE.validate_json(f'{{"kind": "{one.kind}", "multiple": NaN}}')


@pytest.mark.parametrize(
    ("one", "name"),
    [
        (measure("expected_shortfall", level=0.99), "expected_shortfall 0.99"),
        (measure("expected_shortfall", level=0.99, above="mean"), "expected_shortfall 0.99 above mean"),
        (measure("standard_deviation"), "standard_deviation"),
        (measure("standard_deviation", multiple=3.0), "standard_deviation 3"),
        (measure("range_value_at_risk", lower_level=0.95, upper_level=1.0), "range_value_at_risk 0.95 1"),
        (measure("return_level", return_period=200.0), "return_level 200"),
        (measure("return_level", return_period=200.0, scenarios_per_period=4.0), "return_level 200 4"),
        (measure("wang", shift=0.5, label="Board"), "Board"),
        (measure("value_at_risk", level=1.0 - 0.9), "value_at_risk 0.1"),
    ],
)
def test_names(one, name):
    assert one.name == name


@pytest.mark.parametrize(
    ("level", "words"),
    [
        (99.5, "0.995, not 99.5"),
        (1.0, "above 0 and below 1"),  # certain, and hardly one per cent
        (1.5, "0.015, not 1.5"),
        (95.0, "0.95, not 95"),
        (0.0, "above 0 and below 1"),
        (-0.5, "above 0 and below 1"),
        (100.0, "above 0 and below 1"),
        (0.9999999999999999, "above 0 and below 1"),  # 1 in fifteen digits
    ],
)
@pytest.mark.parametrize("kind", ["value_at_risk", "expected_shortfall", "expectile"])
def test_a_percentage_is_no_level(kind, level, words):
    with pytest.raises(ValidationError, match=words):
        measure(kind, level=level)


@pytest.mark.parametrize(
    ("kind", "parameters"),
    [
        ("range_value_at_risk", {"lower_level": 0.9, "upper_level": 0.9}),
        ("range_value_at_risk", {"lower_level": 0.95, "upper_level": 0.9}),
        ("range_value_at_risk", {"lower_level": 1.0, "upper_level": 1.0}),
        ("range_value_at_risk", {"lower_level": -0.1, "upper_level": 1.0}),
        ("standard_deviation", {"multiple": 0.0}),
        ("standard_deviation", {"above": "mean"}),
        ("wang", {"shift": -0.1}),
        ("proportional_hazard", {"exponent": 0.0}),
        ("proportional_hazard", {"exponent": 1.1}),
        ("dual_power", {"exponent": 0.9}),
        ("exponential_distortion", {"aversion": 0.0}),
        ("entropic", {"aversion": -1.0}),
        ("return_level", {"return_period": 1.0}),
        ("return_level", {"return_period": 4.0, "scenarios_per_period": 0.25}),
        ("expected_shortfall", {}),
        ("shortfall", {"level": 0.9}),
        ("wang", {"shift": 0.5, "label": "=SUM(A1)"}),
        ("wang", {"shift": 0.5, "label": "a\u0007"}),
        ("wang", {"shift": 0.5, "label": "x" * 201}),
    ],
)
def test_parameters_outside_their_bounds(kind, parameters):
    with pytest.raises(ValidationError):
        measure(kind, **parameters)


@pytest.mark.parametrize("one", [one for one in TYPICAL if one.kind != "standard_deviation"], ids=lambda one: one.kind)
def test_above_mean_takes_the_mean_from_figure_and_influence(one):
    excess = measure(one.kind, **one.parameters, above="mean")
    of, _ = ordered(np.random.default_rng(1).normal(size=2000))
    assert excess.depth(2000, contributions=False) == 1.0
    assert full_values(excess, of) == pytest.approx(full_values(one, of) - of.values.mean())
    assert full_influence(excess, of).values == pytest.approx(full_influence(one, of).values - of.values)


@pytest.mark.parametrize("one", TYPICAL, ids=lambda one: one.kind)
def test_weights_give_the_figure_and_sum_to_one(one):
    """Weights of measures that move with the losses sum to 1; those of the standard deviation to 0."""
    of, _ = ordered(np.random.default_rng(2).lognormal(size=3000))
    weights = np.broadcast_to(one.weights(of), of.values.shape)
    assert weights.sum() == pytest.approx(0.0 if one.kind == "standard_deviation" else 1.0, abs=1e-12)
    if one.kind != "entropic":  # whose weights are those of its contributions
        assert (weights * of.values).sum() == pytest.approx(one.values(of)[0], rel=1e-12)
    assert (weights * of.values).sum() == pytest.approx(one.values(of)[0], rel=1e-9)


@pytest.mark.parametrize("one", TYPICAL, ids=lambda one: one.kind)
def test_several_distributions_at_once_are_each_alone(one):
    rng = np.random.default_rng(3)
    losses, p = rng.normal(size=(3, 400)), rng.random((3, 400))
    p /= p.sum(axis=1, keepdims=True)
    parts = [ordered(row, weights)[0] for row, weights in zip(losses, p, strict=True)]
    joined = type(parts[0]).of(
        np.concatenate([part.values for part in parts]),
        scenarios=400,
        probabilities=np.concatenate([part.probabilities for part in parts]),
        sampled=True,
    )
    values = one.values(joined)
    assert values == pytest.approx([one.values(part)[0] for part in parts], rel=1e-13)
    found = one.influence(joined, values).values
    expected = np.concatenate([one.influence(part, one.values(part)).values for part in parts])
    assert found == pytest.approx(expected, rel=1e-9, abs=1e-9, nan_ok=True)
