"""Routes that tailrace is measured against: the framework's own way to the same answer, a ping, a drain."""

from typing import Any

import numpy as np
import orjson
from fastapi import FastAPI, Request
from pydantic import BaseModel

from service import calculate, problems
from service.executors import Work
from service.intake import ADAPTERS, Intake
from service.schemas.results import AllocationsAnswer
from service.settings import Settings

app = FastAPI()
SETTINGS = Settings()


class Losses(BaseModel):
    """The table as anybody would declare it."""

    kind: str
    sub_portfolios: list[dict[str, str]]
    values: list[list[float]]


class Asked(BaseModel):
    """The request of tailrace's own route."""

    losses: Losses
    measures: list[dict[str, Any]]
    include_stand_alone: bool = True


@app.get("/ping")
async def ping() -> dict[str, bool]:
    """Answer and do nothing."""
    return {"ok": True}


@app.post("/drop")
async def drop(request: Request) -> dict[str, int]:
    """Take the body and drop it."""
    size = 0
    async for chunk in request.stream():
        size += len(chunk)
    return {"bytes": size}


@app.post("/allocations")
def allocations(asked: Asked) -> AllocationsAnswer:
    """Compute by tailrace's arithmetic what the framework has decoded, and leave the answer to it."""
    values = np.asarray(asked.losses.values)
    document = asked.model_dump(exclude={"losses": {"values"}})
    document["losses"]["values"] = []
    request = ADAPTERS["allocations"].validate_json(orjson.dumps(document))
    taken = Intake("allocations", request, values)
    answer = calculate.answer(taken, Work(SETTINGS.threads), SETTINGS, problems.describe)
    assert isinstance(answer, AllocationsAnswer)
    return answer
