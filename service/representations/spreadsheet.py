"""The page for people who work in a spreadsheet: formulas to copy, a linked table, a query, and errors explained."""

from collections.abc import Sequence
from html import escape
from urllib.parse import quote

from service.representations.page import BookHead, Cell, book_path, link, page, table

CALC_OPTIONS = "44,34,76,1,,1033,true,true"
"""What a linked CSV needs in LibreOffice Calc."""

OPTIONS = (
    ("44", "cells are parted by commas"),
    ("34", "texts stand in double quotes"),
    ("76", "the text is UTF-8"),
    ("1", "begin with the first row"),
    ("(empty)", "columns have no formats of their own"),
    ("1033", "numbers are read as in English (USA), whatever the language of the spreadsheet"),
    ("true", "a quoted cell is text, never a number or a formula"),
    ("true", "numbers are recognised"),
)

ERRORS = (
    (
        "#VALUE!",
        "The service refused the request, is busy, or cannot be reached; or the answer is longer than a cell",
        "Open the address in a browser: it says in words what is wrong. A misspelt name is refused, never ignored.",
    ),
    (
        "#VALUE! in a sum, though the cell shows a number",
        "The answer is text, and this spreadsheet writes a decimal comma",
        "Put NUMBERVALUE around it, as in the formulas above.",
    ),
    ("#N/A", "Calc found no such row in the XML answer", "Compare the names in the formula with the answer."),
    (
        "#NAME?",
        "This program does not have the function: WEBSERVICE works in Excel for Windows and in Calc",
        "On a Mac or in a browser, use a query or open the CSV.",
    ),
    (
        "Err:540",
        "Calc does not fetch from outside until it is allowed to",
        "Click Allow updating above the sheet, or trust the folder of the file under Tools, Options, Security.",
    ),
    (
        "Figures a thousand times too large, or text",
        "A CSV was opened with the rules of another language",
        f"Use the option string {CALC_OPTIONS}, or the query with its en-US conversion.",
    ),
)

NUMBER_COLUMNS = (
    "contribution",
    "standard_error",
    "lower",
    "upper",
    "share",
    "stand_alone",
    "diversification_benefit",
    "expected_loss",
    "expected_profit",
    "return_on_capital",
    "allocated_capital",
)
MEASURE = "measure=expected_shortfall&level=0.99"
WORKBOOK = "/spreadsheets/ternholm.xlsx"  # made for the demonstration's book
WHOLE = BookHead(name="BOOK", example="SUB_PORTFOLIO")  # stands in the examples where there is no book


def spreadsheet_page(base_url: str, books: Sequence[BookHead], *, root: str = "") -> str:
    """Return the page.

    Parameters
    ----------
    base_url : str
        Where the service is reached, without a slash at its end, e.g. `http://127.0.0.1:8000`.
    books : sequence of BookHead
        The first sound one stands in the examples.
    root : str
        Path under which the service is mounted, for links; part of `base_url` too.
    """
    book = next((one for one in books if one.reason is None), WHOLE)
    parts = (
        _workbook(root),
        _one(base_url, book),
        _many(base_url, book),
        _linked(base_url, book),
        _query(base_url, book),
        _errors(root),
    )
    return page("Figures in a spreadsheet", "".join(parts), root=root)


def cell_address(base_url: str, book: BookHead) -> str:
    """Return the address of one figure."""
    part = quote(book.example or str(WHOLE.example), safe="")
    return base_url + book_path("", book.name, f"value.txt?of=contribution&sub_portfolio={part}&{MEASURE}")


def cell_formulas(base_url: str, book: BookHead) -> dict[str, str]:
    """Return the formula of one figure, as it is typed in each kind of spreadsheet."""
    address = _typed(cell_address(base_url, book))
    return {
        "English": f'=NUMBERVALUE(WEBSERVICE("{address}"),".",",")',
        "English, semicolons": f'=NUMBERVALUE(WEBSERVICE("{address}");".";",")',
        "German": f'=ZAHLENWERT(WEBDIENST("{address}");".";",")',
        "French": f'=VALEURNOMBRE(SERVICEWEB("{address}");".";",")',
    }


def xml_formulas(base_url: str, book: BookHead) -> dict[str, str]:
    """Return the formulas that take figures out of one XML answer in A1."""
    address = _typed(base_url + book_path("", book.name, f"allocations.xml?{MEASURE}"))
    row = f"//row[@scope='sub_portfolio'][@id={_xpath(book.example or str(WHOLE.example))}]/@contribution"
    return {
        "A1": f'=WEBSERVICE("{address}")',
        "Excel": f'=NUMBERVALUE(FILTERXML(A1,"{_typed(row)}"),".",",")',
        "Calc": f'=NUMBERVALUE(FILTERXML(A1;"{_typed(f"string({row})")}");".";",")',
    }


def power_query(base_url: str, book: BookHead) -> str:
    """Return a query in M that loads the table of contributions, numbers read as in English wherever it runs."""
    columns = ",\n".join(f'            {{"{column}", type number}}' for column in NUMBER_COLUMNS)
    path = book_path("", book.name, "allocations.csv").removeprefix("/")
    return (
        "let\n"
        "    Answer = Web.Contents(\n"
        f'        "{_typed(base_url)}",\n'
        "        [\n"
        f'            RelativePath = "{_typed(path)}",\n'
        '            Query = [measure = "expected_shortfall", level = "0.99"]\n'
        "        ]\n"
        "    ),\n"
        "    Rows = Csv.Document(\n"
        '        Answer, [Delimiter = ",", Encoding = 65001, QuoteStyle = QuoteStyle.Csv]\n'
        "    ),\n"
        "    Named = Table.PromoteHeaders(Rows, [PromoteAllScalars = true]),\n"
        "    Numbers = Table.TransformColumnTypes(\n"
        "        Named,\n"
        f"        {{\n{columns}\n        }},\n"
        '        "en-US"\n'
        "    )\n"
        "in\n"
        "    Numbers\n"
    )


