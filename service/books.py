"""The books: losses under a name, in a folder that is only read; a changed file is seen at the next request."""

import json
import os
import re
import stat
from collections import OrderedDict
from collections.abc import Iterator, Mapping, Sequence
from contextlib import contextmanager
from dataclasses import dataclass, replace
from pathlib import Path
from threading import Lock
from time import sleep, time_ns
from typing import Any, NamedTuple

import msgspec

from service import demo, intake
from service.errors import Busy, CallerError, Fault, NotDefined, NotFound, TailraceError, TooLong, pointing
from service.executors import Work
from service.intake import Intake
from service.kept import Store
from service.payloads import ARROW, CSV, PARQUET, json_text
from service.risk.loss_table import groups_of
from service.schemas.losses import BookLosses, HistoryLosses, Losses
from service.schemas.requests import AllocationsRequest, ComparisonsRequest
from service.schemas.results import BookDescription, BookSubPortfolio, Labels
from service.settings import Settings
from service.sources import Source, source_of
from service.suggestions import hint

NAME = re.compile(r"[A-Za-z0-9][A-Za-z0-9_-]{0,63}")
TABLE_NAME = re.compile(r"[A-Za-z0-9_][A-Za-z0-9_.-]{0,127}")
SUFFIX = ".json"
TABLES: Mapping[str, str] = {".csv": CSV, ".arrow": ARROW, ".parquet": PARQUET}
"""Suffix of a file beside a book to its media type."""
USUAL_MEASURES: Sequence[Mapping[str, object]] = (
    {"kind": "value_at_risk", "level": 0.995},
    {"kind": "expected_shortfall", "level": 0.99},
)
"""What a book without measures of its own is asked for."""

UNSETTLED = 100_000_000  # nanoseconds after a change in which a further one may leave the same time stamp
TRIES = 5  # to read files that change meanwhile
BETWEEN_TRIES = 0.05  # seconds
FLAGS = os.O_RDONLY | sum(getattr(os, name, 0) for name in ("O_NONBLOCK", "O_NOFOLLOW", "O_CLOEXEC", "O_BINARY"))
BYTES_PER_CHARACTER = 10  # of a document, once it is a model

_MEMBERS = msgspec.json.Decoder(dict[str, msgspec.Raw])


class Stamp(NamedTuple):
    """What tells one state of a file from another."""

    modified: int
    changed: int
    size: int
    inode: int


class Unreadable(Exception):
    """Why a file of a book cannot be used, in words that hold no path."""


@dataclass(frozen=True, slots=True, eq=False)
class Book:
    """A book that can be used; what is computed from it goes on even if its files change.

    Attributes
    ----------
    name : str
    losses : Losses
        As they stand in the book, without its table.
    source : Source
        The losses themselves.
    defaults : mapping
        What the book asks for where a caller does not: members of an allocation request, as in JSON.
    request : AllocationsRequest
        The same, read.
    """

    name: str
    losses: Losses
    source: Source
    defaults: Mapping[str, Any]
    request: AllocationsRequest

    @property
    def size(self) -> int:
        """Bytes that it takes, about."""
        size = BYTES_PER_CHARACTER * len(json_text(dict(self.defaults)))
        table, changes = self.source.table, self.source.changes
        if table is not None:
            size += table.losses.nbytes + (0 if table.probabilities is None else table.probabilities.nbytes)
        return size + (0 if changes is None else changes.values.nbytes)

    @property
    def labels(self) -> Labels:
        """Return its labels."""
        losses = self.losses
        return Labels(losses.currency, losses.valuation_date, losses.horizon, self.request.reference)

    def asked(self, taken: Intake) -> Intake:
        """Return a request whose losses are those of this book."""
        return _with(taken, {"losses": self.losses}, {"losses": self.source})

    def description(self) -> BookDescription:
        """Return what `GET /v1/books/{name}` says of it."""
        source, asked = self.source, self.request
        scenarios = source.plan.scenarios if source.table is None and source.plan is not None else None
        return BookDescription(
            name=self.name,
            state="ready",
            reason=None,
            kind=self.losses.kind,
            sub_portfolios=[
                BookSubPortfolio(one.id, dict(one.attributes), one.expected_profit) for one in source.sub_portfolios
            ],
            scenarios=scenarios if source.table is None else source.table.scenarios,
            labels=self.labels,
            digest=source.digest,
            measures=[measure.name for measure in asked.measures],
            rules=list(asked.rules),
            group_by=list(asked.group_by),
        )


