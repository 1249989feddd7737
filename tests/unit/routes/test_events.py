"""The event stream against a live server: progress, then exactly one result or problem."""

import json
import signal
from itertools import chain, pairwise
from threading import Event, Thread
from time import monotonic, sleep

import httpx
import pytest

from service import calculate
from service.errors import NotDefined
from service.problems import STATUSES
from service.routes import events
from tests.serving import SMALL, assert_problem, metric, running, until
from tests.unit.test_serve import serving

ASK = {"accept": "text/event-stream", "content-type": "application/json"}
BODY = json.dumps(SMALL).encode()
LARGE = BODY + b" " * 200_000  # too long to be read before there is a place
SIMULATED = {
    "losses": {
        "kind": "factors",
        "factors": [{"id": "sea", "marginal": {"family": "normal", "mean": 0, "standard_deviation": 1}}],
        "sub_portfolios": [
            {"id": "hull", "components": [{"kind": "linear", "exposures": [{"factor": "sea", "amount": 2}]}]},
            {
                "id": "cargo",
                "components": [{"kind": "idiosyncratic", "marginal": {"family": "exponential", "mean": 3}}],
            },
        ],
        "simulation": {"scenarios": 400_000},
    },
    "measures": [{"kind": "expected_shortfall", "level": 0.99}],
}


@pytest.fixture(scope="module")
def client():
    with running(max_cells=1_000_000) as client:
        yield client


def read(lines):
    """Return (seconds since the first line, name, data) of each event; a comment is named so."""
    found, name, began = [], None, monotonic()
    for line in lines:
        if line.startswith(":"):
            found.append((monotonic() - began, "comment", None))
        elif line.startswith("event: "):
            name = line.removeprefix("event: ")
        elif line.startswith("data: "):
            found.append((monotonic() - began, name, json.loads(line.removeprefix("data: "))))
        else:
            assert line == ""
    return found


def stream(client, path="/v1/measures", content=BODY, **headers):
    """Return the response and its events."""
    with client.stream("POST", path, content=content, headers={**ASK, **headers}) as response:
        assert response.status_code == 200, response.read()
        return response, read(response.iter_lines())


def named(found, name):
    return [data for _, event, data in found if event == name]


def assert_ends_once(found, name):
    """Check that all but the last are progress or comments, and the last is the one named."""
    assert found[-1][1] == name
    assert {event for _, event, _ in found[:-1]} <= {"progress", "comment"}
    progress = [data["fraction"] for data in named(found, "progress")]
    assert progress
    assert all(before <= after for before, after in pairwise(progress))
    assert progress[0] >= 0.0
    assert progress[-1] <= 1.0
    return found[-1][2]


def working(monkeypatch, steps, pause, then=None):
    """Let every calculation tell `steps` steps with a pause after each, and then do `then` or answer."""
    answer = calculate.answer

    def work_on(taken, work, *more):
        for step in range(1, steps + 1):
            work.checkpoint(step / steps)
            sleep(pause)
        return answer(taken, work, *more) if then is None else then()

    monkeypatch.setattr(calculate, "answer", work_on)


@pytest.mark.parametrize("path", ["/v1/measures", "/v1/allocations"])
def test_the_result_is_the_json_answer(client, path):
    plain = client.post(path, content=BODY, headers={"content-type": "application/json"})
    with client.stream("POST", path, content=BODY, headers=ASK) as response:
        text = response.read().decode()
    assert response.headers["content-type"] == "text/event-stream"
    assert response.headers["cache-control"] == "no-store"
    assert response.headers["vary"] == "Accept"
    assert response.headers["x-accel-buffering"] == "no"
    assert "content-length" not in response.headers
    assert text.startswith("event: progress\ndata: {")
    assert text.endswith(f"event: result\ndata: {plain.text}\n\n")
    assert text.count("event: result\n") == 1
    assert text.count("event: problem\n") == 0


def test_every_kind_of_calculation_and_method(client):
    losses = SMALL["losses"]
    asked = {
        "increments": {**SMALL, "candidates": [{"id": "quay", "values": [1, 2, 3, 4]}]},
        "comparisons": {"measures": SMALL["measures"], "before": losses, "after": losses},
    }
    for name, document in asked.items():
        _, found = stream(client, f"/v1/{name}", json.dumps(document).encode())
        assert name in assert_ends_once(found, "result") or "candidates" in found[-1][2]
        assert named(found, "progress")[0]["scenarios"] == 4
    table = b"hull,cargo\n1,2\n3,4\n5,6\n"
    _, found = stream(client, "/v1/measures?measure=wang&shift=1", table, **{"content-type": "text/csv"})
    assert assert_ends_once(found, "result")["scenarios"] == named(found, "progress")[0]["scenarios"] == 3
    with client.stream("QUERY", "/v1/measures", content=BODY, headers=ASK) as response:
        assert_ends_once(read(response.iter_lines()), "result")


