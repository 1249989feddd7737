"""From an exception to the answer: the only place that knows both the domain's errors and HTTP's statuses."""

import json
from typing import Any

from fastapi import FastAPI
from starlette.exceptions import HTTPException
from starlette.requests import Request
from starlette.responses import Response
from starlette.routing import Match

from service import errors
from service.errors import Fault, TailraceError
from service.middleware import PROBLEM, REQUEST_ID, App, Scope
from service.pages.problems import PROBLEM_PAGES

MEDIA_TYPE = "application/problem+json"

PROBLEMS: dict[type[TailraceError], int] = {
    errors.Malformed: 400,
    errors.DigestMismatch: 400,
    errors.NotFound: 404,
    errors.MethodNotAllowed: 405,
    errors.NotAcceptable: 406,
    errors.LossesChanged: 409,
    errors.TooLarge: 413,
    errors.UnsupportedMediaType: 415,
    errors.InvalidValue: 422,
    errors.NotDefined: 422,
    errors.LimitExceeded: 422,
    errors.TooLong: 422,
    errors.Cancelled: 499,
    TailraceError: 500,
    errors.Busy: 503,
}
"""Class of error to status; a class without a row has that of the first class above it.

The titles are those of the pages.
"""

STATUSES = {error.code: status for error, status in PROBLEMS.items()}
"""Code to status, in the order of the statuses."""


def body(error: TailraceError, instance: str) -> dict[str, Any]:
    """Return the problem (RFC 9457) that tells of `error`; `instance` is the request id."""
    problem: dict[str, Any] = {
        "type": f"/problems/{error.code}",
        "title": PROBLEM_PAGES[error.code].title,
        "status": status_of(error),
        "detail": error.detail,
        "instance": instance,
        "errors": [_place(fault) for fault in error.faults],
    }
    limit = getattr(error, "limit", None)
    if limit is not None:
        problem["limit"] = {
            "name": limit.name,
            "allowed": limit.allowed,
            "asked": limit.asked,
            "setting": limit.setting,
        }
    return problem


def describe(error: TailraceError) -> dict[str, Any]:
    """Return the problem of what is refused inside an answer, whose bytes are the same for every request."""
    problem = body(error, "")
    del problem["instance"]
    return problem


def status_of(error: TailraceError) -> int:
    """Return the status of the first class above `error` that has a row."""
    return next(PROBLEMS[kind] for kind in type(error).__mro__ if kind in PROBLEMS)


def answer(scope: Scope, error: Exception) -> Response:
    """Return the answer to whatever was raised while serving the request of `scope`."""
    known = error if isinstance(error, TailraceError) else _translated(scope, error)
    scope[PROBLEM] = known.code
    # the ASCII form, since a text of the caller may hold half a surrogate pair that no UTF-8 has
    content = json.dumps(body(known, scope[REQUEST_ID]), allow_nan=False, separators=(",", ":")).encode()
    return Response(content, status_of(known), _headers(known), MEDIA_TYPE)


def refuse(scope: Scope, error: Exception) -> App:
    """As `answer`, in the shape that the middleware wants."""
    return answer(scope, error)


def install(app: FastAPI) -> None:
    """Let `app` answer with problems; what has no handler here is the middleware's."""

    async def handle(request: Request, error: Exception) -> Response:
        return answer(request.scope, error)

    app.add_exception_handler(TailraceError, handle)
    app.add_exception_handler(HTTPException, handle)


def _place(fault: Fault) -> dict[str, Any]:
    """Return what is wrong and the one way of saying where that applies."""
    names = ("pointer", "parameter", "header", "part", "row", "column")
    where = {name: value for name in names if (value := getattr(fault, name)) is not None}
    return {"code": fault.code, "detail": fault.detail, **where}


def _headers(error: TailraceError) -> dict[str, str]:
    """Return the header fields that belong to some errors."""
    if isinstance(error, errors.Busy):
        return {"retry-after": str(error.retry_after)}
    if isinstance(error, errors.MethodNotAllowed):
        return {"allow": ", ".join(error.allowed)}
    if isinstance(error, errors.UnsupportedMediaType):
        coded = any(fault.header == "Content-Encoding" for fault in error.faults)
        return {"accept-encoding": "identity"} if coded else {}
    return {}


def _translated(scope: Scope, error: Exception) -> TailraceError:
    """Return the domain's name for what the framework, or a mistake of ours, raised."""
    status = error.status_code if isinstance(error, HTTPException) else 500
    if status == 404:  # noqa: PLR2004  # statuses are names here
        return errors.NotFound("There is nothing at this path.")
    if status == 405:  # noqa: PLR2004
        allowed = _allowed(scope)
        return errors.MethodNotAllowed(f"This path takes {', '.join(allowed)}.", allowed=allowed)
    if 400 <= status < 500:  # noqa: PLR2004
        return errors.Malformed("The request cannot be read.")
    return TailraceError("The service failed; the request id finds the reason in its log.")


def _allowed(scope: Scope) -> list[str]:
    """Return the methods of all routes that match the path; the framework names those of the first."""
    found = {"OPTIONS"}
    for route in scope["app"].router.routes:
        if route.matches(scope)[0] is not Match.NONE:
            found |= set(getattr(route, "methods", None) or ())
    return sorted(found)
