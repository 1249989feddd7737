"""From figures to places: scales, their ticks, and the labels along them."""

from collections.abc import Callable, Sequence
from dataclasses import dataclass
from math import ceil, floor, log10, sqrt
from typing import Literal

from service.representations.charts.canvas import SMALL, Canvas
from service.representations.wording import Amounts, width

GAP = 14.0  # least space between two labels
MOST_DECIMALS = 9


@dataclass(frozen=True, slots=True)
class Scale:
    """Maps `low` to `start` and `high` to `end`, in pixels."""

    low: float
    high: float
    start: float
    end: float
    kind: Literal["linear", "root", "log"] = "linear"
    """How: `root` by the square root above `low` = 0, `log` by the logarithm."""

    def __call__(self, value: float) -> float:
        """Return the place of `value`; what lies outside stands at the nearer end."""
        low, high, value = (self._curved(one) for one in (self.low, self.high, value))
        fraction = (value - low) / (high - low) if high > low else 0.5
        return self.start + min(max(fraction, 0.0), 1.0) * (self.end - self.start)

    def _curved(self, value: float) -> float:
        if self.kind == "log":
            return log10(max(value, 1e-300))
        return sqrt(max(value, 0.0)) if self.kind == "root" else value

    def ticks(self, wanted: int) -> list[float]:
        """Return about so many round values within."""
        if not self.high > self.low:
            return [self.low]
        if self.kind == "log":
            return log_ticks(self.low, self.high, wanted)
        if self.kind == "root":
            return sorted({_floor(self.high * part) for part in (1.0, 0.5, 0.2, 0.05)} | {0.0})
        return round_ticks(self.low, self.high, wanted)


def round_ticks(low: float, high: float, wanted: int) -> list[float]:
    """Return multiples of 1, 2 or 5 times a power of ten from `low` to `high`."""
    step = (high - low) / max(wanted, 1)
    power = 10.0 ** floor(log10(step))
    step = next((digit * power for digit in (1.0, 2.0, 5.0) if digit * power >= step), 10.0 * power)
    first, last = ceil(low / step - 1e-9), floor(high / step + 1e-9)
    return [number * step for number in range(first, last + 1)]


def log_ticks(low: float, high: float, wanted: int) -> list[float]:
    """Return powers of ten, with halves or fifths between few of them."""
    first, last = ceil(log10(low) - 1e-9), floor(log10(high) + 1e-9)
    every = max(1, ceil((last - first + 1) / max(wanted, 1)))
    powers = [10.0**power for power in range(first, last + 1) if (power - last) % every == 0]
    if len(powers) > 2:  # noqa: PLR2004  # enough to read a scale by
        return powers
    between = [digit * 10.0**power for power in range(first - 1, last + 1) for digit in (1.0, 2.0, 5.0)]
    return [one for one in between if low * (1 - 1e-9) <= one <= high * (1 + 1e-9)] or [low, high]


def _floor(value: float) -> float:
    """Return the next lower of 1, 2, 5 times a power of ten."""
    power = 10.0 ** floor(log10(value))
    return max((digit * power for digit in (1.0, 2.0, 5.0) if digit * power <= value * (1 + 1e-9)), default=power)


def along(
    canvas: Canvas, scale: Scale, y: float, write: Callable[[float], str], *, ticks: Sequence[float], up: float = 0.0
) -> None:
    """Draw a horizontal axis at `y` with labels beneath; with `up`, faint lines of that height over each tick."""
    canvas.line(min(scale.start, scale.end), y, max(scale.start, scale.end), y)
    last = -1e9
    for tick in ticks:
        x, words = scale(tick), write(tick)
        if up:
            canvas.line(x, y, x, y - up, tint="line")
        canvas.line(x, y, x, y + 4)
        room = width(words, SMALL) / 2
        if x - room >= last + GAP:
            canvas.text(x, y + 17, words, anchor="middle", tint="soft", size=SMALL)
            last = x + room


def tick_writer(scale: Scale, ticks: Sequence[float], amounts: Amounts) -> Callable[[float], str]:
    """Return what writes ticks in the unit of `amounts`: with as many decimals as tell them apart."""
    if scale.kind == "log":
        return lambda tick: f"{tick / 10.0**amounts.power:,.6g}"
    decimals = 0
    while decimals < MOST_DECIMALS and not all(_same(tick, amounts.power, decimals) for tick in ticks):
        decimals += 1
    return Amounts(amounts.power, decimals, None).text


def _same(tick: float, power: int, decimals: int) -> bool:
    scaled = tick / 10.0**power
    return abs(round(scaled, decimals) - scaled) <= 1e-9 * max(abs(scaled), 1e-9)
