"""How a calculation is let work: with how many threads, until when, and for whom."""

from collections import deque
from collections.abc import Callable, Iterable
from concurrent.futures import ThreadPoolExecutor
from dataclasses import dataclass
from functools import cache
from itertools import chain, islice
from threading import Lock
from typing import Protocol, TypeVar

import numpy as np

FREED_BYTES = 31 << 20  # just below glibc's upper limit of its threshold

Piece = TypeVar("Piece")
Result = TypeVar("Result")


class Checkpoint(Protocol):
    """What the arithmetic calls between pieces of work."""

    def __call__(self, fraction: float = 0.0, /) -> None:
        """Say that `fraction` of the work is done; raise if the rest is not wanted any more."""


def keep_going(_fraction: float = 0.0, /) -> None:
    """Let the work go on: no deadline, and nobody who could leave."""


def keep_freed_memory() -> None:
    """Let the C library keep the memory of freed arrays for the next ones.

    glibc takes every block above a threshold from the system and gives it back when it is freed; to touch the fresh
    pages costs more than the arithmetic on them. It raises the threshold to the size of the largest block freed so
    far, up to 32 MiB (mallopt(3), M_MMAP_THRESHOLD). Elsewhere this does nothing.
    """
    np.empty(FREED_BYTES, dtype=np.uint8)


@dataclass(frozen=True, slots=True)
class Work:
    """What a calculation may use, and the question whether it is still wanted."""

    threads: int = 1
    """Threads that may compute at the same time."""
    checkpoint: Checkpoint = keep_going
    """Called with the fraction done; raises `TooLong` after the deadline, `Cancelled` when the caller left."""

    def part(self, start: float, stop: float) -> "Work":
        """Return the same work whose fractions are those of the part from `start` to `stop` of the whole.

        Fractions go up only, whatever order pieces are done in; 0 says nothing of them.
        """
        told = self.checkpoint
        highest, alone = start, Lock()

        def checkpoint(fraction: float = 0.0, /) -> None:
            nonlocal highest
            with alone:
                highest = max(highest, start + (stop - start) * min(fraction, 1.0))
                reached = highest
            told(reached)

        return Work(self.threads, checkpoint)

    def map(self, function: Callable[[Piece], Result], pieces: Iterable[Piece]) -> list[Result]:
        """Return ``function(piece)`` for each piece, in the order of the pieces, worked on by `threads` threads.

        At most twice as many pieces as threads are under way, so that pieces made one by one do not pile up.
        The checkpoint is asked after each result. Functions must not map themselves: the threads are shared.

        Parameters
        ----------
        function : callable
            Must be safe to call from several threads at once.
        pieces : iterable
        """
        waiting = iter(pieces)
        first = list(islice(waiting, 2))
        results: list[Result] = []
        if self.threads == 1 or len(first) < 2:  # noqa: PLR2004  # a single piece needs no other thread
            for piece in chain(first, waiting):
                results.append(function(piece))
                self.checkpoint()
            return results
        threads = pool(self.threads)
        ahead = chain(first, islice(waiting, 2 * self.threads - 2))
        under_way = deque(threads.submit(function, piece) for piece in ahead)
        try:
            while under_way:
                results.append(under_way.popleft().result())
                self.checkpoint()
                under_way.extend(threads.submit(function, piece) for piece in islice(waiting, 1))
        finally:
            for future in under_way:
                future.cancel()
        return results


@cache
def pool(threads: int) -> ThreadPoolExecutor:
    """Return the threads that compute pieces, made once for each number of them."""
    return ThreadPoolExecutor(threads, "tailrace-piece")
