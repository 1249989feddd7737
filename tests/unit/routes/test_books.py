"""GET on books: forms, tags, one computation for a sheet, single numbers, and names that mean harm."""

import csv
import io
import json
import re
from concurrent.futures import ThreadPoolExecutor
from threading import Event, Thread
from xml.etree import ElementTree as ET

import pyarrow as pa
import pytest

from service import __version__, calculate
from service.calculate import increments
from service.representations.page import PICTURE_POLICY, POLICY
from tests.serving import assert_problem, metric, running, until

HARBOUR = {
    "losses": {"kind": "scenarios", "file": "harbour.csv", "currency": "EUR", "sub_portfolios": []},
    "measures": [{"kind": "expected_shortfall", "level": 0.9}, {"kind": "value_at_risk", "level": 0.9}],
    "group_by": ["line"],
    "reference": "close",
}
PARTS = {"hull": {"line": "sea"}, "cargo": {"line": "sea"}, "storm": {"line": "land", "entity": "north"}}
ES = "measure=expected_shortfall&level=0.9"
HOME = "/v1/books/harbour"
CELL = f"{HOME}/value.txt?of=contribution&sub_portfolio=hull&{ES}"


def harbour(folder, name="harbour", parts=PARTS, **more):
    """Write a book of 200 scenarios."""
    rows = [[(7 * k * (j + 1)) % 101 + 0.25 * j for j in range(len(parts))] for k in range(200)]
    lines = [",".join('"' + one.replace('"', '""') + '"' for one in parts), *(",".join(map(str, row)) for row in rows)]
    (folder / f"{name}.csv").write_text("\n".join(lines) + "\n", "utf-8")
    columns = [
        {"id": one, "attributes": attributes, "expected_profit": 3.0 + j}
        for j, (one, attributes) in enumerate(parts.items())
    ]
    losses = {**HARBOUR["losses"], "file": f"{name}.csv", "sub_portfolios": columns}
    (folder / f"{name}.json").write_text(json.dumps({**HARBOUR, "losses": losses, **more}), "utf-8")


@pytest.fixture(scope="module")
def folder(tmp_path_factory):
    folder = tmp_path_factory.mktemp("books")
    harbour(folder)
    (folder / "broken.json").write_text("{")
    return folder


@pytest.fixture(scope="module")
def client(folder):
    with running(books=str(folder)) as client:
        yield client


@pytest.fixture
def counted(monkeypatch):
    """Give the list of calculations made."""
    made, answer, drawing = [], calculate.answer, calculate.drawing
    monkeypatch.setattr(calculate, "answer", lambda *a: made.append("answer") or answer(*a))
    monkeypatch.setattr(calculate, "drawing", lambda *a: made.append("drawing") or drawing(*a))
    return made


def rows(response):
    assert response.status_code == 200, response.text
    return list(csv.DictReader(io.StringIO(response.text)))


def test_the_list_and_one_book(client):
    books = {one["name"]: one for one in client.get("/v1/books").json()["books"]}
    assert books.keys() == {"broken", "harbour"}
    assert (books["broken"]["state"], books["broken"]["digest"]) == ("damaged", None)
    assert "not JSON" in books["broken"]["reason"]
    good = books["harbour"]
    assert (good["state"], good["reason"], good["sub_portfolios"], good["scenarios"]) == ("ready", None, 3, 200)
    assert good["labels"] == {"currency": "EUR", "valuation_date": None, "horizon": None, "reference": "close"}
    one = client.get(HOME).json()
    assert one["sub_portfolios"][2] == {
        "id": "storm",
        "attributes": {"line": "land", "entity": "north"},
        "expected_profit": 5.0,
    }
    assert one["digest"] == good["digest"]
    assert "values" not in json.dumps(one)
    assert {row["name"]: row["state"] for row in rows(client.get("/v1/books.csv"))} == {
        "broken": "damaged",
        "harbour": "ready",
    }
    assert [row["id"] for row in rows(client.get(HOME + ".csv"))] == ["hull", "cargo", "storm", "storm"]
    assert client.get("/v1/books/broken").json()["state"] == "damaged"
    problem = assert_problem(client.get("/v1/books/broken/measures"), "not_defined")
    assert problem["errors"][0]["code"] == "damaged_book"


def test_get_is_what_post_answers(client):
    query = f"{ES}&measure=value_at_risk&group_by=line&rule=euler&rule=covariance&capital=100&interval_coverage=0.9"
    got = client.get(f"{HOME}/allocations?{query}").json()
    request = {
        "losses": {"kind": "book", "name": "harbour"},
        "measures": HARBOUR["measures"],
        "group_by": ["line"],
        "rules": ["euler", "covariance"],
        "capital": 100,
        "interval_coverage": 0.9,
        "reference": "close",
    }
    post = client.post("/v1/allocations", json=request).json()
    for answer in (got, post):
        for note in answer["notes"]:
            note["pointer"] = None
    assert got == post
    assert got["provenance"]["losses_digest"] == client.get(HOME).json()["digest"]
    measured = client.get(f"{HOME}/measures").json()
    assert [one["measure"] for one in measured["measures"]] == ["expected_shortfall 0.9", "value_at_risk 0.9"]
    assert [one["group"] for one in measured["measures"][0]["groups"]] == ["sea", "land"]
    assert client.get(f"{HOME}/measures?group_by=").json()["measures"][0]["groups"] == []
    assert_problem(client.get(f"{HOME}/measures?group_by=&group_by=line"), "invalid_value", parameter="group_by")


