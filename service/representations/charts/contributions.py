"""Contributions with their intervals, largest first, beside what each part needs alone."""

from collections.abc import Sequence
from dataclasses import dataclass

from service.representations.charts.axes import Scale, along, tick_writer
from service.representations.charts.canvas import HEADING, SMALL, Canvas, Look, wrapped
from service.representations.shapes import Allocation, GroupPart, Labels, Part, SubPortfolioPart
from service.representations.wording import (
    Amounts,
    group_words,
    measure_words,
    odds,
    percent,
    rule_words,
    sentence,
    shortened,
    width,
)

MOST_ROWS = 60
TALL, LOW = 26.0, 17.0  # of a row
FEW_ROWS = 24  # up to which rows are tall
NAMES, NAMES_NARROW = 178.0, 102.0
FIGURES, SHARES, FIGURES_NARROW = 74.0, 66.0, 66.0


@dataclass(frozen=True, slots=True, kw_only=True)
class _Row:
    name: str
    value: float
    share: float | None
    lower: float | None = None
    upper: float | None = None
    alone: float | None = None


def contributions_chart(
    result: Allocation, labels: Labels, look: Look | None = None, *, attribute: str | None = None
) -> str:
    """Return the contributions of sub-portfolios, or of the groups along `attribute`, as SVG.

    Each row has a bar for the contribution (to the left of zero where it relieves the whole), a bracket for its
    interval and a diamond for the stand-alone figure: told apart by shape, not by colour. Beyond
    60 rows the smallest are summed in one.

    Parameters
    ----------
    result : Allocation
    labels : Labels
        For the currency.
    look : Look, optional
        By default a file of its own.
    attribute : str, optional
        One that the answer is grouped by.
    """
    canvas = Canvas(look or Look())
    look = canvas.look
    parts: Sequence[SubPortfolioPart | GroupPart] = result.sub_portfolios
    if attribute is not None:
        parts = [one for one in result.groups if one.attribute == attribute]
    rows = _rows(parts)
    figures = [result.total.value, *(one.value for one in rows)]
    amounts = Amounts.of(figures, labels.currency, power=look.power)
    title = f"Contributions to {measure_words(result.measure)}"
    canvas.text(16, 25, shortened(title, look.width - 32, HEADING), size=HEADING, full=title)
    of = f"{'sub-portfolio' if attribute is None else attribute}, {rule_words(result.rule)} rule"
    subtitle = f"by {of}; total {amounts.text(result.total.value)}{amounts.after}"
    canvas.text(16, 44, shortened(subtitle, look.width - 32, look.size), tint="soft", full=subtitle)
    foot = _legend(canvas, parts, 62)
    left = 16 + (NAMES_NARROW if look.narrow else NAMES) + 8
    right = look.width - 16 - _figures(rows, amounts, look) - 10
    x = _across(rows, left, right)
    ticks = x.ticks(2 if look.narrow else 5)
    pitch = TALL if len(rows) <= FEW_ROWS else LOW
    top = foot + 30
    ground = top + pitch * len(rows) + 4
    canvas.text(look.width - (16 if look.narrow else 16 + SHARES), top - 8, "contribution", anchor="end", tint="soft",
                size=SMALL)  # fmt: skip
    if not look.narrow:
        canvas.text(look.width - 16, top - 8, "share", anchor="end", tint="soft", size=SMALL)
    along(canvas, x, ground, tick_writer(x, ticks, amounts), ticks=ticks, up=ground - top + 2)
    for number, one in enumerate(rows):
        _draw(canvas, one, top + number * pitch, pitch, x, amounts)
    canvas.line(x(0.0), top - 2, x(0.0), ground, tint="ink")
    canvas.text((left + right) / 2, ground + 35, shortened(f"amount{amounts.inside}", right - left + 60, look.size),
                anchor="middle", tint="soft")  # fmt: skip
    told = [f"{one.name} {amounts.text(one.value)}{_told(one, amounts)}" for one in rows]
    return canvas.finish(
        ground + 46, f"{title} {subtitle}", sentence(f"Amounts{amounts.inside}, largest first: {'; '.join(told)}")
    )


