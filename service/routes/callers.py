"""Whether the caller of a request is still there."""

import asyncio
from collections.abc import AsyncIterator
from contextlib import asynccontextmanager

from starlette.requests import Request


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
