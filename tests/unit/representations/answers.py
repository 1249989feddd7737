"""Answers of a running service, from invented losses, for pictures and pages to show."""

import json
from dataclasses import dataclass
from types import SimpleNamespace
from typing import Any

import numpy as np

from service.representations.charts import marks_of, places
from service.representations.page import BookHead
from service.risk.distribution import distribution_of
from tests.serving import running

ODD = ('layer <script>alert(1)</script> & "x"', "1+1=2 'y'", "日本の地震保険", "Überseehäfen")
MEASURES = ({"kind": "value_at_risk", "level": 0.95}, {"kind": "expected_shortfall", "level": 0.9})
OF_LOSSES = ("currency", "horizon", "valuation_date", "scenarios_are")
BOOK = BookHead(name="harbour")


@dataclass(frozen=True)
class Asked:
    """An answer, what was asked, and the distribution of the total."""

    answer: Any
    measures: Any
    distribution: Any
    marks: Any


def asked(losses, ids=None, *, calculation="allocations", attributes=None, measures=MEASURES, **request):
    """Return the answer of the service on losses (n, d)."""
    losses = np.asarray(losses, dtype=float)
    ids = ids or [f"s{j}" for j in range(losses.shape[1])]
    labels = {key: request.pop(key) for key in OF_LOSSES if key in request}
    parts = [
        {"id": name, "attributes": {} if attributes is None else attributes[j], "expected_profit": 10.0 + j}
        for j, name in enumerate(ids)
    ]
    source = {"kind": "scenarios", "sub_portfolios": parts, "values": losses.tolist(), **labels}
    with running() as client:
        got = client.post(f"/v1/{calculation}", json={"losses": source, "measures": list(measures), **request})
    assert got.status_code == 200, got.text
    answer = json.loads(got.content, object_hook=lambda fields: SimpleNamespace(**fields))
    results = answer.allocations if calculation == "allocations" else answer.measures
    wanted = [as_asked(measure) for measure in measures]
    marks = marks_of(wanted, results, answer.expected_loss)
    return Asked(answer, wanted, distribution_of(losses.sum(axis=1), shown=places(marks)), marks)


def as_asked(measure):
    """Return a measure of a request as the service holds it."""
    above = measure.get("above", "zero")
    parameters = {key: value for key, value in measure.items() if key not in ("kind", "above", "label")}
    name = " ".join([measure["kind"], *(f"{value:.15g}" for value in parameters.values())])
    name += " above mean" if above == "mean" else ""
    return SimpleNamespace(name=measure.get("label", name), kind=measure["kind"], above=above, parameters=parameters)


def storms(scenarios=2000, parts=4, seed=3):
    """Return skewed losses (n, d) of which the last part is a hedge."""
    draw = np.random.default_rng(seed).lognormal(6.0, 1.0, (scenarios, parts))
    draw[:, -1] *= -0.3
    return np.round(draw, 2)
