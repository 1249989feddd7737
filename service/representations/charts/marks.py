"""Figures marked on the axis of losses: where each stands, and labels that do not cover each other."""

from collections.abc import Callable, Iterable, Sequence
from dataclasses import dataclass
from typing import NamedTuple

from service.representations.charts.axes import Scale
from service.representations.charts.canvas import EDGE, WIDER, Canvas, Look
from service.representations.shapes import Figure, Measure, Measured
from service.representations.wording import ABOVE_MEAN, Amounts, brief, measure_words, odds, shortened, width

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

    @property
    def shifted(self) -> bool:
        """Whether it does not stand at its own figure."""
        return self.at != self.value

    def words(self, amounts: Amounts) -> str:
        """Return name and figure, and where it stands if that is not the figure."""
        place = f"{ABOVE_MEAN}, at {amounts.text(self.at)}" if self.shifted else ""
        return f"{self.name}: {amounts.text(self.value)}{place}"

    def short(self, amounts: Amounts, room: float, size: float) -> str:
        """Return the name in brief and the whole figure, and where it stands or a cut name as the room allows."""
        name, figure, place = brief(self.name), f": {amounts.text(self.value)}", ""
        if self.shifted:
            sign = "-" if self.value < 0.0 else "+"
            figure, place = f": mean {sign} {amounts.text(abs(self.value))}", f" = {amounts.text(self.at)}"
        longer = f"{name}{figure}{place}"
        return longer if width(longer, size) <= room else shortened(name, room - width(figure, size), size) + figure

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
        marks.append(mark(measure_words(measure.name.removesuffix(ABOVE_MEAN)), figure, shift))
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


def places(marks: Iterable[Mark]) -> list[float]:
    """Return the losses that a picture of `marks` has to show: the figures and the ends of their intervals."""
    return [loss for one in marks for loss in (one.at, one.lower, one.upper) if loss is not None]


def left_out(marks: Sequence[Mark]) -> str | None:
    """Return a sentence on the marks that are too many to draw."""
    return None if len(marks) <= MOST else f"The first {MOST} of {len(marks)} measures are marked."


def interval_words(marks: Iterable[Mark]) -> str | None:
    """Return a sentence on the intervals drawn."""
    coverage = next((one.coverage for one in marks if one.coverage is not None), None)
    if coverage is None:
        return None
    return f"Brackets: intervals for the error of sampling, right in {odds(coverage)} repetitions."


class _Label(NamedTuple):
    """A label in its place: the line of its mark runs down from its row at `x`."""

    mark: Mark
    row: int
    side: str
    words: str
    x: float
    taken: tuple[float, float]
    """What it covers of its row, interval and all."""
    text: tuple[float, float]
    """What its words cover."""
    whole: bool
    """Whether nothing of its words is left out."""


@dataclass(frozen=True, slots=True)
class Flags:
    """Labels of marks, placed in rows so that none covers another and few are crossed by a line."""

    marks: Sequence[Mark]
    scale: Scale
    amounts: Amounts
    look: Look

    @property
    def row(self) -> float:
        """Height of a row."""
        return ROW_WITH_SPAN if any(one.lower is not None for one in self.marks) else ROW

    def placed(self) -> list[_Label]:
        """Return the labels in the better of two arrangements: laid from the left on, or from the right on."""
        ascending = sorted(self.marks, key=lambda one: one.at)
        return min((self._laid(ascending), self._laid(ascending[::-1])), key=_faults)

    def _laid(self, marks: Sequence[Mark]) -> list[_Label]:
        """Return the labels, each put where it disturbs those before it least."""
        laid: list[_Label] = []
        for one in marks:
            rows = range(2 + max((label.row for label in laid), default=-1))
            choices = [self._label(one, row, side) for row in rows for side in ("start", "end")]
            free = [choice for choice in choices if not any(_overlap(choice, label) for label in laid)]
            laid.append(min(free, key=lambda choice: _faults([*laid, choice])))
        return laid

    def _label(self, one: Mark, row: int, side: str) -> _Label:
        x, full = self.scale(one.at), one.words(self.amounts)
        room = (self.look.width - EDGE - x if side == "start" else x - EDGE) - BESIDE
        fits = WIDER * width(full, self.look.size) <= room
        words = full if fits else one.short(self.amounts, room / WIDER, self.look.size)
        wide = width(words, self.look.size) + BESIDE + 4
        left, right = text = (x - 4, x + wide) if side == "start" else (x - wide, x + 4)
        if one.lower is not None and one.upper is not None:
            left, right = min(left, self.scale(one.lower) - 4), max(right, self.scale(one.upper) + 4)
        return _Label(one, row, side, words, x, (left, right), text, fits)

    @property
    def height(self) -> float:
        """Height of all rows."""
        return self.row * (1 + max((label.row for label in self.placed()), default=-1))

    def draw(self, canvas: Canvas, top: float, foot: Callable[[Mark], float]) -> None:
        """Draw lines down to `foot`, then intervals and labels over them, the first row at `top`."""
        labels = sorted(self.placed(), key=lambda label: label.x)
        for number, label in enumerate(labels):
            dashes = DASHES[number % len(DASHES)]
            high, low = top + label.row * self.row + 2, foot(label.mark)
            canvas.line(label.x, high, label.x, low, tint="page", thick=4)
            canvas.line(label.x, high, label.x, low, tint="ink", thick=1.5, dashes=dashes)
        for label in labels:
            one, y = label.mark, top + label.row * self.row
            if one.lower is not None and one.upper is not None:
                self._span(canvas, one.lower, one.upper, y + 19)
            beside = BESIDE if label.side == "start" else -BESIDE
            canvas.text(label.x + beside, y + 12, label.words, anchor=label.side, full=one.words(self.amounts))

    def _span(self, canvas: Canvas, lower: float, upper: float, y: float) -> None:
        """Draw an interval; an end that lies outside the picture has no tick."""
        scale = self.scale
        canvas.line(scale(lower), y, scale(upper), y, tint="ink", thick=1.5)
        for end in (lower, upper):
            if scale.low <= end <= scale.high:
                canvas.line(scale(end), y - 3.5, scale(end), y + 3.5, tint="ink", thick=1.5)


def _overlap(one: _Label, other: _Label) -> bool:
    return one.row == other.row and one.taken[0] < other.taken[1] and other.taken[0] < one.taken[1]


def _faults(labels: Sequence[_Label]) -> tuple[int, int, int]:
    """Return what speaks against an arrangement: texts cut short, texts crossed by lines, rows used."""
    cut = sum((not label.whole) + ("…" in label.words) + label.words.startswith("…") for label in labels)
    crossed = sum(one.text[0] < other.x < one.text[1] and other.row < one.row for one in labels for other in labels)
    return cut, crossed, sum(label.row for label in labels)
