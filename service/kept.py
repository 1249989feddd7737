"""What is kept for those who ask the same again, and one computation for all who ask at the same time."""

import asyncio
from collections import OrderedDict
from collections.abc import Awaitable, Callable
from threading import Lock
from typing import Any, Generic, TypeVar

from service.errors import Cancelled

Answer = TypeVar("Answer")
Thing = TypeVar("Thing")


class Store(Generic[Thing]):
    """The things used last, as many as fit. Safe to use from several threads."""

    def __init__(self, most_bytes: int) -> None:
        """Keep things of at most `most_bytes` together."""
        self._most = most_bytes
        self._things: OrderedDict[str, tuple[Thing, int]] = OrderedDict()
        self._bytes = 0
        self._lock = Lock()

    def get(self, key: str) -> Thing | None:
        """Return the thing kept under `key`."""
        with self._lock:
            found = self._things.get(key)
            if found is None:
                return None
            self._things.move_to_end(key)
            return found[0]

    def put(self, key: str, thing: Thing, size: int) -> None:
        """Keep a thing of `size` bytes, and let go of those not used for longest; not if it could never fit."""
        with self._lock:
            self._bytes -= self._things.pop(key, (thing, 0))[1]
            if size > self._most:
                return
            self._things[key] = (thing, size)
            self._bytes += size
            while self._bytes > self._most:
                self._bytes -= self._things.popitem(last=False)[1][1]


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
        self._size = size
        self._answers: Store[Answer] = Store(most_bytes)
        self._flights: dict[str, _Flight[Answer]] = {}

    def get(self, key: str) -> Answer | None:
        """Return the answer kept under `key`."""
        return self._answers.get(key)

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
        """Keep an answer."""
        flight = self._flights.get(key)
        if flight is not None and flight.task is task:
            del self._flights[key]
        if task.cancelled() or task.exception() is not None:
            return
        answer = task.result()
        self._answers.put(key, answer, self._size(answer))