@dataclass(slots=True)
class _Known:
    """What is known of a book in one state of its files, whether its tables are held or not."""

    folder: Path
    files: dict[str, Stamp]
    settled: bool
    description: BookDescription
    book: Book | None


class Books:
    """The books of one process. Safe to use from several threads."""

    def __init__(self, settings: Settings) -> None:
        self._settings = settings
        folders = [Path(settings.books)] if settings.books else []
        self._folders = [*folders, demo.FOLDER] if settings.demo else folders
        self._known: OrderedDict[str, _Known] = OrderedDict()
        self._held: Store[Any] = Store(settings.max_base_bytes)
        self._lock = Lock()
        self._loading: dict[str, Lock] = {}

    def names(self) -> list[str]:
        """Return the names of all books, damaged ones too, in alphabetical order."""
        found: set[str] = set()
        for folder in self._folders:
            try:
                files = [file.name for file in folder.iterdir()]
            except OSError:
                continue
            names = (file.removesuffix(SUFFIX) for file in files if file.endswith(SUFFIX))
            found.update(name for name in names if NAME.fullmatch(name))
        return sorted(found)

    def described(self, work: Work) -> list[BookDescription]:
        """Return what is known of each book, reading those that are new or have changed."""
        return [one for name in self.names() if (one := self._described(name, work)) is not None]

    def description(self, name: str, work: Work) -> BookDescription:
        """Return what is known of one book, damaged or not.

        Raises
        ------
        NotFound
        """
        return self._current(name, work).description

    def look(self, name: str) -> Book | None:
        """Return a book that is held and as its files are; None if it has to be read.

        Raises
        ------
        NotFound
        """
        known = self._fresh(name, self._folder(name))
        if known is None:
            return None
        return _usable(known) if known.book or known.description.state == "damaged" else None

    def get(self, name: str, work: Work) -> Book:
        """Return a book, reading it if need be.

        Raises
        ------
        NotFound
        NotDefined
            The book is damaged.
        """
        known = self._current(name, work, whole=True)
        return _usable(known)

    def resolved(self, taken: Intake, work: Work) -> Intake:
        """Return a request with the losses of the books that it names.

        Raises
        ------
        NotFound
        NotDefined
            A book is damaged.
        """
        request = taken.request
        fields = ("before", "after") if isinstance(request, ComparisonsRequest) else ("losses",)
        found: dict[str, Losses] = {}
        sources: dict[str, Source] = {}
        for field in fields:
            asked = getattr(request, field)
            if isinstance(asked, BookLosses):
                with pointing(f"/{field}/name"):
                    book = self.get(asked.name, work)
                found[field], sources[field] = _labelled(book.losses, asked), book.source
        if not found:
            return taken
        return _with(taken, found, sources)

    def _described(self, name: str, work: Work) -> BookDescription | None:
        try:
            return self.description(name, work)
        except NotFound:  # it went while the others were read
            return None

    def _folder(self, name: str) -> Path:
        """Return the first folder that has a book of this name."""
        if NAME.fullmatch(name):
            for folder in self._folders:
                if os.path.lexists(folder / (name + SUFFIX)):
                    return folder
        detail = f"there is no book {name[:80]!r} here{hint(name[:80], self.names())}"
        raise NotFound.of(Fault(detail=detail, code=NotFound.code))

    def _fresh(self, name: str, folder: Path) -> _Known | None:
        """Return what is known of a book if its files are still the same."""
        with self._lock:
            known = self._known.get(name)
            if known is None or known.folder != folder or not known.settled:
                return None
            self._known.move_to_end(name)
        return known if _stamps(folder, known.files) == known.files else None

    def _current(self, name: str, work: Work, *, whole: bool = False) -> _Known:
        """Return what is known of a book as its files are now; with `whole`, its tables too."""
        folder = self._folder(name)
        with self._turn(name, work):
            known = self._fresh(name, folder)
            if known is None or (whole and known.book is None and known.description.state == "ready"):
                known = self._read(name, folder, work)
                self._keep(name, known)
        return known

    @contextmanager
    def _turn(self, name: str, work: Work) -> Iterator[None]:
        """Let one thread at a time read a book."""
        with self._lock:
            lock = self._loading.setdefault(name, Lock())
        while not lock.acquire(timeout=BETWEEN_TRIES):
            work.checkpoint()
        try:
            yield
        finally:
            lock.release()

    def _keep(self, name: str, known: _Known) -> None:
        """Hold a book, and let go of the tables of those not used for longest."""
        with self._lock:
            self._known[name] = known
            self._known.move_to_end(name)
            sizes = {key: one.book.size for key, one in self._known.items() if one.book is not None}
            total = sum(sizes.values())
            for key, size in sizes.items():
                if total <= self._settings.max_book_bytes:
                    break
                self._known[key] = replace(self._known[key], book=None)
                total -= size

    def _read(self, name: str, folder: Path, work: Work) -> _Known:
        """Read the files of a book until they have stayed as they were meanwhile."""
        for attempt in range(TRIES):
            if attempt:
                sleep(BETWEEN_TRIES)
            work.checkpoint()
            began = time_ns()
            files: dict[str, Stamp] = {}
            book: Book | None = None
            try:
                book = self._book(name, folder, files, work)
                reason = None
            except Unreadable as error:
                reason = str(error)
            except TooLong:
                raise
            except CallerError as error:
                reason = _words(error)
            if _stamps(folder, files) == files:
                latest = max((max(one.modified, one.changed) for one in files.values()), default=0)
                settled = abs(began - latest) > UNSETTLED
                described = _damaged(name, reason or "") if book is None else book.description()
                return _Known(folder, files, settled, described, book)
        raise Busy("The files of the book change while they are read; send the same request again.", retry_after=1)

    def _book(self, name: str, folder: Path, files: dict[str, Stamp], work: Work) -> Book:
        """Return the book as its files are, putting down in `files` what was read."""
        document = _content(folder, name + SUFFIX, files)
        members, file = _request(document)
        body = _object(members) if members else document
        if file is None:
            taken = intake.read("allocations", body, content_type=intake.JSON, parameters=(), settings=self._settings)
        else:
            table = _content(folder, file, files)
            media_type = TABLES[Path(file).suffix]
            taken = intake.read_parts("allocations", body, table, media_type, self._settings)
        request = taken.request
        if not isinstance(request, AllocationsRequest):
            raise TypeError("a book is a request for allocations")
        source = source_of(request.losses, taken.table, part=taken.part, work=work, settings=self._settings)
        with pointing("/group_by"):
            groups_of(source.sub_portfolios, request.group_by)
        notes = tuple((code, detail, None) for code, detail, _ in source.notes)
        losses = request.losses
        if isinstance(losses, HistoryLosses) and losses.changes is not None:
            losses = replace(losses, changes=None, part="table")  # they are held by the source
        defaults = {key: json.loads(value) for key, value in members.items() if key != "losses"}
        given = {key: value for key, value in defaults.items() if value is not None}
        return Book(name, losses, replace(source, notes=notes, held=self._held), given, replace(request, losses=losses))