def test_measures_and_levels_make_their_product(client):
    query = "measure=expected_shortfall&measure=value_at_risk&level=0.8&level=0.9"
    names = [one["measure"] for one in client.get(f"{HOME}/measures?{query}").json()["measures"]]
    assert names == ["expected_shortfall 0.8", "expected_shortfall 0.9", "value_at_risk 0.8", "value_at_risk 0.9"]
    refused = client.get(f"{HOME}/measures?measure=standard_deviation&measure=value_at_risk&level=0.9")
    assert_problem(refused, "invalid_value", parameter="level")


@pytest.mark.parametrize("path", ["measures", "allocations", "increments", "comparisons"])
def test_a_book_in_every_post(client, path):
    book = {"kind": "book", "name": "harbour"}
    request = {"losses": book, "measures": HARBOUR["measures"]}
    if path == "increments":
        request["candidates"] = [{"id": "more", "scaled": {"sub_portfolio": "hull", "scale": 1.5}}]
    if path == "comparisons":
        request = {"before": book, "after": book, "measures": HARBOUR["measures"]}
    answer = client.post(f"/v1/{path}", json=request)
    assert answer.status_code == 200, answer.text
    assert answer.headers["cache-control"] == "no-store"
    digest = answer.json()["provenance"]["losses_digest"]
    assert digest == client.get(HOME).json()["digest"]
    assert answer.json()["labels"]["currency"] == "EUR"
    field = "before" if path == "comparisons" else "losses"
    for name, code in (("absent", "not_found"), ("broken", "not_defined"), ("../harbour", "invalid_value")):
        refused = client.post(f"/v1/{path}", json={**request, field: {"kind": "book", "name": name}})
        assert_problem(refused, code, pointer=f"/{field}/name")
    relabelled = client.post(f"/v1/{path}", json={**request, field: {**book, "currency": "CHF"}})
    if path == "comparisons":
        assert_problem(relabelled, "invalid_value", pointer="/after")
    else:
        assert relabelled.json()["labels"]["currency"] == "CHF"


def test_a_comparison_of_a_book_with_itself_is_paired(client):
    book = {"kind": "book", "name": "harbour"}
    answer = client.post(
        "/v1/comparisons", json={"before": book, "after": book, "measures": HARBOUR["measures"]}
    ).json()
    assert answer["same_scenarios"] is True
    assert answer["comparisons"][0]["change"]["value"] == 0.0


def test_without_books_there_are_none():
    with running() as bare:
        assert bare.get("/v1/books").json() == {"books": []}
        assert_problem(bare.get("/v1/books/harbour"), "not_found")
        assert_problem(bare.get("/v1/books/harbour/value.txt?of=total"), "not_found")
        assert bare.get("/").status_code == bare.get("/spreadsheets").status_code == 200


FORMS = {
    "": ["json", "csv"],
    "/measures": ["json", "csv", "xml", "arrow", "svg", "png"],
    "/allocations": ["json", "csv", "xml", "arrow", "svg", "png"],
    "/increments": ["json", "csv", "txt"],
    "/value": ["json", "txt"],
    "/report": ["html"],
}
TYPES = {
    "json": "application/json",
    "csv": "text/csv; charset=utf-8; header=present",
    "xml": "application/xml; charset=utf-8",
    "arrow": "application/vnd.apache.arrow.stream",
    "svg": "image/svg+xml",
    "png": "image/png",
    "txt": "text/plain; charset=utf-8",
    "html": "text/html; charset=utf-8",
}
QUERIES = {"": "", "/increments": f"?sub_portfolio=hull&scale=1.1&{ES}", "/value": f"?of=total&{ES}"}