def _rows(parts: Sequence[SubPortfolioPart | GroupPart]) -> list[_Row]:
    """Return the rows, largest contribution first; beyond `MOST_ROWS` the smallest are one row at the end."""
    rows = [_row(_name(part), part) for part in parts]
    rows.sort(key=lambda one: -one.value)
    if len(rows) <= MOST_ROWS:
        return rows
    by_size = sorted(range(len(rows)), key=lambda number: -abs(rows[number].value))
    kept = set(by_size[: MOST_ROWS - 1])
    others = [row for number, row in enumerate(rows) if number not in kept]
    shares = [row.share for row in others if row.share is not None]
    together = _Row(
        name=f"{len(others)} others",
        value=sum(row.value for row in others),
        share=sum(shares) if len(shares) == len(others) else None,
    )
    return [*(row for number, row in enumerate(rows) if number in kept), together]


def _name(part: SubPortfolioPart | GroupPart) -> str:
    return str(part.id) if hasattr(part, "id") else group_words(part.group)


def _row(name: str, part: Part) -> _Row:
    ends = part.contribution.interval
    return _Row(
        name=name,
        value=part.contribution.value,
        share=part.share,
        lower=None if ends is None else ends.lower,
        upper=None if ends is None else ends.upper,
        alone=None if part.stand_alone is None else part.stand_alone.value,
    )


def _across(rows: Sequence[_Row], left: float, right: float) -> Scale:
    values = [0.0]
    for one in rows:
        values += [value for value in (one.value, one.lower, one.upper, one.alone) if value is not None]
    low, high = min(values), max(values)
    if not high > low:
        high = low + 1.0
    room = 0.02 * (high - low)
    return Scale(low - room if low < 0.0 else low, high + room if high > 0.0 else high, left, right)


def _figures(rows: Sequence[_Row], amounts: Amounts, look: Look) -> float:
    """Return the room of the figures to the right of the bars."""
    widest = max((width(amounts.text(one.value), look.size) for one in rows), default=0.0)
    return max(FIGURES_NARROW, widest) if look.narrow else max(FIGURES, widest) + SHARES


def _legend(canvas: Canvas, parts: Sequence[Part], y: float) -> float:
    """Explain the shapes and return where that ends."""
    ends = next((one.contribution.interval for one in parts if one.contribution.interval is not None), None)
    alone = any(one.stand_alone is not None for one in parts)
    x, step = 16.0, 22.0
    canvas.box(x, y - 8, 14, 8, fill="part")
    canvas.text(x + step, y, "contribution", tint="soft", size=SMALL)
    x += 116
    if alone:
        canvas.diamond(x + 7, y - 4, 5, stroke="alone")
        canvas.text(x + step, y, "stand-alone figure", tint="soft", size=SMALL)
        x += 148
    if ends is None:
        return y
    words = f"interval for the error of sampling, right in {odds(ends.coverage)} repetitions"
    if canvas.look.narrow:
        x, y = 16.0, y + 17
    canvas.span(x, x + 14, y - 4)
    for number, line in enumerate(wrapped(words, canvas.look.width - x - step - 16)):
        y += 16 * bool(number)
        canvas.text(x + step, y, line, tint="soft", size=SMALL)
    return y


def _draw(canvas: Canvas, one: _Row, top: float, pitch: float, x: Scale, amounts: Amounts) -> None:
    look = canvas.look
    size = look.size if pitch == TALL else SMALL - 0.5
    middle, base = top + pitch / 2, top + pitch / 2 + 0.36 * size
    room = NAMES_NARROW if look.narrow else NAMES
    canvas.text(16 + room, base, shortened(one.name, room, size), anchor="end", size=size, full=one.name)
    start, end = sorted((x(0.0), x(one.value)))
    high = 0.52 * pitch
    canvas.box(start, middle - high / 2, max(end - start, 0.8), high, fill="part")
    if one.lower is not None and one.upper is not None:
        canvas.line(x(one.lower), middle, x(one.upper), middle, tint="page", thick=4)
        canvas.span(x(one.lower), x(one.upper), middle, reach=0.17 * pitch)
    if one.alone is not None:
        canvas.diamond(x(one.alone), middle, 0.19 * pitch, stroke="alone")
    edge = look.width - 16
    canvas.text(edge - (0 if look.narrow else SHARES), base, amounts.text(one.value), anchor="end", size=size)
    if not look.narrow:
        canvas.text(edge, base, percent(one.share), anchor="end", tint="soft", size=size)


def _told(one: _Row, amounts: Amounts) -> str:
    words = "" if one.lower is None else f" ({amounts.text(one.lower)} to {amounts.text(one.upper)})"
    return words + ("" if one.alone is None else f", alone {amounts.text(one.alone)}")
