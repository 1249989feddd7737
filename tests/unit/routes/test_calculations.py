"""The calculations over HTTP: forms, headers, and every way in which a request can fail."""

import hashlib
import io
import json
import socket
from base64 import b64encode
from threading import Event, Thread, current_thread
from time import sleep

import numpy as np
import pyarrow as pa
import pytest
from pyarrow import parquet

from service import calculate
from service.errors import NotDefined
from service.routes import calculations
from tests.asking import factor_model, law, linear
from tests.serving import SMALL, assert_problem, metric, running, until

JSON = {"content-type": "application/json"}
BODY = json.dumps(SMALL).encode()
LARGE = json.dumps(
    {**SMALL, "losses": {**SMALL["losses"], "values": [[float(row), 1.5] for row in range(20_000)]}}
).encode()


@pytest.fixture(scope="module")
def client():
    with running(max_body_bytes=1 << 20, max_cells=1_000_000) as client:
        yield client


def digest(algorithm, body):
    name = algorithm.replace("-", "")
    return f"{algorithm}=:{b64encode(hashlib.new(name, body).digest()).decode()}:"


@pytest.mark.parametrize("path", ["/v1/measures", "/v1/allocations"])
@pytest.mark.parametrize("method", ["POST", "QUERY"])
def test_json_is_the_default_form(client, path, method):
    response = client.request(method, path, content=BODY, headers=JSON)
    assert response.status_code == 200
    assert response.headers["content-type"] == "application/json"
    assert response.headers["vary"] == "Accept"
    assert response.headers["cache-control"] == "no-store"
    assert int(response.headers["content-length"]) == len(response.content)
    spent = [part.split(";")[0] for part in response.headers["server-timing"].split(", ")]
    assert sorted(spent) == ["compute", "decode", "read", "wait", "write"]
    result = response.json()[path.rpartition("/")[2]][0]
    assert result["total"]["value"] == pytest.approx(7.0, rel=1e-15)


@pytest.mark.parametrize("path", ["/v1/measures.csv", "/v1/allocations.csv?bom=0", "/v1/measures?refresh=7"])
def test_csv_by_suffix_or_accept(client, path):
    accept = "application/json" if ".csv" in path else "text/csv"
    response = client.post(path, content=BODY, headers={**JSON, "accept": accept})
    assert response.headers["content-type"] == "text/csv; charset=utf-8; header=present"
    lines = response.content.split(b"\r\n")
    assert lines[0].startswith(b'"measure",')
    assert lines[1].startswith(b'"expected_shortfall 0.5",')
    assert lines[-1] == b""


def test_byte_order_mark_if_asked(client):
    plain = client.post("/v1/measures.csv", content=BODY, headers=JSON).content
    marked = client.post("/v1/measures.csv?bom=1", content=BODY, headers=JSON).content
    assert marked == b"\xef\xbb\xbf" + plain


def test_large_bodies_give_the_bytes_of_small_ones(client, monkeypatch):
    assert len(LARGE) > calculations.SHORT_BODY
    in_a_thread = client.post("/v1/measures", content=LARGE, headers=JSON)
    monkeypatch.setattr(calculations, "SHORT_BODY", len(LARGE))
    at_once = client.post("/v1/measures", content=LARGE, headers=JSON)
    assert in_a_thread.status_code == 200
    assert in_a_thread.content == at_once.content


def test_scenarios_are_counted(client):
    before = metric(client, "tailrace_scenarios_total")
    client.post("/v1/measures", content=BODY, headers=JSON)
    assert metric(client, "tailrace_scenarios_total") == before + 4


@pytest.mark.parametrize("accept", ["text/event-stream;q=0", "application/json;q=0, text/html", "audio/*"])
def test_not_acceptable_comes_before_reading(client, accept):
    response = client.post("/v1/measures", content=b"{", headers={**JSON, "accept": accept})
    problem = assert_problem(response, "not_acceptable", header="Accept")
    assert "application/json, text/csv" in problem["detail"]


def test_unknown_suffix_is_not_found(client):
    assert_problem(client.post("/v1/measures.pdf", content=BODY, headers=JSON), "not_found")


@pytest.mark.parametrize("method", ["GET", "HEAD", "PUT", "DELETE", "PATCH", "LOCK"])
def test_other_methods_are_told_which_there_are(client, method):
    response = client.request(method, "/v1/measures")
    assert response.status_code == 405
    assert response.headers["allow"] == "OPTIONS, POST, QUERY"
    if method != "HEAD":
        assert_problem(response, "method_not_allowed")


@pytest.mark.parametrize("path", ["/v1/measures", "/v1/allocations.csv"])
def test_options_tells_what_is_taken(client, path):
    response = client.options(path)
    assert response.status_code == 204
    assert response.headers["allow"] == "OPTIONS, POST, QUERY"
    assert "text/csv" in response.headers["accept-post"]
    assert response.content == b""


