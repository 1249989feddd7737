"""SVG by hand: colours, texts and shapes of every picture, and the frame around them.

Every shape carries its colour for a light page as an attribute, so that a file looks right alone and on
paper, and a class, so that the style of a page may recolour it on a dark one. Nothing but the standard
library, no script, nothing from outside: the same figures make the same bytes.
"""

from collections.abc import Sequence
from dataclasses import dataclass, field
from html import escape

from service.representations.wording import width

FONT = "Liberation Sans, Arial, Helvetica, DejaVu Sans Condensed, sans-serif"
SIZE = 13.0  # of the usual text, in pixels
SMALL = 12.0
HEADING = 15.0
WIDTH, NARROW = 760, 360
WIDER = 1.14  # than the shipped font the reader's own may be
EDGE = 16.0  # pixels left free around a picture

LIGHT = {
    "ink": "#1b222b",
    "soft": "#4a5563",
    "line": "#c9d1da",
    "page": "#ffffff",
    "body": "#7796b8",
    "tail": "#8f2d0c",
    "part": "#2b5f8a",
    "alone": "#6b7683",
}
DARK = {
    "ink": "#e9edf2",
    "soft": "#b3bdc9",
    "line": "#3b4653",
    "page": "#14191f",
    "body": "#57779a",
    "tail": "#f0936a",
    "part": "#74b0e0",
    "alone": "#98a4b2",
}
"""Blue and vermilion stay apart for colour-blind readers; in grey the tail is the dark one."""


def dark_style() -> str:
    """Return the rules that recolour pictures inside a page on a dark screen."""
    return "".join(f".f-{name}{{fill:{tint}}}.s-{name}{{stroke:{tint}}}" for name, tint in DARK.items())


def number(value: float) -> str:
    """Return a coordinate with at most one decimal."""
    text = f"{value:z.1f}"
    return text.removesuffix(".0")


def paint(fill: str | None = None, stroke: str | None = None, thick: float = 1.0) -> str:
    """Return the attributes that colour a shape."""
    classes = " ".join([f"f-{fill}"] * bool(fill) + [f"s-{stroke}"] * bool(stroke))
    inside = f' fill="{LIGHT[fill]}"' if fill else ' fill="none"'
    around = f' stroke="{LIGHT[stroke]}" stroke-width="{thick:g}"' if stroke else ""
    return f'class="{classes}"{inside}{around}'


@dataclass(frozen=True, slots=True, kw_only=True)
class Look:
    """Where a picture will stand."""

    width: int = WIDTH
    """In pixels; it is laid out for this width."""
    inside: str | None = None
    """The prefix of its ids inside a page; None for a file of its own, which has a white ground."""
    power: int | None = None
    """Of ten, by which the page around it divides amounts; None for what suits the picture."""

    @property
    def narrow(self) -> bool:
        """Whether it is laid out for a telephone."""
        return self.width < 1.5 * NARROW

    @property
    def size(self) -> float:
        """Size of its usual text."""
        return SMALL if self.narrow else SIZE


