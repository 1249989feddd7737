"""The front page: what this is and where to go."""

from html import escape

from service.pages.html import page


def front_page(version: str) -> str:
    """Return the page at `/`."""
    return page(
        "tailrace",
        "<p>Post a table of loss scenarios and get risk measures, the part that each sub-portfolio has in "
        f"them, and how sure each figure is. This is version {escape(version)}.</p>\n<h2>Calculate</h2><ul>"
        "<li><code>POST /v1/measures</code>: risk measures of the whole and of each part alone</li>"
        "<li><code>POST /v1/allocations</code>: the total split among the sub-portfolios</li></ul>\n"
        "<h2>Read</h2><ul>"
        '<li><a href="/docs">API page</a>: every field, with examples to try; '
        '<a href="/openapi.json">its document</a> for programs</li>'
        '<li><a href="/problems">Problems</a>: what each error means and what to do</li>'
        '<li><a href="/v1/limits">Limits</a> of this server</li></ul>\n'
        "<h2>Operate</h2><ul>"
        '<li><a href="/healthz">healthz</a>: the process lives</li>'
        '<li><a href="/readyz">readyz</a>: it can take work</li>'
        '<li><a href="/metrics">metrics</a>: for a monitoring system</li></ul>\n',
    )
