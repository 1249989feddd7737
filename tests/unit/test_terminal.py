"""The terminal's doors: `tailrace demo` and `tailrace compute`, their words, exit codes and the progress bar."""

import io
import json
import os
import signal
import subprocess
import sys
from time import sleep

import pytest

from openapi_examples import FOLDER, examples
from service import cli
from service.errors import Fault, InvalidValue, NotFound
from service.terminal import BAR, BAR_SECONDS, CAUTION, ProgressBar, complaint
from tests.serving import SMALL, alike

JSON_EXAMPLES = {one.name: one for one in examples() if one.content_type == "application/json"}
SIMULATED = {
    "losses": {
        "kind": "factors",
        "factors": [],
        "sub_portfolios": [
            {"id": "hull", "components": [{"kind": "idiosyncratic", "marginal": {"family": "exponential", "mean": 3}}]}
        ],
        "simulation": {"scenarios": 20_000_000},
    },
    "measures": [{"kind": "expected_shortfall", "level": 0.99}],
}


@pytest.fixture
def small(tmp_path):
    file = tmp_path / "small.json"
    file.write_text(json.dumps(SMALL))
    return str(file)


@pytest.fixture(autouse=True)
def _plain_environment(monkeypatch):
    for name in list(os.environ):
        if name.startswith("TAILRACE_"):
            monkeypatch.delenv(name)


def run(capsys, *arguments):
    """Return exit code, output and complaint of the command."""
    try:
        code = cli.main(arguments)
    except SystemExit as end:
        code = end.code
    said = capsys.readouterr()
    return code, said.out, said.err


def command(*arguments, **options):
    """Start the command as a process of its own."""
    return subprocess.Popen(
        [sys.executable, "-m", "service", *arguments], stdout=subprocess.PIPE, stderr=subprocess.PIPE, **options
    )


def test_demo_prints_the_allocation_and_how_to_go_on(capsys):
    code, output, complaint = run(capsys, "demo")
    assert (code, complaint) == (0, "")
    assert "Ternholm Mutual" in output
    assert "lower and upper: 95 % intervals" in output
    for name in ("value_at_risk 0.995", "expected_shortfall 0.99", "ferry_hull", "line: storm", "total"):
        assert name in output
    assert "no statement of required or available capital" in " ".join(output.split())
    assert "tailrace serve" in output
    assert "http://127.0.0.1:8000/" in output.splitlines()[-1]
    assert max(map(len, output.splitlines())) < 160


def test_a_table_a_person_can_read(capsys, small):
    code, output, complaint = run(capsys, "compute", small)
    assert (code, complaint) == (0, "")
    lines = output.splitlines()
    assert lines[0] == "4 scenarios, expected loss 4.125"
    assert "lower and upper" not in output  # too few scenarios for such columns
    start = lines.index("expected_shortfall 0.5, euler")
    assert lines[start + 1].split() == ["sub-portfolio", "contribution", "share", "alone", "diversified"]
    rows = [line.split() for line in lines[start + 3 : start + 6]]
    assert [row[0] for row in rows] == ["hull", "cargo", "total"]
    assert [float(row[1]) for row in rows] == [3.0, 4.0, 7.0]
    assert " ".join(CAUTION.split()) in " ".join(output.split())
    assert "request sha-256:" in lines[-1]


@pytest.mark.parametrize("name", JSON_EXAMPLES)
def test_json_is_what_the_service_answers(capsys, name):
    example = JSON_EXAMPLES[name]
    code, output, complaint = run(
        capsys, "compute", str(FOLDER / example.request), "--to", example.calculation, "--as", "json"
    )
    assert (code, complaint) == (0, "")
    assert alike(json.loads(example.answer), json.loads(output))


