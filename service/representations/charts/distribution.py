"""The loss distribution: nearly all of it above, its worst losses enlarged beneath."""

from collections.abc import Sequence
from dataclasses import dataclass

from service.representations.charts.axes import Scale, along, tick_writer
from service.representations.charts.canvas import HEADING, SMALL, Canvas, Look, wrapped
from service.representations.charts.marks import MOST, Flags, Mark, interval_words, left_out
from service.representations.shapes import Distribution, Histogram, Labels
from service.representations.wording import Amounts, probability, sentence

LEFT, RIGHT = 52.0, 16.0
HIGH, HIGH_NARROW = 190.0, 150.0  # of a plot
HEADROOM = 1.12  # of the highest bar
FEWEST_IN_TAIL = 3  # bins or losses that are worth a picture of their own
STICK = 7.0  # width of a single loss
NAMED_ATOMS = 5
HAIR = 1.0  # least height of a bar that is not empty


def distribution_chart(
    distribution: Distribution, marks: Sequence[Mark], labels: Labels, look: Look | None = None
) -> str:
    """Return the loss distribution with the figures marked, as SVG.

    One scale cannot show both: a tail of five in a hundred is a hair's breadth beside the body. So the upper
    plot shows the body with bars of true height and the tail in its own colour, and the lower one shows
    the tail alone, wider, with heights by the square root of the probability: a bar made of one scenario is
    still seen beside one made of hundreds. Its axis names the probabilities. A figure is marked where its
    surroundings are shown best.

    Parameters
    ----------
    distribution : Distribution
    marks : sequence of Mark
    labels : Labels
        For the currency.
    look : Look, optional
        By default a file of its own.
    """
    canvas = Canvas(look or Look())
    drawn = marks[:MOST]
    figures = [distribution.mean, *(one.value for one in drawn), distribution.tail_from]
    amounts = Amounts.of(figures, labels.currency, significant=4, power=canvas.look.power)
    canvas.text(16, 25, "Loss distribution", size=HEADING)
    mean = Mark(name="mean", value=distribution.mean, at=distribution.mean)
    twice = enlarged(distribution)
    body = [mean, *(one for one in drawn if not twice or one.at < distribution.tail_from)]
    worst = probability(distribution.tail_probability)
    plot = _Plot(canvas, distribution, amounts)
    foot = plot.draw(
        34,
        "All losses" if not distribution.above + distribution.below else "Nearly all losses",
        distribution.body,
        distribution.body_range,
        body,
        root=False,
    )
    if twice:
        tail = [one for one in drawn if one.at >= distribution.tail_from]
        caption = f"The worst {worst}, enlarged"
        foot = plot.draw(foot + 12, caption, distribution.tail, distribution.tail_range, tail, root=True)
    notes = [words for words in (_outside(distribution, amounts), interval_words(drawn), left_out(marks)) if words]
    lines = [line for words in notes for line in wrapped(words, canvas.look.width - 32)]
    foot = canvas.paragraph(16, foot + 14, lines)
    title = f"Loss distribution of {distribution.scenarios:,} scenarios"
    told = [
        f"Probability by size of loss{amounts.inside}",
        f"losses range from {amounts.text(distribution.lowest)} to {amounts.text(distribution.highest)}",
        f"the worst {worst} begin at {amounts.text(distribution.tail_from)}",
        *(one.told(amounts) for one in [mean, *drawn]),
    ]
    return canvas.finish(foot, title, sentence("; ".join(told)))


def enlarged(distribution: Distribution) -> bool:
    """Return whether the tail gets a plot of its own."""
    low, high = distribution.tail_range
    singles = sum(loss >= distribution.tail_from for loss, _ in distribution.atoms)
    return high > low and max(sum(map(bool, distribution.tail.masses)), singles) >= FEWEST_IN_TAIL


def _outside(distribution: Distribution, amounts: Amounts) -> str | None:
    """Return a sentence on what the plots leave out."""
    far = []
    if distribution.below:
        far.append(f"{probability(distribution.below)} lie further left, down to {amounts.text(distribution.lowest)}")
    if distribution.above:
        far.append(f"{probability(distribution.above)} lie further right, up to {amounts.text(distribution.highest)}")
    if distribution.beyond:
        far.append(f"{probability(distribution.beyond)} lie right of the enlarged tail too")
    return sentence("; ".join(far)) if far else None


