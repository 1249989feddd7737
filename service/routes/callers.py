"""Whether the caller of a request is still there, and how long it means to wait."""

import asyncio
import re
from collections.abc import AsyncIterator
from contextlib import asynccontextmanager

from starlette.requests import Request

from service.settings import Settings

WAIT = re.compile(r'(?:^|[,;\s])wait\s*=\s*"?(\d{1,9})"?\s*(?:$|[,;])', re.IGNORECASE)  # RFC 7240, 4.3


@asynccontextmanager
async def watched(request: Request) -> AsyncIterator[asyncio.Event]:
    """Give an event that is set when the caller leaves."""
    gone = asyncio.Event()

    async def watch() -> None:
        while (await request.receive())["type"] != "http.disconnect":
            pass
        gone.set()

    watching = asyncio.create_task(watch())
    try:
        yield gone
    finally:
        watching.cancel()


def preferred_seconds(request: Request) -> float | None:
    """Return the seconds of ``Prefer: wait=…``; a preference that cannot be read is none (RFC 7240, 2)."""
    found = WAIT.search(", ".join(request.headers.getlist("prefer")))
    return float(found[1]) if found else None


def applied(seconds: float | None, settings: Settings) -> dict[str, str]:
    """Return the header field that tells which preference was heeded."""
    return {} if seconds is None else {"preference-applied": f"wait={min(seconds, settings.max_seconds):.0f}"}