def _typed(words: str) -> str:
    """Return what stands for `words` between the double quotes of a formula or a query."""
    return words.replace('"', '""')


def _xpath(words: str) -> str:
    """Return `words` as a literal of XPath 1.0, which has no escapes."""
    if "'" not in words:
        return f"'{words}'"
    if '"' not in words:
        return f'"{words}"'
    pieces = ', "\'", '.join(f"'{piece}'" for piece in words.split("'"))
    return f"concat({pieces})"


def _code(words: str, kind: str = "wrap") -> str:
    return f'<pre class="{kind}"><code>{escape(words)}</code></pre>\n'


def _workbook(root: str) -> str:
    return (
        f"<p>{link(root + WORKBOOK, 'A workbook to begin with')} asks a server that was started with "
        "<code>--demo</code>; give it the address of this one in its first row.</p>\n"
    )


def _one(base_url: str, book: BookHead) -> str:
    formulas = "".join(f"<h3>{words}</h3>\n{_code(cell)}" for words, cell in cell_formulas(base_url, book).items())
    return (
        "<section><h2>One figure in a cell</h2>\n<p>This address answers exactly one number, unrounded, with a "
        f"decimal point:</p>\n{_code(cell_address(base_url, book))}<p>As a formula it is, by the language and the "
        f"separators of the spreadsheet:</p>\n{formulas}"
        "<p>LibreOffice Calc takes semicolons in every language. NUMBERVALUE is needed everywhere: WEBSERVICE "
        "answers text, and where the decimal sign is a comma that text is not a number.</p>\n"
        "<p><code>of</code> is <code>total</code>, <code>stand_alone</code>, <code>contribution</code>, "
        "<code>share</code> or <code>expected_loss</code>; <code>field</code> is <code>value</code>, "
        "<code>standard_error</code>, <code>lower</code> or <code>upper</code>; <code>attribute</code> and "
        "<code>group</code> name a group instead of a sub-portfolio. Names in an address are encoded: "
        "<code>ENCODEURL</code> does it. Excel takes addresses of up to 2,048 characters. To pull anew, change "
        "the value of <code>&amp;refresh=</code>, for example to that of a cell. A hundred such cells cost one "
        "calculation.</p></section>\n"
    )


def _many(base_url: str, book: BookHead) -> str:
    formulas = xml_formulas(base_url, book)
    return (
        "<section><h2>Many cells from one answer</h2>\n<p>Put the XML answer for one measure and one rule into "
        f"cell A1:</p>\n{_code(formulas['A1'])}<p>and take figures out of it, in Excel:</p>\n{_code(formulas['Excel'])}"
        f"<p>in LibreOffice Calc:</p>\n{_code(formulas['Calc'])}<p>Every column of the CSV is an attribute of a row. "
        "Where the decimal sign is a comma, Excel may turn what FILTERXML finds into a number by its own rules: "
        "compare one figure with the formula for one cell before you rely on it. A cell holds 32,767 characters: a "
        "longer answer is refused, and the linked table below serves "
        "instead.</p></section>\n"
    )


def _linked(base_url: str, book: BookHead) -> str:
    address = base_url + book_path("", book.name, f"allocations.csv?{MEASURE}")
    rows = [[Cell(f"<code>{escape(option)}</code>"), Cell(escape(words), "words")] for option, words in OPTIONS]
    return (
        "<section><h2>The whole table, linked in LibreOffice Calc</h2>\n<p>Sheet, External Links: give this "
        f"address</p>\n{_code(address)}<p>and these options, or choose the same in the dialogue:</p>\n"
        f"{_code(CALC_OPTIONS)}"
        + table("What the options say", [Cell("option", "text"), Cell("meaning", "words")], rows)
        + "<p>For a file to be opened with a double click, add <code>&amp;bom=1</code> to the address: Excel then "
        "reads the letters right.</p></section>\n"
    )


def _query(base_url: str, book: BookHead) -> str:
    return (
        "<section><h2>The whole table, as a query in Excel</h2>\n<p>Data, Get Data, From Other Sources, Blank Query, "
        f"Advanced Editor: replace what is there by</p>\n{_code(power_query(base_url, book), 'query')}<p>The last step "
        "reads numbers as in English (USA), so that the query works in every language. Choose anonymous access unless "
        "this server asks for a key; a cell formula cannot send one.</p></section>\n"
    )


def _errors(root: str) -> str:
    rows = [[Cell(escape(seen)), Cell(escape(why), "words"), Cell(escape(remedy), "words")]
            for seen, why, remedy in ERRORS]  # fmt: skip
    heads = [Cell("what you see", "text"), Cell("why", "words"), Cell("what to do", "words")]
    return (
        "<section><h2>What errors look like</h2>\n"
        + table("Errors in a spreadsheet", heads, rows)
        + f"<p>The {link(root + '/problems', 'pages on problems')} explain each code.</p></section>\n"
    )
