"""Figures marked on the axis of losses: where each stands, and labels that do not cover each other."""

from collections.abc import Callable, Iterable, Sequence
from dataclasses import dataclass

from service.representations.charts.axes import Scale
from service.representations.charts.canvas import Canvas
from service.representations.shapes import Figure, Measure, Measured
from service.representations.wording import Amounts, measure_words, odds, shortened, width

MOST = 12  # marks in a picture
BESIDE = 5.0  # pixels between a line and its label
ROW, ROW_WITH_SPAN = 19.0, 27.0
DASHES = ("", "6 3", "2 3", "9 3 2 3")  # one after the other, so that neighbours differ in print


@dataclass(frozen=True, slots=True, kw_only=True)
class Mark:
    """One figure on the axis of losses."""

    name: str
    """In words."""
    value: float
    """The figure, in currency."""
    at: float
    """The loss at which it stands: the figure, plus the mean where the figure is an excess over it."""
    lower: float | None = None
    upper: float | None = None
    """Ends of its interval, on the axis of losses."""
    coverage: float | None = None

    def words(self, amounts: Amounts) -> str:
        """Return name and figure."""
        added = " (drawn from the mean)" if self.at != self.value else ""
        return f"{self.name}: {amounts.text(self.value)}{added}"

    def told(self, amounts: Amounts) -> str:
        """Return name, figure and interval, for a screen reader."""
        if self.lower is None or self.upper is None or self.coverage is None:
            return self.words(amounts)
        shift = self.at - self.value
        ends = f"{amounts.text(self.lower - shift)} to {amounts.text(self.upper - shift)}"
        return f"{self.words(amounts)}, interval {ends}"


def marks_of(measures: Iterable[Measure], results: Sequence[Measured], expected_loss: Figure) -> list[Mark]:
    """Return the marks of the measures asked for.

    Parameters
    ----------
    measures : iterable of Measure
        As asked for; only they know whether a figure is an excess over the mean.
    results : sequence of Measured
        The results of an answer; a measure that comes with several rules is marked once.
    expected_loss : Figure
        The mean, from which an excess or a standard deviation is drawn.
    """
    figures = {result.measure: result.total for result in results}
    marks = []
    for measure in measures:
        figure = figures[measure.name]
        shift = expected_loss.value if measure.above == "mean" or measure.kind == "standard_deviation" else 0.0
        marks.append(mark(measure_words(measure.name), figure, shift))
    return marks


def mark(name: str, figure: Figure, shift: float = 0.0) -> Mark:
    """Return the mark of one figure, `shift` further on the axis of losses."""
    ends = figure.interval
    return Mark(
        name=name,
        value=figure.value,
        at=figure.value + shift,
        lower=None if ends is None else ends.lower + shift,
        upper=None if ends is None else ends.upper + shift,
        coverage=None if ends is None else ends.coverage,
    )


def left_out(marks: Sequence[Mark]) -> str | None:
    """Return a sentence on the marks that are too many to draw."""
    return None if len(marks) <= MOST else f"The first {MOST} of {len(marks)} measures are marked."


def interval_words(marks: Iterable[Mark]) -> str | None:
    """Return a sentence on the intervals drawn."""
    coverage = next((one.coverage for one in marks if one.coverage is not None), None)
    if coverage is None:
        return None
    return f"Bracketed lines: intervals for the error of sampling ({odds(coverage)} repetitions hold the true figure)."


@dataclass(frozen=True, slots=True)
class Flags:
    """Labels of marks, placed in rows so that none covers another."""

    marks: Sequence[Mark]
    scale: Scale
    amounts: Amounts
    size: float

    @property
    def row(self) -> float:
        """Height of a row."""
        return ROW_WITH_SPAN if any(one.lower is not None for one in self.marks) else ROW

    def placed(self) -> list[tuple[Mark, int, str, str]]:
        """Return each mark with its row, its side and its words.

        Labels to the right of their line go down from left to right and those to the left of it go down
        from right to left, so that no line crosses the label of another.
        """
        middle = (self.scale.start + self.scale.end) / 2
        right = sorted((one for one in self.marks if self.scale(one.at) < middle), key=lambda one: one.at)
        left = sorted((one for one in self.marks if self.scale(one.at) >= middle), key=lambda one: -one.at)
        rows: list[list[tuple[float, float]]] = []
        placed = []
        for side, chosen in (("start", right), ("end", left)):
            lowest = 0
            for one in chosen:
                x = self.scale(one.at)
                room = (self.scale.end - x if side == "start" else x - self.scale.start) - BESIDE
                words = shortened(one.words(self.amounts), room, self.size)
                wide = width(words, self.size) + BESIDE + 8
                taken = (x - 4, x + wide) if side == "start" else (x - wide, x + 4)
                taken = self._with_span(one, taken)
                number = next(n for n in range(lowest, len(rows) + 1) if n == len(rows) or _free(rows[n], taken))
                if number == len(rows):
                    rows.append([])
                rows[number].append(taken)
                lowest = number
                placed.append((one, number, side, words))
        return placed

    def _with_span(self, one: Mark, taken: tuple[float, float]) -> tuple[float, float]:
        if one.lower is None or one.upper is None:
            return taken
        return min(taken[0], self.scale(one.lower) - 4), max(taken[1], self.scale(one.upper) + 4)

    @property
    def height(self) -> float:
        """Height of all rows."""
        return self.row * (1 + max((number for _, number, _, _ in self.placed()), default=-1))

    def draw(self, canvas: Canvas, top: float, foot: Callable[[Mark], float]) -> None:
        """Draw lines down to `foot`, then intervals and labels over them, the first row at `top`."""
        placed = sorted(self.placed(), key=lambda one: one[0].at)
        for number, (one, row, _, _) in enumerate(placed):
            x = self.scale(one.at)
            dashes = DASHES[number % len(DASHES)]
            canvas.line(x, top + row * self.row + 2, x, foot(one), tint="ink", thick=1.5, dashes=dashes)
        for one, row, side, words in placed:
            x, y = self.scale(one.at), top + row * self.row
            if one.lower is not None and one.upper is not None:
                canvas.span(self.scale(one.lower), self.scale(one.upper), y + 19)
            beside = BESIDE if side == "start" else -BESIDE
            canvas.text(x + beside, y + 12, words, anchor=side, full=one.words(self.amounts))


def _free(row: Sequence[tuple[float, float]], taken: tuple[float, float]) -> bool:
    return all(taken[1] <= start or taken[0] >= end for start, end in row)