@pytest.mark.parametrize(
    ("accept", "media_type"),
    [
        ("text/event-stream", "text/event-stream"),
        ("text/event-stream, application/json;q=0.9, */*;q=0.1", "text/event-stream"),
        ("text/event-stream;q=0.2, application/json;q=0.1", "text/event-stream"),
        ("application/json, text/event-stream", "application/json"),
        ("text/event-stream;q=0.5, text/csv;q=0.5", "text/csv; charset=utf-8; header=present"),
        ("*/*", "application/json"),
        ("text/*", "text/csv; charset=utf-8; header=present"),
        ("text/event-stream;q=0, */*", "application/json"),
    ],
)
def test_only_who_weighs_it_most_gets_a_stream(client, accept, media_type):
    response = client.post("/v1/measures", content=BODY, headers={**ASK, "accept": accept})
    assert response.headers["content-type"] == media_type


def test_the_suffix_wins(client):
    response = client.post("/v1/measures.json", content=BODY, headers=ASK)
    assert response.headers["content-type"] == "application/json"


def test_progress_of_a_simulation(client):
    _, found = stream(client, content=json.dumps(SIMULATED).encode())
    result = assert_ends_once(found, "result")
    assert result["scenarios"] == 400_000
    told = named(found, "progress")
    assert all(one["scenarios"] == 400_000 for one in told)
    assert all(one["scenarios_done"] == int(one["fraction"] * 400_000) for one in told)
    assert all(one["eta_seconds"] >= 0.0 for one in told)
    assert 0.0 < told[0]["fraction"] < 0.9
    plain = client.post("/v1/measures", json=SIMULATED)
    assert result == plain.json()


def test_progress_is_told_a_few_times_a_second(client, monkeypatch):
    working(monkeypatch, steps=150, pause=0.01)
    _, found = stream(client)
    assert_ends_once(found, "result")
    times = [seconds for seconds, event, _ in found if event == "progress"]
    assert 4 <= len(times) <= 5 * (found[-1][0] + 0.4)
    assert len({data["fraction"] for data in named(found, "progress")}) == len(times)
    left = [data["eta_seconds"] for data in named(found, "progress")]
    assert left[-1] < left[1]


def test_silence_is_broken_by_a_comment(client, monkeypatch):
    monkeypatch.setattr(events, "SILENCE", 0.3)
    working(monkeypatch, steps=1, pause=1.5)
    _, found = stream(client)
    assert_ends_once(found, "result")
    assert 2 <= len([1 for _, event, _ in found if event == "comment"]) <= 5


def test_work_that_tells_nothing_begins_after_a_while(client, monkeypatch):
    monkeypatch.setattr(events, "SILENCE", 0.2)
    finish, answer = Event(), calculate.answer

    def wait(*arguments):
        finish.wait(10)
        return answer(*arguments)

    monkeypatch.setattr(calculate, "answer", wait)
    with client.stream("POST", "/v1/measures", content=BODY, headers=ASK) as response:
        assert response.status_code == 200
        lines = response.iter_lines()
        first = next(lines)  # the work ends after it only
        finish.set()
        found = read(chain([first], lines))
    assert_ends_once(found, "result")
    assert named(found, "progress")[0] == {
        "fraction": 0.0,
        "scenarios_done": 0,
        "scenarios": 4,
        "eta_seconds": None,
    }


@pytest.mark.parametrize(
    ("content", "code"),
    [
        (b"{", "malformed"),
        (BODY.replace(b'"level": 0.5', b'"level": 99.5'), "invalid_value"),
        (json.dumps({**SMALL, "group_by": ["entity"]}).encode(), "invalid_value"),
        (BODY.replace(b'"level"', b'"lvel"'), "invalid_value"),
        (BODY.replace(b"[3.0, -1.0]", b"[3.0]"), "invalid_value"),
    ],
)
def test_what_is_refused_before_the_start_has_its_status(client, content, code):
    assert_problem(client.post("/v1/measures", content=content, headers=ASK), code)


@pytest.mark.parametrize("headers", [{"content-encoding": "gzip"}, {"content-type": "text/plain"}])
def test_headers_are_judged_as_ever(client, headers):
    response = client.post("/v1/measures", content=BODY, headers={**ASK, **headers})
    assert_problem(response, "unsupported_media_type")


def test_what_fails_later_is_the_last_event(client, monkeypatch):
    def refuse():
        raise NotDefined.at("/measures/0", "has no value")

    working(monkeypatch, steps=1, pause=0.0, then=refuse)
    refused = metric(client, 'tailrace_refused_total{reason="not_defined"}')
    response, found = stream(client)
    problem = assert_ends_once(found, "problem")
    assert problem["type"] == "/problems/not_defined"
    assert problem["status"] == STATUSES["not_defined"]
    assert problem["instance"] == response.headers["x-request-id"]
    assert problem["errors"][0]["pointer"] == "/measures/0"
    assert metric(client, 'tailrace_refused_total{reason="not_defined"}') == refused + 1


