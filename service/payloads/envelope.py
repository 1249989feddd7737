"""The JSON body of a request, parted from the huge values inside it without parsing them.

The arrays ``values`` and the texts ``packed/data`` of `losses`, `before` and `after`, and the arrays ``values``
of candidates are found, and the rest, in which an empty value stands in their place, is parsed strictly. To
find them, the places of the usual case are guessed by looking for a member's name and the next quotation mark;
the guesses stand only if a real parser, given the small rest, finds the empty values at these very places and at
no other. Otherwise the real parser passes over the whole body. Either way the body is JSON exactly if the rest and
the values are, and each is parsed once.
"""

import json
import re
from collections import Counter
from collections.abc import Iterator, Mapping, Sequence
from dataclasses import dataclass, field, replace
from typing import Any, NoReturn

import msgspec
import numpy as np

from service.errors import CallerError, Fault, Limit, Malformed, TooLarge
from service.payloads.cells import excerpt

USUAL_MAX_BYTES = 1 << 25
HEAD = 1 << 20
"""Bytes in which a guess looks for the name of the next huge value."""
MOST_GUESSES = 1024
"""Huge values of a body: no request may hold more candidates."""

_FILLERS = {ord("["): b"[]", ord('"'): b'""'}
"""What stands in the place of a value that was taken out, by the first byte of the value."""
FILLER_BYTES = 2

_ENCODING_MARKS = (b"\xff\xfe", b"\xfe\xff", b"\x00", b"{\x00")
_VALUES = (b'"values"', re.compile(rb'"values"[ \t\r\n]*+:[ \t\r\n]*+(?=\[)'))
_DATA = (b'"data"', re.compile(rb'"data"[ \t\r\n]*+:[ \t\r\n]*+(?=")'))

_ESCAPE = re.compile(
    rb"\\(?:u[dD][89abAB][0-9a-fA-F]{2}\\u[dD][c-fC-F][0-9a-fA-F]{2}|(?P<lone>u[dD][89a-fA-F][0-9a-fA-F]{2})|.)",
    re.DOTALL,
)
_BYTE = re.compile(r" \(byte ([0-9]+)\)")
_CONSTANT = re.compile(rb"NaN|Infinity")
_CONTINUATION = bytes(range(0x80, 0xC0))
"""Bytes that continue a character in UTF-8."""

SOURCES = ("losses", "before", "after")
"""Members that hold a table of losses."""

_OBJECT = msgspec.json.Decoder(dict[str, msgspec.Raw])
_LIST = msgspec.json.Decoder(list[msgspec.Raw])


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Envelope:
    """A request body with its huge values kept apart."""

    document: dict[str, Any]
    """The body as parsed, with ``[]`` and ``""`` in the place of the values kept apart."""
    apart: Mapping[str, memoryview]
    """The values kept apart, by their pointers: text of an array, inside of a text, escapes and all."""
    text: bytes
    """JSON text of `document`, for a validating parser."""


@dataclass(frozen=True, slots=True)
class _Span:
    """Where a huge value stands."""

    start: int
    stop: int
    pointer: str = field(default="", compare=False)


def split_envelope(body: bytes | bytearray, *, max_bytes: int = USUAL_MAX_BYTES) -> Envelope:
    """Part the JSON body of a request from its loss table.

    Parameters
    ----------
    body : bytes or bytearray
        The whole body, in UTF-8 without a byte order mark.
    max_bytes : int
        Of the body without its huge values; parsing takes up to twenty times as much memory.

    Returns
    -------
    Envelope
        The views in it lead into `body`; nothing large is copied.

    Raises
    ------
    Malformed
        If the body, but for the inside of its huge values, is not a JSON object, repeats a member name, nests
        too deeply, or holds NaN, infinity or half of a surrogate pair.
    TooLarge
        If there is too much of it besides the huge values.
    """
    _require_object(body)
    spans = _spans_of(body)
    text = _without(body, spans)
    if len(text) > max_bytes:
        name = "max_envelope_bytes"
        detail = f"the request without its table has {len(text)} bytes; {max_bytes} are allowed here"
        limit = Limit(name=name, allowed=max_bytes, asked=len(text), setting="TAILRACE_MAX_ENVELOPE_BYTES")
        raise TooLarge(detail, limit=limit, faults=[Fault(detail=detail, code=TooLarge.code, pointer="")])
    document = _parse(text, body, spans)
    view = memoryview(body)
    apart = {}
    for span in spans:
        quoted = body[span.start] == ord('"')
        apart[span.pointer] = view[span.start + quoted : span.stop - quoted]
    return Envelope(document=document, apart=apart, text=text)


