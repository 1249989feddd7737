"""A real spreadsheet: what LibreOffice Calc gets from a running service, in English and in German."""

import csv
import io
import json
import os
import shutil
import subprocess
from pathlib import Path

import openpyxl
import pytest

from openapi_examples import workbook
from service.representations.page import BookHead
from service.representations.spreadsheet import CALC_OPTIONS, cell_formulas, power_query, xml_formulas
from tests.serving import running, told_by

HERE = Path(__file__).parent
PYTHON = os.environ.get("UNO_PYTHON", "/usr/bin/python3")
ES = "measure=expected_shortfall&level=0.99"
BOOK = BookHead(name="ternholm", example="storm")
LAST = workbook.FIRST + len(workbook.PARTS)


def has_calc():
    if shutil.which("soffice") is None or not Path(PYTHON).exists():
        return False
    return subprocess.run([PYTHON, "-c", "import uno"], capture_output=True, check=False).returncode == 0


needs_calc = pytest.mark.skipif(
    not has_calc(),
    reason="NO SPREADSHEET WAS TESTED: install libreoffice-calc-nogui and python3-uno (.ci/run does so on Debian)",
)


def pull(**job):
    """Let Calc do a job and return what it found."""
    return told_by([PYTHON, str(HERE / "calc_pull.py")], given=json.dumps(job))


@pytest.fixture(scope="module")
def client():
    with running(demo=True) as client:
        yield client


@pytest.fixture(scope="module")
def table(client):
    text = client.get(f"/v1/books/ternholm/allocations.csv?{ES}").text
    return list(csv.DictReader(io.StringIO(text)))


def base(client):
    return str(client.base_url).rstrip("/")


@needs_calc
@pytest.mark.parametrize("locale", ["en-US", "de-DE"])
def test_numbers_in_cells(client, table, locale):
    address = base(client) + "/v1/books/ternholm"
    formulas = [
        cell_formulas(base(client), BOOK)["English, semicolons"],
        f'=WEBSERVICE("{address}/value.txt?of=expected_loss&field=lower")',
        '=NUMBERVALUE(A2;".";",")*2',
        f'=WEBSERVICE("{address}/value.txt?of=contribution&sub_portfolio=nowhere&{ES}")',
        xml_formulas(base(client), BOOK)["A1"],
        xml_formulas(base(client), BOOK)["Calc"].replace("A1", "A5"),
        '=NUMBERVALUE(FILTERXML(A5;"string(//row[@scope=\'total\']/@contribution)");".";",")',
        f'=NUMBERVALUE(WEBSERVICE("{address}/increments.txt?sub_portfolio=storm&scale=1.1&{ES}");".";",")',
        f'=WEBSERVICE("{address}/value.txt?of=share&sub_portfolio=storm&{ES}")',
        '=NUMBERVALUE(A9;".";",")',
    ]
    cells = pull(locale=locale, formulas=formulas)["cells"]
    row = {one["id"]: one for one in table if one["scope"] == "sub_portfolio"}["storm"]
    storm = float(row["contribution"])
    assert cells[0]["number"] == storm
    lower = client.get("/v1/books/ternholm/value.txt?of=expected_loss&field=lower").text
    assert cells[1]["text"] == lower  # the text itself, decimal point and all, in either language
    assert cells[2]["number"] == 2 * float(lower)
    assert cells[3]["text"] == "#VALUE!"
    assert cells[3]["error"] != 0
    assert cells[4]["text"].startswith("<?xml")
    assert cells[5]["number"] == storm
    assert cells[6]["number"] == float(table[0]["contribution"])
    increment = client.get(f"/v1/books/ternholm/increments.txt?sub_portfolio=storm&scale=1.1&{ES}").text
    assert cells[7]["number"] == float(increment)
    assert cells[9]["number"] == float(row["share"])


@needs_calc
def test_the_trap_of_the_decimal_comma_is_real(client):
    address = f"{base(client)}/v1/books/ternholm/value.txt?of=expected_loss"
    formulas = [f'=WEBSERVICE("{address}")', "=A1*2", '=NUMBERVALUE(A1;".";",")*2']
    german = pull(locale="de-DE", formulas=formulas)["cells"]
    assert german[1]["error"] != 0
    assert german[2]["number"] == 2 * float(client.get("/v1/books/ternholm/value.txt?of=expected_loss").text)


