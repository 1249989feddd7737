"""From SVG to PNG, with the font that is shipped and no other: the same picture on every machine."""

from collections.abc import Sequence
from importlib.resources import as_file, files

from service.errors import Fault, NotAcceptable

FONT = "LiberationSans-Regular.ttf"
FAMILY = "Liberation Sans"
ZOOM = 2.0  # pixels of the PNG per pixel of the SVG
SIGNATURE = b"\x89PNG\r\n\x1a\n"


def png(svg: str, *, zoom: float = ZOOM, fonts: Sequence[str] = ()) -> bytes:
    """Return a picture as PNG.

    Parameters
    ----------
    svg : str
        A picture of its own, not one made for the inside of a page.
    zoom : float
        Pixels of the PNG per pixel of the SVG.
    fonts : sequence of str
        Files of further fonts. The shipped one has the Latin, Greek, Cyrillic and Hebrew scripts; without
        another, names in other scripts are boxes here (in SVG the reader's own fonts draw them).

    Raises
    ------
    NotAcceptable
        Where the optional package that draws it is not installed.
    """
    try:
        import resvg_py
    except ImportError:
        detail = "PNG needs the package resvg-py: install tailrace with its extra `png`. SVG is there without it."
        fault = Fault(detail=detail, code=NotAcceptable.code)
        raise NotAcceptable(detail, faults=[fault]) from None
    with as_file(files("service.representations") / "fonts" / FONT) as font:
        # Without system fonts a text in any other font would not be drawn at all, and nothing would say so.
        return bytes(
            resvg_py.svg_to_bytes(
                svg_string=svg,
                zoom=zoom,
                skip_system_fonts=True,
                font_files=[str(font), *fonts],
                font_family=FAMILY,
                sans_serif_family=FAMILY,
            )
        )
