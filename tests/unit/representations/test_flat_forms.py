"""XML and Arrow hold the rows of the CSV."""

import csv
import io
import sys
from dataclasses import dataclass, field
from xml.etree import ElementTree as ET

import pytest

from service.errors import InvalidValue, NotAcceptable
from service.representations.arrow import arrow_bytes
from service.representations.formats import FORMATS, write
from service.representations.table import Column, Table
from service.representations.xml import MOST_CHARACTERS, xml_bytes
from tests.unit.representations.answers import ODD

COLUMNS = (
    Column(name="measure", kind="text"),
    Column(name="rule", kind="text"),
    Column(name="id", kind="text"),
    Column(name="contribution", unit="currency", kind="number"),
    Column(name="share", kind="number"),
)


@dataclass(frozen=True)
class Flat:
    rows: list = field(default_factory=list)

    def table(self):
        return Table(COLUMNS, self.rows)


ANSWER = Flat(
    [
        ("expected_shortfall 0.99", "euler", None, 0.1 + 0.2, None),
        ("expected_shortfall 0.99", "euler", ODD[0], -0.0, 1e-300),
        ("expected_shortfall 0.99", "euler", ODD[1], 5, 123456789.12345679),
        ("expected_shortfall 0.99", "euler", ODD[2] + ' "<&>', -7.5e22, 0.25),
    ]
)


def csv_rows():
    return list(csv.DictReader(io.StringIO(write(ANSWER, FORMATS["csv"]).decode())))


def test_xml_has_an_attribute_for_each_cell_of_the_csv():
    data = xml_bytes(ANSWER)
    root = ET.fromstring(data)  # made here
    assert [one.tag for one in root] == ["row"] * 4
    for row, expected in zip(root, csv_rows(), strict=True):
        assert row.attrib == {name: cell for name, cell in expected.items() if cell != ""}
    assert data.startswith(b'<?xml version="1.0" encoding="UTF-8"?>\n<rows>')
    assert float(root[0].get("contribution")) == 0.1 + 0.2
    assert root[1].get("contribution") == "0.0"


def test_xml_is_for_one_measure_and_one_rule():
    with pytest.raises(InvalidValue, match="one measure and this answer has 2"):
        xml_bytes(Flat([*ANSWER.rows, ("value_at_risk 0.9", "euler", "a", 1.0, 1.0)]))
    with pytest.raises(InvalidValue, match="one rule and this answer has 2"):
        xml_bytes(Flat([*ANSWER.rows, ("expected_shortfall 0.99", "shapley", "a", 1.0, 1.0)]))


def test_xml_fits_a_cell_or_recommends_csv():
    row = ("expected_shortfall 0.99", "euler", "a", 1.0, 1.0)
    empty, one = len(xml_bytes(Flat([]))), len(xml_bytes(Flat([row])))
    most = (MOST_CHARACTERS - empty) // (one - empty)
    assert len(xml_bytes(Flat([row] * most)).decode()) <= MOST_CHARACTERS
    with pytest.raises(InvalidValue, match="take CSV") as caught:
        xml_bytes(Flat([row] * (most + 1)))
    assert caught.value.faults


def test_xml_refuses_what_is_no_number():
    with pytest.raises(ArithmeticError, match="nan where a number is due"):
        xml_bytes(Flat([("m", "euler", "a", float("nan"), None)]))


def test_arrow_has_the_columns_of_the_csv():
    pa = pytest.importorskip("pyarrow")
    table = pa.ipc.open_stream(arrow_bytes(ANSWER)).read_all()
    assert table.schema.names == [column.name for column in COLUMNS]
    assert table.schema.types == [pa.string(), pa.string(), pa.string(), pa.float64(), pa.float64()]
    assert table.schema.field("contribution").metadata == {b"unit": b"currency"}
    for row, expected in zip(table.to_pylist(), csv_rows(), strict=True):
        for name, cell in row.items():
            assert (expected[name] == "") == (cell is None)
            if cell is not None:
                assert cell == (float(expected[name]) if name in ("contribution", "share") else expected[name])
    assert str(table.column("contribution")[1].as_py()) == "0.0"
    empty = pa.ipc.open_stream(arrow_bytes(Flat([]))).read_all()
    assert empty.num_rows == 0
    assert empty.schema == table.schema


def test_without_its_package_arrow_says_what_to_install(monkeypatch):
    monkeypatch.setitem(sys.modules, "pyarrow", None)
    with pytest.raises(NotAcceptable, match="extra `arrow`"):
        arrow_bytes(ANSWER)
