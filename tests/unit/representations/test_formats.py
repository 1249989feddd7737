"""Which form a caller gets, and what is in it."""

import csv
import io
import json
from dataclasses import dataclass

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from service.errors import NotAcceptable, NotFound
from service.representations.formats import FORMATS, best, choose, write
from service.representations.table import Column, Table

OFFERED = tuple(FORMATS.values())
JSON, CSV = FORMATS["json"], FORMATS["csv"]


@dataclass(frozen=True)
class Part:
    value: float
    spread: float | None
    name: str | None


@dataclass(frozen=True)
class Answer:
    parts: list[Part]
    count: int
    spread: float | None = None

    def table(self):
        columns = (
            Column(name="name", kind="text"),
            Column(name="value", unit="currency", kind="number"),
            Column(name="spread", kind="number"),
        )
        return Table(columns, [(part.name, part.value, part.spread) for part in self.parts])


@pytest.mark.parametrize(
    ("accept", "suffix"),
    [
        (None, "json"),
        ("", "json"),
        ("*/*", "json"),
        ("text/csv", "csv"),
        ("TEXT/CSV", "csv"),
        ("text/*", "csv"),
        ("text/csv;header=present", "csv"),
        ("application/json, text/csv", "json"),
        ("text/csv, application/json", "json"),
        ("text/csv, application/json;q=0.9", "csv"),
        ("application/json;q=0.5, text/csv; q=0.8", "csv"),
        ("*/*;q=0.1, text/csv;q=0.2", "csv"),
        ("*/*, application/json;q=0", "csv"),
        ("application/*;q=0.2, application/json;q=0.9, text/csv;q=0.5", "json"),
        ("text/html, application/xhtml+xml, */*;q=0.8", "json"),
        ("text/event-stream, application/json;q=0.5", "json"),
        ("application/json;q=nonsense, text/csv", "csv"),
        ("application/json;q=1.5, text/csv", "csv"),
        (";;;,,,", "json"),
        ("nonsense", "json"),
        ("text/csv;q=1.000", "csv"),
    ],
)
def test_choice_by_accept(accept, suffix):
    assert choose(None, accept, OFFERED).suffix == suffix


@pytest.mark.parametrize(
    "accept", ["text/event-stream", "image/png", "*/*;q=0", "application/json;q=0, text/csv;q=0.0"]
)
def test_nothing_suits(accept):
    with pytest.raises(NotAcceptable, match="application/json or text/csv") as caught:
        choose(None, accept, OFFERED)
    assert caught.value.faults[0].header == "Accept"


def test_the_suffix_wins():
    assert choose("csv", "application/json", OFFERED) is CSV
    with pytest.raises(NotFound, match=r"\.json or \.csv"):
        choose("xls", None, OFFERED)


@given(st.text(max_size=60))
def test_no_header_breaks_the_choice(accept):
    assert best(accept, ("application/json", "text/csv")) in ("application/json", "text/csv", None)


def test_json_is_exact_and_keeps_null():
    answer = Answer([Part(0.1 + 0.2, None, None), Part(np.float64(1e300), 5e-324, "é")], 2)
    read = json.loads(write(answer, JSON))
    assert read["parts"][0] == {"value": 0.1 + 0.2, "spread": None, "name": None}
    assert read["parts"][1] == {"value": 1e300, "spread": 5e-324, "name": "é"}
    assert read["spread"] is None


@pytest.mark.parametrize("number", [float("nan"), float("inf"), -float("inf")])
def test_json_refuses_what_is_not_finite(number):
    with pytest.raises(ArithmeticError, match="value"):
        write(Answer([Part(number, 1.0, "a")], 1), JSON)


def test_zero_has_no_sign_but_texts_are_left_alone():
    tricky = 'x":-0.0,'
    data = write(Answer([Part(-0.0, -0.0, tricky)], 1), JSON)
    assert b'"value":0.0,"spread":0.0' in data
    assert json.loads(data)["parts"][0]["name"] == tricky
    assert b",0.0,0.0\r\n" in write(Answer([Part(-0.0, np.float64(-0.0), "a")], 1), CSV)


def test_csv_by_the_letter():
    answer = Answer([Part(1.0, None, 'say "a", b\n'), Part(0.1 + 0.2, 1e-300, None), Part(np.float64(2.5), 7, "é")], 3)
    assert write(answer, CSV).decode() == (
        '"name","value","spread"\r\n"say ""a"", b\n",1.0,\r\n,0.30000000000000004,1e-300\r\n"é",2.5,7\r\n'
    )


def test_the_mark_is_for_csv_only():
    answer = Answer([], 0)
    assert write(answer, CSV, mark=True) == b"\xef\xbb\xbf" + write(answer, CSV)
    assert write(answer, JSON, mark=True) == write(answer, JSON)


@pytest.mark.parametrize("number", [float("nan"), float("inf")])
def test_csv_refuses_what_is_not_finite(number):
    with pytest.raises(ArithmeticError):
        write(Answer([Part(number, None, "a")], 1), CSV)


numbers = st.floats(allow_nan=False, allow_infinity=False)
texts = st.text(st.characters(codec="utf-8", exclude_characters="\r\x00"))


@given(st.lists(st.tuples(numbers, st.none() | numbers, texts), max_size=5))
def test_what_is_written_reads_back(rows):
    answer = Answer([Part(*row) for row in rows], len(rows))
    read = json.loads(write(answer, JSON))["parts"]
    assert [(part["value"], part["spread"], part["name"]) for part in read] == rows
    lines = list(csv.reader(io.StringIO(write(answer, CSV).decode(), newline="")))[1:]
    assert [(float(value), float(spread) if spread else None, name) for name, value, spread in lines] == rows


def test_forms_are_named_by_their_suffix():
    for suffix, form in FORMATS.items():
        assert form.suffix == suffix
        assert form.content_type.startswith(form.media_type)
