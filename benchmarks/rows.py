"""What a row of the benchmark is: a figure, the target it has and the bound it must never pass."""

from collections.abc import Callable, Sequence
from dataclasses import dataclass
from math import inf
from statistics import median


@dataclass(frozen=True, slots=True)
class Span:
    """Where a figure ought to lie, ends included."""

    least: float = -inf
    most: float = inf

    def __contains__(self, figure: float) -> bool:
        """Say whether `figure` lies here."""
        return self.least <= figure <= self.most

    def __str__(self) -> str:
        """Return it as the table shows it."""
        if self.least == -inf:
            return f"≤ {self.most:g}"
        return f"≥ {self.least:g}" if self.most == inf else f"{self.least:g} – {self.most:g}"


def at_most(figure: float) -> Span:
    """Return everything up to `figure`."""
    return Span(most=figure)


def at_least(figure: float) -> Span:
    """Return everything from `figure` on."""
    return Span(least=figure)


@dataclass(frozen=True, slots=True)
class Pace:
    """How thorough a run is.

    Attributes
    ----------
    repeats : int
        Of timed work.
    slow : int
        Repeats of work that takes seconds.
    runs : int
        Simulated samples behind each coverage.
    seconds : float
        Of each burst of requests.
    """

    repeats: int
    slow: int
    runs: int
    seconds: float


@dataclass(frozen=True, slots=True)
class Outcome:
    """What a row measured.

    Attributes
    ----------
    figure, least, most : float
        The figure that is judged, and the range of all.
    figures : sequence of float
        All, in the order measured.
    details : sequence of str
        Lines to print beneath the table.
    """

    figure: float
    least: float
    most: float
    figures: Sequence[float]
    details: Sequence[str] = ()

    @classmethod
    def of(cls, figures: Sequence[float], details: Sequence[str] = ()) -> "Outcome":
        """Judge by the median of repeats."""
        return cls(median(figures), min(figures), max(figures), figures, details)


@dataclass(frozen=True, slots=True)
class Row:
    """One row.

    Attributes
    ----------
    number : str
        As in `--only`; rows may share one.
    what : str
        What is measured.
    target, bound : Span
    measure : callable
        From the pace to the outcome.
    """

    number: str
    what: str
    target: Span
    bound: Span
    measure: Callable[[Pace], Outcome]

    def verdict(self, figure: float) -> str:
        """Return how `figure` stands."""
        if figure in self.target:
            return "reached"
        return "within bound" if figure in self.bound else "missed"
