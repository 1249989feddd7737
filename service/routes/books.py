"""The doors of the books, for spreadsheets, pages and programs that can only GET."""

import asyncio
from collections.abc import Callable, Mapping
from dataclasses import dataclass
from functools import partial
from typing import Any
from urllib.parse import urlencode

from starlette.requests import Request
from starlette.responses import FileResponse, Response
from starlette.routing import Route

from service import __version__, demo, problems, pulls, query, values
from service.books import Book, Books
from service.calculate import Answer, Drawing
from service.desk import Desk, too_long
from service.errors import TooLong
from service.executors import Work
from service.kept import Kept
from service.metrics import Metrics
from service.pulls import Asked, answer_in
from service.representations import formats
from service.representations.charts import Chart
from service.representations.formats import FORMS_OF_BOOKS, HTML, TXT, Form
from service.representations.index import index_page
from service.representations.page import POLICY, BookHead
from service.representations.report import report_page
from service.representations.spreadsheet import spreadsheet_page
from service.routes.callers import applied, preferred_seconds, watched
from service.routes.conditional import conditional, tag_of, unchanged
from service.routes.doors import door
from service.routes.forms import chart_asked, headers_of, picture, wants_mark
from service.schemas.results import AllocationsAnswer, BookDescription, BooksAnswer, IncrementsAnswer
from service.settings import Settings

PATHS: Mapping[str, str] = {
    "books": "/v1/books",
    "book": "/v1/books/{name}",
    **{kind: f"/v1/books/{{name}}/{kind}" for kind in ("measures", "allocations", "increments", "value", "report")},
}
"""Path of each question."""
WORKBOOK_TYPE = "application/vnd.openxmlformats-officedocument.spreadsheetml.sheet"
PAGE = {"content-type": HTML.content_type, "content-security-policy": POLICY}
SERVICE_LINKS = '</openapi.json>; rel="service-desc", </docs>; rel="service-doc"'


class _Unread(Exception):  # no error: it leads to the desk
    """A book has to be read first."""


def _read_nothing(_fraction: float = 0.0, /) -> None:
    raise _Unread


@dataclass(frozen=True, slots=True, eq=False)
class Reading:
    """What all doors of books share in one process."""

    settings: Settings
    books: Books
    desk: Desk
    metrics: Metrics
    kept: Kept[Answer | Drawing]

    async def at_desk(self, request: Request, job: Callable[[Work], Any]) -> Any:
        """Do what may take long, only while the caller is there."""
        async with watched(request) as gone:
            return await self.desk.run(job, seconds=None, gone=gone)

    async def known(self, request: Request, job: Callable[[Work], Any]) -> Any:
        """Do what takes a place only where books have to be read for it."""
        try:
            return await asyncio.to_thread(job, Work(checkpoint=_read_nothing))
        except _Unread:
            return await self.at_desk(request, job)

    async def book(self, request: Request) -> Book:
        """Return the book of the path."""
        name = request.path_params["name"]
        held = await asyncio.to_thread(self.books.look, name)
        found: Book = held or await self.at_desk(request, partial(self.books.get, name))
        return found

    async def answer(self, request: Request, asked: Asked, *, drawn: bool) -> Answer | Drawing:
        """Return the answer that is kept, or computed once for all who ask now."""
        key = f"{asked.digest} drawn"
        known = self.kept.get(key)
        if known is not None:
            return known

        async def compute(gone: asyncio.Event) -> Answer | Drawing:
            def job(work: Work) -> Answer | Drawing:
                return asked.answer(work, self.settings, problems.describe, drawn=drawn)

            answered = await self.desk.run(job, seconds=None, gone=gone)
            self.metrics.computed(answer_in(answered).provenance.scenarios)
            return answered

        seconds = preferred_seconds(request)
        try:
            async with asyncio.timeout(seconds), watched(request) as gone:
                return await self.kept.shared(key if drawn else asked.digest, compute, gone)
        except TimeoutError as error:
            if isinstance(error, TooLong) or seconds is None:
                raise
            raise too_long(seconds) from None


def routes(*, settings: Settings, books: Books, desk: Desk, metrics: Metrics) -> list[Route]:
    """Return the doors: the pages, and of each question one that goes by Accept and one per suffix."""
    reading = Reading(settings, books, desk, metrics, Kept(settings.max_answer_bytes, pulls.size_of))
    made = [
        door("/", {"GET": partial(_front, reading)}),
        door("/spreadsheets", {"GET": partial(_spreadsheets, reading)}),
        door(f"/spreadsheets/{demo.WORKBOOK}", {"GET": _workbook}),
    ]
    for kind, path in PATHS.items():
        made += [
            door(f"{path}.{form.suffix}", {"GET": Pull(kind, form.suffix, reading).handle}, asked=True)
            for form in FORMS_OF_BOOKS[kind]
        ]
    made += [door(path, {"GET": Pull(kind, None, reading).handle}, asked=True) for kind, path in PATHS.items()]
    return made