@needs_calc
@pytest.mark.parametrize("locale", ["en-US", "de-DE"])
def test_a_linked_table(client, table, locale):
    url = f"{base(client)}/v1/books/ternholm/allocations.csv?{ES}"
    sheet = pull(locale=locale, links=[{"url": url, "options": CALC_OPTIONS}], refresh=1)["links"][0]
    heads, *lines = sheet["values"]
    assert heads == list(table[0])
    cells = [dict(zip(heads, line, strict=True)) for line in lines]
    for column in ("contribution", "standard_error", "lower", "upper", "share", "stand_alone"):
        expected = [float(row[column]) if row[column] else "" for row in table]
        assert [cell[column] for cell in cells] == expected
    assert [cell["id"] for cell in cells] == [row["id"] for row in table]
    assert not any(formula.startswith("=") for line in sheet["formulas"] for formula in line)


@needs_calc
def test_calc_costs_one_computation(client):
    with running(demo=True) as fresh:
        address = base(fresh) + "/v1/books/ternholm/value.txt?of=contribution&sub_portfolio="
        cells = [
            f'=WEBSERVICE("{address}{name}&{ES}&field={field}")'
            for name in workbook.PARTS
            for field in ("value", "upper")
        ]
        assert all(cell["error"] == 0 for cell in pull(formulas=cells)["cells"])
        assert "tailrace_scenarios_total 10000.0" in fresh.get("/metrics").text


@needs_calc
@pytest.mark.parametrize("locale", ["en-US", "de-DE"])
def test_the_example_workbook_fetches_and_recalculates(client, table, tmp_path, locale):
    opened, saved = tmp_path / "in.xlsx", tmp_path / "out.xlsx"
    workbook.write(opened, base(client))
    places = [[workbook.FIGURES, f"B{row}"] for row in range(workbook.FIRST, LAST + 3)]
    places += [[workbook.ONE_ANSWER, f"B{row}"] for row in range(2, 2 + len(workbook.PARTS))]
    cells = pull(open=str(opened), locale=locale, cells=places, save_as=str(saved))["cells"]
    expected = [float(row["contribution"]) for row in table if row["scope"] == "sub_portfolio"]
    count = len(expected)
    total = float(table[0]["contribution"])
    assert [cell["number"] for cell in cells[:count]] == expected
    assert [cell["number"] for cell in cells[count : count + 2]] == pytest.approx([total, total], rel=1e-12)
    assert cells[count + 2]["number"] == pytest.approx(0.0, abs=1e-9 * total)
    assert [cell["number"] for cell in cells[count + 3 :]] == expected
    kept = openpyxl.load_workbook(saved, data_only=True)[workbook.FIGURES]
    assert [kept.cell(row, 2).value for row in range(workbook.FIRST, LAST)] == pytest.approx(expected, rel=1e-14)


def test_the_shipped_workbook_is_what_the_script_makes():
    shipped, made = openpyxl.load_workbook(workbook.FILE), workbook.workbook()
    assert shipped.sheetnames == made.sheetnames
    for sheet in made:
        cells = {cell.coordinate: cell.value for row in sheet.iter_rows() for cell in row if cell.value is not None}
        there = shipped[sheet.title]
        assert {
            cell.coordinate: cell.value for row in there.iter_rows() for cell in row if cell.value is not None
        } == cells


@pytest.mark.skipif(
    shutil.which("node") is None or not (HERE / "node_modules" / "@microsoft" / "powerquery-parser").exists(),
    reason="THE QUERY WAS NOT PARSED: run npm install in tests/clients (.ci/run does)",
)
def test_the_power_query_parses(tmp_path):
    for number, book in enumerate((BOOK, BookHead(name="q", example='say "hi"'))):
        (tmp_path / f"{number}.pq").write_text(power_query("http://127.0.0.1:8000", book), "utf-8")
    (tmp_path / "bad.pq").write_text("let A = in A", "utf-8")
    script = ["node", str(HERE / "pq_parse.cjs")]
    good = subprocess.run([*script, tmp_path / "0.pq", tmp_path / "1.pq"], capture_output=True, text=True, check=False)
    assert good.returncode == 0, good.stderr
    bad = subprocess.run([*script, tmp_path / "bad.pq"], capture_output=True, text=True, check=False)
    assert bad.returncode == 1
