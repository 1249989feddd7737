"""The desk: which calculation may compute now, which waits, which is sent away, and when one must stop."""

import asyncio
from collections import deque
from collections.abc import Callable
from concurrent.futures import ThreadPoolExecutor
from math import ceil
from time import perf_counter
from typing import TypeVar

from service.errors import Busy, Cancelled, Limit, TooLong
from service.executors import Checkpoint, Work, keep_going
from service.settings import Settings, variable

Answer = TypeVar("Answer")

FIRST_GUESS = 0.1  # seconds that a calculation takes, before one was seen
MEMORY = 0.8  # weight of the past in the moving average of durations
LONGEST_RETRY = 600  # seconds


class Desk:
    """Admits calculations: so many compute, so many wait, the rest are told when to come again.

    Belongs to one event loop; only the jobs leave it.
    """

    def __init__(self, settings: Settings) -> None:
        self._settings = settings
        self._pool = ThreadPoolExecutor(settings.max_concurrent, "tailrace-desk")
        self._queue: deque[asyncio.Future[None]] = deque()
        self._typical = FIRST_GUESS
        self._open = True
        self.computing = 0
        """Calculations that hold a place now."""

    @property
    def waiting(self) -> int:
        """Calculations that wait for a place."""
        return len(self._queue)

    @property
    def has_place(self) -> bool:
        """Whether one more calculation could compute at once."""
        return self.computing < self._settings.max_concurrent

    def check(self) -> None:
        """Raise `Busy` if one more calculation could neither compute nor wait."""
        if not self._open:
            raise Busy("This process is stopping; another may answer.", retry_after=1)
        if not self.has_place and self.waiting >= self._settings.max_waiting:
            round_trip = self._typical * (self.waiting + 1) / self._settings.max_concurrent
            raise Busy(
                "All places to compute and to wait are taken; send the same request again.",
                retry_after=min(max(ceil(round_trip), 1), LONGEST_RETRY),
            )

    def close(self) -> None:
        """Take no more work; what computes now may end."""
        self._open = False
        self._pool.shutdown(wait=False, cancel_futures=True)

    async def run(
        self,
        job: Callable[[Work], Answer],
        *,
        seconds: float | None,
        gone: asyncio.Event,
        short: bool = False,
        told: Callable[[float], None] = keep_going,
    ) -> Answer:
        """Wait for a place and return ``job(work)``, computed in a thread.

        Parameters
        ----------
        job : callable
            Must call ``work.checkpoint()`` between pieces of work.
        seconds : float or None
            Computing time that the caller allows; the server's own limit if None or above it.
        gone : asyncio.Event
            Set when the caller leaves: the job is stopped at its next checkpoint.
        short : bool
            Whether the job is so short that a thread would cost more than it frees.
        told : callable
            Called with the fraction of the work that is done, from any thread.

        Raises
        ------
        Busy
            All places, also those to wait, are taken.
        TooLong
            The time allowed is over.
        Cancelled
            The caller has gone.
        """
        await self._enter(gone)
        allowed = self._settings.max_seconds if seconds is None else min(seconds, self._settings.max_seconds)
        began = perf_counter()
        try:
            work = Work(self._settings.threads, _checkpoint(began + allowed, allowed, gone, told))
            if short:
                return job(work)
            return await asyncio.wrap_future(self._pool.submit(job, work))
        except asyncio.CancelledError:
            gone.set()
            raise
        finally:
            self._typical += (1.0 - MEMORY) * (perf_counter() - began - self._typical)
            self._leave()

    async def _enter(self, gone: asyncio.Event) -> None:
        """Take a place, first come first served."""
        self.check()
        if self.has_place:
            self.computing += 1
            return
        place = asyncio.get_running_loop().create_future()
        self._queue.append(place)
        leaving = asyncio.ensure_future(gone.wait())
        granted = False
        try:
            await asyncio.wait({place, leaving}, return_when=asyncio.FIRST_COMPLETED)
            granted = place.done() and not gone.is_set()
        finally:
            leaving.cancel()
            if not granted:
                self._give_up(place)
        if not granted:
            raise Cancelled("The caller left while the calculation waited.")

    def _give_up(self, place: asyncio.Future[None]) -> None:
        if place.done():
            self._leave()
        else:
            self._queue.remove(place)

    def _leave(self) -> None:
        """Hand the place to the first who waits."""
        if self._queue:
            self._queue.popleft().set_result(None)
        else:
            self.computing -= 1


def _checkpoint(deadline: float, allowed: float, gone: asyncio.Event, told: Callable[[float], None]) -> Checkpoint:
    """Return the question of one job; `gone` is only read, which is safe in any thread."""

    def checkpoint(fraction: float = 0.0, /) -> None:
        told(fraction)
        if gone.is_set():
            raise Cancelled("The caller left while the calculation ran.")
        if perf_counter() > deadline:
            raise too_long(allowed)

    return checkpoint


def too_long(allowed: float) -> TooLong:
    """Return the error of a calculation that takes longer than the seconds allowed."""
    limit = Limit(name="max_seconds", allowed=allowed, asked=None, setting=variable("max_seconds"))
    words = f"The calculation needs more than the {allowed:g} seconds that this server or `Prefer: wait` allows."
    return TooLong(words, limit=limit)
