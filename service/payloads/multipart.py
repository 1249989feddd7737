"""A request of two parts, ``multipart/form-data`` (RFC 7578): the JSON and the table."""

from collections.abc import Callable
from dataclasses import dataclass, field

from python_multipart.exceptions import FormParserError
from python_multipart.multipart import MultipartParser, parse_options_header

from service.errors import CallerError, Fault, InvalidValue, Malformed, UnsupportedMediaType
from service.payloads.cells import excerpt
from service.payloads.media_types import ARROW, CSV, PARQUET

REQUEST = "request"
TABLE = "table"
PARTS = (REQUEST, TABLE)
"""The names of the parts, in their order."""

JSON = "application/json"
TABLE_TYPES = (CSV, ARROW, PARQUET)
"""The media types that the table may have."""

MAX_CONTENT_TYPE = 1024
"""Characters of a ``Content-Type`` header."""

_UNCODED = (b"", b"7bit", b"8bit", b"binary")


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Parts:
    """The two parts of a request."""

    request: bytes
    """The JSON, without its table."""
    table: memoryview
    """The bytes of the table, a view into the body."""
    table_media_type: str
    """One of the three that are read."""


@dataclass(slots=True)
class _Part:
    """A part as it is found: its headers by lower-case name, and where its content stands."""

    headers: dict[bytes, bytes] = field(default_factory=dict)
    start: int = 0
    stop: int = 0

    def options(self, header: bytes) -> tuple[bytes, dict[bytes, bytes]]:
        return parse_options_header(self.headers.get(header, b"").decode("latin-1"))


def split_multipart(body: bytes, content_type: str) -> Parts:
    """Take a request of two parts apart.

    Parameters
    ----------
    body : bytes
        The whole body.
    content_type : str
        The header of the request, which names the boundary.

    Returns
    -------
    Parts
        The table is not copied.

    Raises
    ------
    Malformed
        If the boundary is missing, or the body is cut or no multipart body.
    InvalidValue
        If the parts are not `request` and `table`, in this order.
    UnsupportedMediaType
        If a part has another media type or a transfer encoding.
    """
    parts = _parts(body, _boundary(content_type))
    names = [part.options(b"content-disposition")[1].get(b"name", b"") for part in parts]
    if names != [name.encode() for name in PARTS]:
        found = ", ".join(excerpt(name.decode(errors="replace")) for name in names) or "none"
        raise _error(InvalidValue, f"two parts are needed, 'request' and then 'table'; found: {found}")
    request, table = parts
    for part, name in zip(parts, PARTS, strict=True):
        if part.headers.get(b"content-transfer-encoding", b"").strip().lower() not in _UNCODED:
            raise _error(UnsupportedMediaType, f"the part {name} has a transfer encoding: send it as it is", name)
    return Parts(
        request=_request(body, request),
        table=memoryview(body)[table.start : table.stop],
        table_media_type=_table_type(table),
    )


def _boundary(content_type: str) -> bytes:
    if len(content_type) > MAX_CONTENT_TYPE:
        raise _error(Malformed, "the Content-Type header is too long")
    try:
        kind, options = parse_options_header(content_type)
    except ValueError:  # characters beyond Latin-1
        raise _error(Malformed, "the Content-Type header cannot be read") from None
    if kind != b"multipart/form-data" or not options.get(b"boundary"):
        raise _error(Malformed, "the Content-Type header must be multipart/form-data with a boundary")
    return options[b"boundary"]


def _parts(body: bytes, boundary: bytes) -> list[_Part]:
    """Return the parts of a complete body; one more than two is refused as soon as it begins."""
    parts: list[_Part] = []
    ended: list[bool] = []
    name = bytearray()
    value = bytearray()

    def begin() -> None:
        if len(parts) == len(PARTS):
            raise _error(InvalidValue, "two parts are needed, 'request' and then 'table', but there are more")
        parts.append(_Part())

    def header() -> None:
        if parts[-1].headers.setdefault(bytes(name).lower(), bytes(value)) != bytes(value):
            raise _error(Malformed, "a part has one header twice")
        name.clear()
        value.clear()

    def content(_data: bytes, start: int, stop: int) -> None:
        part = parts[-1]
        part.start = part.start or start  # the content never begins at 0: the boundary stands there
        part.stop = stop

    try:
        parser = MultipartParser(
            boundary,
            {
                "on_part_begin": begin,
                "on_header_field": _append_to(name),
                "on_header_value": _append_to(value),
                "on_header_end": header,
                "on_part_data": content,
                "on_end": lambda: ended.append(True),
            },
        )
        parser.write(body)
    except FormParserError as error:
        raise _error(Malformed, "the body is not the multipart body that its header announces") from error
    if not ended:
        raise _error(Malformed, "the body is cut: its last boundary is missing")
    return parts


def _append_to(target: bytearray) -> Callable[[bytes, int, int], None]:
    def append(data: bytes, start: int, stop: int) -> None:
        target.extend(data[start:stop])

    return append


def _request(body: bytes, part: _Part) -> bytes:
    kind, options = part.options(b"content-type")
    if kind not in (b"", JSON.encode()) or not _is_utf8(options):
        raise _error(UnsupportedMediaType, f"the part {REQUEST} must be {JSON} in UTF-8", REQUEST)
    return body[part.start : part.stop]


def _table_type(part: _Part) -> str:
    kind, options = part.options(b"content-type")
    media_type = kind.decode("latin-1")
    if media_type not in TABLE_TYPES or not _is_utf8(options):
        found = excerpt(media_type) if media_type else "none"
        types = ", ".join(TABLE_TYPES)
        detail = f"the part {TABLE} must say its media type, one of {types} (in UTF-8); found: {found}"
        raise _error(UnsupportedMediaType, detail, TABLE)
    return media_type


def _is_utf8(options: dict[bytes, bytes]) -> bool:
    return options.get(b"charset", b"utf-8").lower() in (b"utf-8", b"utf8", b"us-ascii")


def _error(kind: type[CallerError], detail: str, part: str = "body") -> CallerError:
    return kind.of(Fault(detail=detail, code=kind.code, part=part))