@pytest.mark.parametrize(("path", "form"), [(path, form) for path, forms in FORMS.items() for form in forms])
def test_every_form_by_suffix_and_accept_with_tag_head_and_options(client, counted, path, form):
    query = QUERIES.get(path, f"?{ES}")
    address = f"{HOME}{path}.{form}{query}"
    head = client.head(address)
    assert (head.status_code, head.content, counted) == (200, b"", [])
    got = client.get(address, headers={"accept": "audio/ogg", "range": "bytes=0-0"})
    assert got.status_code == 200, got.text
    assert got.content
    assert got.headers["content-type"] == head.headers["content-type"] == TYPES[form]
    assert got.headers["etag"] == head.headers["etag"]
    assert re.fullmatch('"[0-9a-f]{40}"', got.headers["etag"])
    assert (got.headers["vary"], got.headers["cache-control"]) == ("Accept", "private, no-cache")
    by_accept = client.get(f"{HOME}{path}{query}", headers={"accept": TYPES[form].partition(";")[0]})
    assert by_accept.content == got.content
    assert by_accept.headers["etag"] == got.headers["etag"]
    counted.clear()
    for tags in (got.headers["etag"], "*", f'"other", W/{got.headers["etag"]}'):
        same = client.get(address, headers={"if-none-match": tags})
        assert (same.status_code, same.content) == (304, b"")
        assert same.headers["etag"] == got.headers["etag"]
        assert same.headers["cache-control"] == "private, no-cache"
    assert client.get(address, headers={"if-none-match": '"other"'}).status_code == 200
    assert counted == []
    options = client.options(address)
    assert (options.status_code, options.headers["allow"]) == (204, "GET, HEAD, OPTIONS")
    assert_problem(client.post(address), "method_not_allowed")
    assert_problem(client.get(address + ("&" if query else "?") + "lvel=1"), "invalid_value", parameter="lvel")
    assert client.head(address + ("&" if query else "?") + "lvel=1").status_code == 422


def test_tags_tell_forms_requests_and_versions_apart(client, folder):
    tags = [
        client.get(f"{HOME}/{rest}").headers["etag"]
        for rest in (
            f"allocations.json?{ES}",
            f"allocations.csv?{ES}",
            f"allocations.csv?{ES}&bom=1",
            f"allocations.svg?{ES}",
            f"allocations.svg?{ES}&chart=exceedance",
            f"allocations.csv?{ES}&rule=covariance",
            f"measures.csv?{ES}",
            f"value.txt?of=total&{ES}",
            f"value.txt?of=total&field=lower&{ES}",
        )
    ]
    assert len(set(tags)) == len(tags)
    assert client.get(f"{HOME}/measures.csv?level=0.90&measure=expected_shortfall&refresh=7").headers["etag"] == tags[6]
    assert __version__
    harbour(folder, "moving")
    before = client.get("/v1/books/moving/measures").headers["etag"]
    harbour(folder, "moving", {**PARTS, "fire": {"line": "land"}})
    answer = client.get("/v1/books/moving/measures", headers={"if-none-match": before})
    assert answer.status_code == 200
    assert answer.headers["etag"] != before
    assert len(answer.json()["measures"][0]["stand_alone"]) == 4


def test_no_form_that_suits(client):
    refused = client.get(f"{HOME}/value?of=total&{ES}", headers={"accept": "text/html"})
    assert_problem(refused, "not_acceptable", header="Accept")
    assert_problem(client.get(f"{HOME}/measures.html"), "not_found")
    assert_problem(client.get(f"{HOME}/value.csv?of=total"), "not_found")
    for accept, form in (("*/*", "json"), ("text/*", "csv"), ("text/csv, application/json;q=0.9", "csv")):
        got = client.get(f"{HOME}/measures", headers={"accept": accept})
        assert got.headers["content-type"] == TYPES[form]


def test_a_sheet_of_a_hundred_cells_costs_one_computation(folder, counted):
    with running(books=str(folder)) as client:
        cells = [
            f"{HOME}/value.txt?of={of}&{part}field={field}&measure={measure}&level=0.9"
            for measure in ("expected_shortfall", "value_at_risk")
            for field in ("value", "standard_error", "lower", "upper")
            for of, part in [
                *((of, f"sub_portfolio={one}&") for of in ("contribution", "stand_alone") for one in PARTS),
                *(("contribution", f"attribute=line&group={group}&") for group in ("sea", "land")),
                ("stand_alone", "attribute=entity&group=north&"),
                ("contribution", "attribute=entity&group=&"),
                ("total", ""),
                ("expected_loss", ""),
            ]
        ] + [f"{HOME}/value.txt?of=share&sub_portfolio={one}&{ES}&refresh={one}" for one in PARTS]
        assert len(cells) >= 99
        with ThreadPoolExecutor(8) as pool:
            answers = list(pool.map(client.get, cells))
        assert {answer.status_code for answer in answers} <= {200, 422}
        assert sum(answer.status_code == 200 for answer in answers) > 60
        assert counted == ["answer"]
        total = "tailrace_scenarios_total 200.0"
        assert total in client.get("/metrics").text


def test_the_row_of_a_total_sums_what_parts_have(client):
    table = list(rows(client.get(f"{HOME}/allocations.csv?{ES}")))
    parts = [row for row in table if row["scope"] == "sub_portfolio"]
    (total,) = [row for row in table if row["scope"] == "total"]
    assert float(total["share"]) == 1.0
    for column in ("stand_alone", "expected_profit"):
        cells = [row[column] for row in parts]
        assert total[column] == ("" if "" in cells else repr(sum(map(float, cells))))


