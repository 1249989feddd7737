"""Every exception of the domain, grouped by who must act; imports nothing of ours.

TailraceError
├── CallerError                 the caller changes the request
│   ├── Malformed               the body cannot be read as what it says it is
│   ├── DigestMismatch          the body is not the one that its digest was made of
│   ├── InvalidValue            readable, but a value is not allowed (also a ValueError)
│   ├── NotDefined              the figure asked for does not exist for these losses (also an ArithmeticError)
│   ├── LimitExceeded           a count is over a limit of this server
│   ├── TooLarge                the body is over a limit of this server
│   ├── TooLong                 the work cannot finish within the time allowed (also a TimeoutError)
│   ├── NotFound                there is nothing under this name (also a LookupError)
│   ├── MethodNotAllowed        the path exists, the method does not
│   ├── NotAcceptable           no form of the answer suits the Accept header
│   ├── UnsupportedMediaType    the body has a media type or coding that is not read here
│   └── LossesChanged           the losses are not those the caller thinks
├── Busy                        the caller tries again later
└── Cancelled                   the caller has gone away: nobody needs the answer

A ``TailraceError`` carries a sentence, a code and the faults found, never an HTTP status:
``service.problems`` alone knows both.
"""

from collections.abc import Iterable, Iterator
from contextlib import contextmanager
from dataclasses import dataclass, replace
from typing import ClassVar


@dataclass(frozen=True, slots=True, kw_only=True)
class Fault:
    """One thing that is wrong, and where it stands in the caller's own document."""

    detail: str
    code: str
    pointer: str | None = None
    """RFC 6901 pointer into the JSON document."""
    parameter: str | None = None
    """Name of the query parameter."""
    header: str | None = None
    """Name of the request header."""
    part: str | None = None
    """`body` or the name of the part that holds the table."""
    row: int | None = None
    """Row of the table, counted from 1 without the header line."""
    column: str | None = None
    """Header of the table's column, or its number counted from 1."""

    def beneath(self, pointer: str) -> "Fault":
        """Return the same fault with its pointer (or none yet) put beneath `pointer`."""
        if self.parameter or self.header or self.part:
            return self
        return replace(self, pointer=pointer + (self.pointer or ""))


@dataclass(frozen=True, slots=True, kw_only=True)
class Limit:
    """A limit of this server that a request went over."""

    name: str
    allowed: float
    asked: float | None
    setting: str


class TailraceError(Exception):
    """The root: a sentence for a person, a code for a program, and the faults found."""

    code: ClassVar[str] = "internal"

    def __init__(self, detail: str, *, faults: Iterable[Fault] = ()) -> None:
        super().__init__(detail)
        self.detail = detail
        self.faults = tuple(faults)


class CallerError(TailraceError):
    """The caller must change the request."""

    @classmethod
    def at(cls, pointer: str, detail: str, *, code: str | None = None) -> "CallerError":
        """Return the error with one fault that stands at `pointer`."""
        return cls(detail, faults=[Fault(detail=detail, code=code or cls.code, pointer=pointer)])

    @classmethod
    def of(cls, fault: Fault) -> "CallerError":
        """Return the error with this one fault, whose sentence is the error's."""
        return cls(fault.detail, faults=[fault])


class Malformed(CallerError):
    """The body cannot be read as what it says it is."""

    code = "malformed"


class DigestMismatch(CallerError):
    """The body is not the one that its digest was made of."""

    code = "digest_mismatch"


class InvalidValue(CallerError, ValueError):
    """The request can be read, but a value in it is not allowed."""

    code = "invalid_value"


class NotDefined(CallerError, ArithmeticError):
    """The figure asked for does not exist for these losses."""

    code = "not_defined"


class _OverLimit(CallerError):
    """A limit of this server was passed."""

    def __init__(self, detail: str, *, limit: Limit, faults: Iterable[Fault] = ()) -> None:
        super().__init__(detail, faults=faults)
        self.limit = limit


class LimitExceeded(_OverLimit):
    """A count in the request is over a limit of this server."""

    code = "limit_exceeded"


class TooLarge(_OverLimit):
    """The body is over a limit of this server."""

    code = "too_large"


class TooLong(_OverLimit, TimeoutError):
    """The work cannot finish within the time allowed."""

    code = "too_long"


class NotFound(CallerError, LookupError):
    """There is nothing under this name."""

    code = "not_found"


class MethodNotAllowed(CallerError):
    """The path exists, but not with this method."""

    code = "method_not_allowed"

    def __init__(self, detail: str, *, allowed: Iterable[str]) -> None:
        super().__init__(detail)
        self.allowed = tuple(sorted(allowed))


class NotAcceptable(CallerError):
    """No form of the answer suits what the caller accepts."""

    code = "not_acceptable"


class UnsupportedMediaType(CallerError):
    """The body has a media type or a content coding that is not read here."""

    code = "unsupported_media_type"


class LossesChanged(CallerError):
    """The losses are not those that the caller named by their digest."""

    code = "losses_changed"


class Busy(TailraceError):
    """All places for work are taken; the same request may be sent again."""

    code = "busy"

    def __init__(self, detail: str, *, retry_after: int) -> None:
        super().__init__(detail)
        self.retry_after = retry_after


class Cancelled(TailraceError):
    """The caller has gone away."""

    code = "cancelled"


@contextmanager
def pointing(pointer: str) -> Iterator[None]:
    """Put the faults of a caller's error raised inside beneath `pointer`.

    The arithmetic raises without knowing where in the request its input stood; whoever knows
    wraps the call. An error without faults gets one that repeats its sentence.
    """
    try:
        yield
    except CallerError as error:
        faults = error.faults or (Fault(detail=error.detail, code=error.code),)
        error.faults = tuple(fault.beneath(pointer) for fault in faults)
        raise
