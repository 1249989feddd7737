"""A real browser: what the pages of a running service fetch, show and do on a telephone and on paper."""

import os
import shutil
from pathlib import Path

import pytest

from tests.serving import running, told_by

HERE = Path(__file__).parent
BROWSER = os.environ.get("CHROMIUM") or shutil.which("chromium")
REPORT = "/v1/books/ternholm/report"
OWN = ("/", REPORT, "/spreadsheets", "/problems")
PAGES = (*OWN, "/docs")
WHITE, CLEAR = "rgb(255, 255, 255)", "rgba(0, 0, 0, 0)"
DIGITS = 5  # shown of the largest amount

pytestmark = pytest.mark.skipif(
    BROWSER is None or shutil.which("node") is None or not (HERE / "node_modules" / "playwright-core").exists(),
    reason="NO PAGE WAS OPENED: install chromium and node, run npm install in tests/clients (.ci/run does on Debian)",
)


@pytest.fixture(scope="module")
def client():
    with running(demo=True) as client:
        yield client


@pytest.fixture(scope="module")
def seen(client):
    base = str(client.base_url).rstrip("/")
    return told_by(["node", str(HERE / "browse.mjs"), BROWSER, base, *PAGES])


@pytest.fixture(scope="module")
def answer(client):
    return client.get("/v1/books/ternholm/allocations.json").json()


def written(value, total):
    """Write `value` with as many decimals as the `total` of its table is shown with."""
    decimals = len(total.partition(".")[2])
    return f"{value:z,.{decimals}f}"


@pytest.mark.parametrize("path", PAGES)
def test_a_page_opens_without_errors_and_asks_no_one_else(client, seen, path):
    page = seen[path]
    assert page["status"] == 200
    assert page["errors"] == []
    assert page["failed"] == []
    assert page["requests"]
    inside = (f"{str(client.base_url).rstrip('/')}/", "data:", "blob:")
    assert [url for url in page["requests"] if not url.startswith(inside)] == []


def test_a_page_of_its_own_is_one_request(seen):
    assert [len([url for url in seen[path]["requests"] if not url.startswith("data:")]) for path in OWN] == [1] * 4
    assert "/v1/allocations" in seen["/docs"]["text"]


def test_titles_and_the_workbook(seen):
    assert seen["/"]["title"] == "tailrace"
    assert seen[REPORT]["title"] == "Risk report: ternholm - tailrace"
    assert "/spreadsheets/ternholm.xlsx" in seen["/spreadsheets"]["links"]


def test_the_report_shows_the_figures_of_the_answer(seen, answer):
    page = seen[REPORT]
    assert len(page["sections"]) == len(answer["allocations"]) == 2
    compared = 0
    for result, tables in zip(answer["allocations"], page["sections"], strict=True):
        parts, *groups = tables
        assert parts["caption"] == "By sub-portfolio amounts in EUR thousand"
        assert len(parts["rows"]) == len(result["sub_portfolios"]) + 2
        assert sum(len(table["rows"]) - 2 for table in groups) == len(result["groups"])
        figures = [(parts, one["id"], one) for one in result["sub_portfolios"]]
        for one in result["groups"]:
            title = "(none)" if one["group"] is None else one["group"]
            caption = f"By {one['attribute']} amounts in EUR thousand"
            figures.append((next(table for table in groups if table["caption"] == caption), title, one))
        for table, title, one in figures:
            heads, *rows = table["rows"]
            places = [heads.index(name) for name in ("contribution", "interval", "share")]
            total = rows[-1][places[0]]
            assert rows[-1][0] == "total"
            assert total == written(result["total"]["value"], total)
            assert len(total.replace(",", "").replace(".", "")) == DIGITS
            ends = one["contribution"]["interval"]
            expected = [
                written(one["contribution"]["value"], total),
                f"{written(ends['lower'], total)} to {written(ends['upper'], total)}",
                f"{100 * one['share']:z.1f} %",
            ]
            (row,) = [row for row in rows if row[0] == title]
            assert [row[place] for place in places] == expected
            compared += 1
    assert compared == sum(len(one["sub_portfolios"]) + len(one["groups"]) for one in answer["allocations"])


def test_the_report_shows_the_whole(seen, answer):
    cards = seen[REPORT]["cards"]
    wholes = [answer["expected_loss"], *(one["total"] for one in answer["allocations"])]
    assert [title for title, _ in cards] == [
        "Expected loss",
        "Value at risk 99.5 % above the mean",
        "Expected shortfall 99 %",
    ]
    for (_, words), whole in zip(cards, wholes, strict=True):
        shown = words.removesuffix(" EUR thousand")
        assert shown == written(whole["value"], shown)
        assert len(shown.replace(",", "").replace(".", "")) >= DIGITS - 1


@pytest.mark.parametrize("path", OWN)
def test_a_telephone_does_not_scroll_sideways(seen, path):
    assert seen[path]["narrow"] == 360


@pytest.mark.parametrize("path", ["/", REPORT, "/spreadsheets"])
def test_paper_stays_white_though_the_screen_is_dark(seen, path):
    assert seen[path]["print"]["body"] == WHITE
    assert set(seen[path]["print"]["all"]) <= {WHITE, CLEAR}
    assert seen[path]["screen"]["body"] not in (WHITE, CLEAR)