def test_the_cells_are_the_figures_of_the_table(client):
    table = {(row["measure"], row["scope"], row["id"]): row for row in rows(client.get(f"{HOME}/allocations.csv"))}
    for measure in ("expected_shortfall", "value_at_risk"):
        for name in PARTS:
            row = table[f"{measure} 0.9", "sub_portfolio", name]
            for of, column in (("contribution", "contribution"), ("stand_alone", "stand_alone"), ("share", "share")):
                path = f"{HOME}/value.txt?of={of}&sub_portfolio={name}&measure={measure}&level=0.9"
                assert client.get(path).text == row[column]
            path = f"{HOME}/value.txt?of=expected_loss&sub_portfolio={name}"
            assert client.get(path).text == row["expected_loss"]
        row = table[f"{measure} 0.9", "group", "sea"]
        path = f"{HOME}/value.txt?of=contribution&attribute=line&group=sea&measure={measure}&level=0.9&field=upper"
        assert float(client.get(path).text) == pytest.approx(float(row["upper"]), rel=1e-12)  # other groups beside it
        total = client.get(f"{HOME}/value.txt?of=total&measure={measure}&level=0.9")
        assert total.text == table[f"{measure} 0.9", "total", ""]["contribution"]
        assert float(total.text) == float(repr(float(total.text)))
    answer = client.get(f"{HOME}/value.json?of=contribution&sub_portfolio=hull&{ES}").json()
    assert repr(answer["value"]) == client.get(CELL).text
    assert (answer["of"], answer["field"], answer["measure"], answer["rule"], answer["sub_portfolio"]) == (
        "contribution",
        "value",
        "expected_shortfall 0.9",
        "euler",
        "hull",
    )
    assert answer["labels"]["reference"] == "close"


@pytest.mark.parametrize(
    ("query", "code", "parameter"),
    [
        ("", "invalid_value", "of"),
        ("of=nothing", "invalid_value", "of"),
        ("of=total", "invalid_value", "measure"),
        (f"of=total&{ES}&level=0.8", "invalid_value", "measure"),
        (f"of=total&of=total&{ES}", "invalid_value", "of"),
        (f"of=total&sub_portfolio=hull&{ES}", "invalid_value", "of"),
        (f"of=contribution&{ES}", "invalid_value", "sub_portfolio"),
        (f"of=contribution&sub_portfolio=absent&{ES}", "not_found", "sub_portfolio"),
        (f"of=contribution&attribute=line&{ES}", "invalid_value", "group"),
        (f"of=contribution&group=sea&{ES}", "invalid_value", "attribute"),
        (f"of=contribution&attribute=colour&group=sea&{ES}", "invalid_value", "attribute"),
        (f"of=contribution&attribute=line&group=absent&{ES}", "not_found", "group"),
        (f"of=contribution&attribute=line&group=sea&sub_portfolio=hull&{ES}", "invalid_value", "sub_portfolio"),
        (f"of=share&sub_portfolio=hull&field=lower&{ES}", "invalid_value", "field"),
        (f"of=total&field=all&{ES}", "invalid_value", "field"),
        ("of=total&measure=expected_shortfall&level=99.5", "invalid_value", "level"),
        (f"of=contribution&sub_portfolio=hull&rule=euler&rule=covariance&{ES}", "invalid_value", "rule"),
        (f"of=contribution&sub_portfolio=hull&rule=fair&{ES}", "invalid_value", "rule"),
        (f"of=total&capital=3&{ES}", "invalid_value", "capital"),
        ("of=total&field=lower&measure=expected_shortfall&level=0.999", "not_defined", None),
    ],
)
def test_a_number_that_is_not_one(client, query, code, parameter):
    for form in ("txt", "json"):
        response = client.get(f"{HOME}/value.{form}?{query}")
        problem = assert_problem(response, code, **({"parameter": parameter} if parameter else {}))
        assert len(problem["detail"]) > 15
    if parameter is None:
        assert "too few scenarios" in problem["detail"]
    elif code != "not_defined":
        assert client.head(f"{HOME}/value.txt?{query}").status_code == response.status_code


def test_a_scaled_sub_portfolio(client):
    path = f"{HOME}/increments?sub_portfolio=hull&scale=1.1&{ES}&cost_of_capital=0.1"
    answer = client.get(path).json()
    candidate = answer["candidates"][0]
    assert (candidate["id"], candidate["status"], answer["refused"]) == ("hull x 1.1", "ok", 0)
    figures = candidate["figures"][0]
    assert figures["return_on_capital"] == pytest.approx(0.1 * 3.0 / figures["increment"]["value"], rel=1e-12)
    assert figures["required_profit"] == pytest.approx(0.1 * figures["increment"]["value"], rel=1e-12)
    assert candidate["expected_profit"] == pytest.approx(0.1 * 3.0, rel=1e-12)
    row = rows(client.get(path.replace("increments?", "increments.csv?")))[0]
    assert row["expected_profit"] == repr(candidate["expected_profit"])
    text = client.get(path.replace("increments?", "increments.txt?")).text
    assert row["increment"] == text == repr(figures["increment"]["value"])
    lower = client.get(path.replace("increments?", "increments.txt?") + "&of=total_with&field=lower")
    assert lower.text == repr(figures["total_with"]["interval"]["lower"])
    less = float(client.get(f"{HOME}/increments.txt?sub_portfolio=hull&scale=0&{ES}").text)
    removed = client.get(f"{HOME}/allocations?rule=with_without&{ES}").json()["allocations"][0]["sub_portfolios"][0]
    assert less == pytest.approx(-removed["contribution"]["value"], rel=1e-12)


