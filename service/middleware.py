"""The outermost layer: request ids, the request log, metrics, common headers, an answer to every failure.

Plain ASGI, one pass over the headers, no task of its own: this runs for every request.
"""

import asyncio
import re
from collections.abc import Awaitable, Callable, MutableMapping
from secrets import token_hex
from time import perf_counter
from typing import Any

from service.errors import Busy, Cancelled
from service.logs import REQUESTS, failure
from service.metrics import Metrics

Scope = MutableMapping[str, Any]
Message = MutableMapping[str, Any]
Receive = Callable[[], Awaitable[Message]]
Send = Callable[[Message], Awaitable[None]]
App = Callable[[Scope, Receive, Send], Awaitable[None]]

REQUEST_ID = "tailrace.request_id"  # keys of the scope
PROBLEM = "tailrace.problem"

SAFE_ID = re.compile(rb"[A-Za-z0-9][A-Za-z0-9._=+/-]{0,127}")  # also a valid relative reference (RFC 3986)
TRACE_PARENT = re.compile(rb"[0-9a-f]{2}-(?!0{32})([0-9a-f]{32})-(?!0{16})[0-9a-f]{16}-[0-9a-f]{2}")
CLIENT_CLOSED = 499  # for the log: nobody was there to read a status
UNFINISHED = 500
FIRST_ERROR = 400
NO_SNIFFING = (b"x-content-type-options", b"nosniff")
NO_STORE = (b"cache-control", b"no-store")
COMPUTING = frozenset({"POST", "QUERY"})


class Envelope:
    """Wraps an application; see the module."""

    def __init__(self, app: App, *, metrics: Metrics, refuse: Callable[[Scope, Exception], App]) -> None:
        """Wrap `app`; `refuse` makes the answer to an exception that nobody caught."""
        self.app = app
        self._metrics = metrics
        self._refuse = refuse

    async def __call__(self, scope: Scope, receive: Receive, send: Send) -> None:
        """Serve one request."""
        if scope["type"] != "http":
            await self.app(scope, receive, send)
            return
        visit = _Visit(scope, receive, send)
        try:
            await self.app(scope, visit.receive, visit.send)
        except Cancelled:
            visit.status = visit.status or CLIENT_CLOSED
        except asyncio.CancelledError:  # the server stops and waits no longer: this task ends here anyway
            if not visit.status:
                stopping = Busy("This process stops; send the same request again.", retry_after=1)
                await self._refuse(scope, stopping)(scope, receive, visit.send)
        except Exception as error:  # noqa: BLE001  # whatever it is, the caller gets an answer
            visit.failure = failure(error)
            if not visit.status:
                await self._refuse(scope, error)(scope, receive, visit.send)
        finally:
            self._record(scope, visit)

    def _record(self, scope: Scope, visit: "_Visit") -> None:
        """Write the line of the log and count the answer."""
        seconds = perf_counter() - visit.began
        method, status = scope["method"], visit.status or UNFINISHED
        route = getattr(scope.get("endpoint"), "path", None)
        self._metrics.answered(method, route, status, seconds)
        line = {
            "request_id": scope[REQUEST_ID],
            "trace_id": visit.trace_id,
            "method": method if method.isalpha() else "other",
            "route": route,
            "status": status,
            "duration_ms": round(seconds * 1e3, 3),
            "bytes_in": visit.bytes_in,
            "bytes_out": visit.bytes_out,
        }
        code = scope.get(PROBLEM)
        if code is not None:
            self._metrics.refused(code)
            line["problem"] = code
        if visit.failure is None:
            REQUESTS.info(line)
        else:
            REQUESTS.error(line | visit.failure)


class _Visit:
    """One request on its way through."""

    __slots__ = (
        "_computing",
        "_headers",
        "_receive",
        "_send",
        "began",
        "bytes_in",
        "bytes_out",
        "failure",
        "status",
        "trace_id",
    )

    def __init__(self, scope: Scope, receive: Receive, send: Send) -> None:
        self.began = perf_counter()
        self._receive = receive
        self._send = send
        self.status = self.bytes_in = self.bytes_out = 0
        self.failure: dict[str, Any] | None = None
        self.trace_id = None
        request_id = b""
        for name, value in scope["headers"]:
            if name == b"x-request-id" and SAFE_ID.fullmatch(value):
                request_id = value
            elif name == b"traceparent" and (read := TRACE_PARENT.fullmatch(value)):
                self.trace_id = read[1].decode()
        request_id = request_id or token_hex(16).encode()
        scope[REQUEST_ID] = request_id.decode()
        self._headers = [(b"x-request-id", request_id), NO_SNIFFING]
        self._computing = scope["method"] in COMPUTING

    async def receive(self) -> Message:
        """Count what comes in."""
        message = await self._receive()
        self.bytes_in += len(message.get("body", b""))
        return message

    async def send(self, message: Message) -> None:
        """Put the common headers on the answer and count what goes out."""
        if message["type"] == "http.response.start":
            self.status = message["status"]
            message["headers"] = [*message.get("headers", ()), *self._headers]
            if self._computing or self.status >= FIRST_ERROR:
                message["headers"].append(NO_STORE)
        else:
            self.bytes_out += len(message.get("body", b""))
        await self._send(message)