@dataclass(slots=True)
class Canvas:
    """Collects the shapes of one picture."""

    look: Look
    _shapes: list[str] = field(default_factory=list)

    def text(
        self,
        x: float,
        y: float,
        words: str,
        *,
        anchor: str = "start",
        tint: str = "ink",
        size: float | None = None,
        full: str | None = None,
    ) -> None:
        """Write `words`, with a rim in the colour of the page; `full` is what they were shortened from."""
        attributes = f' text-anchor="{anchor}"' if anchor != "start" else ""
        if size is not None and size != self.look.size:
            attributes += f' font-size="{size:g}"'
        title = f"<title>{escape(full)}</title>" if full is not None and full != words else ""
        self._shapes.append(
            f'<text x="{number(x)}" y="{number(y)}"{attributes} {paint(tint, "page", 3)} paint-order="stroke" '
            f'stroke-linejoin="round">{title}{escape(words, quote=False)}</text>'
        )

    def line(
        self, x1: float, y1: float, x2: float, y2: float, *, tint: str = "soft", thick: float = 1.0, dashes: str = ""
    ) -> None:
        """Draw a straight line."""
        points = f"M{number(x1)} {number(y1)}L{number(x2)} {number(y2)}"
        self.path(points, stroke=tint, thick=thick, dashes=dashes)

    def path(
        self,
        points: str,
        *,
        fill: str | None = None,
        stroke: str | None = None,
        thick: float = 1.0,
        dashes: str = "",
        title: str | None = None,
    ) -> None:
        """Draw a path."""
        dashed = f' stroke-dasharray="{dashes}"' if dashes else ""
        start = f'<path d="{points}" {paint(fill, stroke, thick)}{dashed}'
        self._shapes.append(f"{start}/>" if title is None else f"{start}><title>{escape(title)}</title></path>")

    def box(self, x: float, y: float, wide: float, high: float, *, fill: str | None, stroke: str | None = None) -> None:
        """Draw a rectangle."""
        self._shapes.append(
            f'<rect x="{number(x)}" y="{number(y)}" width="{number(wide)}" height="{number(high)}" '
            f"{paint(fill, stroke)}/>"
        )

    def dot(self, x: float, y: float, radius: float, *, fill: str, stroke: str | None = None) -> None:
        """Draw a disc."""
        self._shapes.append(
            f'<circle cx="{number(x)}" cy="{number(y)}" r="{number(radius)}" {paint(fill, stroke, 1.5)}/>'
        )

    def diamond(self, x: float, y: float, radius: float, *, stroke: str) -> None:
        """Draw a hollow diamond."""
        corners = ((x - radius, y), (x, y - radius), (x + radius, y), (x, y + radius))
        points = "L".join(f"{number(a)} {number(b)}" for a, b in corners)
        self.path(f"M{points}Z", fill="page", stroke=stroke, thick=1.5)

    def span(self, x1: float, x2: float, y: float, *, tint: str = "ink", reach: float = 3.5) -> None:
        """Draw an interval: a line with a tick at both ends."""
        low, high = number(y - reach), number(y + reach)
        self.path(f"M{number(x1)} {low}V{high}M{number(x1)} {number(y)}H{number(x2)}M{number(x2)} {low}V{high}",
                  stroke=tint, thick=1.5)  # fmt: skip

    def paragraph(self, x: float, y: float, words: Sequence[str], *, tint: str = "soft") -> float:
        """Write lines beneath each other and return where the next one would stand."""
        for line in words:
            self.text(x, y, line, tint=tint, size=SMALL)
            y += SMALL * 1.35
        return y

    def finish(self, height: float, title: str, description: str) -> str:
        """Return the picture; `title` and `description` are what a screen reader says of it."""
        prefix = self.look.inside or "picture"
        ground = "" if self.look.inside else f'<rect width="100%" height="100%" fill="{LIGHT["page"]}"/>'
        inside = ' class="picture"' if self.look.inside else ""
        return (
            f'<svg xmlns="http://www.w3.org/2000/svg" viewBox="0 0 {self.look.width} {number(height)}" '
            f'width="{self.look.width}" height="{number(height)}"{inside} role="img" '
            f'aria-labelledby="{prefix}-title {prefix}-desc" font-family="{FONT}" font-size="{self.look.size:g}">'
            f'<title id="{prefix}-title">{escape(title, quote=False)}</title>'
            f'<desc id="{prefix}-desc">{escape(description, quote=False)}</desc>{ground}\n'
            + "\n".join(self._shapes)
            + "\n</svg>"
        )


def wrapped(words: str, room: float, size: float = SMALL) -> list[str]:
    """Return `words` broken into lines no wider than `room`."""
    lines: list[str] = []
    for word in words.split(" "):
        if lines and WIDER * width(f"{lines[-1]} {word}", size) <= room:
            lines[-1] += f" {word}"
        else:
            lines.append(word)
    return lines
