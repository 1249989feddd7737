"""How the body of a request is read: bounded, unencoded, and the one that its digest was made of."""

import hashlib
import re
from base64 import b64decode
from binascii import Error as Base64Error
from hmac import compare_digest

from starlette.requests import Request

from service.errors import Cancelled, DigestMismatch, Fault, Limit, Malformed, TooLarge, UnsupportedMediaType
from service.settings import variable

DIGEST_MEMBER = re.compile(r"\s*([a-z*][a-z0-9_.*-]*)\s*=\s*:([A-Za-z0-9+/=]*):\s*")
DIGESTS = {"sha-256": hashlib.sha256, "sha-512": hashlib.sha512}
"""The algorithms of RFC 9530 that are not deprecated; a digest by another is passed over."""


def check_coding(request: Request) -> None:
    """Refuse a body in a content coding.

    Raises
    ------
    UnsupportedMediaType
    """
    coding = request.headers.get("content-encoding", "identity").strip().lower()
    if coding not in ("", "identity"):
        detail = "A body in a content coding is not read here; send it as it is."
        fault = Fault(detail=detail, code="content_coding", header="Content-Encoding")
        raise UnsupportedMediaType.of(fault)


async def read_body(request: Request, most: int) -> bytes:
    """Return the body of at most `most` bytes; one that says it is larger is not read at all.

    Raises
    ------
    TooLarge
    Cancelled
        The caller left before the body was complete.
    """
    said = request.headers.get("content-length", "")
    if said.isdecimal() and int(said) > most:
        raise _too_large(most, asked=int(said))
    chunks, size, more = [], 0, True
    while more:
        message = await request.receive()
        if message["type"] == "http.disconnect":
            raise Cancelled("The caller left while the body was read.")
        chunk = message.get("body", b"")
        more = message.get("more_body", False)
        size += len(chunk)
        if size > most:
            raise _too_large(most, asked=None)
        chunks.append(chunk)
    return chunks[0] if len(chunks) == 1 else b"".join(chunks)


def check_digest(header: str, body: bytes) -> None:
    """Check the Content-Digest header (RFC 9530), if there is any, against the body.

    Raises
    ------
    Malformed
        The header cannot be read.
    DigestMismatch
        The body is another one.
    """
    if not header:
        return
    for name, encoded in _digest_members(header):
        if name not in DIGESTS:
            continue
        try:
            expected = b64decode(encoded, validate=True)
        except Base64Error:
            raise _unreadable_digest() from None
        if not compare_digest(expected, DIGESTS[name](body).digest()):
            detail = f"The {name} digest of the body is not the one that Content-Digest gives."
            raise DigestMismatch.of(Fault(detail=detail, code="digest_mismatch", header="Content-Digest"))


def _digest_members(header: str) -> list[tuple[str, str]]:
    """Return name and base64 of each member; the last of a name counts (RFC 8941, 4.2.2)."""
    members = [DIGEST_MEMBER.fullmatch(member) for member in header.split(",")]
    read = {member[1]: member[2] for member in members if member}
    if not all(members):
        raise _unreadable_digest()
    return list(read.items())


def _unreadable_digest() -> Malformed:
    detail = "Content-Digest is written like this: sha-256=:BASE64:, sha-512=:BASE64:"
    return Malformed(detail, faults=[Fault(detail=detail, code="malformed", header="Content-Digest")])


def _too_large(most: int, *, asked: int | None) -> TooLarge:
    limit = Limit(name="max_body_bytes", allowed=most, asked=asked, setting=variable("max_body_bytes"))
    return TooLarge(f"The body has more than the {most} bytes that are read here.", limit=limit)
