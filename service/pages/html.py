"""The frame of every page: one style, one policy, no script."""

from base64 import b64encode
from hashlib import sha256
from html import escape

STYLE = """
:root{color-scheme:light dark;font:16px/1.55 system-ui,sans-serif}
body{max-width:46rem;margin:2.5rem auto;padding:0 1.2rem}
h1{font-size:1.5rem;margin:0 0 .3rem}h2{font-size:1.05rem;margin:1.6rem 0 .3rem}
p,ul,dl{margin:.4rem 0}code{font:.92em ui-monospace,monospace}
dt{font-weight:600;margin-top:.7rem}dd{margin:0 0 0 1.2rem}
nav{margin-bottom:1.5rem;font-size:.92rem}a{color:LinkText}
"""

POLICY = (
    f"default-src 'none'; style-src 'sha256-{b64encode(sha256(STYLE.encode()).digest()).decode()}'; "
    "img-src data:; base-uri 'none'; form-action 'none'; frame-ancestors 'none'"
)
"""Content-Security-Policy of the pages: this style and nothing else."""

NAVIGATION = (("/", "tailrace"), ("/docs", "API"), ("/problems", "problems"), ("/v1/limits", "limits"))


def page(title: str, body: str) -> str:
    """Return a whole page; `title` is text, `body` is HTML."""
    links = " · ".join(f'<a href="{address}">{name}</a>' for address, name in NAVIGATION)
    return (
        '<!doctype html>\n<html lang="en"><head><meta charset="utf-8">'
        '<meta name="viewport" content="width=device-width, initial-scale=1">'
        f'<link rel="icon" href="data:,"><title>{escape(title)}</title><style>{STYLE}</style></head>\n'
        f"<body><nav>{links}</nav>\n<main><h1>{escape(title)}</h1>\n{body}</main></body></html>\n"
    )
