"""The application: settings in, doors wired to the desk, problems and metrics."""

from collections.abc import AsyncIterator
from contextlib import asynccontextmanager
from os import environ

from fastapi import FastAPI
from starlette.datastructures import Headers
from starlette.middleware import Middleware
from starlette.middleware.cors import CORSMiddleware
from starlette.types import Receive, Scope, Send

from service import __version__, openapi, problems
from service.books import Books
from service.desk import Desk
from service.executors import keep_freed_memory
from service.metrics import Metrics
from service.middleware import FIRST_ERROR, Envelope
from service.routes import books, calculations, operations
from service.settings import Settings

ASKED_HEADERS = (
    "Authorization",
    "Content-Digest",
    "Content-Type",
    "If-None-Match",
    "Prefer",
    "X-API-Key",
    "X-Request-ID",
    "traceparent",
)
TOLD_HEADERS = ("ETag", "Retry-After", "Server-Timing", "X-Request-ID")


class Sharing(CORSMiddleware):
    """Answers the questions of browsers on behalf of other origins.

    One that asks for more than is allowed gets the answer to any OPTIONS: without the fields that allow it, a
    browser does not send the request.
    """

    async def __call__(self, scope: Scope, receive: Receive, send: Send) -> None:
        """Serve one request."""
        if scope["type"] == "http" and scope["method"] == "OPTIONS":
            headers = Headers(scope=scope)
            asked = {"origin", "access-control-request-method"} <= set(headers)
            if asked and self.preflight_response(headers).status_code >= FIRST_ERROR:
                await self.app(scope, receive, send)
                return
        await super().__call__(scope, receive, send)


def create_app(settings: Settings) -> FastAPI:
    """Return the application of one process.

    Its API page and document are doors of ours: the bodies of calculations are read in a thread and not by
    the framework, which therefore cannot describe them.
    """
    keep_freed_memory()
    metrics = Metrics()
    desk = Desk(settings)
    shelf = Books(settings)
    metrics.watch(computing=lambda: desk.computing, waiting=lambda: desk.waiting)
    document = openapi.committed()

    @asynccontextmanager
    async def life(_app: FastAPI) -> AsyncIterator[None]:
        yield
        desk.close()

    app = FastAPI(
        title="tailrace",
        version=__version__,
        lifespan=life,
        openapi_url=None,
        redirect_slashes=False,
        telemetry={"metrics": False, "logs": False},  # both are the middleware's; traces are the framework's
        middleware=[*_shared_with(settings), Middleware(Envelope, metrics=metrics, refuse=problems.refuse)],
    )
    problems.install(app)
    app.router.routes += calculations.routes(settings=settings, books=shelf, desk=desk, metrics=metrics)
    app.router.routes += books.routes(settings=settings, books=shelf, desk=desk, metrics=metrics)
    app.router.routes += operations.routes(
        settings=settings, desk=desk, metrics=metrics, statuses=problems.STATUSES, document=document
    )
    return app


def _shared_with(settings: Settings) -> list[Middleware]:
    """Return what lets pages of the origins that are set read the answers; outermost, so that errors have it too."""
    origins = [origin for part in settings.cors_origins.split(",") if (origin := part.strip())]
    if not origins:
        return []
    return [
        Middleware(
            Sharing,
            allow_origins=origins,
            allow_methods=["GET", "HEAD", "OPTIONS", "POST", "QUERY"],
            allow_headers=ASKED_HEADERS,
            expose_headers=TOLD_HEADERS,
        )
    ]


def from_environment() -> FastAPI:
    """Return the application as the environment sets it: what each process of the server makes."""
    return create_app(Settings.from_environment(environ))
