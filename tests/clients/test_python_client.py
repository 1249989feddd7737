"""A Python client generated from the API document: typed answers and typed problems of a running service."""

import importlib
import os
import re
import subprocess
import sys
from pathlib import Path

import pytest

from tests.serving import SMALL, running

DOCUMENT = Path(__file__).parents[2] / "service" / "openapi.json"
PACKAGE = "generated_client"
TABLE_TYPES = {"text/csv", "application/vnd.apache.arrow.stream", "application/vnd.apache.parquet"}
TABLE_DOORS = {"/v1/measures", "/v1/allocations"}  # these also take a bare table, which the generator leaves out


@pytest.fixture(scope="module")
def made(tmp_path_factory):
    """Generate the client; give what the generator said and a way to import its parts."""
    folder = tmp_path_factory.mktemp("client")
    beside = str(Path(sys.executable).parent)  # the generator calls ruff, and is a script there itself
    done = subprocess.run(
        [
            Path(beside) / "openapi-python-client",
            "generate",
            *("--path", DOCUMENT),
            *("--meta", "none"),
            *("--output-path", folder / PACKAGE),
        ],
        env={**os.environ, "PATH": os.pathsep.join([beside, os.environ.get("PATH", "")])},
        capture_output=True,
        text=True,
        timeout=240,
        check=False,
    )
    said = done.stdout + done.stderr
    assert done.returncode == 0, said[-2000:]
    sys.path.insert(0, str(folder))
    try:
        yield said, lambda name: importlib.import_module(f"{PACKAGE}.{name}")
    finally:
        sys.path.remove(str(folder))
        for name in [name for name in sys.modules if name.partition(".")[0] == PACKAGE]:
            del sys.modules[name]


@pytest.fixture(scope="module")
def server():
    with running(demo=True) as client:
        yield client


@pytest.fixture
def client(made, server):
    _, part = made
    with part("client").Client(base_url=str(server.base_url).rstrip("/")) as client:
        yield client


def test_only_bare_tables_are_left_out(made):
    said, part = made
    assert set(re.findall(r"^WARNING parsing (?:\w+ )?(\S+)", said, re.MULTILINE)) <= TABLE_DOORS
    assert set(re.findall(r"^Unsupported content type (\S+)", said, re.MULTILINE)) <= TABLE_TYPES
    assert len(re.findall(r"^WARNING", said, re.MULTILINE)) == len(re.findall(r"^Unsupported", said, re.MULTILINE))
    for operation in ("calculations.compute_allocations", "books.get_book_allocations"):
        assert callable(part(f"api.{operation}").sync_detailed)


def test_an_allocation_of_losses_sent(made, server, client):
    _, part = made
    models = part("models")
    losses = models.ScenarioLosses(
        kind="scenarios",
        sub_portfolios=[models.SubPortfolioColumn(id=one["id"]) for one in SMALL["losses"]["sub_portfolios"]],
        values=SMALL["losses"]["values"],
    )
    measure = models.ExpectedShortfall(kind="expected_shortfall", level=0.5)
    request = models.AllocationsRequest(losses=losses, measures=[measure])
    answer = part("api.calculations.compute_allocations").sync_detailed(client=client, body=request)
    assert answer.status_code == 200
    assert isinstance(answer.parsed, models.AllocationsAnswer)
    expected = server.post("/v1/allocations", json=SMALL).json()["allocations"][0]
    (result,) = answer.parsed.allocations
    assert result.total.value == expected["total"]["value"] == 7.0
    assert [(one.id, one.contribution.value) for one in result.sub_portfolios] == [
        (one["id"], one["contribution"]["value"]) for one in expected["sub_portfolios"]
    ]


def test_an_allocation_of_a_book(made, server, client):
    _, part = made
    get = part("api.books.get_book_allocations")
    kinds = part("models").GetBookAllocationsMeasureItem
    answer = get.sync("ternholm", client=client, measure=[kinds.EXPECTED_SHORTFALL], level=[0.99])
    assert isinstance(answer, part("models").AllocationsAnswer)
    expected = server.get("/v1/books/ternholm/allocations.json?measure=expected_shortfall&level=0.99").json()
    assert [one.to_dict() for one in answer.allocations] == expected["allocations"]
    assert answer.allocations[0].total.interval.lower == expected["allocations"][0]["total"]["interval"]["lower"]


def test_a_problem_is_typed(made, client):
    _, part = made
    models = part("models")
    request = models.AllocationsRequest(
        losses=models.BookLosses(kind="book", name="ternholm"),
        measures=[models.ExpectedShortfall(kind="expected_shortfall", level=99.5)],
    )
    answer = part("api.calculations.compute_allocations").sync_detailed(client=client, body=request)
    assert answer.status_code == 422
    assert isinstance(answer.parsed, models.Problem)
    assert answer.parsed.status == 422
    assert answer.parsed.errors[0].pointer == "/measures/0/level"