def test_the_scaled_increment_over_the_step_tends_to_the_contribution(client):
    for name in PARTS:
        contribution = float(client.get(CELL.replace("hull", name)).text)
        errors = []
        for step in ("1", "0.1", "0.0001"):
            scale = f"{1 + float(step):.10g}"
            increment = client.get(f"{HOME}/increments.txt?sub_portfolio={name}&scale={scale}&{ES}")
            errors.append(abs(float(increment.text) / float(step) - contribution))
        assert errors[2] <= 1e-6 * abs(contribution)  # piecewise linear: exact once the tail keeps its scenarios
        assert errors[2] <= errors[0] + 1e-9 * abs(contribution)


@pytest.mark.parametrize(
    ("query", "code", "parameter"),
    [
        ("scale=1.1", "invalid_value", "sub_portfolio"),
        ("sub_portfolio=hull", "invalid_value", "scale"),
        ("sub_portfolio=hull&scale=-1", "invalid_value", "scale"),
        ("sub_portfolio=hull&scale=ten", "invalid_value", "scale"),
        ("sub_portfolio=hull&scale=1e999", "invalid_value", "scale"),
        ("sub_portfolio=absent&scale=1.1", "not_found", "sub_portfolio"),
        ("sub_portfolio=hull&scale=1.1&of=increment", "invalid_value", "of"),
    ],
)
def test_a_scaled_sub_portfolio_that_is_none(client, query, code, parameter):
    assert_problem(client.get(f"{HOME}/increments?{query}"), code, parameter=parameter)
    assert client.head(f"{HOME}/increments?{query}").status_code in (404, 422)


@pytest.mark.parametrize(
    ("path", "code", "parameter", "words"),
    [
        ("/v1/books/harbor", "not_found", None, "there is no book 'harbor' here; did you mean 'harbour'?"),
        ("/v1/books/zzz", "not_found", None, "there is no book 'zzz' here; known here: broken, harbour"),
        (f"{HOME}/measures?mesure=wang&shift=1", "invalid_value", "mesure", "did you mean 'measure'?"),
        (f"{HOME}/measures?measure=es&level=0.9", "invalid_value", "measure", "did you mean 'expected_shortfall'?"),
        (f"{HOME}/measures?{ES}&group_by=lines", "invalid_value", "group_by", "did you mean 'line'?"),
        (f"{HOME}/increments?sub_portfolio=strom&scale=2", "not_found", "sub_portfolio", "did you mean 'storm'?"),
        (f"{HOME}/increments?sub_portfolio=zz&scale=2", "not_found", "sub_portfolio", "here: hull, cargo, storm"),
        (f"{HOME}/value?of=share&attribute=entiti&group=a", "invalid_value", "attribute", "did you mean 'entity'?"),
        (f"{HOME}/value?of=share&attribute=line&group=se", "not_found", "group", "did you mean 'sea'?"),
        (f"{HOME}/value?of=share&attribute=line&group=air", "not_found", "group", "known here: sea, land"),
    ],
)
def test_a_name_that_is_none_gets_a_hint(client, path, code, parameter, words):
    problem = assert_problem(client.get(path), code, **({"parameter": parameter} if parameter else {}))
    assert words in problem["detail"]


def test_an_unknown_parameter_has_a_code_of_its_own(client):
    problem = assert_problem(client.get(f"{HOME}/measures?mesure=wang"), "invalid_value", parameter="mesure")
    assert [one["code"] for one in problem["errors"]] == ["unknown_parameter"]
    assert "unknown_parameter" in client.get("/problems").text


def test_text_of_an_increment_is_of_one_measure(client):
    refused = client.get(f"{HOME}/increments.txt?sub_portfolio=hull&scale=1.1")
    assert_problem(refused, "invalid_value", parameter="measure")