def _with(taken: Intake, losses: Mapping[str, Any], sources: Mapping[str, Source]) -> Intake:
    """Return a request with the losses of books, which are resolved already, in their fields."""
    return replace(taken, request=replace(taken.request, **losses), sources=sources)


def _request(document: bytes) -> tuple[dict[str, bytes], str | None]:
    """Return the members of the allocation request that a book is, and the file that holds its table.

    What is no JSON at all goes on as it is, to be refused by the reader of requests.
    """
    try:
        members = {key: bytes(value) for key, value in _MEMBERS.decode(document).items()}
        whole = "losses" in members
        losses = {key: bytes(value) for key, value in _MEMBERS.decode(members["losses"] if whole else document).items()}
    except (msgspec.DecodeError, UnicodeDecodeError, RecursionError):
        return {}, None
    file = losses.pop("file", None)
    if "part" in losses or losses.get("kind") == b'"book"':
        raise Unreadable("a book holds its losses itself or names their table by `file`")
    if file is not None:
        losses["part"] = b'"table"'
    members = {**members, "losses": _object(losses)} if whole else {"losses": _object(losses)}
    members.setdefault("measures", json_text(list(USUAL_MEASURES)))
    return members, None if file is None else _table_name(file, losses.get("kind"))


def _object(members: Mapping[str, bytes]) -> bytes:
    """Return the JSON text of an object whose members are JSON texts."""
    return b"{" + b",".join(json.dumps(key).encode() + b":" + value for key, value in members.items()) + b"}"