def _require_object(body: bytes | bytearray) -> None:
    """Refuse an empty body, another encoding and anything that does not begin as an object."""
    if body.startswith(b"\xef\xbb\xbf"):
        raise Malformed.at("", "the body begins with a byte order mark: JSON is sent without one")
    if body.startswith(_ENCODING_MARKS):
        raise Malformed.at("", "the body is not UTF-8: JSON is sent in UTF-8")
    first = re.match(rb"[ \t\r\n]*+(.)", body, re.DOTALL)
    if first is None:
        raise Malformed.at("", "the body is empty: a JSON object is needed")
    if first[1] != b"{":
        raise Malformed.at("", "the body must be a JSON object, which begins with {")


def _spans_of(body: bytes | bytearray) -> Sequence[_Span]:
    """Return where the huge values stand, in order; what is no object has none."""
    guesses = _guesses(body)
    if guesses:
        try:
            found = _search(_without(body, guesses))
        except (ValueError, RecursionError):
            found = []
        if found == _shrunk(guesses):
            return [replace(guess, pointer=one.pointer) for guess, one in zip(guesses, found, strict=True)]
    try:
        return _search(body)
    except RecursionError:
        raise Malformed.at("", "the body is nested too deeply") from None
    except ValueError as reason:  # the library's own errors, and those of its text decoding
        _refuse(body, str(reason))


def _guesses(body: bytes | bytearray) -> list[_Span]:
    """Return where huge values probably stand, in order."""
    spans: list[_Span] = []
    names = [_Name(*known) for known in (_VALUES, _DATA)]
    while (span := _guess(body, spans[-1].stop if spans else 0, names)) is not None:
        spans.append(span)
        if len(spans) > MOST_GUESSES:  # more than a request may hold
            return []
    return spans


@dataclass(slots=True)
class _Name:
    """A member's name, and where it stands next."""

    name: bytes
    member: re.Pattern[bytes]
    place: int = -1
    until: int = 0
    """Bytes that were looked at: no such name stands between `place` and here."""

    def after(self, body: bytes | bytearray, start: int) -> int:
        """Return where it stands next within `HEAD` bytes; -1 for nowhere."""
        if self.place < start:
            self.place = body.find(self.name, max(start, self.until - len(self.name)), start + HEAD)
            self.until = start + HEAD
        return self.place


def _guess(body: bytes | bytearray, start: int, names: Sequence[_Name]) -> _Span | None:
    """Return where the next huge value probably stands: from its name to the next quotation mark or closing brace."""
    places = [(name.after(body, start), name.member) for name in names]
    for found, member in sorted(places, key=lambda place: place[0]):
        place = member.match(body, found) if found >= 0 else None
        if place is None:
            continue
        quoted = body[place.end()] == ord('"')
        quote = body.find(b'"', place.end() + quoted)
        end = quote if quote >= 0 else len(body)
        if quoted:
            return _Span(place.end(), quote + 1) if quote >= 0 and body[quote - 1] != ord("\\") else None
        brace = body.find(b"}", place.end(), end)
        last = body.rfind(b"]", place.end(), brace if brace >= 0 else end)
        return _Span(place.end(), last + 1) if last >= 0 else None
    return None


def _shrunk(spans: Sequence[_Span]) -> list[_Span]:
    """Return where the empty values stand that take the place of huge ones."""
    gone, shrunk = 0, []
    for span in spans:
        shrunk.append(_Span(span.start - gone, span.start - gone + FILLER_BYTES))
        gone += span.stop - span.start - FILLER_BYTES
    return shrunk


def _search(text: bytes | bytearray) -> list[_Span]:
    """Return where the huge values stand by a real parser, which skips them.

    The parser hands out views into `text`, so the distance between the addresses is the offset. Of a
    name that occurs twice it takes the last one; the strict parser refuses the rest then.
    """
    base = _address(text)
    found = []
    for pointer, value, first in _huge(_OBJECT.decode(text)):
        if value is not None and bytes(memoryview(value)[:1]) == first:
            start = _address(value) - base
            found.append(_Span(start, start + len(memoryview(value)), pointer))
    return sorted(found, key=lambda span: span.start)


