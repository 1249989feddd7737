"""The exceedance curve: how probable it is that a loss is exceeded, and how many periods that takes."""

from bisect import bisect_right
from collections.abc import Sequence

from service.representations.charts.axes import Scale, along, tick_writer
from service.representations.charts.canvas import HEADING, SMALL, Canvas, Look, wrapped
from service.representations.charts.marks import MOST, Flags, Mark, interval_words, left_out, places
from service.representations.shapes import Distribution, Labels
from service.representations.wording import Amounts, probability, sentence

LEFT, RIGHT = 62.0, 76.0
HIGH, HIGH_NARROW = 300.0, 250.0
HEAVY = 50.0  # largest loss in medians from which on losses are shown by their logarithm
START = 0.2  # of the median, where such a scale begins
BELOW = 1.6  # how much lower than the smallest probability the axis ends


def exceedance_chart(
    distribution: Distribution, marks: Sequence[Mark], labels: Labels, look: Look | None = None
) -> str:
    """Return the exceedance curve with the figures marked, as SVG.

    Probabilities are on a logarithmic scale, with return periods on the other side. Losses are on a
    logarithmic scale too where the largest is very many times the median, else on a plain one. The last step
    is the worst scenario: beyond it the scenarios say nothing.

    Parameters
    ----------
    distribution : Distribution
    marks : sequence of Mark
    labels : Labels
        For currency and horizon.
    look : Look, optional
        By default a file of its own.
    """
    canvas = Canvas(look or Look())
    look = canvas.look
    drawn = marks[:MOST]
    figures = [one.value for one in drawn] or [distribution.highest]
    amounts = Amounts.of(figures, labels.currency, significant=4, power=look.power)
    canvas.text(16, 25, "Exceedance curve", size=HEADING)
    right = look.width - (RIGHT if not look.narrow else RIGHT - 16)
    left = LEFT if not look.narrow else LEFT - 8
    x = _across(distribution, drawn, left, right)
    flags = Flags(drawn, x, amounts, look)
    least = min((one for one in distribution.exceeding if one > 0.0), default=0.1)
    head = 62 + flags.height
    ground = head + (HIGH_NARROW if look.narrow else HIGH)
    y = Scale(least / BELOW, 1.0, ground, head, "log")
    canvas.text(16, 46, "probability", tint="soft", size=SMALL)
    canvas.text(look.width - 16, 46, _period(labels.horizon), anchor="end", tint="soft", size=SMALL)
    for tick in y.ticks(8):
        canvas.line(left, y(tick), right, y(tick), tint="line")
        canvas.text(left - 6, y(tick) + 4, probability(tick), anchor="end", tint="soft", size=SMALL)
        canvas.text(right + 6, y(tick) + 4, f"{1.0 / tick:,.6g}", tint="soft", size=SMALL)
    ticks = x.ticks(4 if look.narrow else 8)
    along(canvas, x, ground, tick_writer(x, ticks, amounts), ticks=ticks, up=ground - head)
    _curve(canvas, distribution, x, y)
    feet = {one: min(y(_exceeding(distribution, one.at)), ground) for one in drawn}
    flags.draw(canvas, 52, lambda one: feet[one])
    for one, foot in feet.items():
        canvas.dot(x(one.at), foot, 4, fill="page", stroke="ink")
    canvas.text((left + right) / 2, ground + 35, f"loss{amounts.inside}", anchor="middle", tint="soft")
    worst = f"The curve ends at the worst of {distribution.scenarios:,} scenarios, {amounts.text(distribution.highest)}"
    notes = [sentence(worst + amounts.after), interval_words(drawn), left_out(marks)]
    lines = [line for words in notes if words for line in wrapped(words, look.width - 32)]
    foot = canvas.paragraph(16, ground + 56, lines)
    told = [
        f"Probability that a loss{amounts.inside} is exceeded, on a logarithmic scale",
        *_told(distribution, amounts),
        *(
            f"{one.told(amounts)}, exceeded with probability {probability(_exceeding(distribution, one.at))}"
            for one in drawn
        ),
    ]
    return canvas.finish(foot, f"Exceedance curve of {distribution.scenarios:,} scenarios", sentence("; ".join(told)))


def _across(distribution: Distribution, marks: Sequence[Mark], left: float, right: float) -> Scale:
    """Return the scale of losses."""
    low = min(distribution.body_range[0], *(one.at for one in marks), distribution.highest)
    high = max(distribution.highest, *places(marks), low)
    median = _at(distribution, 0.5)
    if median > 0.0 and high > HEAVY * median and all(one.at > 0.0 for one in marks):
        low = min(START * median, *(one.at for one in marks), high)
        return Scale(low, high * 1.05, left, right, "log")
    if high > low:
        return Scale(low, high + 0.02 * (high - low), left, right)
    room = 0.5 * abs(low) or 1.0
    return Scale(low - room, high + room, left, right)


def _at(distribution: Distribution, exceeding: float) -> float:
    """Return the smallest loss on the curve that is exceeded with at most this probability."""
    return next(
        loss for loss, chance in zip(distribution.losses, distribution.exceeding, strict=True) if chance <= exceeding
    )


def _exceeding(distribution: Distribution, loss: float) -> float:
    """Return P(L > loss) on the curve."""
    place = bisect_right(distribution.losses, loss)
    return distribution.exceeding[place - 1] if place else 1.0


def _curve(canvas: Canvas, distribution: Distribution, x: Scale, y: Scale) -> None:
    """Draw the steps: each loss takes the curve down to the probability that it is exceeded."""
    before = _exceeding(distribution, x.low - 1e-9 * abs(x.low))
    points = [f"M{x(x.low):.1f} {y(before):.1f}"]
    for loss, chance in zip(distribution.losses, distribution.exceeding, strict=True):
        if loss < x.low:
            continue
        if chance <= 0.0:
            canvas.path("".join(points) + f"H{x(loss):.1f}", stroke="tail", thick=2.2)
            canvas.dot(x(loss), y(before), 3.2, fill="tail")
            return
        points.append(f"H{x(loss):.1f}V{y(chance):.1f}")
        before = chance


def _told(distribution: Distribution, amounts: Amounts) -> list[str]:
    """Return points of the curve for a screen reader."""
    least = min((one for one in distribution.exceeding if one > 0.0), default=1.0)
    told = [
        f"{amounts.text(_at(distribution, chance))} is exceeded with at most {probability(chance)}"
        for chance in (0.1, 0.01, 0.001)
        if chance >= least
    ]
    return [*told, f"the largest loss is {amounts.text(distribution.highest)}"]


def _period(horizon: str | None) -> str:
    """Return the title of the axis of return periods."""
    if horizon in ("1 year", "one year"):
        return "return period in years"
    return "return period in horizons" if not horizon else f"return period in horizons of {horizon}"
