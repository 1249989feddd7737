"""The doors beside the calculations: health, limits, metrics, and the pages that people read."""

import json
from collections.abc import Mapping, Sequence
from dataclasses import fields
from functools import partial
from typing import Any

from starlette.requests import Request
from starlette.responses import FileResponse, Response
from starlette.routing import Route

from service.desk import Desk
from service.errors import NotFound
from service.metrics import Metrics
from service.pages import docs
from service.pages.problems import problem_index, problem_page, problem_record
from service.representations.formats import best
from service.representations.page import POLICY
from service.routes.conditional import unchanged
from service.routes.doors import Handler, door
from service.settings import Settings, variable
from service.validation import CODES

HTML = "text/html; charset=utf-8"
JSON = "application/json"
A_DAY = "public, max-age=86400"


def routes(
    *, settings: Settings, desk: Desk, metrics: Metrics, statuses: Mapping[str, int], document: bytes
) -> list[Route]:
    """Return the doors of one app.

    Parameters
    ----------
    settings : Settings
    desk : Desk
    metrics : Metrics
    statuses : mapping of str to int
        Code of each problem to its status.
    document : bytes
        The OpenAPI document.
    """
    start = _said(docs.START, "text/javascript; charset=utf-8")
    limits = _said(json.dumps(limits_of(settings)), JSON)
    return [
        door("/healthz", {"GET": _alive}),
        door("/readyz", {"GET": partial(_ready, desk)}),
        door("/metrics", {"GET": partial(_metrics, metrics)}),
        door("/v1/limits", {"GET": limits}),
        door("/v1/limits.json", {"GET": limits}),
        door("/problems", {"GET": partial(_problems, statuses)}),
        door("/problems/{code}", {"GET": partial(_problem, statuses)}),
        door("/openapi.json", {"GET": _said(document, JSON)}),
        door("/docs", {"GET": _said(docs.PAGE, HTML, policy=docs.POLICY)}),
        door("/docs/start.js", {"GET": start}),
        *(door(f"/docs/{name}", {"GET": partial(_asset, name)}) for name in docs.ASSETS),
    ]


def limits_of(settings: Settings) -> list[dict[str, Any]]:
    """Return what `GET /v1/limits` answers: one row per setting that limits a caller."""
    return [
        {
            "name": spec.name,
            "value": getattr(settings, spec.name),
            "unit": spec.metadata["unit"],
            "setting": variable(spec.name),
        }
        for spec in fields(settings)
        if spec.name.startswith("max_")
    ]


def _said(content: str | bytes, media_type: str, *, policy: str | None = None) -> Handler:
    """Return a handler that always answers the same."""
    data = content.encode() if isinstance(content, str) else content
    sent = {"content-type": media_type} | ({} if policy is None else {"content-security-policy": policy})

    async def handle(request: Request) -> Response:
        return await unchanged(request, data, sent)

    return handle


async def _alive(_request: Request) -> Response:
    return Response('{"status":"alive"}', headers={"cache-control": "no-store"}, media_type=JSON)


async def _ready(desk: Desk, _request: Request) -> Response:
    desk.check()
    return Response('{"status":"ready"}', headers={"cache-control": "no-store"}, media_type=JSON)


async def _metrics(metrics: Metrics, _request: Request) -> Response:
    return Response(metrics.exposition(), headers={"cache-control": "no-store", "content-type": metrics.content_type})


async def _problems(statuses: Mapping[str, int], request: Request) -> Response:
    if _wants_json(request):
        return _record([problem_record(code, status) for code, status in statuses.items()])
    return _page(problem_index(statuses, CODES, root=_root(request)))


async def _problem(statuses: Mapping[str, int], request: Request) -> Response:
    code = request.path_params["code"]
    status = statuses.get(code)
    if status is None:
        raise NotFound("There is no problem of this name; GET /problems lists all.")
    if _wants_json(request):
        return _record(problem_record(code, status))
    return _page(problem_page(code, status, root=_root(request)))


def _root(request: Request) -> str:
    """Return the path under which the service is mounted."""
    root: str = request.scope.get("root_path", "")
    return root


async def _asset(name: str, _request: Request) -> Response:
    return FileResponse(docs.asset(name), headers={"cache-control": A_DAY}, media_type=docs.ASSETS[name])


def _wants_json(request: Request) -> bool:
    """Return whether JSON suits the caller better than a page; one who takes neither gets the page."""
    accept = ", ".join(request.headers.getlist("accept"))
    return best(accept, ("text/html", JSON)) == JSON


def _page(content: str) -> Response:
    headers = {"content-security-policy": POLICY, "vary": "Accept"}
    return Response(content, headers=headers, media_type=HTML)


def _record(content: dict[str, object] | Sequence[dict[str, object]]) -> Response:
    return Response(json.dumps(content), headers={"vary": "Accept"}, media_type=JSON)
