"""The frame of the pages that show figures: one style for screen, telephone and paper, and no script."""

from base64 import b64encode
from collections.abc import Iterable, Mapping, Sequence
from dataclasses import dataclass
from hashlib import sha256
from html import escape
from urllib.parse import quote, urlencode

from service.representations.charts.canvas import DARK, LIGHT, dark_style

SHORT = 25  # rows of a table that paper does not break
MORE = "1.1"  # times its size, of a part that grows
INKS = ("ink", "soft", "line", "page")  # that pages share with the pictures in them


def _inks(palette: Mapping[str, str]) -> str:
    return "".join(f"--{name}:{palette[name]};" for name in INKS)


STYLE = (
    f":root{{{_inks(LIGHT)}"
    """--link:#0b57a4;--shade:#f1f4f7;--warn:#8f2d0c;
color-scheme:light dark;font:16px/1.5 "Liberation Sans",Arial,Helvetica,"DejaVu Sans Condensed",sans-serif}
*{box-sizing:border-box}
body{margin:0;background:var(--page);color:var(--ink);overflow-wrap:break-word}
header,main,footer{max-width:64rem;margin:0 auto;padding:0 1.2rem}
header{padding-top:1rem}footer{padding-bottom:2rem;color:var(--soft);font-size:.9rem}
nav ul{list-style:none;display:flex;flex-wrap:wrap;gap:.2rem 1.2rem;margin:0;padding:0;font-size:.95rem}
a{color:var(--link)}a:focus-visible,[tabindex]:focus-visible{outline:3px solid var(--link);outline-offset:2px}
.skip{position:absolute;left:-99rem}.skip:focus{left:1rem;top:.5rem;background:var(--page);padding:.4rem .8rem}
h1{font-size:1.75rem;line-height:1.2;margin:1.2rem 0 .4rem}
h2{font-size:1.3rem;margin:2.4rem 0 .5rem;border-top:2px solid var(--line);padding-top:.8rem}
h3{font-size:1.05rem;margin:1.3rem 0 .3rem}
p,ul,dl{margin:.5rem 0}.soft{color:var(--soft)}.caution{border-left:4px solid var(--warn);padding:.2rem 0 .2rem .9rem}
.cards{display:grid;grid-template-columns:repeat(auto-fit,minmax(17rem,1fr));gap:.8rem;margin:.8rem 0}
.card{background:var(--shade);border:1px solid var(--line);padding:.7rem 1rem}
.card h3{margin:0}.card p{margin:.3rem 0;font-size:.95rem}.card .figure{font-size:1.7rem;line-height:1.2;margin:.3rem 0}
.figure span{font-size:1rem;color:var(--soft)}
figure{margin:1rem 0}figcaption{color:var(--soft);font-size:.95rem}
.picture{display:block;width:100%;height:auto;max-width:760px}.phone{display:none}
.scroll{overflow-x:auto;margin:.8rem 0}
table{border-collapse:collapse;font-size:.9rem;font-variant-numeric:tabular-nums}
caption{text-align:left;font-weight:bold;padding:.3rem 0}
caption span{font-weight:normal;color:var(--soft)}
th,td{padding:.32rem .6rem;text-align:right;vertical-align:top;border-bottom:1px solid var(--line)}
thead th{vertical-align:bottom;white-space:normal!important;border-bottom:2px solid var(--soft);font-weight:600}
th.text,td.text{text-align:left}td.words{text-align:left;min-width:14rem}
tbody th,tfoot th{text-align:left;font-weight:normal;min-width:9rem;max-width:18rem;overflow-wrap:anywhere;
position:sticky;left:0;background:var(--page)}
tfoot th,tfoot td{font-weight:600;border-top:2px solid var(--soft)}.number{white-space:nowrap}
dl{display:grid;grid-template-columns:max-content 1fr;gap:.2rem 1.2rem}
dt{font-weight:600}dd{margin:0 0 .3rem;overflow-wrap:anywhere}
code,pre{font-family:"Liberation Mono",ui-monospace,Consolas,monospace;font-size:.9rem}
code{overflow-wrap:anywhere}pre{background:var(--shade);border:1px solid var(--line);padding:.7rem;overflow-x:auto}
pre.wrap{white-space:pre-wrap;overflow-wrap:anywhere}.damaged{color:var(--warn);font-weight:600}
@media screen and (max-width:40rem){
.desk{display:none}.phone{display:block}header,main,footer{padding-left:.9rem;padding-right:.9rem}
h1{font-size:1.45rem}th,td{padding:.3rem .45rem}tbody th,tfoot th{min-width:7.5rem;max-width:9rem}
td.words{min-width:12rem}dl{display:block}
}
@media screen and (prefers-color-scheme:dark){
"""
    f":root{{{_inks(DARK)}"
    "--link:#8ec5ff;--shade:#1c232b;--warn:#f0936a}"
    + dark_style()
    + """
}
@media print{
@page{size:A4;margin:15mm 14mm}
:root{color-scheme:light;font-size:10pt}
header,.skip{display:none}header,main,footer{max-width:none;padding:0}a{color:inherit}
h2{margin-top:1.4rem}h1,h2,h3,caption{break-after:avoid}p{orphans:3;widows:3}
figure,.card,tr{break-inside:avoid}thead{display:table-header-group}tfoot{display:table-row-group}
.scroll{overflow:visible}table{font-size:8.5pt;width:100%}th,td{padding:.18rem .4rem}
tbody th,tfoot th{position:static;min-width:7rem}.card,pre{background:none}pre{white-space:pre-wrap}
.figure{font-size:15pt}.cards{grid-template-columns:repeat(3,1fr)}.allocation{break-before:page}
.short{break-inside:avoid}thead{break-after:avoid}
.picture{max-width:100%;max-height:215mm}
}
"""
)

