"""How much of the machine a calculation may use: threads, a map over pieces, and a call between pieces."""

from collections.abc import Callable, Iterable
from dataclasses import dataclass
from typing import Protocol, TypeVar

T = TypeVar("T")
R = TypeVar("R")


class Effort(Protocol):
    """What the arithmetic asks of whoever runs it; it knows neither clock nor cluster."""

    @property
    def threads(self) -> int:
        """How many pieces may be worked on at the same time."""

    def map(self, function: Callable[[T], R], pieces: Iterable[T]) -> list[R]:
        """Return the results of all pieces in the order of the pieces."""

    def checkpoint(self, fraction: float = 0.0) -> None:
        """Called between pieces with the part of the work that is done; may raise to stop it."""


@dataclass(frozen=True, slots=True)
class Alone:
    """One thread, no limit: for scripts and tests."""

    threads: int = 1

    def map(self, function: Callable[[T], R], pieces: Iterable[T]) -> list[R]:
        """Return the results of all pieces, one after the other."""
        return [function(piece) for piece in pieces]

    def checkpoint(self, fraction: float = 0.0) -> None:
        """Do nothing."""
