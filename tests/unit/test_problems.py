"""The body of a problem, unit by unit; every way to get one over HTTP is in routes/."""

import json

import pytest
from starlette.exceptions import HTTPException
from starlette.routing import Route

from service import errors
from service.errors import Fault, Limit
from service.middleware import PROBLEM, REQUEST_ID
from service.problems import answer, body, status_of


class Router:
    routes = (Route("/a", lambda _request: None), Route("/a", lambda _request: None, methods=["POST"]))


class App:
    router = Router


def scope():
    return {REQUEST_ID: "id-1", "app": App, "type": "http", "path": "/a", "method": "PUT", "headers": []}


def test_members():
    error = errors.InvalidValue("two are wrong", faults=[
        Fault(detail="a", code="b", pointer=""),
        Fault(detail="c", code="d", part="table", row=0, column="hull"),
    ])  # fmt: skip
    assert body(error, "id-1") == {
        "type": "/problems/invalid_value",
        "title": "A value is not allowed",
        "status": 422,
        "detail": "two are wrong",
        "instance": "id-1",
        "errors": [
            {"code": "b", "detail": "a", "pointer": ""},
            {"code": "d", "detail": "c", "part": "table", "row": 0, "column": "hull"},
        ],
    }


def test_a_limit_is_told():
    limit = Limit(name="max_cells", allowed=5, asked=6, setting="TAILRACE_MAX_CELLS")
    told = body(errors.LimitExceeded("too many", limit=limit), "")["limit"]
    assert told == {"name": "max_cells", "allowed": 5, "asked": 6, "setting": "TAILRACE_MAX_CELLS"}


def test_a_class_without_a_row_has_the_status_of_the_one_above():
    class Special(errors.NotFound):
        pass

    class Unheard(errors.CallerError):
        pass

    assert status_of(Special("x")) == 404
    assert status_of(Unheard("x")) == 500


@pytest.mark.parametrize(
    ("error", "status", "code"),
    [
        (HTTPException(404, "words"), 404, "not_found"),
        (HTTPException(405, "words"), 405, "method_not_allowed"),
        (HTTPException(400, "words"), 400, "malformed"),
        (HTTPException(418, "words"), 400, "malformed"),
        (HTTPException(502, "words"), 500, "internal"),
        (ValueError("words"), 500, "internal"),
        (errors.Busy("later", retry_after=7), 503, "busy"),
    ],
)
def test_whatever_is_raised_has_an_answer(error, status, code):
    given = scope()
    response = answer(given, error)
    problem = json.loads(response.body)
    assert response.status_code == problem["status"] == status
    assert problem["type"] == f"/problems/{code}"
    assert problem["instance"] == "id-1"
    assert given[PROBLEM] == code
    assert b"words" not in response.body
    assert response.headers.get("retry-after") == ("7" if code == "busy" else None)


def test_allow_is_that_of_all_routes_of_a_path():
    assert answer(scope(), HTTPException(405)).headers["allow"] == "GET, HEAD, OPTIONS, POST"