@pytest.mark.parametrize(
    ("name", "words"),
    [
        ("insurer", ["value_at_risk 0.995 above mean, euler", "entity/line: north/hull", "12,000", "Note: "]),
        ("five_rules", ["proportional stand alone", "with without", "not shared out: ", "shapley"]),
        ("every_measure", ["wang 0.5", "unexpected loss", "return_level 10", "standard error"]),
        ("treasury", ["risk: commodity", "diversification ", "horizon 1 quarter"]),
        (
            "quote_batch",
            [
                "now 1,541",
                "quote_1001",
                "expected profit",
                "meets hurdle",
                "within limit",
                "quote_1003 refused: /candidates/3/values: 147 values are given",
            ],
        ),
        ("close_to_close", ["treasury", "gone", "all new", "all changed"]),
    ],
)
def test_tables_of_all_calculations(capsys, name, words):
    example = JSON_EXAMPLES[name]
    code, output, complaint = run(capsys, "compute", str(FOLDER / example.request), "--to", example.calculation)
    assert (code, complaint) == (0, "")
    for word in words:
        assert word in output, output
    assert not any(line != line.rstrip() for line in output.splitlines())


def test_csv(capsys, small):
    code, output, complaint = run(capsys, "compute", small, "--to", "measures", "--as", "csv")
    assert (code, complaint) == (0, "")
    lines = output.splitlines()
    assert lines[0].startswith('"measure","scope"')
    assert lines[1].startswith('"expected_shortfall 0.5","total",,,7')
    assert len(lines) == 4


@pytest.mark.parametrize(
    ("form", "begins"), [("xml", b"<"), ("arrow", b"\xff\xff\xff\xff"), ("svg", b"<svg"), ("png", b"\x89PNG")]
)
def test_the_other_forms(capfdbinary, small, form, begins):
    assert cli.main(["compute", small, "--as", form]) == 0
    output, complaint = capfdbinary.readouterr()
    assert output.startswith(begins)
    assert complaint == b""


def test_a_form_that_a_calculation_has_not(capsys, small):
    code, output, complaint = run(capsys, "compute", small, "--to", "comparisons", "--as", "svg")
    assert (code, output) == (2, "")
    assert "comparisons have no form svg: there are table, json, csv" in complaint


@pytest.mark.parametrize("arguments", [("serve", "--books"), ("compute", "request.json", "--books")])
def test_a_folder_of_books_that_is_not_there(capsys, tmp_path, arguments, monkeypatch):
    monkeypatch.setenv("TAILRACE_BOOKS", "")
    (tmp_path / "request.json").write_text("{}")
    monkeypatch.chdir(tmp_path)
    code, output, complaint = run(capsys, *arguments, str(tmp_path / "none"))
    assert (code, output) == (2, "")
    assert "there is no folder" in complaint


def test_standard_input(small):
    process = command("compute", "-", "--as", "json", stdin=subprocess.PIPE)
    output, complaint = process.communicate(json.dumps(SMALL).encode(), timeout=60)
    assert (process.returncode, complaint) == (0, b"")
    assert json.loads(output)["allocations"][0]["total"]["value"] == pytest.approx(7.0, rel=1e-15)


@pytest.mark.parametrize(("name", "words"), [("nothing.json", "No such file or directory"), ("", "Is a directory")])
def test_a_file_that_cannot_be_read(capsys, tmp_path, name, words):
    file = str(tmp_path / name)
    code, output, complaint = run(capsys, "compute", file)
    assert (code, output) == (1, "")
    assert complaint == f"tailrace: cannot read {file}: {words}\n"


@pytest.mark.parametrize(
    ("text", "to", "words"),
    [
        ("", "measures", ["tailrace: the body is empty"]),
        ('{"losses": \n{]}', "measures", ["tailrace: the body is not JSON", "line 2, column 2"]),
        ("[1]", "measures", ["the body must be a JSON object"]),
        ('{"losses": {"kind": "scenarios", "values": NaN}}', "measures", ["NaN is not JSON"]),
        (json.dumps({**SMALL, "measurs": []}), "measures", ["at /measurs: ", "did you mean 'measures'?"]),
        (json.dumps(SMALL).replace("0.5}]}", "99.5}]}"), "measures", ["at /measures/0/level: ", "0.995"]),
        (json.dumps(SMALL).replace("[3.0, -1.0]", '[3.0, "x"]'), "measures", ["/losses/values/1/1"]),
        (json.dumps({**SMALL, "rules": ["covariance"]}), "measures", ["at /rules: there is no field 'rules'"]),
        (json.dumps(SMALL), "increments", ["at /candidates: 'candidates' is required"]),
        (json.dumps({**SMALL, "group_by": ["entity"]}), "allocations", ["at /group_by", "entity"]),
    ],
)
def test_what_is_refused_is_said_in_words(capsys, tmp_path, text, to, words):
    file = tmp_path / "request.json"
    file.write_text(text)
    code, output, complaint = run(capsys, "compute", str(file), "--to", to)
    assert (code, output) == (2, "")
    assert complaint.startswith("tailrace: ")
    for word in words:
        assert word in complaint
    assert "Traceback" not in complaint