@pytest.mark.parametrize("coding", ["gzip", "zstd", "gzip, identity"])
def test_codings_are_refused(client, coding):
    response = client.post("/v1/measures", content=BODY, headers={**JSON, "content-encoding": coding})
    assert_problem(response, "unsupported_media_type", header="Content-Encoding")
    assert response.headers["accept-encoding"] == "identity"


def test_a_body_without_a_type_is_told_the_header(client):
    for sent in ("application/x-www-form-urlencoded", ""):  # the first is what curl says of itself
        problem = client.post("/v1/measures", content=BODY, headers={"content-type": sent}).json()
        assert "send the header Content-Type: application/json or, " in problem["detail"]
        assert "text/csv" in problem["detail"]


@pytest.mark.parametrize("media_type", ["text/plain", "application/xml", "nonsense", ""])
def test_other_media_types_are_refused(client, media_type):
    response = client.post("/v1/measures", content=BODY, headers={"content-type": media_type})
    assert_problem(response, "unsupported_media_type", header="Content-Type")


def test_a_body_that_says_it_is_too_large_is_not_read(client):
    with socket.create_connection((client.base_url.host, client.base_url.port), timeout=10) as raw:
        raw.sendall(b"POST /v1/measures HTTP/1.1\r\nhost: a\r\ncontent-length: 1048577\r\n\r\n")
        assert raw.recv(4096).startswith(b"HTTP/1.1 413 ")


def test_too_large_names_the_limit(client):
    response = client.post("/v1/measures", content=b" " * ((1 << 20) + 1), headers=JSON)
    limit = assert_problem(response, "too_large")["limit"]
    assert limit == {
        "name": "max_body_bytes",
        "allowed": 1 << 20,
        "asked": (1 << 20) + 1,
        "setting": "TAILRACE_MAX_BODY_BYTES",
    }


def test_too_large_without_a_length_is_seen_while_reading(client):
    response = client.post("/v1/measures", content=(b" " * 65536 for _ in range(40)), headers=JSON)
    assert assert_problem(response, "too_large")["limit"]["asked"] is None


def test_a_body_in_pieces_is_put_together(client):
    pieces = (BODY[start : start + 10] for start in range(0, len(BODY), 10))
    response = client.post("/v1/measures", content=pieces, headers=JSON)
    assert response.content == client.post("/v1/measures", content=BODY, headers=JSON).content


@pytest.mark.parametrize(
    "header",
    [
        digest("sha-256", BODY),
        digest("sha-512", BODY),
        f"md5=:AAAA:, {digest('sha-256', BODY)} ,{digest('sha-512', BODY)}",
        "unixsum=:AAAA:",
    ],
)
def test_right_digests_pass(client, header):
    response = client.post("/v1/measures", content=BODY, headers={**JSON, "content-digest": header})
    assert response.status_code == 200


@pytest.mark.parametrize(
    "header",
    [digest("sha-256", BODY + b" "), f"{digest('sha-256', BODY)}, {digest('sha-512', b'')}", "sha-256=::"],
)
def test_wrong_digests_are_refused(client, header):
    response = client.post("/v1/measures", content=BODY, headers={**JSON, "content-digest": header})
    assert_problem(response, "digest_mismatch", header="Content-Digest")


@pytest.mark.parametrize("header", ["sha-256=abc", "sha-256=:a:", "nonsense", "sha-256=:AA==:,", "=:AA==:"])
def test_unreadable_digests_are_malformed(client, header):
    response = client.post("/v1/measures", content=BODY, headers={**JSON, "content-digest": header})
    assert_problem(response, "malformed", header="Content-Digest")


@pytest.mark.parametrize("body", [b"", b"{", b"\xff", b"[1", b'{"a":1}x'])
def test_broken_json_is_malformed(client, body):
    assert_problem(client.post("/v1/measures", content=body, headers=JSON), "malformed")


def test_wrong_values_are_pointed_at(client):
    wrong = {**SMALL, "measures": [{"kind": "expected_shortfall", "lvel": 0.99}]}
    problem = assert_problem(client.post("/v1/measures", json=wrong), "invalid_value")
    assert {error["pointer"] for error in problem["errors"]} == {"/measures/0/level", "/measures/0/lvel"}
    assert any("did you mean 'level'?" in error["detail"] for error in problem["errors"])


@pytest.mark.parametrize("query", ["level=0.99", "bon=1", "bom=1&Bom=1"])
def test_parameters_beside_json_are_refused(client, query):
    response = client.post(f"/v1/measures?{query}", content=BODY, headers=JSON)
    assert "parameter" in assert_problem(response, "invalid_value")["errors"][0]


