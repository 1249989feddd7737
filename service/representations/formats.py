"""The forms of an answer, what writes each, and which one a caller gets."""

import re
from collections.abc import Callable, Iterable, Mapping, Sequence
from dataclasses import dataclass, is_dataclass
from functools import cache, lru_cache
from math import isfinite
from types import NoneType
from typing import Any, Protocol, get_args, get_type_hints

import orjson

from service.errors import Fault, NotAcceptable, NotFound
from service.representations.arrow import arrow_bytes
from service.representations.png import png
from service.representations.table import Column, Table
from service.representations.xml import xml_bytes

BYTE_ORDER_MARK = b"\xef\xbb\xbf"
LINE_END = "\r\n"
NEGATIVE_ZERO = re.compile(rb'(?<=[a-z_]":)-0\.0(?=[,}])')  # the value of a key: in a text the quote is escaped
WEIGHT = re.compile(r"q=(0(?:\.\d{0,3})?|1(?:\.0{0,3})?)", re.IGNORECASE)
MEDIA_RANGE = re.compile(r"[\w!#$&^.+*-]+/[\w!#$&^.+*-]+")


class Tabular(Protocol):
    """An answer: a dataclass that also offers a flat view of itself."""

    def table(self) -> Table:
        """Return the flat view."""


@dataclass(frozen=True, slots=True, kw_only=True)
class Form:
    """One form of an answer."""

    suffix: str
    """What a path ends in to ask for this form."""
    media_type: str
    """What an Accept header names to ask for this form."""
    content_type: str
    """The media type with its parameters, as sent."""
    write: Callable[[Any], bytes]
    """From an answer (a picture's SVG, a page's HTML, or a number) to its bytes."""
    drawn: bool = False
    """Whether it is a picture."""


def write(content: Any, form: Form, *, mark: bool = False) -> bytes:
    """Return an answer (or what `form` is made of) in `form`; with `mark` a CSV begins with the byte order mark."""
    data = form.write(content)
    return BYTE_ORDER_MARK + data if mark and form.suffix == "csv" else data


def choose(suffix: str | None, accept: str | None, offered: Sequence[Form]) -> Form:
    """Return the form that a caller gets; the suffix of the path wins over the Accept header.

    Parameters
    ----------
    suffix : str or None
        What the path ended in, without the point.
    accept : str or None
        The Accept header (RFC 9110, 12.5.1).
    offered : sequence of Form
        In the order that decides where the caller weighs two forms alike.

    Raises
    ------
    NotFound
        No form has this suffix.
    NotAcceptable
        The caller accepts none of the forms.
    """
    if suffix is not None:
        for form in offered:
            if form.suffix == suffix:
                return form
        raise NotFound(f"There is no form .{suffix}; there are {_listed('.' + form.suffix for form in offered)}.")
    media_type = best(accept, [form.media_type for form in offered])
    if media_type is None:
        detail = f"The answer can be had as {_listed(form.media_type for form in offered)}."
        raise NotAcceptable(detail, faults=[Fault(detail=detail, code="not_acceptable", header="Accept")])
    return next(form for form in offered if form.media_type == media_type)


def best(accept: str | None, offered: Sequence[str]) -> str | None:
    """Return the media type of `offered` that an Accept header weighs highest, the first of equals.

    Elements that cannot be read are left out; a header without any readable element accepts everything.
    The most specific range that matches a type decides its weight.
    """
    ranges = _ranges(accept or "")
    if not ranges:
        return offered[0]
    weights = [_weight(media_type, ranges) for media_type in offered]
    heaviest = max(weights)
    return offered[weights.index(heaviest)] if heaviest > 0.0 else None


@lru_cache(maxsize=256)
def _ranges(accept: str) -> dict[str, float]:
    """Return media range to weight; parameters of the media types play no part here."""
    ranges = {}
    for element in accept.lower().split(","):
        name, *parameters = (piece.strip() for piece in element.split(";"))
        weights = [parameter for parameter in parameters if parameter.startswith("q=")]
        read = WEIGHT.fullmatch(weights[0]) if weights else None
        if MEDIA_RANGE.fullmatch(name) and bool(read) == bool(weights):
            ranges[name] = float(read[1]) if read else 1.0
    return ranges


def _weight(media_type: str, ranges: dict[str, float]) -> float:
    kind = media_type.partition("/")[0]
    return next((ranges[name] for name in (media_type, f"{kind}/*", "*/*") if name in ranges), 0.0)


def _listed(names: Iterable[str]) -> str:
    *rest, last = names
    return f"{', '.join(rest)} or {last}" if rest else last


