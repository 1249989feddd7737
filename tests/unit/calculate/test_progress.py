"""Fractions of work done never go back, and the last of them is the whole."""

import numpy as np
import pytest

from service.executors import Work
from tests.asking import answered, es, factor_model, law, linear, var

LOSSES = factor_model(
    {"x": law("lognormal", mu=0.0, sigma=1.0)},
    {"a": {"components": [linear(x=1.0)], "attributes": {"g": "one"}}, "b": linear(x=2.0)},
    scenarios=80_000,
)
TABLE = {
    "kind": "scenarios",
    "sub_portfolios": [{"id": "a"}, {"id": "b"}],
    "values": np.random.Generator(np.random.Philox(1)).standard_normal((20_000, 2)).tolist(),
}
STOPPING = LOSSES | {
    "simulation": {"stop_when": {"relative_standard_error": 0.01, "max_scenarios": 400_000}},
}
MEASURES = [es(0.99), var(0.99)]
CANDIDATES = [{"id": f"c{number}", "components": [linear(x=1.0)]} for number in range(10)]
REQUESTS = {
    "measures": ("measures", {"losses": LOSSES, "measures": MEASURES, "group_by": ["g"]}),
    "a table": ("measures", {"losses": TABLE, "measures": MEASURES}),
    "rules": ("allocations", {"losses": LOSSES, "measures": MEASURES, "rules": ["euler", "with_without", "shapley"]}),
    "stopping": ("allocations", {"losses": STOPPING, "measures": MEASURES}),
    "increments": ("increments", {"losses": LOSSES, "measures": MEASURES, "candidates": CANDIDATES}),
    "comparisons": ("comparisons", {"before": LOSSES, "after": LOSSES, "measures": MEASURES}),
}


@pytest.mark.parametrize(("calculation", "request_"), REQUESTS.values(), ids=REQUESTS)
@pytest.mark.parametrize("threads", [1, 3])
@pytest.mark.parametrize("memory", [1 << 30, 1 << 20], ids=["held", "streamed"])
def test_progress(calculation, request_, threads, memory):
    if memory == 1 << 20 and (calculation == "increments" or "rules" in request_):
        return  # these need all losses at hand
    told = []
    answered(
        calculation,
        request_,
        work=Work(threads, lambda fraction=0.0, /: told.append(fraction)),
        max_memory_bytes=memory,
    )
    assert told == sorted(told)
    assert told[0] < 0.1
    assert told[-1] == pytest.approx(1.0)
    if request_.get("losses") is not TABLE:  # which is read in one piece
        assert np.diff(told).max() < 0.5
