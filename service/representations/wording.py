"""Numbers and names in a person's words: rounded for reading, never for data."""

from collections.abc import Iterable, Sequence
from dataclasses import dataclass
from decimal import Decimal
from math import floor, isfinite, log10
from unicodedata import east_asian_width

SIGNIFICANT = 5  # digits shown of the largest amount
LARGE, SMALL = 1e7, 1e-3  # beyond which amounts are shown in another unit
LARGEST = 1e10  # in a currency that is a multiple already, such as EUR thousand
MOST_DECIMALS = 9
POWERS = {6: "million", 9: "billion", 12: "trillion"}
KINDS = (
    "dual_power",
    "entropic",
    "expected_shortfall",
    "expectile",
    "exponential_distortion",
    "proportional_hazard",
    "range_value_at_risk",
    "return_level",
    "standard_deviation",
    "value_at_risk",
    "wang",
)
BRIEF = {
    "expected shortfall": "ES",
    "value at risk": "VaR",
    "standard deviation": "SD",
    "loss of once in": "once in",
}  # of kinds in words, where there is little room
ABOVE_MEAN = " above mean"
NARROW = dict.fromkeys("fijlrt'|!.,:;/\\[]()- I", 0.29)
WIDE = dict.fromkeys("mwMW@%&", 0.87) | dict.fromkeys("ABCDEGHKNOPQRSUVXY…", 0.72)
WIDTHS = NARROW | WIDE  # of characters, in font sizes; all others are as wide as a digit
DIGIT, FULL = 0.556, 1.0


@dataclass(frozen=True, slots=True)
class Amounts:
    """How the amounts of one table or picture are written, all alike.

    Attributes
    ----------
    power : int
        Of ten, that each is divided by.
    decimals : int
    currency : str or None
    """

    power: int
    decimals: int
    currency: str | None

    @classmethod
    def of(
        cls,
        values: Iterable[float | None],
        currency: str | None,
        *,
        significant: int = SIGNIFICANT,
        power: int | None = None,
    ) -> "Amounts":
        """Return how to write `values` so that the largest shows so many digits, in a unit of its own or in `power`."""
        known = [value for value in values if value is not None and isfinite(value)]
        largest = max(map(abs, known), default=0.0)
        if power is None:
            power = _power(largest, LARGEST if currency and " " in currency else LARGE)
        if largest == 0.0 or (power == 0 and all(value.is_integer() for value in map(float, known))):
            return cls(power, 0, currency)
        decimals = significant - 1 - (floor(log10(largest)) - power)
        return cls(power, min(max(decimals, 0), MOST_DECIMALS), currency)

    def text(self, value: float | None) -> str:
        """Return `value` with thousands separators; what rounds to zero has no sign, what is missing a dash."""
        if value is None:
            return "–"
        return f"{float(Decimal(value).scaleb(-self.power)):z,.{self.decimals}f}"

    @property
    def unit(self) -> str:
        """The unit of what `text` writes; empty where none is known."""
        word = POWERS.get(self.power, f"1e{self.power}") if self.power else ""
        if not self.currency:
            return word
        return f"{word} × {self.currency}" if word and " " in self.currency else f"{word} {self.currency}".strip()

    @property
    def inside(self) -> str:
        """`, in UNIT`, or nothing."""
        return f", in {self.unit}" if self.unit else ""

    @property
    def after(self) -> str:
        """` UNIT`, or nothing."""
        return f" {self.unit}" if self.unit else ""


def _power(largest: float, large: float) -> int:
    """Return the power of ten that amounts up to `largest` are divided by; below `large` none."""
    if largest >= large:
        return 3 * ((floor(log10(largest)) - 1) // 3)
    return 3 * (floor(log10(largest)) // 3) if 0.0 < largest < SMALL else 0


def percent(ratio: float | None, decimals: int = 1) -> str:
    """Return a ratio as a percentage; a dash where there is none."""
    return "–" if ratio is None else f"{100.0 * ratio:z,.{decimals}f} %"


def probability(value: float) -> str:
    """Return a probability with two digits, as a percentage."""
    if value <= 0.0:
        return "0 %"
    decimals = max(1 - floor(log10(100.0 * value)), 0)
    shown = f"{100.0 * value:.{decimals}f}"
    return (shown.rstrip("0").rstrip(".") if "." in shown else shown) + " %"


def level_words(level: float) -> str:
    """Return a level as the decimal it was meant as, as a percentage."""
    return f"{(Decimal(f'{level:.15g}') * 100).normalize():f} %"


def odds(coverage: float) -> str:
    """Return a coverage as repetitions, e.g. `95 of 100`."""
    exact = Decimal(f"{coverage:.15g}")
    for base in (100, 1_000, 10_000, 100_000):
        if exact * base == int(exact * base):
            return f"{int(exact * base):,} of {base:,}"
    return f"{level_words(coverage)}"


def measure_words(name: str) -> str:
    """Return the default name of a measure in words; a caller's own label is left as it is."""
    plain = name.removesuffix(ABOVE_MEAN)
    above = " above the mean" if plain != name else ""
    kind, *numbers = plain.split(" ")
    if kind not in KINDS:
        return name
    known = all(one.replace(".", "", 1).isdigit() for one in numbers)
    return (_kind_words(kind, numbers) if known else " ".join([kind.replace("_", " "), *numbers])) + above


def _kind_words(kind: str, numbers: Sequence[str]) -> str:
    """Return the name of a kind of measure with its parameters."""
    words = kind.replace("_", " ")
    match kind, *numbers:
        case (("expectile" | "expected_shortfall" | "value_at_risk"), level):
            return f"{words} {level_words(float(level))}"
        case ("standard_deviation", multiple):
            return words if multiple == "1" else f"{multiple} × {words}"
        case ("return_level", periods, *scenarios):
            return f"loss of once in {periods} periods" + "".join(f" of {one} scenarios" for one in scenarios)
    return " ".join([words, *numbers])


def brief(words: str) -> str:
    """Return the name of a measure in words, its kind as the trade shortens it."""
    return next((words.replace(kind, short) for kind, short in BRIEF.items() if kind in words), words)


def rule_words(rule: str) -> str:
    """Return the name of a rule in words."""
    return {"euler": "Euler", "shapley": "Shapley"}.get(rule, rule.replace("_", " "))


def group_words(group: str | None) -> str:
    """Return the name of a group; those without the attribute have none."""
    return "(none)" if group is None else group


def sentence(words: str) -> str:
    """Return `words` as a sentence: a capital at the start, a full stop at the end."""
    return words[:1].upper() + words[1:] + ("" if words.endswith((".", "!", "?")) else ".")


def width(words: str, size: float) -> float:
    """Return about how wide `words` are in a sans-serif font of `size`."""
    return size * sum(_character(one) for one in words)


def _character(one: str) -> float:
    known = WIDTHS.get(one)
    if known is not None:
        return known
    return FULL if east_asian_width(one) in "WF" else DIGIT if one.islower() or one.isdigit() else 0.64


def shortened(words: str, room: float, size: float) -> str:
    """Return `words`, cut with an ellipsis where they are wider than `room`."""
    if width(words, size) <= room:
        return words
    kept = words
    while kept and width(kept + "…", size) > room:
        kept = kept[:-1]
    return kept.rstrip() + "…"