def test_a_failure_tells_nothing_but_the_log(client, monkeypatch, caplog):
    def fail():
        raise KeyError("secret of the caller")

    working(monkeypatch, steps=1, pause=0.0, then=fail)
    _, found = stream(client)
    problem = assert_ends_once(found, "problem")
    assert problem["type"] == "/problems/internal"
    assert "secret" not in json.dumps(problem)
    until(lambda: any("KeyError" in record.getMessage() for record in caplog.records))


def test_time_is_limited(client, monkeypatch):
    working(monkeypatch, steps=10_000, pause=0.005)
    response, found = stream(client, prefer="wait=1")
    assert response.headers["preference-applied"] == "wait=1"
    problem = assert_ends_once(found, "problem")
    assert problem["type"] == "/problems/too_long"
    assert problem["limit"]["name"] == "max_seconds"
    assert problem["limit"]["allowed"] == 1.0
    assert 0.5 < found[-1][0] < 3.0


def test_who_leaves_stops_the_work(client, monkeypatch):
    steps = 0

    def work_on(_taken, work, *_):
        nonlocal steps
        while True:
            steps += 1
            work.checkpoint(min(0.9, steps / 1000))
            sleep(0.005)

    monkeypatch.setattr(calculate, "answer", work_on)
    cancelled = metric(client, 'tailrace_refused_total{reason="cancelled"}')
    with client.stream("POST", "/v1/measures", content=BODY, headers=ASK) as response:
        lines = response.iter_lines()
        assert next(lines) == "event: progress"
        assert steps > 0
    left = monotonic()
    until(lambda: metric(client, "tailrace_calculations_in_flight") == 0)
    assert monotonic() - left < 1.0
    done = steps
    sleep(0.1)
    assert steps == done
    until(lambda: metric(client, 'tailrace_refused_total{reason="cancelled"}') == cancelled + 1)


def test_who_leaves_stops_a_simulation(client):
    long = {**SIMULATED, "losses": {**SIMULATED["losses"], "simulation": {"scenarios": 20_000_000}}}
    with client.stream("POST", "/v1/measures", content=json.dumps(long).encode(), headers=ASK) as response:
        assert response.status_code == 200
        assert next(response.iter_lines()) == "event: progress"
    left = monotonic()
    until(lambda: metric(client, "tailrace_calculations_in_flight") == 0)
    assert monotonic() - left < 1.0


def test_busy_comes_before_the_start(monkeypatch):
    finish, answer = Event(), calculate.answer

    def wait(*arguments):
        finish.wait(20)
        return answer(*arguments)

    monkeypatch.setattr(calculate, "answer", wait)
    monkeypatch.setattr(events, "SILENCE", 0.2)
    with running(max_concurrent=1, max_waiting=1) as client:
        found = []
        senders = [Thread(target=lambda: found.append(stream(client, content=LARGE)[1])) for _ in range(2)]
        senders[0].start()
        until(lambda: metric(client, "tailrace_calculations_in_flight") == 1)
        senders[1].start()
        until(lambda: metric(client, "tailrace_calculations_waiting") == 1)
        assert_problem(client.post("/v1/measures", content=BODY, headers=ASK), "busy")
        sleep(0.5)  # whoever waits hears so
        finish.set()
        for sender in senders:
            sender.join(20)
    waited = max(found, key=lambda one: named(one, "progress")[0]["scenarios"] is None)
    assert named(waited, "progress")[0]["scenarios"] is None
    for one in found:
        assert_ends_once(one, "result")


def test_a_server_that_stops_says_so():
    slow = """
import time
from service import calculate
def slow(_taken, work, *_):
    work.checkpoint(0.5)
    time.sleep(6)
calculate.answer = slow
"""
    with serving("--stop-seconds", "1", before=slow) as (process, client):
        with client.stream("POST", "/v1/measures", content=BODY, headers=ASK) as response:
            lines = response.iter_lines()
            assert next(lines) == "event: progress"
            process.send_signal(signal.SIGTERM)
            began = monotonic()
            found = read(["event: progress", *lines])
        assert monotonic() - began < 4.0
        assert assert_ends_once(found, "problem")["type"] == "/problems/busy"
        process.communicate(timeout=20)
        assert process.returncode == 0


def test_a_client_of_the_other_kind(client):
    """A stream can be read in pieces of any size: events are parted by empty lines."""
    with (
        httpx.Client(base_url=client.base_url) as other,
        other.stream("POST", "/v1/measures", content=BODY, headers=ASK) as response,
    ):
        text = b"".join(response.iter_bytes(chunk_size=7)).decode()
    blocks = [block for block in text.split("\n\n") if block]
    assert [block.split("\n")[0] for block in blocks][-1] == "event: result"
