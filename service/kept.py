"""Answers kept for those who ask the same again, and one computation for all who ask at the same time."""

import asyncio
from collections import OrderedDict
from collections.abc import Awaitable, Callable
from typing import Any, Generic, TypeVar

from service.errors import Cancelled

Answer = TypeVar("Answer")


class _Flight(Generic[Answer]):
    """One computation and how many wait for it."""

    __slots__ = ("gone", "task", "waiting")

    def __init__(self, compute: Callable[[asyncio.Event], Awaitable[Answer]]) -> None:
        self.gone = asyncio.Event()
        self.task: asyncio.Future[Answer] = asyncio.ensure_future(compute(self.gone))
        self.waiting = 0


class Kept(Generic[Answer]):
    """The answers used last, as many as fit. Belongs to one event loop."""

    def __init__(self, most_bytes: int, size: Callable[[Answer], int]) -> None:
        """Keep answers of at most `most_bytes` together; `size` tells the bytes of one."""
        self._most, self._size = most_bytes, size
        self._answers: OrderedDict[str, tuple[Answer, int]] = OrderedDict()
        self._flights: dict[str, _Flight[Answer]] = {}
        self._bytes = 0

    def get(self, key: str) -> Answer | None:
        """Return the answer kept under `key`."""
        found = self._answers.get(key)
        if found is None:
            return None
        self._answers.move_to_end(key)
        return found[0]

    async def shared(
        self, key: str, compute: Callable[[asyncio.Event], Awaitable[Answer]], gone: asyncio.Event
    ) -> Answer:
        """Return the answer under `key`: kept, being computed already, or computed now.

        Parameters
        ----------
        key : str
        compute : callable
            Gets an event that is set when all who wait for the answer have gone.
        gone : asyncio.Event
            Set when this caller leaves.

        Raises
        ------
        Cancelled
            This caller has gone.
        Exception
            Whatever the computation raised; it is not kept.
        """
        known = self.get(key)
        if known is not None:
            return known
        flight = self._flights.get(key)
        if flight is None:
            flight = self._flights[key] = _Flight(compute)
            flight.task.add_done_callback(lambda task: self._landed(key, task))
        flight.waiting += 1
        leaving = asyncio.ensure_future(gone.wait())
        try:
            both: set[asyncio.Future[Any]] = {flight.task, leaving}
            await asyncio.wait(both, return_when=asyncio.FIRST_COMPLETED)
        finally:
            leaving.cancel()
            flight.waiting -= 1
            if not flight.waiting and not flight.task.done():
                flight.gone.set()
                if self._flights.get(key) is flight:
                    del self._flights[key]
        if not flight.task.done():
            raise Cancelled("The caller left while the answer was computed.")
        return flight.task.result()

    def _landed(self, key: str, task: "asyncio.Future[Answer]") -> None:
        """Keep an answer, and let go of those not used for longest."""
        flight = self._flights.get(key)
        if flight is not None and flight.task is task:
            del self._flights[key]
        if task.cancelled() or task.exception() is not None:
            return
        answer = task.result()
        size = self._size(answer)
        if size > self._most:
            return
        self._bytes += size - self._answers.pop(key, (answer, 0))[1]
        self._answers[key] = (answer, size)
        while self._bytes > self._most:
            self._bytes -= self._answers.popitem(last=False)[1][1]