def _huge(members: Mapping[str, msgspec.Raw]) -> Iterator[tuple[str, msgspec.Raw | None, bytes]]:
    """Yield the members that may be huge, each with its pointer and the first byte that it then has."""
    for name in SOURCES:
        losses = _members(members.get(name))
        yield f"/{name}/values", losses.get("values"), b"["
        yield f"/{name}/packed/data", _members(losses.get("packed")).get("data"), b'"'
    candidates = members.get("candidates")
    if candidates is not None and bytes(memoryview(candidates)[:1]) == b"[":
        found = _LIST.decode(candidates)
        for number, candidate in enumerate(found if len(found) <= MOST_GUESSES else ()):
            yield f"/candidates/{number}/values", _members(candidate).get("values"), b"["


def _members(value: msgspec.Raw | None) -> dict[str, msgspec.Raw]:
    """Return the members of an object, none of anything else."""
    if value is None or bytes(memoryview(value)[:1]) != b"{":
        return {}
    return _OBJECT.decode(value)


def _address(buffer: bytes | bytearray | msgspec.Raw) -> int:
    return int(np.frombuffer(buffer, np.uint8).__array_interface__["data"][0])


def _without(body: bytes | bytearray, spans: Sequence[_Span]) -> bytes:
    """Return the body with an empty value in each place."""
    pieces = []
    end = 0
    for span in spans:
        pieces += [body[end : span.start], _FILLERS[body[span.start]]]
        end = span.stop
    return b"".join([*pieces, body[end:]])


def _parse(text: bytes, body: bytes | bytearray, spans: Sequence[_Span]) -> dict[str, Any]:
    """Parse the rest strictly; an error names the place in the body."""
    try:
        decoded = text.decode()
        document: dict[str, Any] = _STRICT.decode(decoded)
    except RecursionError:
        raise Malformed.at("", "the body is nested too deeply") from None
    except UnicodeDecodeError as error:
        raise _at_byte("the body is not UTF-8", body, _original(error.start, spans)) from None
    except json.JSONDecodeError as error:
        offset = _original(len(decoded[: error.pos].encode()), spans)
        raise _at_byte(f"the body is not JSON: {error.msg}", body, offset) from None
    except ValueError as error:  # more digits than the language converts
        raise Malformed.at("", f"the body holds a whole number of too many digits: {error}") from None
    _refuse_lone_surrogates(text, body, spans)
    return document


def _refuse_lone_surrogates(text: bytes | bytearray, body: bytes | bytearray, spans: Sequence[_Span]) -> None:
    r"""Refuse an escape like ``\ud800`` without its other half: it stands for no character."""
    if b"\\u" not in text:
        return
    for escape in _ESCAPE.finditer(text):
        if escape["lone"]:
            detail = f"\\{escape['lone'].decode()} is half of a surrogate pair and no character"
            raise _at_byte(detail, body, _original(escape.start(), spans))


def _refuse(body: bytes | bytearray, reason: str) -> NoReturn:
    """Raise the error of a body over which the real parser stumbled, for this reason."""
    _refuse_lone_surrogates(body, body, ())
    byte = _BYTE.search(reason)
    if byte and (word := _CONSTANT.match(body, int(byte[1]))) is not None:
        detail = _not_finite(word[0].decode())
    else:
        detail = f"the body is not JSON: {_BYTE.sub('', reason.removeprefix('JSON is malformed: '))}"
    raise _at_byte(detail, body, int(byte[1])) if byte else Malformed.at("", detail)


def _original(offset: int, spans: Sequence[_Span]) -> int:
    """Return the offset in the body of what stands at `offset` in the rest."""
    for span in spans:
        if offset <= span.start:
            break
        offset += span.stop - span.start - FILLER_BYTES
    return offset


def _at_byte(detail: str, body: bytes | bytearray, offset: int) -> CallerError:
    line = body.count(b"\n", 0, offset) + 1
    start = body.rfind(b"\n", 0, offset) + 1
    column = len(body[start:offset].translate(None, _CONTINUATION)) + 1
    return Malformed.at("", f"{detail} (line {line}, column {column})")


def _distinct(pairs: list[tuple[str, Any]]) -> dict[str, Any]:
    """Return the members of an object, each of which has its own name."""
    members = dict(pairs)
    if len(members) != len(pairs):
        counts = Counter(name for name, _ in pairs)
        twice = next(name for name, count in counts.items() if count > 1)
        raise Malformed.at("", f"the member name {excerpt(twice)} occurs twice in one object")
    return members


def _not_finite(name: str) -> str:
    return f"{name} is not JSON: every number must be finite"


def _refuse_constant(name: str) -> NoReturn:
    raise Malformed.at("", _not_finite(name))


_STRICT = json.JSONDecoder(object_pairs_hook=_distinct, parse_constant=_refuse_constant)