def _table_name(file: bytes, kind: bytes | None) -> str:
    """Return the name of the file beside a book, refusing any that is not plainly beside it."""
    name = json.loads(file)
    if kind not in (b'"scenarios"', b'"history"'):
        raise Unreadable("`file` holds the table of losses of the kind scenarios or history")
    if not isinstance(name, str) or not TABLE_NAME.fullmatch(name) or Path(name).suffix not in TABLES:
        raise Unreadable(f"`file` is the plain name of a file beside the book that ends in {', '.join(TABLES)}")
    return name


def _content(folder: Path, file: str, files: dict[str, Stamp]) -> bytes:
    """Return the bytes of a file inside the folder, and put down its state.

    Raises
    ------
    Unreadable
        It is not there, is no plain file, or a link leads out of the folder.
    """
    try:
        real = os.path.realpath(folder / file)
        files[file] = _stamp(Path(real).stat())
        if not Path(real).is_relative_to(os.path.realpath(folder)):
            raise Unreadable(f"{file} is a link that leads out of the folder of books")
        descriptor = os.open(real, FLAGS)
        with os.fdopen(descriptor, "rb") as opened:
            status = os.fstat(descriptor)
            if not stat.S_ISREG(status.st_mode):
                raise Unreadable(f"{file} is not a file")
            files[file] = _stamp(status)
            return opened.read()
    except FileNotFoundError:
        files.setdefault(file, NOTHING)
        raise Unreadable(f"there is no file {file} beside the book") from None
    except OSError as error:
        files.setdefault(file, NOTHING)
        raise Unreadable(f"{file} cannot be read: {error.strerror}") from None


NOTHING = Stamp(0, 0, 0, 0)


def _stamp(status: os.stat_result) -> Stamp:
    return Stamp(status.st_mtime_ns, status.st_ctime_ns, status.st_size, status.st_ino)


def _stamps(folder: Path, files: Mapping[str, Stamp]) -> dict[str, Stamp]:
    """Return the state of some files now."""
    found = {}
    for file in files:
        try:
            found[file] = _stamp((folder / file).stat())
        except OSError:
            found[file] = NOTHING
    return found


def _usable(known: _Known) -> Book:
    if known.book is None:
        detail = f"the book {known.description.name!r} is damaged: {known.description.reason}"
        raise NotDefined.of(Fault(detail=detail, code="damaged_book"))
    return known.book


def _labelled(losses: Losses, asked: BookLosses) -> Losses:
    """Return losses with the labels that a request gives in place of the book's."""
    given = {name: getattr(asked, name) for name in ("currency", "valuation_date", "horizon")}
    labels = {name: value for name, value in given.items() if value is not None}
    return replace(losses, **labels) if labels else losses


def _damaged(name: str, reason: str) -> BookDescription:
    return BookDescription(
        name=name,
        state="damaged",
        reason=reason,
        kind=None,
        sub_portfolios=[],
        scenarios=None,
        labels=None,
        digest=None,
        measures=[],
        rules=[],
        group_by=[],
    )


def _words(error: TailraceError) -> str:
    """Return what is wrong with a book and where, in a sentence."""
    if not error.faults:
        return error.detail
    fault = error.faults[0]
    words = (fault.pointer, fault.row and f"row {fault.row}", fault.column and f"column {fault.column}")
    place = ", ".join(word for word in words if word)
    return f"{fault.detail} ({place})" if place else fault.detail