POLICY = (
    f"default-src 'none'; style-src 'sha256-{b64encode(sha256(STYLE.encode()).digest()).decode()}'; "
    "img-src data:; base-uri 'none'; form-action 'none'; frame-ancestors 'none'"
)
"""Content-Security-Policy of these pages: this style and nothing else."""

PICTURE_POLICY = "default-src 'none'; style-src 'unsafe-inline'; frame-ancestors 'none'; sandbox"
"""Content-Security-Policy of a picture that is a file of its own."""

LINKS = (("/", "Books"), ("/spreadsheets", "Spreadsheets"), ("/docs", "API"), ("/problems", "Problems"))


@dataclass(frozen=True, slots=True, kw_only=True)
class BookHead:
    """What the pages say of a book."""

    name: str
    reason: str | None = None
    """Why it is damaged; None for one that can be used."""
    sub_portfolios: int | None = None
    scenarios: int | None = None
    currency: str | None = None
    valuation_date: str | None = None
    reference: str | None = None
    example: str | None = None
    """The id of one of its sub-portfolios, for examples."""


def page(title: str, body: str, *, root: str = "", foot: str = "") -> str:
    """Return a whole page.

    Parameters
    ----------
    title : str
        Text.
    body, foot : str
        HTML.
    root : str
        Path under which the service is mounted, without a slash at its end.
    """
    links = "".join(f'<li><a href="{escape(root + path)}">{name}</a></li>' for path, name in LINKS)
    footer = f"<footer>{foot}</footer>\n" if foot else ""
    tab = title if title == "tailrace" else f"{title} - tailrace"
    return (
        '<!doctype html>\n<html lang="en">\n<head><meta charset="utf-8">'
        '<meta name="viewport" content="width=device-width, initial-scale=1">'
        '<meta name="referrer" content="no-referrer">'
        f'<link rel="icon" href="data:,"><title>{escape(tab)}</title><style>{STYLE}</style></head>\n'
        f'<body><a class="skip" href="#main">Skip to the content</a>\n'
        f'<header><nav aria-label="tailrace"><ul>{links}</ul></nav></header>\n'
        f'<main id="main" tabindex="-1"><h1>{escape(title)}</h1>\n{body}</main>\n{footer}</body>\n</html>\n'
    )


def name(words: str) -> str:
    """Return a caller's text as HTML, kept apart from the direction of the text around it."""
    return f"<bdi>{escape(words)}</bdi>"


def link(address: str, words: str) -> str:
    """Return a link with plain words."""
    return f'<a href="{escape(address)}">{escape(words)}</a>'


def book_path(root: str, book: str, rest: str) -> str:
    """Return the path of something of a book."""
    return f"{root}/v1/books/{quote(book, safe='')}/{rest}"


def more_of(root: str, book: str, part: str, measure: Sequence[tuple[str, str]] = ()) -> str:
    """Return a link to what a tenth more of a sub-portfolio would change; without `measure`, in those of the book."""
    query = urlencode([("sub_portfolio", part), ("scale", MORE), *measure])
    return f'<a href="{escape(book_path(root, book, f"increments.csv?{query}"))}">{name(part)}&nbsp;×&nbsp;{MORE}</a>'


@dataclass(frozen=True, slots=True)
class Cell:
    """A cell: HTML, and whether it stands to the left as text, wide as words, or to the right as a number."""

    html: str
    kind: str = "number"


def table(
    caption: str,
    heads: Sequence[Cell],
    rows: Iterable[Sequence[Cell]],
    *,
    foot: Sequence[Cell] | None = None,
    unit: str = "",
) -> str:
    """Return a table whose first column names its rows; on a narrow screen it scrolls sideways by itself."""
    columns = "".join(
        f'<th scope="col" class="{"number" if head.kind == "number" else "text"}">{head.html}</th>' for head in heads
    )
    lines = [f"<tr>{_cells(row)}</tr>\n" for row in rows]
    length = "short" if len(lines) <= SHORT else "long"
    feet = "" if foot is None else f"<tfoot><tr>{_cells(foot)}</tr></tfoot>"
    small = f" <span>{escape(unit)}</span>" if unit else ""
    return (
        f'<div class="scroll {length}" role="region" tabindex="0" aria-label="{escape(caption)}"><table>'
        f"<caption>{escape(caption)}{small}</caption>\n<thead><tr>{columns}</tr></thead>\n<tbody>\n{''.join(lines)}</tbody>"
        f"{feet}</table></div>\n"
    )


def _cells(row: Sequence[Cell]) -> str:
    first, *others = row
    cells = "".join(f'<td class="{cell.kind}">{cell.html}</td>' for cell in others)
    return f'<th scope="row">{first.html}</th>{cells}'