def _json(answer: Any) -> bytes:
    """Return the answer as JSON with shortest round-trip numbers.

    The encoder writes null for a number that is not finite. Where the answer's type always has a number
    that would be a lie, so it is an error here instead.
    """
    data = orjson.dumps(answer, option=orjson.OPT_SERIALIZE_NUMPY)
    if b":null" in data:
        lost = [key for key in _required_numbers(answer.__class__) if key in data]
        if lost:
            raise ArithmeticError(f"{lost[0].decode()} where a number is due")
    if b'":-0.0,' in data or b'":-0.0}' in data:
        data = NEGATIVE_ZERO.sub(b"0.0", data)
    return data


@cache
def _required_numbers(answer: Any) -> tuple[bytes, ...]:
    """Return `"name":null` for each number that is never null anywhere within the answer."""
    required: set[str] = set()
    optional: set[str] = set()
    waiting: list[Any] = [answer]
    seen: set[Any] = {answer}
    while waiting:
        for name, hint in get_type_hints(waiting.pop()).items():
            parts = _parts(hint)
            if NoneType in parts:
                optional.add(name)
            elif {int, float} & parts:
                required.add(name)
            found = {part for part in parts if is_dataclass(part)} - seen
            waiting.extend(found)
            seen |= found
    return tuple(f'"{name}":null'.encode() for name in sorted(required - optional))


def _parts(hint: Any) -> set[Any]:
    """Return every plain type that a type hint is made of."""
    inner = get_args(hint)
    return set().union(*map(_parts, inner)) if inner else {hint}


def _csv(answer: Tabular) -> bytes:
    """Return the answer's table by RFC 4180: texts quoted, numbers bare, null empty."""
    table = answer.table()
    cells = [_cell_writer(column) for column in table.columns]
    lines = [",".join(_quoted(column.name) for column in table.columns)]
    lines += [",".join([cell(value) for cell, value in zip(cells, row, strict=True)]) for row in table.rows]
    return (LINE_END.join(lines) + LINE_END).encode()


def _cell_writer(column: Column) -> Callable[[Any], str]:
    return _number if column.kind == "number" else _quoted


def _quoted(text: str | None) -> str:
    return "" if text is None else '"' + text.replace('"', '""') + '"'


def _number(value: float | None) -> str:
    """Return the shortest decimal that reads back as the same number; zero has no sign."""
    if value is None:
        return ""
    if isinstance(value, int):
        return str(value)
    number = float(value)
    if not isfinite(number):
        raise ArithmeticError(f"{number} where a number is due")
    return repr(number + 0.0)


def _text(value: float) -> bytes:
    """Return one number as text: the shortest decimal that reads back as the same, with nothing after it."""
    return _number(value).encode()


FORMATS = {
    form.suffix: form
    for form in (
        Form(suffix="json", media_type="application/json", content_type="application/json", write=_json),
        Form(
            suffix="csv",
            media_type="text/csv",
            content_type="text/csv; charset=utf-8; header=present",
            write=_csv,
        ),
    )
}
"""Suffix to form of what every calculation answers, in the order that decides between forms weighed alike."""

XML = Form(suffix="xml", media_type="application/xml", content_type="application/xml; charset=utf-8", write=xml_bytes)
ARROW = Form(
    suffix="arrow",
    media_type="application/vnd.apache.arrow.stream",
    content_type="application/vnd.apache.arrow.stream",
    write=arrow_bytes,
)
SVG = Form(suffix="svg", media_type="image/svg+xml", content_type="image/svg+xml", write=str.encode, drawn=True)
PNG = Form(suffix="png", media_type="image/png", content_type="image/png", write=png, drawn=True)
TXT = Form(suffix="txt", media_type="text/plain", content_type="text/plain; charset=utf-8", write=_text)
HTML = Form(suffix="html", media_type="text/html", content_type="text/html; charset=utf-8", write=str.encode)

FLAT = tuple(FORMATS.values())
FIGURES = (*FLAT, XML, ARROW, SVG, PNG)
FORMS: Mapping[str, tuple[Form, ...]] = {
    "measures": FIGURES,
    "allocations": FIGURES,
    "increments": FLAT,
    "comparisons": FLAT,
}
"""The forms of the answer of each calculation."""
FORMS_OF_BOOKS: Mapping[str, tuple[Form, ...]] = {
    "books": FLAT,
    "book": FLAT,
    "measures": FIGURES,
    "allocations": FIGURES,
    "increments": (*FLAT, TXT),
    "value": (FORMATS["json"], TXT),
    "report": (HTML,),
}
"""Likewise of what GET asks of books."""
