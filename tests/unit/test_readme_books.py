"""What README.md says of books and spreadsheets is so."""

import json
import re

import pytest

from openapi_examples.readme import README, SERVER, shown
from service.representations.page import BookHead
from service.representations.spreadsheet import CALC_OPTIONS, cell_formulas
from tests.serving import running

TEXT = README.read_text(encoding="utf-8")
FENCES = re.findall(r"^```(\w*)\n(.*?)^```$", TEXT, re.MULTILINE | re.DOTALL)
PLAIN = [words for language, words in FENCES if not language]


@pytest.fixture(scope="module")
def client():
    with running(demo=True) as client:
        yield client


def test_the_addresses_are_answered(client):
    command = next(one.command for one in shown(TEXT) if "/v1/books/" in one.command)
    addresses = re.findall(r"'(http://[^']*)'", command)
    assert len(addresses) == 4
    for address in addresses:
        answer = client.get(address.removeprefix(SERVER))
        assert answer.status_code == 200, answer.text


def test_the_book_is_one(tmp_path):
    (tmp_path / "harbour.json").write_text(PLAIN[0])
    (tmp_path / "harbour.csv").write_text("hull,storm\n" + "1,2\n3,4\n" * 100)
    with running(books=str(tmp_path)) as client:
        assert client.get("/v1/books/harbour").json()["state"] == "ready"
        words = re.search(r'`"losses": (\{"kind": "book"[^`]*)`', TEXT)[1]
        request = {"losses": json.loads(words), "measures": [{"kind": "value_at_risk", "level": 0.5}]}
        assert client.post("/v1/measures", json=request).status_code == 200


def test_measures_of_a_book_are_those_of_get_and_a_post_names_its_own(client):
    assert "what GET asks the book" in TEXT
    assert "a POST names its measures itself" in TEXT
    assert client.get("/v1/books/ternholm/measures").status_code == 200
    refused = client.post("/v1/measures", json={"losses": {"kind": "book", "name": "ternholm"}})
    assert [one["pointer"] for one in refused.json()["errors"]] == ["/measures"]


def test_the_formula_is_the_one_of_the_page(client):
    formula = PLAIN[1].strip()
    assert formula == cell_formulas(SERVER, BookHead(name="ternholm", example="storm"))["English"]
    address = re.search(r'"http://[^/]*([^"]*)"', formula)[1]
    assert float(client.get(address).text) > 0
    assert CALC_OPTIONS in TEXT