@dataclass(frozen=True, slots=True)
class _Plot:
    """Draws one of the two plots."""

    canvas: Canvas
    distribution: Distribution
    amounts: Amounts

    def draw(
        self,
        top: float,
        caption: str,
        histogram: Histogram,
        span: tuple[float, float],
        marks: Sequence[Mark],
        *,
        root: bool,
    ) -> float:
        """Draw a plot from `top` on and return where it ends."""
        canvas, look = self.canvas, self.canvas.look
        low, high = _widened(span)
        margin = 0.02 * (high - low) if self.distribution.atoms else 0.0
        x = Scale(low - margin, high + margin, LEFT, look.width - RIGHT)
        binned = any(histogram.masses)
        atoms = [(loss, mass) for loss, mass in self.distribution.atoms if low <= loss <= high]
        if binned and len(atoms) <= NAMED_ATOMS:
            marks = [*marks, *(_named(loss, mass) for loss, mass in atoms)]
        flags = Flags(marks, x, self.amounts, look)
        tallest = max(histogram.masses) if binned else max((mass for _, mass in atoms), default=1.0)
        height = "square-root heights" if root else f"probability of each {'bar' if binned else 'loss'}"
        canvas.text(16, top + 16, f"{caption}: {height}", tint="soft")
        head = top + 26 + flags.height
        ground = head + (HIGH_NARROW if look.narrow else HIGH)
        y = Scale(0.0, tallest * HEADROOM, ground, head + 6, "root" if root else "linear")
        for tick in y.ticks(5):
            canvas.line(LEFT, y(tick), look.width - RIGHT, y(tick), tint="line")
            canvas.text(LEFT - 6, y(tick) + 4, probability(tick), anchor="end", tint="soft", size=SMALL)
        self._bars(histogram, x, y)
        self._sticks(atoms, x, y)
        ticks = x.ticks(4 if look.narrow else 8)
        along(canvas, x, ground, tick_writer(x, ticks, self.amounts), ticks=ticks)
        flags.draw(canvas, top + 24, lambda mark: self._foot(mark, atoms, x, y))
        canvas.text(
            (LEFT + look.width - RIGHT) / 2, ground + 35, f"loss{self.amounts.inside}", anchor="middle", tint="soft"
        )
        return ground + 42

    def _bars(self, histogram: Histogram, x: Scale, y: Scale) -> None:
        border = self.distribution.tail_from
        points: dict[str, list[str]] = {"body": [], "tail": []}
        for mass, lower, upper in zip(histogram.masses, histogram.edges, histogram.edges[1:], strict=False):
            if not mass:
                continue
            high = min(y(mass), y.start - HAIR)
            pieces = [("body", lower, min(upper, border)), ("tail", max(lower, border), upper)]
            for tint, left, right in pieces:
                if right > left:
                    gap = 0.8 if right == upper else 0.0
                    wide = max(x(right) - x(left) - gap, 0.6)
                    points[tint].append(f"M{x(left):.1f} {y.start:.1f}V{high:.1f}h{wide:.1f}V{y.start:.1f}Z")
        for tint, shapes in points.items():
            if shapes:
                self.canvas.path("".join(shapes), fill=tint)

    def _sticks(self, atoms: Sequence[tuple[float, float]], x: Scale, y: Scale) -> None:
        """Draw single losses; one that is taller than the plot is broken."""
        for loss, mass in atoms:
            tint = "tail" if loss >= self.distribution.tail_from else "body"
            high = min(y(mass), y.start - HAIR)
            self.canvas.box(x(loss) - STICK / 2, high, STICK, y.start - high, fill=tint)
            if mass > y.high:
                self.canvas.line(x(loss) - 7, high + 15, x(loss) + 7, high + 10, tint="page", thick=3)

    @staticmethod
    def _foot(mark: Mark, atoms: Sequence[tuple[float, float]], x: Scale, y: Scale) -> float:
        """Return where the line of a mark ends: on top of a single loss, else at the axis."""
        return min((y(mass) for loss, mass in atoms if abs(x(loss) - x(mark.at)) < STICK), default=y.start)


def _named(loss: float, mass: float) -> Mark:
    """Return the label of a single loss that stands beside bars."""
    return Mark(name=f"single loss, {probability(mass)}", value=loss, at=loss)


def _widened(span: tuple[float, float]) -> tuple[float, float]:
    """Return a span that has some width, also where all losses are alike."""
    low, high = span
    if high > low:
        return span
    room = 0.5 * abs(low) or 1.0
    return low - room, high + room
