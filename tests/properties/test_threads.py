"""The same bytes for any number of threads, blocks included."""

import base64
import json

import numpy as np
import pytest

from service.risk import fold, frame
from service.risk.allocation import RULES
from service.risk.measures import TYPICAL
from tests.serving import running

ROWS, COLUMNS = 1200, 7


def _body(losses, rules, measures, **more):
    data = base64.b64encode(losses.astype("<f8").tobytes()).decode()
    lines = ("hull", "cargo", "liability")
    return json.dumps(
        {
            "losses": {
                "kind": "scenarios",
                "sub_portfolios": [
                    {"id": f"s{j}", "attributes": {"line": lines[j % 3], "entity": "north" if j % 2 else "south"}}
                    for j in range(losses.shape[1])
                ],
                "packed": {"data": data, "dtype": "float64", "rows": losses.shape[0], "columns": losses.shape[1]},
                **more,
            },
            "measures": measures,
            "group_by": ["line", "entity/line"],
            "tail_detail": True,
            "rules": rules,
        }
    ).encode()


def _answered(body, threads):
    with running(threads=threads) as client:
        response = client.post("/v1/allocations", content=body, headers={"content-type": "application/json"})
    assert response.status_code == 200, response.text
    return response.content


@pytest.mark.parametrize("weighted", [False, True], ids=["equal", "weighted"])
def test_threads(monkeypatch, weighted):
    monkeypatch.setattr(fold, "BLOCK_BYTES", 1 << 14)
    monkeypatch.setattr(frame, "CHUNK_BYTES", 1 << 16)
    rng = np.random.default_rng(8)
    losses = rng.lognormal(size=(ROWS, COLUMNS)) * np.where(rng.random((ROWS, COLUMNS)) < 0.3, 1.0, 0.0)
    p = rng.integers(1, 9, ROWS) * 1.0
    more = {"probabilities": (p / p.sum()).tolist()} if weighted else {}
    rules = [rule for rule in RULES if rule != "shapley"]
    body = _body(losses, rules, [{"kind": one.kind, **one.parameters} for one in TYPICAL], **more)
    one, *others = (_answered(body, threads) for threads in (1, 2, 3))
    assert len(one) > 10_000
    assert all(other == one for other in others)


def test_threads_of_drawn_shapley_values():
    losses = np.random.default_rng(9).lognormal(size=(40, 14))
    body = _body(losses, ["shapley"], [{"kind": "expected_shortfall", "level": 0.75}])
    assert len({_answered(body, threads) for threads in (1, 3)}) == 1
