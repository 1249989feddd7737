"""The report page: self-contained, in order for a screen reader, and its figures are those of the answer."""

import re
from html.parser import HTMLParser
from itertools import pairwise
from urllib.parse import parse_qsl, urlsplit

import pytest

from service.representations.charts.canvas import DARK, LIGHT
from service.representations.page import POLICY, STYLE
from service.representations.report import MOST_ROWS, measure_query, report_page
from tests.unit.representations.answers import BOOK, MEASURES, ODD, as_asked, asked, storms

VOID = {"meta", "link", "br"}
ATTRIBUTES = [{"line": "hull"}, {"line": "cargo"}, {"line": "hull"}, {}]


class Page(HTMLParser):
    """Reads a page: refuses tags that do not nest, and keeps what tests ask for."""

    def __init__(self, html):
        super().__init__()
        self.open, self.seen, self.headings, self.rows, self.links, self.ids = [], [], [], [], [], []
        self.cell, self.text = None, []
        self.feed(html)
        self.close()
        assert self.open == []

    def handle_starttag(self, tag, attributes):
        attributes = dict(attributes)
        self.seen.append((tag, attributes))
        assert not [name for name in attributes if name.startswith("on") or name == "style"]
        if tag not in VOID:
            self.open.append(tag)
        if "id" in attributes:
            self.ids.append(attributes["id"])
        if re.fullmatch("h[1-6]", tag):
            self.headings.append([int(tag[1]), ""])
        if tag == "tr":
            self.rows.append([])
        if tag in ("td", "th"):
            self.rows[-1].append("")
            self.cell = tag
        if tag == "a":
            self.links.append(attributes["href"])

    def handle_startendtag(self, tag, attributes):
        self.handle_starttag(tag, attributes)
        if tag not in VOID:
            self.open.pop()

    def handle_endtag(self, tag):
        assert self.open.pop() == tag
        if tag == self.cell:
            self.cell = None

    def handle_data(self, data):
        if "style" in self.open:
            return
        self.text.append(data)
        if self.cell:
            self.rows[-1][-1] += data
        if self.open and re.fullmatch("h[1-6]", next((tag for tag in self.open if re.fullmatch("h[1-6]", tag)), "")):
            self.headings[-1][1] += data

    @property
    def words(self):
        return " ".join(" ".join(self.text).split())

    def row(self, first):
        return next(row for row in self.rows if row and row[0] == first)


def assert_page(html):
    """Check what holds for every page and return it read."""
    page = Page(html)
    assert html.startswith("<!doctype html>")
    tags = [tag for tag, _ in page.seen]
    assert ("html", {"lang": "en"}) in page.seen
    assert not {"script", "img", "iframe", "object", "embed", "form", "base"} & set(tags)
    for tag, attributes in page.seen:
        if tag != "a":
            outside = [value for value in attributes.values() if value and "//" in value and "w3.org" not in value]
            assert tag == "div" or not outside  # a label may hold two slashes, an address may not
        if tag == "link":
            assert attributes["href"] == "data:,"
    assert "url(" not in html
    assert "@import" not in html
    assert tags.count("h1") == tags.count("main") == tags.count("header") == tags.count("style") == 1
    assert len(page.ids) == len(set(page.ids))
    assert page.links[0] == "#main"
    levels = [level for level, _ in page.headings]
    assert levels[0] == 1
    assert all(after <= before + 1 for before, after in pairwise(levels))
    assert tags.count("caption") == tags.count("table")
    assert all(attributes.get("scope") in ("col", "row") for tag, attributes in page.seen if tag == "th")
    return page


@pytest.fixture(scope="module")
def found():
    return asked(
        storms(),
        ODD,
        attributes=ATTRIBUTES,
        group_by=["line"],
        measures=(*MEASURES, {"kind": "expectile", "level": 0.9, "label": "my <label>"}),
        currency="EUR",
        horizon="1 year",
        valuation_date="2026-09-30",
        reference="Board <b>paper</b> & more",
        tail_detail=True,
        capital=5000.0,
    )


@pytest.fixture(scope="module")
def html(found):
    query = "measure=value_at_risk&level=0.95&a=<b>"
    return report_page(BOOK, found.answer, found.distribution, found.measures, query=query)


def test_it_is_a_whole_page_and_fetches_nothing(html):
    page = assert_page(html)
    assert "'unsafe-inline'" not in POLICY
    assert [tag for tag, _ in page.seen].count("svg") == 2 * (2 + 3)
    assert "/v1/books/harbour/allocations.csv?measure=value_at_risk&level=0.95&a=<b>" in page.links
    assert "/v1/books/harbour/allocations.json?measure=value_at_risk&level=0.95&a=<b>" in page.links
    assert "rounded for reading" in page.words


