"""The doors of the calculations: read, calculate, represent."""

import asyncio
from dataclasses import dataclass, replace
from functools import partial
from time import perf_counter

from starlette.requests import Request
from starlette.responses import Response
from starlette.routing import Route

from service import calculate, intake, problems
from service.books import Books
from service.desk import Desk
from service.errors import LimitExceeded
from service.executors import Work
from service.intake import Intake
from service.metrics import Metrics
from service.payloads import TABLE_READERS
from service.representations import formats
from service.representations.formats import FORMS, Form
from service.routes.bodies import check_coding, check_digest, read_body
from service.routes.callers import applied, preferred_seconds, watched
from service.routes.doors import Handler, door
from service.routes.events import EVENTS, EventStream, Progress
from service.routes.forms import POLICIES, chart_asked, picture, wants_mark
from service.schemas.losses import ScenarioLosses
from service.settings import Settings

CALCULATIONS = tuple(intake.MODELS)
"""Names of the calculations; each is the last word of its path."""

SHORT_BODY = 128 * 1024
"""Bytes of a body that takes less time (about 2 ms) to read than a thread is worth."""
SHORT_CELLS = 16 * 1024
"""Cells of a table on which figures take less time than that, also where the body was packed more densely."""
SHORT_COLUMNS = 64
"""Sub-portfolios of such a table, since some rules look at each by itself."""
SHORT_WORK = 6
"""Most measures times rules, candidates and groupings of such a request."""
BODY_TYPES = ", ".join(("application/json", "multipart/form-data", *TABLE_READERS))


def routes(*, settings: Settings, books: Books, desk: Desk, metrics: Metrics) -> list[Route]:
    """Return the doors of each calculation: one that goes by Accept, and one per suffix."""
    made = []
    for name in CALCULATIONS:
        for suffix in (None, *(form.suffix for form in FORMS[name])):
            path = f"/v1/{name}" if suffix is None else f"/v1/{name}.{suffix}"
            made.append(_door(path, Calculation(name, suffix, settings, books, desk, metrics).handle))
    return made


def _door(path: str, handler: Handler) -> Route:
    return door(path, {"POST": handler, "QUERY": handler}, asked=True, accept_post=BODY_TYPES, accept_query=BODY_TYPES)


@dataclass(frozen=True, slots=True)
class Calculation:
    """One path that computes, and what it needs for that."""

    name: str
    suffix: str | None
    settings: Settings
    books: Books
    desk: Desk
    metrics: Metrics

    async def handle(self, request: Request) -> Response:
        """Answer one request; what cannot be answered is refused before it is read."""
        accept = ", ".join(request.headers.getlist("accept"))
        offered = FORMS[self.name] if self.suffix else (*FORMS[self.name], EVENTS)  # last: it must weigh most alone
        form = formats.choose(self.suffix, accept, offered)
        check_coding(request)
        self.desk.check()
        seconds = preferred_seconds(request)
        clock = _Clock()
        body = await read_body(request, self.settings.max_body_bytes)
        clock.mark("read")
        task = _Task(self, request, body, form, clock)
        headers = {"vary": "Accept"}
        if form.suffix in POLICIES:
            headers["content-security-policy"] = POLICIES[form.suffix]
        headers |= applied(seconds, self.settings)
        if form is EVENTS:
            return EventStream(request, partial(self._told, task, seconds), lambda: task.expected, headers)
        data = await self._compute(task, seconds)
        self.metrics.computed(task.scenarios)
        headers |= {"content-type": form.content_type, "server-timing": clock.told()}
        return Response(data, headers=headers)

    async def _compute(self, task: "_Task", seconds: float | None) -> bytes:
        """Compute at once what is short; else in a thread, and only while the caller is there."""
        if task.decoded_if_short() and self.desk.has_place:
            return await self.desk.run(task.run, seconds=seconds, gone=asyncio.Event(), short=True)
        async with watched(task.request) as gone:
            return await self.desk.run(task.run, seconds=seconds, gone=gone)

    async def _told(self, task: "_Task", seconds: float | None, progress: Progress, gone: asyncio.Event) -> bytes:
        """Compute in a thread and tell how far it is."""

        def run(work: Work) -> bytes:
            progress.start()
            return task.run(work)

        task.decoded_if_short()
        data = await self.desk.run(run, seconds=seconds, gone=gone, told=progress)
        self.metrics.computed(task.scenarios)
        return data