def test_csv_xml_and_arrow_hold_the_same(client):
    table = rows(client.get(f"{HOME}/allocations.csv?{ES}"))
    marked = client.get(f"{HOME}/allocations.csv?{ES}&bom=1").content
    assert marked[:3] == b"\xef\xbb\xbf"
    tree = ET.fromstring(client.get(f"{HOME}/allocations.xml?{ES}").content)
    assert [row.attrib for row in tree] == [{key: cell for key, cell in row.items() if cell} for row in table]
    arrow = pa.ipc.open_stream(client.get(f"{HOME}/allocations.arrow?{ES}").content).read_all()
    assert arrow.column_names == list(table[0])
    assert arrow["contribution"].to_pylist() == [float(row["contribution"]) for row in table]
    posted = {"losses": {"kind": "book", "name": "harbour"}, "measures": HARBOUR["measures"][:1]}
    posted |= {"group_by": ["line"], "reference": "close"}
    for form in ("csv", "xml", "arrow", "svg", "png"):
        answer = client.post(f"/v1/allocations.{form}", json=posted)
        assert answer.content == client.get(f"{HOME}/allocations.{form}?{ES}").content, form
        assert answer.headers["content-type"] == TYPES[form]
    assert_problem(client.get(f"{HOME}/allocations.xml"), "invalid_value")


def test_pictures(client):
    for path in ("measures", "allocations"):
        for chart in ("distribution", "exceedance"):
            svg = client.get(f"{HOME}/{path}.svg?{ES}&chart={chart}")
            assert svg.text.startswith("<svg")
            assert svg.headers["content-security-policy"] == PICTURE_POLICY
        refused = client.get(f"{HOME}/{path}.svg?{ES}&chart=pie")
        assert_problem(refused, "invalid_value", parameter="chart")
    assert client.get(f"{HOME}/allocations.png?{ES}").content.startswith(b"\x89PNG")
    usual = client.get(f"{HOME}/allocations.svg?{ES}").content
    assert usual == client.get(f"{HOME}/allocations.svg?{ES}&chart=contributions").content
    assert_problem(client.get(f"{HOME}/measures.svg?{ES}&chart=contributions"), "invalid_value", parameter="chart")
    assert_problem(client.get(f"{HOME}/measures.csv?{ES}&chart=exceedance"), "invalid_value", parameter="chart")
    body = {"losses": {"kind": "book", "name": "harbour"}, "measures": HARBOUR["measures"]}
    assert_problem(client.post("/v1/measures?chart=exceedance", json=body), "invalid_value", parameter="chart")
    drawn = client.post("/v1/measures.svg?chart=exceedance", json=body)
    assert drawn.text.startswith("<svg")
    assert drawn.headers["content-security-policy"] == PICTURE_POLICY


def test_the_report_and_the_pages(client):
    report = client.get(f"{HOME}/report?{ES}")
    assert report.headers["content-type"] == TYPES["html"]
    assert report.headers["content-security-policy"] == POLICY
    assert "harbour" in report.text
    assert f'href="{HOME}/allocations.csv?measure=expected_shortfall&amp;level=0.9"' in report.text
    front = client.get("/").text
    assert "harbour" in front
    assert "broken" in front
    assert "value.txt?of=contribution&amp;sub_portfolio=hull" in client.get("/spreadsheets").text
    for page in ("/", "/spreadsheets", f"{HOME}/report"):
        for address in set(re.findall(r'href="(/[^"]*)"', client.get(page).text)):
            assert client.get(address.replace("&amp;", "&")).status_code == 200, address


def test_the_example_workbook(client):
    answer = client.get("/spreadsheets/ternholm.xlsx")
    assert answer.content.startswith(b"PK")
    assert answer.headers["content-type"].endswith("spreadsheetml.sheet")
    assert 'filename="ternholm.xlsx"' in answer.headers["content-disposition"]
    assert client.head("/spreadsheets/ternholm.xlsx").content == b""


def test_a_factor_model_is_asked_like_any_book():
    with running(demo=True) as client:
        home = "/v1/books/ternholm_model"
        contributions = rows(client.get(f"{home}/allocations.csv?{ES}&group_by="))
        total = float(contributions[0]["contribution"])
        parts = [row for row in contributions if row["scope"] == "sub_portfolio"]
        assert sum(float(row["contribution"]) for row in parts) == pytest.approx(total, rel=1e-12)
        cell = client.get(f"{home}/value.txt?of=contribution&sub_portfolio={parts[0]['id']}&{ES}")
        assert float(cell.text) == pytest.approx(float(parts[0]["contribution"]), rel=1e-12)
        step = client.get(f"{home}/increments.txt?sub_portfolio={parts[0]['id']}&scale=1.000001&{ES}")
        assert float(step.text) / 1e-6 == pytest.approx(float(cell.text), rel=1e-4)
        svg = client.get(f"{home}/allocations.svg?{ES}&chart=exceedance")
        assert svg.text.startswith("<svg")
        assert client.get(f"{home}/report").status_code == 200


ENCODED = [
    "/v1/books/%2e%2e",
    "/v1/books/..%2f..%2fetc%2fpasswd",
    "/v1/books/%252e%252e%252fharbour",
    "/v1/books/harbour%00",
    "/v1/books/harbour%0a",
    "/v1/books/%ff%fe",
    "/v1/books/h%C0%AErbour",
    "/v1/books/harbour%2f",
    "/v1/books/./harbour.json.json",
    "/v1/books/harbour%5c..%5cbroken/measures",
    "/v1/books//measures",
]