COMPARED = {"before": SMALL["losses"], "after": SMALL["losses"], "measures": SMALL["measures"]}


@pytest.mark.parametrize(
    ("name", "text", "words"),
    [
        (
            "quotes.json",
            json.dumps({**SMALL, "candidates": []}),
            "tailrace: this looks like increments: --to increments",
        ),
        ("close.json", json.dumps(COMPARED), "tailrace: this looks like comparisons: --to comparisons"),
        (
            "port.json",
            json.dumps({"losses": {"file": "port.csv"}}),
            'a book, not a request: a request asks it by "losses"',
        ),
        (
            "source.json",
            json.dumps(SMALL["losses"]),
            '{"kind": "book", "name": "source"}, with its folder behind --books',
        ),
        (
            "port.csv",
            "hull,cargo\n1,2\n",
            'a table, not a request: put it beside a book whose losses say "file": "port.csv"',
        ),
    ],
)
def test_what_is_no_request_is_recognised(capsys, tmp_path, name, text, words):
    file = tmp_path / name
    file.write_text(text)
    code, output, complaint = run(capsys, "compute", str(file))
    assert (code, output, complaint.count("\n")) == (2, "", 1)
    assert words in complaint


def test_a_single_fault_is_said_once(capsys, tmp_path):
    file = tmp_path / "request.json"
    file.write_text(json.dumps({**SMALL, "capital": "x"}))
    said = "tailrace: at /capital: a number is needed here, not 'x'\n"
    assert run(capsys, "compute", str(file)) == (2, "", said)


@pytest.mark.parametrize(
    "arguments",
    [
        (),
        ("calculate",),
        ("compute",),
        ("compute", "x", "--to", "profits"),
        ("compute", "x", "--as", "pdf"),
        ("demo", "x"),
    ],
)
def test_wrong_usage(capsys, arguments):
    code, output, complaint = run(capsys, *arguments)
    assert (code, output) == (2, "")
    assert complaint.startswith("usage: tailrace")


def test_limits_are_those_of_the_settings(capsys, small, monkeypatch):
    monkeypatch.setenv("TAILRACE_MAX_CELLS", "5")
    code, _, complaint = run(capsys, "compute", small)
    assert code == 2
    assert "5" in complaint
    monkeypatch.setenv("TAILRACE_MAX_CELLS", "many")
    code, _, complaint = run(capsys, "compute", small)
    assert (code, complaint) == (2, "tailrace: TAILRACE_MAX_CELLS is 'many', not a number of cells\n")


def test_a_reader_who_has_seen_enough():
    process = command("compute", str(FOLDER / "insurer.request.json"), "--as", "json")
    process.stdout.close()
    complaint = process.stderr.read()
    process.stderr.close()
    assert process.wait(60) == 1
    assert complaint == b""


@pytest.mark.skipif(os.name != "posix", reason="signals of a terminal")
def test_an_interrupt_ends_at_once(tmp_path):
    file = tmp_path / "long.json"
    file.write_text(json.dumps(SIMULATED))
    process = command("compute", str(file), "--to", "measures")
    sleep(4)
    process.send_signal(signal.SIGINT)
    output, complaint = process.communicate(timeout=20)
    assert process.returncode == 130
    assert (output, complaint) == (b"", b"")


