"""The front page and the page for spreadsheets."""

import re
from urllib.parse import parse_qs, urlsplit

import pytest

from service.representations.index import index_page
from service.representations.page import BookHead
from service.representations.spreadsheet import (
    CALC_OPTIONS,
    cell_address,
    cell_formulas,
    power_query,
    spreadsheet_page,
    xml_formulas,
)
from service.schemas.results import ALLOCATIONS_COLUMNS
from tests.unit.representations.answers import ODD
from tests.unit.representations.test_report import assert_page

BASE = "http://127.0.0.1:8000"
SOUND = BookHead(
    name="harbour", sub_portfolios=7, scenarios=10_000, currency="EUR", reference="A <i>name</i>", example="quay & pier"
)
BROKEN = BookHead(name="broken", reason="row 3 of <losses.csv> is short")


def test_the_front_page_lists_books_and_leads_on():
    page = assert_page(index_page([BROKEN, SOUND], version="1.2.3"))
    assert page.row("report on harbour")[1:4] == ["A <i>name</i>, amounts in EUR", "7", "10,000"]
    assert page.row("report on harbour")[5] == "quay & pier\xa0×\xa01.1"
    assert page.row("broken") == ["broken", "row 3 of <losses.csv> is short"]
    assert "/v1/books/harbour/increments.csv?sub_portfolio=quay+%26+pier&scale=1.1" in page.links
    wanted = {"/v1/books/harbour/report", "/v1/books/harbour/allocations.csv", "/docs", "/spreadsheets", "/problems"}
    assert wanted | {"/v1/limits", "/openapi.json", "/v1/books"} <= set(page.links)
    assert not any("broken" in link for link in page.links)
    assert "1.2.3" in page.words


def test_without_books_it_says_how_to_get_one():
    page = assert_page(index_page([], root="/risk"))
    assert "--demo" in page.words
    assert all(link.startswith(("/risk/", "#")) for link in page.links)


def test_the_spreadsheet_page_holds_what_is_to_be_copied():
    page = assert_page(spreadsheet_page(BASE, [BROKEN, SOUND]))
    copied = [*cell_formulas(BASE, SOUND).values(), *xml_formulas(BASE, SOUND).values(), CALC_OPTIONS]
    words = "".join(page.text)
    for one in [*copied, power_query(BASE, SOUND), cell_address(BASE, SOUND)]:
        assert one in words
    for seen in ("#VALUE!", "#N/A", "#NAME?", "Err:540"):
        assert page.row(seen)
    assert CALC_OPTIONS == "44,34,76,1,,1033,true,true"


def test_it_has_examples_without_a_book():
    page = assert_page(spreadsheet_page(BASE, []))
    assert f"{BASE}/v1/books/BOOK/value.txt?of=contribution&sub_portfolio=SUB_PORTFOLIO" in page.words


@pytest.mark.parametrize("name", [*ODD, "a/b?c#d", 'it\'s "both"'])
def test_any_name_stands_in_a_formula_and_is_the_same_when_read(name):
    book = BookHead(name="harbour", example=name)
    parts = urlsplit(cell_address(BASE, book))
    assert parts.path == "/v1/books/harbour/value.txt"
    assert parse_qs(parts.query)["sub_portfolio"] == [name]
    formula = cell_formulas(BASE, book)["English"]
    assert formula.startswith('=NUMBERVALUE(WEBSERVICE("http')
    assert formula.count('"') == 6
    excel = xml_formulas(BASE, book)["Excel"]
    # between its outer quotes a formula doubles each quote
    path = excel.removeprefix('=NUMBERVALUE(FILTERXML(A1,"').removesuffix('"),".",",")').replace('""', '"')
    literal = path.removeprefix("//row[@scope='sub_portfolio'][@id=").removesuffix("]/@contribution")
    pieces = re.findall(r"""'[^']*'|"[^"]*\"""", literal)
    assert "".join(piece[1:-1] for piece in pieces) == name
    assert literal == pieces[0] or literal == f"concat({', '.join(pieces)})"


def test_calc_and_semicolon_forms():
    forms = cell_formulas(BASE, SOUND)
    assert forms["English, semicolons"].endswith('";".";",")'.replace('";"', '");"', 1))
    assert forms["German"].startswith('=ZAHLENWERT(WEBDIENST("')
    assert xml_formulas(BASE, SOUND)["Calc"].startswith('=NUMBERVALUE(FILTERXML(A1;"string(//row')


def test_the_query_names_the_columns_of_the_csv_and_its_culture():
    query = power_query(BASE, SOUND)
    for column in ALLOCATIONS_COLUMNS:
        assert (f'{{"{column.name}", type number}}' in query) == (column.kind == "number")
    assert '"en-US"' in query
    assert 'RelativePath = "v1/books/harbour/allocations.csv"' in query
    assert query.count("(") == query.count(")")
    assert query.count("{") == query.count("}")
    assert query.count("[") == query.count("]")
    assert power_query('http://x/"q"', SOUND).count('"http://x/""q"""') == 1