@pytest.mark.parametrize("path", ENCODED)
def test_odd_addresses_reach_nothing(client, path):
    response = client.get(f"{client.base_url}".rstrip("/") + path)
    assert response.status_code in (404, 422)
    assert "root:" not in response.text
    assert_problem(response, "not_found")


@pytest.mark.parametrize("value", ["%ff", "%00", "%0d%0aset-cookie:x", "%C0%AE", "=1%2B1", "%3Cscript%3E", "a" * 500])
def test_odd_parameters_are_refused_and_not_echoed_as_headers(client, value):
    for path in (f"value.txt?of=contribution&{ES}&sub_portfolio=", f"measures?{ES}&group_by="):
        response = client.get(f"{HOME}/{path}{value}")
        assert response.status_code in (404, 422)
        assert "set-cookie" not in response.headers
        assert response.headers["content-type"] == "application/problem+json"
        assert len(response.content) < 1000


NASTY = {
    'layer <script>alert("x")</script> & co': {"line": "a]]>b"},
    "1+1=2,'\"": {"line": "x</svg>"},
    "Überseehäfen 日本": {"line": "y&amp;"},
}


def test_html_in_names_is_escaped_in_each_form(folder, client):
    harbour(folder, "nasty", NASTY)
    home = "/v1/books/nasty"
    names = list(NASTY)
    got = client.get(f"{home}/allocations.json?{ES}").json()["allocations"][0]
    assert [row["id"] for row in got["sub_portfolios"]] == names
    table = rows(client.get(f"{home}/allocations.csv?{ES}"))
    assert [row["id"] for row in table[1:4]] == names
    tree = ET.fromstring(client.get(f"{home}/allocations.xml?{ES}").content)
    assert [row.get("id") for row in tree][1:4] == names
    svg = client.get(f"{home}/allocations.svg?{ES}").content
    assert "script" not in {one.tag.rpartition("}")[2] for one in ET.fromstring(svg).iter()}
    assert client.get(f"{home}/allocations.png?{ES}").status_code == 200
    arrow = pa.ipc.open_stream(client.get(f"{home}/measures.arrow?{ES}").content).read_all()
    assert names[0] in arrow["id"].to_pylist()
    for page in (f"{home}/report", "/", "/spreadsheets"):
        text = client.get(page).text
        assert "<script" not in text
    for name in names:
        value = client.get(
            f"{home}/value.txt",
            params={"of": "contribution", "sub_portfolio": name, "measure": "expected_shortfall", "level": "0.9"},
        )
        assert value.status_code == 200
        assert float(value.text)


@pytest.mark.parametrize("name", ["=1+1", "+1", "-1", "@SUM(1)", "\t=1+1", "\r=1", "'=1", " =1", "=cmd|' /C calc'!A0"])
def test_a_name_that_could_be_a_formula_damages_the_book(folder, client, name):
    harbour(folder, "formula", {**PARTS, name: {}})
    assert client.get("/v1/books/formula").json()["state"] == "damaged"
    for path in (
        "measures.csv",
        "allocations.xml",
        "allocations.svg",
        "measures.arrow",
        "report",
        "value.txt?of=total",
    ):
        assert_problem(client.get(f"/v1/books/formula/{path}"), "not_defined")
    harbour(folder, "formula", {**PARTS, "fire": {"line": name}})
    assert client.get("/v1/books/formula").json()["state"] == "damaged"
    harbour(folder, "formula", reference=name)
    assert client.get("/v1/books/formula").json()["state"] == "damaged"


def test_browsers_of_other_origins_only_by_setting(client, folder):
    origin = {"origin": "https://app.example"}
    assert "access-control-allow-origin" not in client.get(CELL, headers=origin).headers
    with running(books=str(folder), cors_origins="https://app.example, https://other.example") as shared:
        got = shared.get(CELL, headers=origin)
        assert got.headers["access-control-allow-origin"] == "https://app.example"
        exposed = set(got.headers["access-control-expose-headers"].split(", "))
        assert exposed == {"ETag", "Retry-After", "Server-Timing", "X-Request-ID"}
        assert {word.strip() for word in got.headers["vary"].split(",")} == {"Accept", "Origin"}
        refused = shared.get("/v1/books/absent", headers=origin)
        assert refused.headers["access-control-allow-origin"] == "https://app.example"
        asked = {**origin, "access-control-request-method": "POST", "access-control-request-headers": "content-type"}
        preflight = shared.options("/v1/measures", headers=asked)
        assert preflight.status_code == 200
        assert "POST" in preflight.headers["access-control-allow-methods"]
        stranger = shared.get(CELL, headers={"origin": "https://evil.example"})
        assert "access-control-allow-origin" not in stranger.headers
        plain = shared.options(CELL, headers=origin)
        assert plain.headers["allow"] == "GET, HEAD, OPTIONS"
        for more in ({"origin": "https://evil.example"}, {"access-control-request-headers": "x-other"}):
            refused = shared.options("/v1/measures", headers={**asked, **more})
            assert (refused.status_code, refused.content) == (204, b"")
            assert "access-control-allow-origin" not in refused.headers
            assert refused.headers["x-request-id"]