class _Clock:
    """Where the time of one request went."""

    __slots__ = ("_last", "_spent")

    def __init__(self) -> None:
        self._last = perf_counter()
        self._spent: list[str] = []

    def mark(self, name: str) -> None:
        """Put the time since the last mark down to `name`."""
        now = perf_counter()
        self._spent.append(f"{name};dur={(now - self._last) * 1e3:.3f}")
        self._last = now

    def told(self) -> str:
        """Return the Server-Timing header, in milliseconds."""
        return ", ".join(self._spent)


class _Task:
    """The work of one request: the part that may run in a thread."""

    __slots__ = ("_calculation", "_clock", "_form", "_taken", "body", "request", "scenarios")

    def __init__(self, calculation: Calculation, request: Request, body: bytes, form: Form, clock: _Clock) -> None:
        self._calculation = calculation
        self._clock = clock
        self._form = form
        self._taken: Intake | None = None
        self.body = body
        self.request = request
        self.scenarios = 0

    def decoded_if_short(self) -> bool:
        """Read the body if that is short, and return whether the rest is done in less time than a thread is worth."""
        if len(self.body) > SHORT_BODY:
            return False
        settings = self._calculation.settings
        few = min(settings.max_cells, SHORT_CELLS)
        try:
            self.decode(replace(settings, max_cells=few))
        except LimitExceeded as error:
            if few == settings.max_cells or error.limit.name != "max_cells":
                raise
            return False  # a small body that holds much, which a thread will read
        return self._is_short()

    def decode(self, settings: Settings) -> Intake:
        """Read the body as a request."""
        headers = self.request.headers
        check_digest(", ".join(headers.getlist("content-digest")), self.body)
        self._taken = intake.read(
            self._calculation.name,
            self.body,
            content_type=headers.get("content-type", ""),
            parameters=self._parameters(),
            settings=settings,
        )
        self._clock.mark("decode")
        return self._taken

    @property
    def expected(self) -> int | None:
        """Scenarios that the figures will rest on; None before the request is read."""
        return None if self._taken is None else self._taken.scenarios

    def _is_short(self) -> bool:
        """Return whether a decoded request is computed in less time than a thread is worth."""
        if self._taken is None:
            return False
        request = self._taken.request
        if self._form.drawn or not all(isinstance(losses, ScenarioLosses) for losses in self._taken.losses):
            return False
        if self._taken.columns > SHORT_COLUMNS:
            return False
        rules = getattr(request, "rules", ("none",))
        times = (
            len(rules) * len(getattr(request, "candidates", ("none",))) * (1 + len(getattr(request, "group_by", ())))
        )
        return len(request.measures) * times <= SHORT_WORK and "shapley" not in rules

    def run(self, work: Work) -> bytes:
        """Return the answer's bytes."""
        self._clock.mark("wait")
        mark, chart = wants_mark(self._parameters()), chart_asked(self._parameters(), self._form)
        of, settings = self._calculation, self._calculation.settings
        taken = self._taken = of.books.resolved(self._taken or self.decode(settings), work)
        drawing = calculate.drawing(taken, work, settings) if self._form.drawn else None
        answer = drawing.answer if drawing else calculate.answer(taken, work, settings, problems.describe)
        self.scenarios = answer.provenance.scenarios
        self._clock.mark("compute")
        data = formats.write(picture(drawing, chart) if drawing else answer, self._form, mark=mark)
        self._clock.mark("write")
        return data

    def _parameters(self) -> list[tuple[str, str]]:
        return self.request.query_params.multi_items() if self.request.scope["query_string"] else []
