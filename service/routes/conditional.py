"""Answers to GET that the caller may have already: entity tags, 304 and HEAD (RFC 9110, 8.8.3, 13.1.2 and 9.3.2)."""

import hashlib
import re
from collections.abc import Awaitable, Callable, Mapping
from typing import Any

from starlette.requests import Request
from starlette.responses import Response

from service import __version__
from service.provenance import canonical

PRIVATE = "private, no-cache"
ENTITY_TAG = re.compile(r'(?:W/)?("[\x21\x23-\x7e\x80-\xff]*")')


def tag_of(of: Mapping[str, Any]) -> str:
    """Return a strong entity tag; answers are sent in no content coding."""
    made_by = {"version": __version__, "coding": "identity"}
    return f'"{hashlib.sha256(canonical({**of, **made_by})).hexdigest()[:40]}"'


async def conditional(
    request: Request, tag: str, write: Callable[[], Awaitable[bytes]], headers: Mapping[str, str]
) -> Response:
    """Answer with what `write` makes, unless the caller has it already or asks for the head alone.

    Parameters
    ----------
    request : Request
    tag : str
        Of the answer.
    write : callable
        Makes its bytes.
    headers : mapping of str to str
        Of the answer with its bytes, the content type among them.
    """
    always = {"etag": tag, "vary": "Accept", "cache-control": PRIVATE}
    if _has(request.headers.getlist("if-none-match"), tag):
        return Response(status_code=304, headers=always)
    if request.method == "HEAD":
        response = Response(headers={**headers, **always})
        if "content-length" not in headers:  # it is not known before the bytes are made
            del response.headers["content-length"]
        return response
    return Response(await write(), headers={**headers, **always})


async def unchanged(request: Request, data: bytes, headers: Mapping[str, str]) -> Response:
    """Answer with bytes that are there already, by the tag of these bytes."""

    async def write() -> bytes:
        return data

    tag = tag_of({"digest": hashlib.sha256(data).hexdigest(), "form": headers["content-type"]})
    return await conditional(request, tag, write, {**headers, "content-length": str(len(data))})


def _has(given: list[str], tag: str) -> bool:
    """Return whether an If-None-Match header names the tag, by the weak comparison."""
    said = ", ".join(given).strip()
    return said == "*" or tag in ENTITY_TAG.findall(said)