@pytest.mark.skipif(os.name != "posix", reason="needs a terminal of its own")
def test_a_bar_on_a_terminal_alone(tmp_path):
    file = tmp_path / "long.json"
    shorter = {**SIMULATED, "losses": {**SIMULATED["losses"], "simulation": {"scenarios": 2_000_000}}}
    file.write_text(json.dumps(shorter))
    master, slave = os.openpty()
    arguments = [sys.executable, "-m", "service", "compute", str(file), "--to", "measures", "--as", "json"]
    process = subprocess.Popen(arguments, stdout=subprocess.PIPE, stderr=slave)
    os.close(slave)
    output = process.stdout.read()
    process.stdout.close()
    drawn = os.read(master, 1 << 16).decode()
    os.close(master)
    assert process.wait(60) == 0
    assert json.loads(output)["scenarios"] == 2_000_000
    assert drawn.count("s left") >= 2
    assert drawn.endswith(" \r")  # the bar is wiped


def test_no_bar_in_a_file(capsys, tmp_path):
    file = tmp_path / "model.json"
    file.write_text(json.dumps({**SIMULATED, "losses": {**SIMULATED["losses"], "simulation": {"scenarios": 300_000}}}))
    code, output, complaint = run(capsys, "compute", str(file), "--to", "measures")
    assert (code, complaint) == (0, "")
    assert "300,000 scenarios" in output


class Terminal(io.StringIO):
    def isatty(self):
        return True


class Clock:
    now = 100.0

    def __call__(self):
        return self.now


def drawn(bar, clock, stream, seconds, fraction):
    """Return what the bar draws when told `fraction` some seconds later."""
    clock.now += seconds
    stream.seek(0)
    stream.truncate()
    bar(fraction)
    return stream.getvalue()


def test_the_bar_says_how_far_and_how_long():
    stream, clock = Terminal(), Clock()
    bar = ProgressBar(stream, clock)
    assert drawn(bar, clock, stream, 10.0, 0.25) == "\r[" + "#" * 8 + "." * 22 + "]  25%, 30 s left "
    assert drawn(bar, clock, stream, 10.0, 0.5) == "\r[" + "#" * 15 + "." * 15 + "]  50%, 20 s left "
    assert drawn(bar, clock, stream, 20.0, 1.0) == "\r[" + "#" * BAR + "] 100%, 0 s left "
    bar.end()
    assert stream.getvalue().endswith("\r" + " " * (BAR + 25) + "\r")


def test_the_bar_is_not_drawn_too_often_nor_without_news():
    stream, clock = Terminal(), Clock()
    bar = ProgressBar(stream, clock)
    assert drawn(bar, clock, stream, BAR_SECONDS / 2, 0.1) == ""
    assert drawn(bar, clock, stream, BAR_SECONDS, 0.0) == ""
    assert drawn(bar, clock, stream, BAR_SECONDS, 0.2) != ""
    assert drawn(bar, clock, stream, BAR_SECONDS / 2, 0.3) == ""
    assert drawn(bar, clock, stream, BAR_SECONDS, 0.4) != ""


def test_no_bar_for_what_is_over_at_once_or_is_no_terminal():
    stream, clock = Terminal(), Clock()
    ProgressBar(stream, clock).end()
    assert stream.getvalue() == ""
    plain = io.StringIO()
    bar = ProgressBar(plain, clock)
    clock.now += 50.0
    bar(0.5)
    bar.end()
    assert plain.getvalue() == ""


@pytest.mark.parametrize(
    ("fault", "line"),
    [
        (Fault(detail="too high", code="x", pointer="/measures/0"), "  at /measures/0: too high"),
        (Fault(detail="broken", code="x", pointer=""), "  at the top: broken"),
        (Fault(detail="no", code="x", parameter="level"), "  at level: no"),
        (Fault(detail="no", code="x", header="Accept"), "  at Accept: no"),
        (Fault(detail="no", code="x", part="body", row=3, column="hull"), "  row 3 column hull: no"),
        (Fault(detail="no", code="x", part="table", column="7"), "  column 7: no"),
    ],
)
def test_places_in_words(fault, line):
    assert complaint(InvalidValue("wrong", faults=[fault])) == f"wrong\n{line}"


def test_an_error_without_a_place_is_its_sentence():
    assert complaint(NotFound("there is nothing")) == "there is nothing"
