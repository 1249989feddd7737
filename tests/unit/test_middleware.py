"""Request ids, the request log, common headers, and failures that nobody caught."""

import asyncio
import json
import logging

import pytest

from service.errors import Cancelled
from service.logs import JsonLine
from service.metrics import Metrics
from service.middleware import PROBLEM, REQUEST_ID, Envelope

TRACE = "00-4bf92f3577b34da6a3ce929d0e0e4736-00f067aa0ba902b7-01"


class Endpoint:
    path = "/v1/measures"


class Kept(logging.Handler):
    def __init__(self):
        super().__init__()
        self.lines = []

    def emit(self, record):
        self.lines.append(json.loads(JsonLine().format(record)))


@pytest.fixture
def log():
    logger, kept = logging.getLogger("tailrace.requests"), Kept()
    level = logger.level
    logger.addHandler(kept)
    logger.setLevel(logging.INFO)
    yield kept.lines
    logger.removeHandler(kept)
    logger.setLevel(level)


def visit(app, *, method="GET", headers=(), query=b"", metrics=None):
    """Serve one request and return the messages sent."""
    sent = []
    scope = {
        "type": "http",
        "method": method,
        "path": "/secret",
        "query_string": query,
        "headers": [(name.encode(), value.encode()) for name, value in headers],
        "endpoint": Endpoint,
    }

    async def receive():
        return {"type": "http.request", "body": b"12345", "more_body": False}

    async def send(message):
        sent.append(message)

    def refuse(scope, error):
        scope[PROBLEM] = getattr(error, "code", "internal")
        return answering(503 if scope[PROBLEM] == "busy" else 500)

    asyncio.run(Envelope(app, metrics=metrics or Metrics(), refuse=refuse)(scope, receive, send))
    return sent


def answering(status=200, headers=()):
    async def app(_scope, receive, send):
        await receive()
        await send({"type": "http.response.start", "status": status, "headers": list(headers)})
        await send({"type": "http.response.body", "body": b"abc", "more_body": True})
        await send({"type": "http.response.body", "body": b"defg"})

    return app


def header(sent, name):
    return [value.decode() for key, value in sent[0]["headers"] if key == name]


def test_one_line_per_request(log):
    visit(answering(), method="POST", headers=[("traceparent", TRACE), ("x-api-key", "KEY")], query=b"a=SECRET")
    (line,) = log
    assert line["level"] == "info"
    assert line["time"].endswith("+00:00")
    assert line["method"] == "POST"
    assert line["route"] == "/v1/measures"
    assert line["status"] == 200
    assert line["bytes_in"] == 5
    assert line["bytes_out"] == 7
    assert line["duration_ms"] >= 0
    assert line["trace_id"] == "4bf92f3577b34da6a3ce929d0e0e4736"
    assert not any(word in json.dumps(line) for word in ("KEY", "SECRET", "12345", "/secret"))


@pytest.mark.parametrize("given", ["a", "3f2504e0-4f89-11d3-9a0c-0305e82c3301", "A.b_c=+/-9", "x" * 128])
def test_a_safe_request_id_is_kept(log, given):
    sent = visit(answering(), headers=[("x-request-id", given)])
    assert header(sent, b"x-request-id") == [given]
    assert log[0]["request_id"] == given


@pytest.mark.parametrize("given", ["", " ", "x" * 129, "a b", "-a", 'a"b', "a\x0bb", "<b>", "é", "//host"])
def test_any_other_is_replaced(given):
    (made,) = header(visit(answering(), headers=[("x-request-id", given)]), b"x-request-id")
    assert made != given
    assert len(made) == 32


def test_made_ids_differ():
    assert header(visit(answering()), b"x-request-id") != header(visit(answering()), b"x-request-id")


@pytest.mark.parametrize(
    "given", ["nonsense", TRACE.upper(), TRACE.replace("4bf9", "xxxx"), f"00-{'0' * 32}-{'1' * 16}-01"]
)
def test_an_unreadable_trace_is_none(log, given):
    visit(answering(), headers=[("traceparent", given)])
    assert log[0]["trace_id"] is None


@pytest.mark.parametrize(
    ("method", "status", "stored"),
    [("GET", 200, True), ("POST", 200, False), ("QUERY", 200, False), ("GET", 404, False)],
)
def test_common_headers(method, status, stored):
    sent = visit(answering(status, [(b"a", b"b")]), method=method)
    assert header(sent, b"a") == ["b"]
    assert header(sent, b"x-content-type-options") == ["nosniff"]
    assert header(sent, b"cache-control") == ([] if stored else ["no-store"])


def test_a_failure_is_answered_and_logged_without_its_words(log):
    async def app(*_):
        raise ValueError("value of a caller")

    metrics = Metrics()
    sent = visit(app, metrics=metrics)
    assert sent[0]["status"] == 500
    (line,) = log
    assert line["level"] == "error"
    assert line["error"] == "ValueError"
    assert line["problem"] == "internal"
    assert any("test_middleware.py" in place for place in line["at"])
    assert "caller" not in json.dumps(line)
    assert b'tailrace_refused_total{reason="internal"} 1.0' in metrics.exposition()


def test_a_failure_amid_the_answer_ends_it(log):
    async def app(_scope, _receive, send):
        await send({"type": "http.response.start", "status": 200, "headers": []})
        raise ValueError

    sent = visit(app)
    assert [message["type"] for message in sent] == ["http.response.start"]
    assert log[0]["level"] == "error"


def test_nobody_is_answered_who_has_left(log):
    async def app(*_):
        raise Cancelled("gone")

    assert visit(app) == []
    assert log[0]["status"] == 499


def test_who_still_waits_when_the_server_stops_is_told(log):
    async def app(*_):
        raise asyncio.CancelledError

    assert visit(app)[0]["status"] == 503
    assert log[0]["problem"] == "busy"


def test_other_scopes_pass():
    seen = []

    async def app(scope, _receive, _send):
        seen.append(scope)

    asyncio.run(Envelope(app, metrics=Metrics(), refuse=None)({"type": "lifespan"}, None, None))
    assert seen == [{"type": "lifespan"}]


def test_the_request_id_is_in_the_scope():
    seen = {}

    async def app(scope, receive, send):
        seen.update(scope)
        await answering()(scope, receive, send)

    visit(app, headers=[("x-request-id", "abc")])
    assert seen[REQUEST_ID] == "abc"


def test_other_records_are_lines_too():
    record = logging.LogRecord("uvicorn.error", logging.WARNING, __file__, 1, "half \ud800 of %s", ("it",), None)
    line = json.loads(JsonLine().format(record))
    assert line["message"] == "half ? of it"
    assert line["logger"] == "uvicorn.error"
    with pytest.raises(KeyError) as caught:
        {}["words"]
    record.exc_info = caught._excinfo
    line = json.loads(JsonLine().format(record))
    assert line["error"] == "KeyError"
    assert "words" not in json.dumps(line)