@pytest.mark.parametrize("query", ["bom=2", "bom=", "bom=1&bom=1"])
def test_bom_is_zero_or_one(client, query):
    response = client.post(f"/v1/measures.csv?{query}", content=BODY, headers=JSON)
    assert_problem(response, "invalid_value", parameter="bom")


def test_half_a_surrogate_pair_does_not_break_the_answer(client):
    body = BODY.replace(b"expected_shortfall", b"\\ud800")
    response = client.post("/v1/measures", content=body, headers=JSON)
    assert response.status_code in (400, 422)
    assert_problem(response, response.json()["type"].rpartition("/")[2])


def test_what_the_arithmetic_refuses(client, monkeypatch):
    def refuse(*_):
        raise NotDefined.at("/measures/0", "has no value")

    monkeypatch.setattr(calculate, "answer", refuse)
    response = client.post("/v1/measures", content=BODY, headers=JSON)
    assert_problem(response, "not_defined", pointer="/measures/0")


@pytest.mark.parametrize("body", [BODY, LARGE], ids=["at once", "in a thread"])
def test_a_failure_tells_nothing(client, monkeypatch, body):
    def fail(*_):
        raise KeyError("secret of the caller")

    monkeypatch.setattr(calculate, "answer", fail)
    response = client.post("/v1/measures", content=body, headers=JSON)
    assert_problem(response, "internal")
    assert "secret" not in response.text


def test_numbers_that_are_not_finite_never_leave(client, monkeypatch):
    answer = calculate.answer

    def spoil(*arguments):
        made = answer(*arguments)
        object.__setattr__(made.expected_loss, "value", float("nan"))
        return made

    monkeypatch.setattr(calculate, "answer", spoil)
    assert_problem(client.post("/v1/measures", content=BODY, headers=JSON), "internal")


def endless(started=None):
    def work_on(_intake, work, *_):
        if started is not None:
            started.set()
        while True:
            work.checkpoint()
            sleep(0.002)

    return work_on


@pytest.mark.parametrize("header", ["wait=0", "respond-async, wait=0", 'handling=strict; wait="0"'])
@pytest.mark.parametrize("body", [BODY, LARGE], ids=["at once", "in a thread"])
def test_prefer_lowers_the_time_allowed(client, monkeypatch, header, body):
    monkeypatch.setattr(calculate, "answer", endless())
    response = client.post("/v1/measures", content=body, headers={**JSON, "prefer": header})
    limit = assert_problem(response, "too_long")["limit"]
    assert limit == {"name": "max_seconds", "allowed": 0.0, "asked": None, "setting": "TAILRACE_MAX_SECONDS"}


def test_preferences_that_were_applied_are_told(client):
    response = client.post("/v1/measures", content=BODY, headers={**JSON, "prefer": "wait=30"})
    assert response.headers["preference-applied"] == "wait=30"
    response = client.post("/v1/measures", content=BODY, headers={**JSON, "prefer": "wait=100000"})
    assert response.headers["preference-applied"] == "wait=60"
    response = client.post("/v1/measures", content=BODY, headers={**JSON, "prefer": "wait=soon, await=1"})
    assert response.status_code == 200
    assert "preference-applied" not in response.headers


def test_the_server_has_a_limit_of_its_own(monkeypatch):
    monkeypatch.setattr(calculate, "answer", endless())
    with running(max_seconds=0.05) as client:
        response = client.post("/v1/measures", content=LARGE, headers={**JSON, "prefer": "wait=60"})
        assert assert_problem(response, "too_long")["limit"]["allowed"] == 0.05


def test_busy_when_all_places_are_taken(monkeypatch):
    finish, answer = Event(), calculate.answer

    def wait(*arguments):
        finish.wait(20)
        return answer(*arguments)

    monkeypatch.setattr(calculate, "answer", wait)
    answers = []
    with running(max_concurrent=1, max_waiting=1) as client:

        def send():
            answers.append(client.post("/v1/measures", content=LARGE, headers=JSON).status_code)

        senders = [Thread(target=send) for _ in range(2)]
        for sender in senders:
            sender.start()
        until(lambda: metric(client, "tailrace_calculations_waiting") == 1)
        assert metric(client, "tailrace_calculations_in_flight") == 1
        for refused in (client.post("/v1/measures", content=BODY, headers=JSON), client.get("/readyz")):
            assert_problem(refused, "busy")
            assert int(refused.headers["retry-after"]) >= 1
        assert client.get("/healthz").status_code == 200
        finish.set()
        for sender in senders:
            sender.join(20)
        assert answers == [200, 200]
        assert client.get("/readyz").status_code == 200
        assert metric(client, 'tailrace_refused_total{reason="busy"}') == 2