def test_a_base_is_made_ready_once(folder, monkeypatch):
    """Every quote against a book finds its totals and tails made, however it asks; other measures make others."""
    made, base_of = [], increments.base_of
    monkeypatch.setattr(increments, "base_of", lambda *a: made.append(a[1].name) or base_of(*a))

    def ask(client, level, **more):
        candidate = {"id": "deal", "values": [float(k % 13) for k in range(200)]}
        measures = [{"kind": "expected_shortfall", "level": level}]
        request = {"losses": {"kind": "book", "name": "harbour"}, "measures": measures, "candidates": [candidate]}
        return client.post("/v1/increments", json={**request, **more})

    with running(books=str(folder)) as client:
        first = ask(client, 0.9)
        assert first.status_code == 200
        assert ask(client, 0.9).content == first.content
        assert ask(client, 0.9, hurdle_rate=0.1).status_code == 200
        assert made == ["expected_shortfall 0.9"]
        path = f"{HOME}/increments?sub_portfolio=hull&scale=1.1&{ES}"
        assert client.get(path).status_code == 200
        assert made == ["expected_shortfall 0.9"]
        assert ask(client, 0.8).status_code == 200
        assert made == ["expected_shortfall 0.9", "expected_shortfall 0.8"]
    made.clear()
    with running(books=str(folder), max_base_bytes=0) as client:
        assert ask(client, 0.9).content == ask(client, 0.9).content == first.content
        assert made == ["expected_shortfall 0.9"] * 2


def test_a_cell_asks_for_no_more_groups_than_are_allowed(folder):
    harbour(folder, "many", {f"p{k}": {"line": "sea", "ship": f"ship {k}"} for k in range(5)})
    with running(books=str(folder), max_groups=3) as client:
        total = client.get(f"/v1/books/many/value.txt?of=total&{ES}")
        assert total.status_code == 200, total.text
        cell = f"/v1/books/many/value.txt?of=contribution&{ES}"
        assert client.get(f"{cell}&attribute=line&group=sea").status_code == 200
        assert_problem(client.get(f"{cell}&attribute=ship&group=ship%201"), "limit_exceeded")


def test_what_is_known_of_books_takes_no_place(folder, monkeypatch):
    """Lists, heads and pages are there also while all places to compute are taken."""
    monkeypatch.setattr("service.books.UNSETTLED", -1)
    finish, answer = Event(), calculate.answer

    def wait(*arguments):
        finish.wait(20)
        return answer(*arguments)

    paths = ("/v1/books", HOME, "/", "/spreadsheets")
    with running(books=str(folder), max_concurrent=1, max_waiting=0) as client:
        assert [client.get(path).status_code for path in paths] == [200] * 4
        monkeypatch.setattr(calculate, "answer", wait)
        sender = Thread(target=lambda: client.get(f"{HOME}/measures?{ES}"))
        sender.start()
        until(lambda: metric(client, "tailrace_calculations_in_flight") == 1)
        for method in ("GET", "HEAD"):
            assert [client.request(method, path).status_code for path in paths] == [200] * 4
        assert client.head(f"{HOME}/allocations?{ES}").status_code == 200
        assert_problem(client.get(f"{HOME}/allocations?{ES}"), "busy")
        finish.set()
        sender.join(20)


def test_prefer_lowers_the_time_allowed(folder, monkeypatch):
    """One who waits no longer gets a problem; another who asked the same gets the answer."""
    finish, answer = Event(), calculate.answer

    def wait(*arguments):
        finish.wait(20)
        return answer(*arguments)

    monkeypatch.setattr(calculate, "answer", wait)
    path, answers = f"{HOME}/measures?{ES}", []
    with running(books=str(folder)) as client:
        patient = Thread(target=lambda: answers.append(client.get(path, headers={"prefer": "wait=30"})))
        patient.start()
        until(lambda: metric(client, "tailrace_calculations_in_flight") == 1)
        limit = assert_problem(client.get(path, headers={"prefer": "wait=0"}), "too_long")["limit"]
        assert (limit["name"], limit["allowed"]) == ("max_seconds", 0.0)
        finish.set()
        patient.join(20)
        assert answers[0].status_code == 200
        assert answers[0].headers["preference-applied"] == "wait=30"
        assert client.get(path, headers={"prefer": "wait=0"}).status_code == 200  # it is there already


def test_a_number_of_an_increment_is_one(client):
    path = f"{HOME}/increments.txt?sub_portfolio=hull&scale=1.1&{ES}"
    assert client.get(f"{path}&of=contribution").status_code == 200
    assert_problem(client.get(f"{path}&of=increment&of=contribution"), "invalid_value", parameter="of")