def test_names_are_escaped(html):
    assert "<script" not in html
    assert "<b>" not in html
    assert "<label>" not in html
    page = Page(html)
    for name in ODD:
        assert page.row(name)
    assert "Board <b>paper</b> & more" in page.words


def test_headline_figures_and_their_errors_are_those_of_the_answer(found, html):
    words = Page(html).words
    for result in found.answer.allocations:
        ends = result.total.interval
        digits = 1 if result.total.value < 1e4 and ends.upper < 1e4 else 0
        assert f"{result.total.value:,.{digits}f} EUR" in words
        assert f"between {ends.lower:,.{digits}f} and {ends.upper:,.{digits}f}" in words
    assert "in 95 of 100 repetitions of the sampling" in words
    assert "The mean of the worst 10 % of losses." in words
    assert "The amount that losses stay at or below with a probability of 95 %." in words
    alone = sum(one.stand_alone.value for one in found.answer.allocations[0].sub_portfolios)
    saved = 1 - found.answer.allocations[0].total.value / alone
    assert f"The parts alone add up to {alone:,.1f} EUR: {100 * saved:.1f} % of that" in words


@pytest.mark.parametrize(("currency", "unit"), [("EUR", "million EUR"), ("EUR thousand", "EUR thousand")])
def test_one_unit_serves_the_whole_page(currency, unit):
    found = asked(storms() * 2e3, currency=currency, tail_detail=True)
    page = Page(report_page(BOOK, found.answer, found.distribution, found.measures))
    expected, shortfall = found.answer.expected_loss.value, found.answer.allocations[1].total.value
    assert expected < 1e7 < shortfall
    shown = (f"{expected / 1e6:.4f}", f"{shortfall / 1e6:.3f}") if currency == "EUR" else (f"{expected:,.0f}",)
    assert all(f"{one} {unit}" in page.words for one in shown)
    assert page.words.count("EUR") == page.words.count(unit) + page.words.count("Amounts in: EUR") * (unit != currency)
    assert re.search(rf"Error of sampling: between [\d.,]+ and [\d.,]+ {unit}\. ", page.words)
    assert f"amount, in {unit}" in page.words


def test_tables_show_each_row_of_the_answer_rounded(found, html):
    page = Page(html)
    headings = [words for level, words in page.headings if level == 2]
    assert "Expected shortfall 90 %, shared by the Euler rule" in headings
    assert "My <label>, shared by the Euler rule" in headings
    start = html.index("Expected shortfall 90 %, shared by")
    section = html[html.index("</figure>", start) + 9 : html.index("</section>", start)]
    part = Page(section)
    result = found.answer.allocations[1]
    for one in result.sub_portfolios:
        cells = part.row(one.id)
        assert cells[1] == f"{one.contribution.value:z,.1f}"
        ends = one.contribution.interval
        assert cells[2] == f"{ends.lower:z,.1f} to {ends.upper:z,.1f}"
        assert cells[3] == f"{100 * one.share:z.1f} %"
        assert cells[4] == f"{one.stand_alone.value:z,.1f}"
        assert cells[-1] == f"{one.allocated_capital:z,.1f}"
    for one in result.groups:
        assert part.row(one.group or "(none)")[1] == f"{one.contribution.value:z,.1f}"
    alone = sum(one.stand_alone.value for one in result.sub_portfolios)
    profit = sum(one.expected_profit for one in result.sub_portfolios)
    total = part.row("total")
    assert total[1] == f"{result.total.value:,.1f}"
    assert total[3:6] == ["100.0 %", f"sum {alone:,.1f}", f"{100 * (1 - result.total.value / alone):.1f} %"]
    assert total[7] == f"{profit:,.1f}"


def test_each_measure_leads_to_what_more_of_a_part_would_change(html):
    links = [urlsplit(one) for one in Page(html).links if "increments" in one]
    assert {one.path for one in links} == {"/v1/books/harbour/increments.csv"}
    asked_for = [dict(parse_qsl(one.query)) for one in links]
    assert sorted(one["sub_portfolio"] for one in asked_for) == sorted(3 * ODD)
    assert {tuple(one.items())[1:] for one in asked_for} == {
        (("scale", "1.1"), ("measure", "value_at_risk"), ("level", "0.95")),
        (("scale", "1.1"), ("measure", "expected_shortfall"), ("level", "0.9")),
        (("scale", "1.1"), ("measure", "expectile"), ("level", "0.9")),
    }
    above = measure_query(as_asked({"kind": "wang", "shift": 0.5, "above": "mean"}))
    assert above == [("measure", "wang"), ("shift", "0.5"), ("above", "mean")]


