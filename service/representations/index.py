"""The front page: the books on this server and where to go from them."""

from collections.abc import Sequence
from html import escape

from service.representations.page import BookHead, Cell, book_path, link, more_of, name, page, table

NONE = (
    "<p>There are no books on this server. A book is a file of losses under a name: start the service with "
    "<code>--books DIR</code>, or with <code>--demo</code> for an invented one.</p>\n"
)


def index_page(books: Sequence[BookHead], *, version: str = "", root: str = "") -> str:
    """Return the page at `/`.

    Parameters
    ----------
    books : sequence of BookHead
        Damaged ones too; they are listed with their reason.
    version : str
        Of the service.
    root : str
        Path under which the service is mounted, without a slash at its end.
    """
    sound = [book for book in books if book.reason is None]
    damaged = [book for book in books if book.reason is not None]
    body = (
        "<p>Loss scenarios in, risk measures and their allocation out. A book is a set of losses kept on this server "
        "under a name; its report says what the whole needs, what each part contributes and how sure that is.</p>\n"
        f"<section><h2>Books</h2>\n{_sound(sound, root) if sound else NONE}{_damaged(damaged)}</section>\n"
        "<section><h2>Other ways in</h2>\n<ul>"
        f"<li>{link(root + '/spreadsheets', 'Spreadsheets')}: formulas for a cell, a linked table, a query</li>"
        f"<li>{link(root + '/docs', 'API')}: every request and field, with examples to try; "
        f"{link(root + '/openapi.json', 'its document')} for programs</li>"
        f"<li>{link(root + '/v1/books', 'The list of books')} for programs</li>"
        f"<li>{link(root + '/problems', 'Problems')}: what each error means and what to do</li>"
        f"<li>{link(root + '/v1/limits', 'Limits')} of this server</li></ul></section>\n"
    )
    return page("tailrace", body, root=root, foot=f"<p>Version {escape(version)}</p>" if version else "")


def _sound(books: Sequence[BookHead], root: str) -> str:
    heads = [
        Cell("book", "text"),
        Cell("about", "words"),
        Cell("sub-portfolios"),
        Cell("scenarios"),
        Cell("figures", "text"),
        Cell("one more deal", "text"),
    ]
    return table("Books that can be used", heads, [_row(book, root) for book in books])


def _row(book: BookHead, root: str) -> list[Cell]:
    about = [book.reference, book.valuation_date, book.currency and f"amounts in {book.currency}"]
    forms = "&nbsp;".join(
        link(book_path(root, book.name, f"allocations.{form}"), form.upper()) for form in ("csv", "json")
    )
    return [
        Cell(f'<a href="{escape(book_path(root, book.name, "report"))}">report on {name(book.name)}</a>'),
        Cell(", ".join(name(words) for words in about if words) or "–", "words"),
        Cell("–" if book.sub_portfolios is None else f"{book.sub_portfolios:,}"),
        Cell("–" if book.scenarios is None else f"{book.scenarios:,}"),
        Cell(forms, "text"),
        Cell("–" if book.example is None else more_of(root, book.name, book.example), "text"),
    ]


def _damaged(books: Sequence[BookHead]) -> str:
    if not books:
        return ""
    rows = [[Cell(name(book.name)), Cell(escape(str(book.reason)), "words")] for book in books]
    return '<p class="damaged">Some books cannot be used.</p>\n' + table(
        "Damaged books", [Cell("book", "text"), Cell("reason", "words")], rows
    )