def raw_request(client, body, length=None):
    connection = socket.create_connection((client.base_url.host, client.base_url.port), timeout=10)
    fields = f"host: a\r\ncontent-type: application/json\r\ncontent-length: {length or len(body)}"
    connection.sendall(f"POST /v1/measures HTTP/1.1\r\n{fields}\r\n\r\n".encode() + body)
    return connection


def cancelled(client):
    return metric(client, 'tailrace_refused_total{reason="cancelled"}')


def test_work_stops_when_the_caller_leaves(client, monkeypatch):
    started, before = Event(), cancelled(client)
    monkeypatch.setattr(calculate, "answer", endless(started))
    with raw_request(client, LARGE):
        assert started.wait(10)
    until(lambda: metric(client, "tailrace_calculations_in_flight") == 0)
    until(lambda: cancelled(client) == before + 1)


def test_waiting_ends_when_the_caller_leaves(monkeypatch):
    finish, answer = Event(), calculate.answer

    def wait(*arguments):
        finish.wait(20)
        return answer(*arguments)

    monkeypatch.setattr(calculate, "answer", wait)
    with running(max_concurrent=1, max_waiting=2) as client, raw_request(client, LARGE) as first:
        until(lambda: metric(client, "tailrace_calculations_in_flight") == 1)
        with raw_request(client, LARGE):
            until(lambda: metric(client, "tailrace_calculations_waiting") == 1)
        until(lambda: metric(client, "tailrace_calculations_waiting") == 0)
        finish.set()
        assert first.recv(64).startswith(b"HTTP/1.1 200 ")


def test_a_caller_who_leaves_while_sending_is_dropped(client):
    before = cancelled(client)
    raw_request(client, BODY, length=len(BODY) + 100).close()
    until(lambda: cancelled(client) == before + 1)
    assert client.post("/v1/measures", content=BODY, headers=JSON).status_code == 200


def test_columns_that_are_hardly_sub_portfolios_are_noted(client):
    def notes(header, query=""):
        table = f"{header}\n" + "".join(f"{k},{2 * k},{3 * k}\n" for k in range(1, 40))
        path = f"/v1/measures?measure=expected_shortfall&level=0.5{query}"
        answer = client.post(path, content=table, headers={"content-type": "text/csv"}).json()
        return [note for note in answer["notes"] if note["code"] == "column_taken"]

    assert notes("hull,cargo,quay") == []
    assert notes("hull,cargo,total", "&ignore_columns=total") == []
    [note] = notes("Scenario,hull,Total")
    assert note["pointer"] is None
    assert "'Scenario', 'Total'" in note["detail"]


def wide_table():
    """Return few rows of many columns, each of which is looked at alone."""
    return b"\n".join(b",".join(b"%s%d" % (name, k) for k in range(500)) for name in (b"s", b"", b"1")) + b"\n"


def packed_densely():
    """Return a Parquet file of few bytes and many equal losses."""
    made = io.BytesIO()
    parquet.write_table(pa.table({"hull": np.zeros(200_000), "quay": np.ones(200_000)}), made, compression="zstd")
    return made.getvalue()


MODEL = factor_model(
    {"sea": law("normal", mean=0.0, standard_deviation=1.0)}, {"hull": linear(sea=1.0)}, scenarios=9000
)
OBSERVED = {
    "kind": "history",
    "factors": ["sea"],
    "changes": [[0.1 * k] for k in range(20)],
    "sub_portfolios": MODEL["sub_portfolios"],
}
PARQUET = {"content-type": "application/vnd.apache.parquet"}
BY_QUERY = "/v1/measures?measure=expected_shortfall&level=0.5"


@pytest.mark.parametrize(
    ("path", "body", "headers", "in_thread"),
    [
        ("/v1/measures", BODY, JSON, False),
        (BY_QUERY, b"hull,quay\n1,2\n3,4\n", {"content-type": "text/csv"}, False),
        ("/v1/measures", LARGE, JSON, True),
        ("/v1/measures", json.dumps({**SMALL, "losses": MODEL}).encode(), JSON, True),
        ("/v1/measures", json.dumps({**SMALL, "losses": OBSERVED}).encode(), JSON, True),
        (BY_QUERY, packed_densely(), PARQUET, True),
        (BY_QUERY, wide_table(), {"content-type": "text/csv"}, True),
    ],
    ids=["small", "small table", "large", "model", "history", "packed densely", "wide"],
)
def test_the_event_loop_does_small_work_alone(client, monkeypatch, path, body, headers, in_thread):
    """A small body may ask for much: a simulation, or a table that unpacks to many losses."""
    threads, answer = [], calculate.answer

    def noted(*arguments):
        threads.append(current_thread().name)
        return answer(*arguments)

    monkeypatch.setattr(calculate, "answer", noted)
    response = client.post(path, content=body, headers=headers)
    assert response.status_code == 200, response.text
    assert [name.startswith("tailrace-desk") for name in threads] == [in_thread]