@dataclass(frozen=True, slots=True)
class Pull:
    """One path that answers GET on books."""

    kind: str
    suffix: str | None
    reading: Reading

    async def handle(self, request: Request) -> Response:
        """Answer one request; with the tag of the answer that the caller has, nothing is computed."""
        form = formats.choose(self.suffix, ", ".join(request.headers.getlist("accept")), FORMS_OF_BOOKS[self.kind])
        parameters = request.query_params.multi_items()
        mark, chart = wants_mark(parameters), chart_asked(parameters, form)
        pairs = [pair for pair in parameters if pair[0] not in query.WITHOUT_MEANING]
        numbered = self.kind == "increments" and form is TXT
        query.refuse_unknown(pairs, (*pulls.PARAMETERS[self.kind], *(("of", "field") if numbered else ())))
        if self.kind in ("books", "book"):
            return await self._described(request, form, mark=mark)
        book = await self.reading.book(request)
        asked = pulls.ask(
            self.kind,
            [pair for pair in pairs if not (numbered and pair[0] in ("of", "field"))],
            book,
            self.reading.settings,
        )
        number = _number_of(pairs) if numbered else None
        tag = self._tag(asked, form, {"mark": mark, "chart": chart, "query": pairs if self._by_query(form) else None})

        async def write() -> bytes:
            drawn = form.drawn or self.kind == "report"
            answered = await self.reading.answer(request, asked, drawn=drawn)
            answer = answer_in(answered)
            if number is not None and isinstance(answer, IncrementsAnswer):
                return formats.write(values.increment_value(*number, answer), form)
            if self.kind == "value" and isinstance(answer, AllocationsAnswer):
                found = values.value_of(values.selection(pairs), answer, asked.number)
                return formats.write(found.value if form is TXT else found, form)
            if isinstance(answered, Drawing) and drawn:
                return await asyncio.to_thread(self._drawn, answered, book, form, chart, pairs, request)
            return await asyncio.to_thread(formats.write, answer, form, mark=mark)

        headers = {**headers_of(form), **applied(preferred_seconds(request), self.reading.settings)}
        return await conditional(request, tag, write, headers)

    def _by_query(self, form: Form) -> bool:
        """Return whether an answer depends on more than the canonical request."""
        return self.kind in ("value", "report") or form is TXT

    def _tag(self, asked: Asked, form: Form, more: dict[str, Any]) -> str:
        return tag_of({"request": asked.digest, "kind": self.kind, "form": form.suffix, **more})

    def _drawn(
        self, drawing: Drawing, book: Book, form: Form, chart: Chart | None, pairs: query.Pairs, request: Request
    ) -> bytes:
        """Return the bytes of a picture or of the page with all of them."""
        answer = drawing.answer
        if self.kind != "report" or not isinstance(answer, AllocationsAnswer):
            return formats.write(picture(drawing, chart), form)
        head, root = head_of(book.description()), request.scope.get("root_path", "")
        words = urlencode(pairs)
        page = report_page(head, answer, drawing.distribution, drawing.measures, query=words, root=root)
        return formats.write(page, form)

    async def _described(self, request: Request, form: Form, *, mark: bool) -> Response:
        """Answer what the books are, or what one is."""
        books = self.reading.books

        def job(work: Work) -> BooksAnswer | BookDescription:
            if self.kind == "book":
                return books.description(request.path_params["name"], work)
            return BooksAnswer([one.summary() for one in books.described(work)])

        found = await self.reading.known(request, job)
        data = formats.write(found, form, mark=mark)
        return await unchanged(request, data, headers_of(form))


def _number_of(pairs: query.Pairs) -> tuple[values.OfIncrement, values.Part]:
    """Return which number of an increment is asked for as text."""
    given = values.single(pairs, ("of", "field"))
    return (
        values.chosen(given, "of", values.OF_INCREMENT, "increment"),
        values.chosen(given, "field", values.FIELDS, "value"),
    )


def head_of(book: BookDescription) -> BookHead:
    """Return what the pages say of a book."""
    labels = book.labels
    return BookHead(
        name=book.name,
        reason=book.reason,
        sub_portfolios=len(book.sub_portfolios),
        scenarios=book.scenarios,
        currency=None if labels is None else labels.currency,
        valuation_date=None if labels is None else labels.valuation_date,
        reference=None if labels is None else labels.reference,
        example=book.sub_portfolios[0].id if book.sub_portfolios else None,
    )


async def _heads(reading: Reading, request: Request) -> list[BookHead]:
    described: list[BookDescription] = await reading.known(request, reading.books.described)
    return [head_of(one) for one in described]


async def _front(reading: Reading, request: Request) -> Response:
    heads = await _heads(reading, request)
    page = index_page(heads, version=__version__, root=request.scope.get("root_path", ""))
    return await unchanged(request, page.encode(), {**PAGE, "link": SERVICE_LINKS})


async def _spreadsheets(reading: Reading, request: Request) -> Response:
    heads = await _heads(reading, request)
    base = str(request.base_url).rstrip("/")
    page = spreadsheet_page(base, heads, root=request.scope.get("root_path", ""))
    return await unchanged(request, page.encode(), PAGE)


async def _workbook(_request: Request) -> Response:
    """Answer the example workbook, which asks the demonstration's book."""
    return FileResponse(demo.FOLDER / demo.WORKBOOK, media_type=WORKBOOK_TYPE, filename=demo.WORKBOOK)
