"""A real server in a thread, what to wait for, and what answers and problems must look like."""

import json
import math
import socket
import subprocess
from contextlib import contextmanager
from threading import Thread
from time import monotonic, sleep

import httpx
import uvicorn

from service.app import create_app
from service.problems import STATUSES
from service.settings import Settings

ELSEWHERE = 1e-12  # relative difference that another kind of processor may make
PLACES = {"pointer", "parameter", "header", "part", "row", "column"}
SMALL = {
    "losses": {
        "kind": "scenarios",
        "sub_portfolios": [{"id": "hull"}, {"id": "cargo"}],
        "values": [[1.0, 2.0], [3.0, -1.0], [5.0, 6.0], [0.0, 0.5]],
    },
    "measures": [{"kind": "expected_shortfall", "level": 0.5}],
}


@contextmanager
def running(**settings):
    """Serve an app with these settings on a free port of the loopback and give a client of it."""
    app = create_app(Settings(**settings))
    listener = socket.create_server(("127.0.0.1", 0))
    listener.setsockopt(socket.IPPROTO_TCP, socket.TCP_NODELAY, 1)  # else each answer waits 40 ms for the client's ACK
    server = uvicorn.Server(uvicorn.Config(app, log_config=None, access_log=False, server_header=False))
    thread = Thread(target=server.run, kwargs={"sockets": [listener]})
    thread.start()
    deadline = monotonic() + 20
    while not server.started and monotonic() < deadline:
        sleep(0.005)
    try:
        with httpx.Client(base_url=f"http://127.0.0.1:{listener.getsockname()[1]}", timeout=20) as client:
            yield client
    finally:
        server.should_exit = True
        thread.join(20)
        listener.close()
        assert not thread.is_alive()


def until(condition, seconds=10):
    """Wait until something is so."""
    deadline = monotonic() + seconds
    while not condition():
        assert monotonic() < deadline, "nothing happened"
        sleep(0.005)


def metric(client, name):
    """Return a number that the service counts."""
    lines = client.get("/metrics").text.splitlines()
    return next((float(line.rpartition(" ")[2]) for line in lines if line.startswith(name)), 0.0)


def alike(kept, came):
    """Compare two answers: the same but for the version and for the last digits of numbers."""
    if isinstance(kept, dict):
        names = kept.keys() - {"service_version"}
        return kept.keys() == came.keys() and all(alike(kept[name], came[name]) for name in names)
    if isinstance(kept, list):
        return len(kept) == len(came) and all(map(alike, kept, came))
    if isinstance(kept, float) and isinstance(came, float):
        return math.isclose(kept, came, rel_tol=ELSEWHERE, abs_tol=1e-9)
    return kept == came


def assert_problem(response, code, **place):
    """Check the shape of a problem of this code; with a place, that its first error stands there."""
    assert response.headers["content-type"] == "application/problem+json"
    assert response.status_code == STATUSES[code]
    problem = response.json()
    assert {"type", "title", "status", "detail", "instance", "errors"} <= problem.keys()
    assert problem.keys() - {"limit"} == {"type", "title", "status", "detail", "instance", "errors"}
    assert problem["type"] == f"/problems/{code}"
    assert problem["status"] == response.status_code
    assert problem["instance"] == response.headers["x-request-id"]
    assert response.headers["cache-control"] == "no-store"
    assert response.headers["x-content-type-options"] == "nosniff"
    assert problem["title"]
    assert problem["detail"]
    for error in problem["errors"]:
        assert error["code"]
        assert error["detail"]
        assert error.keys() - {"code", "detail"} <= PLACES
    if "limit" in problem:
        assert problem["limit"].keys() == {"name", "allowed", "asked", "setting"}
    for word in ("Traceback", "/work", "site-packages", "pydantic"):
        assert word not in response.text
    if place:
        assert {name: problem["errors"][0].get(name) for name in place} == place
    return problem


def told_by(command, given=None):
    """Run a program that drives another one, and return the JSON that it prints."""
    done = subprocess.run(command, input=given, capture_output=True, text=True, timeout=240, check=False)
    assert done.returncode == 0, done.stderr[-2000:]
    return json.loads(done.stdout)
