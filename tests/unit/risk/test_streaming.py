"""A simulation that streams through leaves the figures of one that is held."""

import json

import numpy as np
import pytest

from service.representations import formats
from tests.asking import answered, compound, equal, es, factor_model, law, linear, step, var
from tests.unit.working import ORDERS

SMALL = {"max_memory_bytes": 1 << 20}

LOSSES = factor_model(
    {name: law("lognormal", mu=0.0, sigma=1.0) for name in "xy"},
    {
        "hull": {"components": [linear(x=1.0)], "attributes": {"line": "ships"}},
        "quay": {  # zero but once in fifty years
            "components": [linear(y=1.0)],
            "cover": [step("layer", attachment=8.0, limit=50.0)],
            "attributes": {"line": "land"},
        },
        "rare": {  # zero but once in a thousand
            "components": [compound(law("poisson", mean=0.001), law("exponential", mean=9.0))],
            "attributes": {"line": "land"},
        },
        "whole": compound(law("poisson", mean=1.0), law("empirical", values=[1.0], probabilities=[1.0])),
        "fixed": {"kind": "constant", "amount": 3.0},
    },
    dependence=law("student_t", correlation=equal(0.5), df=4.0),
    scenarios=100_000,
)
REQUEST = {
    "losses": LOSSES,
    "measures": [
        var(0.99),
        es(0.99),
        es(0.995, label="deeper"),
        {"kind": "range_value_at_risk", "lower_level": 0.97, "upper_level": 0.99},
        {"kind": "return_level", "return_period": 250.0},
    ],
    "group_by": ["line"],
    "tail_detail": True,
}


def numbers(node):
    """Yield all numbers of a JSON document in order."""
    if isinstance(node, dict):
        node = list(node.values())
    if isinstance(node, list):
        for one in node:
            yield from numbers(one)
    elif isinstance(node, float):
        yield node


def document(calculation, request, **settings):
    return json.loads(formats.write(answered(calculation, request, **settings), formats.FORMATS["json"]))


@pytest.mark.parametrize("calculation", ["measures", "allocations"])
def test_streamed_is_held(calculation):
    held, streamed = (document(calculation, REQUEST, **settings) for settings in ({}, SMALL))
    assert streamed["provenance"] == held["provenance"]
    assert streamed["notes"] == held["notes"]
    pairs = list(zip(numbers(held), numbers(streamed), strict=True))
    assert len(pairs) > 200
    np.testing.assert_allclose(*np.transpose(pairs), rtol=1e-12, atol=1e-12)


@pytest.mark.parametrize("work", ORDERS.values(), ids=ORDERS)
@pytest.mark.parametrize("settings", [{}, SMALL], ids=["held", "streamed"])
def test_threads_and_order_change_no_byte_of_an_answer(work, settings):
    written = [
        formats.write(answered("allocations", REQUEST, work=one, **settings), formats.FORMATS["json"])
        for one in (None, work)
    ]
    assert written[0] == written[1]


def test_columns_that_are_mostly_one_value_are_exact():
    """Below their threshold lies one value only, or the column is simulated once more: exact in both cases."""
    request = {"losses": LOSSES, "measures": [es(0.9), var(0.9)]}
    held, streamed = (answered("measures", request, **settings) for settings in ({}, SMALL))
    for first, second in zip(held.measures, streamed.measures, strict=True):
        assert [one.figure.value for one in second.stand_alone] == pytest.approx(
            [one.figure.value for one in first.stand_alone], rel=1e-12
        )
    assert streamed.measures[1].stand_alone[4].figure.value == 3.0
