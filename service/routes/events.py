"""The event stream: how far a calculation is, then its answer or its problem.

The stream begins once a part of the work is done, or after some seconds of waiting. What is refused before then is an
ordinary answer with its status; what fails later is the last event.
"""

import asyncio
import json
from collections.abc import AsyncIterator, Awaitable, Callable, Coroutine, Mapping
from time import perf_counter
from typing import Any

from starlette.requests import Request
from starlette.responses import Response
from starlette.types import Receive, Scope, Send

from service import problems
from service.errors import Busy, TailraceError
from service.representations.formats import FORMATS, Form
from service.routes.callers import watched

EVENTS = Form(
    suffix="",
    media_type="text/event-stream",
    content_type="text/event-stream",
    write=FORMATS["json"].write,
)
"""The answer as JSON inside the last event. No path ends so: the form goes by Accept alone."""

PERIOD = 0.2  # seconds between two events `progress`
SILENCE = 10.0  # seconds without an event after which a comment shows that the connection lives
COMMENT = b":\n\n"
NOTHING_HELD_BACK = {"x-accel-buffering": "no"}  # what proxies take as: send each event on at once

Job = Callable[["Progress", asyncio.Event], Coroutine[Any, Any, bytes]]


class Progress:
    """What computing threads last said of a calculation; they write, the event loop reads."""

    __slots__ = ("_began", "_fraction", "_loop", "begun")

    def __init__(self) -> None:
        self._began = perf_counter()
        self._fraction = 0.0
        self._loop = asyncio.get_running_loop()
        self.begun = asyncio.Event()
        """Set when a part of the work is done."""

    def start(self) -> None:
        """Say that the work begins now."""
        self._began = perf_counter()

    def __call__(self, fraction: float, /) -> None:
        """Say that `fraction` of the work is done."""
        if fraction > self._fraction:
            first = not self._fraction
            self._fraction = fraction  # before anybody is told to look at it
            if first:
                self._loop.call_soon_threadsafe(self.begun.set)

    def after(self, fraction: float) -> float:
        """Return the fraction done now, but no less than the one told before: threads may overtake each other."""
        return min(max(fraction, self._fraction), 1.0)

    def told(self, fraction: float, scenarios: int | None) -> dict[str, Any]:
        """Return the data of an event."""
        spent = perf_counter() - self._began
        return {
            "fraction": fraction,
            "scenarios_done": None if scenarios is None else int(fraction * scenarios),
            "scenarios": scenarios,
            "eta_seconds": round(spent * (1.0 - fraction) / fraction, 3) if fraction else None,
        }


class EventStream(Response):
    """An answer that does its work while it is sent."""

    def __init__(
        self, request: Request, job: Job, scenarios: Callable[[], int | None], headers: Mapping[str, str]
    ) -> None:
        """Answer `request` by `job`.

        Parameters
        ----------
        request : Request
            Its body has been read.
        job : callable
            Computes the data of the result; gets where to tell its progress, and the event that the caller has gone.
        scenarios : callable
            Tells the scenarios of the request once they are known.
        headers : mapping of str to str
            Besides those of the stream itself.
        """
        super().__init__(headers={**headers, **NOTHING_HELD_BACK, "content-type": EVENTS.content_type})
        del self.headers["content-length"]
        self._request, self._job, self._scenarios = request, job, scenarios

    async def __call__(self, scope: Scope, receive: Receive, send: Send) -> None:  # noqa: ARG002  # the request has it
        """Compute, and send what is to be told meanwhile.

        Raises
        ------
        Exception
            Whatever ends the work before the stream has begun; later only a mistake of ours, after its event.
        """
        progress = Progress()
        async with watched(self._request) as gone:
            job = asyncio.create_task(self._job(progress, gone))
            try:
                await _first(job, progress.begun.wait(), SILENCE)
                if job.done() and not progress.begun.is_set() and (error := job.exception()) is not None:
                    raise error
                await send({"type": "http.response.start", "status": self.status_code, "headers": self.raw_headers})
                await self._send_events(job, progress, scope, send)
            finally:
                if not job.done():
                    gone.set()
                    job.cancel()

    async def _send_events(self, job: asyncio.Task[bytes], progress: Progress, scope: Scope, send: Send) -> None:
        """Send events until the job is done, and then the last one."""

        async def send_one(event: bytes, *, last: bool = False) -> None:
            await send({"type": "http.response.body", "body": event, "more_body": not last})

        try:
            async for event in self._meanwhile(job, progress):
                await send_one(event)
            last = _event("result", await asyncio.shield(job))
        except asyncio.CancelledError:  # the server stops and waits no longer
            stopping = Busy("This process stops; send the same request again.", retry_after=1)
            await send_one(_problem(scope, stopping), last=True)
            raise
        except Exception as error:
            await send_one(_problem(scope, error), last=True)
            if not isinstance(error, TailraceError):
                raise  # for the log
        else:
            await send_one(last, last=True)

    async def _meanwhile(self, job: asyncio.Task[bytes], progress: Progress) -> AsyncIterator[bytes]:
        """Yield an event at the start and whenever more is done, and a comment where nothing is to be told."""
        shown = 1.0 if job.done() else progress.after(0.0)
        spoke = perf_counter()
        yield _told(progress, shown, self._scenarios())
        while not job.done():
            await asyncio.wait({job}, timeout=PERIOD)
            done = progress.after(shown)
            if not job.done() and done > shown:
                shown, spoke = done, perf_counter()
                yield _told(progress, shown, self._scenarios())
            elif perf_counter() - spoke >= SILENCE:
                spoke = perf_counter()
                yield COMMENT


async def _first(job: asyncio.Task[bytes], begun: Awaitable[object], seconds: float) -> None:
    """Wait until the job is done, or something begun, or time is up."""
    beginning = asyncio.ensure_future(begun)
    try:
        await asyncio.wait({job, beginning}, timeout=seconds, return_when=asyncio.FIRST_COMPLETED)
    finally:
        beginning.cancel()


def _event(name: str, data: bytes) -> bytes:
    """Return one event; JSON without white space is always one line."""
    return b"event: %s\ndata: %s\n\n" % (name.encode(), data)


def _told(progress: Progress, fraction: float, scenarios: int | None) -> bytes:
    data = json.dumps(progress.told(fraction, scenarios), separators=(",", ":"))
    return _event("progress", data.encode())


def _problem(scope: Scope, error: Exception) -> bytes:
    return _event("problem", bytes(problems.answer(scope, error).body))