def test_worst_scenarios_notes_method_and_provenance(found, html):
    words = Page(html).words
    worst = found.answer.tail.scenarios[0]
    assert Page(html).row("scenario, counted from 1")
    assert Page(html).row(f"number {worst.number + 1:,}")[2] == f"{worst.total:,.0f}"
    for note in found.answer.notes:
        assert note.detail[1:] in words
    assert found.answer.provenance.losses_digest in words
    assert found.answer.provenance.request_digest in words
    assert found.answer.provenance.method[1:] in words
    assert "responsible actuary or risk officer decide" in words
    assert "smoothed over the" in words


def test_the_same_figures_make_the_same_page(found, html):
    query = "measure=value_at_risk&level=0.95&a=<b>"
    assert html == report_page(BOOK, found.answer, found.distribution, found.measures, query=query)


def test_what_is_absent_is_left_out():
    found = asked([[1.0, 2.0], [3.0, 5.0]], scenarios_are="population", include_stand_alone=False)
    page = assert_page(report_page(BOOK, found.answer, found.distribution, found.measures, root="/risk"))
    assert "No error of sampling can be given" in page.words
    assert "No figure has an interval" in page.words
    assert "What the worst losses look like" not in page.words
    assert "stand-alone" not in [cell for row in page.rows for cell in row]
    assert "/risk/v1/books/harbour/allocations.json" in page.links
    assert "/risk/docs" in page.links


def test_a_rule_that_does_not_add_up_says_so():
    found = asked(storms(), rules=["with_without"], measures=MEASURES[1:])
    page = Page(report_page(BOOK, found.answer, found.distribution, found.measures))
    assert "do not add up" in page.words
    assert f"{found.answer.allocations[0].residual:z,.1f} of the total is not shared out" in page.words
    assert page.row("total")[3] == "–"


def test_few_scenarios_are_said_to_be_few_and_drawn_once():
    found = asked([[1.0, 2.0], [3.0, 5.0], [2.0, 2.0]])
    page = Page(report_page(BOOK, found.answer, found.distribution, found.measures))
    assert "There are only 3 scenarios" in page.words
    assert "The worst ones have a colour of their own." in page.words


def test_many_scenarios_are_drawn_twice(html):
    words = Page(html).words
    assert "of their own and are drawn once more beneath" in words
    assert "There are only" not in words


def test_a_long_table_shows_the_largest_rows():
    found = asked(storms(scenarios=60, parts=MOST_ROWS + 40), measures=MEASURES[1:])
    page = assert_page(report_page(BOOK, found.answer, found.distribution, found.measures))
    assert f"(the {MOST_ROWS} largest of {MOST_ROWS + 40})" in page.words
    assert sum(bool(re.fullmatch(r"s\d+", row[0])) for row in page.rows if row) == MOST_ROWS


def luminance(colour):
    parts = [int(colour[at : at + 2], 16) / 255 for at in (1, 3, 5)]
    linear = [one / 12.92 if one <= 0.04045 else ((one + 0.055) / 1.055) ** 2.4 for one in parts]
    return 0.2126 * linear[0] + 0.7152 * linear[1] + 0.0722 * linear[2]


def contrast(one, other):
    light, dark = sorted((luminance(one), luminance(other)), reverse=True)
    return (light + 0.05) / (dark + 0.05)


@pytest.mark.parametrize(("palette", "shade"), [(LIGHT, "#f1f4f7"), (DARK, "#1c232b")])
def test_colours_have_contrast_on_screen_and_in_grey(palette, shade):
    links, warnings = re.findall("--link:(#[0-9a-f]{6})", STYLE), re.findall("--warn:(#[0-9a-f]{6})", STYLE)
    assert shade in STYLE
    for text in ("ink", "soft"):
        assert contrast(palette[text], palette["page"]) >= 4.5
        assert contrast(palette[text], shade) >= 4.5
    number = 0 if palette is LIGHT else 1
    assert contrast(links[number], palette["page"]) >= 4.5
    assert contrast(warnings[number], palette["page"]) >= 4.5
    for shape in ("body", "tail", "part", "alone"):
        assert contrast(palette[shape], palette["page"]) >= 3.0
    assert contrast(palette["body"], palette["tail"]) >= 1.8
