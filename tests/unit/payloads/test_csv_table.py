"""Tables of CSV."""

import csv
import io
import time
from contextlib import suppress
from unittest.mock import patch

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from service.errors import CallerError, InvalidValue, LimitExceeded, Malformed
from service.payloads import csv_plain, csv_table, table_from_csv

MANY = 1 << 30


def read(text, **options):
    body = text if isinstance(text, bytes) else text.encode()
    return table_from_csv(body, **{"max_cells": MANY, **options})


def fault_of(text, kind=InvalidValue, **options):
    with pytest.raises(kind) as caught:
        read(text, **options)
    assert len(caught.value.faults) == 1
    fault = caught.value.faults[0]
    assert fault.part == "body"
    assert fault.detail == caught.value.detail
    return fault


@pytest.mark.parametrize(
    "text",
    [
        "a,b\n1,2\n3,-0.0\n",
        "a,b\r\n1,2\r\n3,-0\r\n",
        "a,b\r\n1,2\r\n3,0",
        "a,b\n1,2\n3,0\n\n\r\n\n",
        "\ufeffa,b\n1,2\n3,0\n",
        '"a","b"\n1,2\n3,0\n',
        'a,b\n"1","2"\n3,"0"\n',
        "a,b\n 1 ,2\t\n3,+0\n",
        "a,b\n1.,2e0\n30e-1,.0\n",
        "a,b\n001,2\n3,0\n",
        "a,b\n1,2\n3,0" + "\n" * 5000,
    ],
)
def test_forms_of_the_same_table(text):
    sheet = read(text)
    assert sheet.names == ("a", "b")
    assert sheet.texts == {}
    assert sheet.values.tolist() == [[1, 2], [3, 0]]
    assert not np.signbit(sheet.values).any()
    assert sheet.values.flags.c_contiguous
    assert sheet.values.dtype == np.float64


def test_texts_and_ignored_columns():
    text = 'id,motor,note,fire\n007,1,"x, ""y""\nz",2\n1e2,3,,4\n'
    sheet = read(text, text_columns=["note", "id"], ignore=[])
    assert sheet.names == ("motor", "fire")
    assert list(sheet.texts) == ["note", "id"]
    assert sheet.texts == {"note": ('x, "y"\nz', ""), "id": ("007", "1e2")}
    assert sheet.values.tolist() == [[1, 2], [3, 4]]
    sheet = read(text, ignore={"id", "note", "fire"})
    assert (sheet.names, sheet.texts, sheet.values.tolist()) == (("motor",), {}, [[1], [3]])


def test_a_header_may_hold_anything_that_can_be_quoted():
    assert read('"a,b","c\r\nd","é_"\n1,2,3\n').names == ("a,b", "c\r\nd", "é_")


cells = st.floats(allow_nan=False, allow_infinity=False).map(repr) | st.integers(-(2**70), 2**70).map(str)
idents = st.text(alphabet="abé1 _[]-.", max_size=5)
tables = st.integers(1, 4).flatmap(
    lambda columns: st.lists(
        st.tuples(idents, st.lists(cells, min_size=columns, max_size=columns)), min_size=1, max_size=9
    )
)


@settings(deadline=None)
@given(tables, st.integers(0, 30), st.sampled_from(["\n", "\r\n"]), st.booleans())
def test_both_ways_of_reading_give_the_nearest_floats(rows, piece, end, with_ids):
    columns = len(rows[0][1])
    header = [*(["id", "no"] if with_ids else []), *(f"c{index}" for index in range(columns))]
    lines = [[*([ident, "x"] if with_ids else []), *numbers] for ident, numbers in rows]
    text = end.join(map(",".join, [header, *lines]))
    options = {"text_columns": ["id"], "ignore": ["no"]} if with_ids else {}
    expected = np.array([[float(cell) for cell in numbers] for _, numbers in rows]) + 0.0
    with patch.object(csv_plain, "PIECE", piece), patch.object(csv_table, "_sheet", None):
        quick = read(text, **options)
    with (
        patch.object(csv_table, "plain_sheet", lambda *_, **__: None),
        patch.object(csv_table, "BLOCK_CELLS", piece),
    ):
        slow = read(text, **options)
    for sheet in (quick, slow):
        assert sheet.values.tobytes() == expected.tobytes()
        assert sheet.names == tuple(header[-columns:])
        assert sheet.texts == ({"id": tuple(ident for ident, _ in rows)} if with_ids else {})


@pytest.mark.parametrize("text", ["id,a\n1\n2\n", "id,a\n1\n2,3\n", "id,a\n1,2,3\n", "id,a\n\n1,2\n", "id,a\nx,y\n"])
def test_wrong_tables_with_ids(text):
    fault_of(text, text_columns=["id"])


def test_ids_that_are_not_utf8():
    assert "not UTF-8" in fault_of(b"id,a\n\xff,1\n", Malformed, text_columns=["id"]).detail


@pytest.mark.parametrize(
    ("text", "row", "column", "words"),
    [
        ("a,b\n1,2\n3,x\n", 2, "b", "row 2, column 'b': 'x' is not a number"),
        ("a,b\n1,\n", 1, "b", "the cell is empty"),
        ("a,b\n1, \n", 1, "b", "the cell is empty"),
        ("a,b\n1,nan\n", 1, "b", "'nan' is not a finite number"),
        ("a,b\n1,-Infinity\n", 1, "b", "'-Infinity' is not a finite number"),
        ("a,b\n1,1e999\n", 1, "b", "'1e999' is not a finite number"),
        ("a,b\n1,1_000\n", 1, "b", "'1_000' is not a number"),
        ("a,b\n1,١٢\n", 1, "b", "only the digits 0-9"),
        ('a,b\n1,"1,5"\n', 1, "b", "the decimal mark is a point"),
        ('a,b\n1,"1,234,567.8"\n', 1, "b", "thousands are not separated"),
        ("a,b\n1,1 000\n", 1, "b", "'1 000' is not a number"),
        ("a,b\n1,true\n", 1, "b", "'true' is not a number"),
        ("a,b\n1,[2]\n", 1, "b", "'[2]' is not a number"),
        ("a,b\n1],[2\n", 1, "a", "'1]' is not a number"),
        ("a,b\n1,0x10\n", 1, "b", "'0x10' is not a number"),
        ("a,b\n1,2\n3\n", 2, None, "row 2: there is 1 cell, but the header names 2"),
        ("a,b\n1,2\n1,5,2\n", 2, None, "it is no decimal mark"),
        ("a,b\n1,2\n\n3,4\n", 2, None, "row 2: the line is blank"),
        ("a\n1\n\n3\n", 2, None, "row 2: the line is blank"),
        ("a,b\n", None, None, "no rows"),
        ("a,b", None, None, "no rows"),
        ("a,b\n\n\n", None, None, "no rows"),
        ("1,2\n3,4\n", None, None, "the first line must name the columns"),
        ("1.5e3\n3\n", None, None, "the first line must name the columns"),
        ("a,\n1,2\n", None, "2", "column 2 has no name"),
        ("a,a\n1,2\n", None, "a", "two columns are named 'a'"),
        ("\na,b\n1,2\n", None, None, "but it is blank"),
        ("\ufeff\r\n", None, None, "but it is blank"),
        ("a,b\n1,2\n3,4\r5\n", 3, None, "there is 1 cell"),
    ],
)
@pytest.mark.parametrize("block", [1, 1 << 14])
def test_values_that_are_not_allowed(text, row, column, words, block):
    with patch.object(csv_table, "BLOCK_CELLS", block):
        fault = fault_of(text)
    assert words in fault.detail
    assert (fault.row, fault.column) == (row, column)


@pytest.mark.parametrize(
    ("text", "words"),
    [
        ("", "empty"),
        ("\ufeff", "empty"),
        ("a;b\n1,5;2\n", "separated by semicolons"),
        ("a\tb\n1\t2\n", "separated by tabs"),
        ("1;2\n3;4\n", "separated by semicolons"),
        ('a,b\n"1"2,3\n', "not CSV"),
        ('a,b\n1,"2\n', "not CSV"),
        ('a,"b\n1,2\n', "not CSV"),
        ("a,b\n1,\x00\n", "NUL"),
        (b"PK\x03\x04\x14\x00\x06\x00", "a workbook, or an archive of another kind: save the sheet as CSV"),
        ("a,b\n1,2\n".encode("utf-16"), "UTF-16"),
        (b"a,b\n1,\xff\n", "not UTF-8"),
        (b"\xff,b\n1,2\n", "not UTF-8"),
        ('a,b\n1,"' + "2" * 200_000 + '"\n', "field larger than field limit"),
    ],
)
def test_what_is_not_csv(text, words):
    assert words in fault_of(text, Malformed).detail


@pytest.mark.parametrize(
    ("options", "words"),
    [
        ({"text_columns": ["c"]}, "there is no column 'c'"),
        ({"ignore": ["c"]}, "there is no column 'c'"),
        ({"text_columns": ["a"], "ignore": ["a"]}, "cannot be both read and ignored"),
        ({"text_columns": ["a"], "ignore": ["b"]}, "no column of numbers"),
    ],
)
def test_columns_that_cannot_be_read(options, words):
    assert words in fault_of("a,b\n1,2\n", **options).detail


@pytest.mark.parametrize("text", ["a,b\n1,2\n3,4\n", 'a,b\n"1",2\n3,4\n'])
def test_more_cells_than_allowed(text):
    assert read(text, max_cells=4).values.shape == (2, 2)
    with pytest.raises(LimitExceeded) as caught:
        read(text, max_cells=3)
    assert caught.value.limit.asked == 4
    assert caught.value.faults[0].part == "body"


def test_ignored_columns_are_no_cells():
    assert read("a,b\n1,x\n3,y\n", ignore=["b"], max_cells=2).values.tolist() == [[1], [3]]


@pytest.mark.parametrize("place", [0, 7_777, 29_999])
def test_the_fault_is_found_far_behind_the_start(place):
    rows = [["1.25"] * 5 for _ in range(30_000)]
    rows[place][3] = "?"
    fault = fault_of("a,b,c,d,e\n" + "\n".join(map(",".join, rows)))
    assert (fault.row, fault.column) == (place + 1, "d")


FRAGMENTS = st.lists(
    st.sampled_from(
        [
            "1",
            "2.5",
            ",",
            ",",
            "\n",
            "\n",
            "\r\n",
            "\r",
            '"',
            '""',
            "-",
            "[",
            "]",
            "],[",
            "nan",
            "_",
            " ",
            "é",
            "a",
            ";",
        ]
    ),
    max_size=30,
).map("".join)


def strictly(text):
    """Return the table as the csv module reads it, or None if there is anything odd about it."""
    try:
        rows = list(csv.reader(io.StringIO(text, newline=""), strict=True))
        while rows and not rows[-1]:
            rows.pop()
        table = [[float(cell) for cell in row] for row in rows]
    except (csv.Error, ValueError):
        return None
    odd = {len(row) for row in rows} != {2} or "_" in text or not text.isascii()
    values = None if odd else np.array(table) + 0.0
    return values if values is not None and np.isfinite(values).all() else None


@settings(deadline=None)
@given(FRAGMENTS, st.integers(0, 9))
def test_what_looks_like_csv_is_read_as_a_plain_reading_does(text, piece):
    expected = strictly(text)
    with patch.object(csv_plain, "PIECE", piece), patch.object(csv_table, "BLOCK_CELLS", piece):
        try:
            found = read("a,b\n" + text).values
        except CallerError:
            found = None
    assert (found is None) == (expected is None)
    if found is not None:
        assert np.array_equal(found, expected)


@settings(deadline=None)
@given(st.binary(max_size=60), st.integers(0, 24))
def test_nothing_else_is_raised(junk, cut):
    for body in (junk, b'a,b\n1,2\n"3",4\n5,6\n'[:cut] + junk):
        with suppress(CallerError):
            table_from_csv(body, max_cells=1000, text_columns=["a"])
        with suppress(CallerError):
            table_from_csv(memoryview(body), max_cells=1000)


@pytest.mark.parametrize(
    "text",
    [
        "a,b\n" + "\n" * 3_000_000 + "1",
        "a,b\n" + "1" * 3_000_000,
        "a,b\n" + "1," * 1_500_000,
        'a,b\n"' + "1\n" * 1_500_000,
        "a" * 3_000_000,
        '"' + "a\n" * 1_500_000,
        ",".join("a" * 1_000_000),
        "a,b\n1,2" + "\r" * 3_000_000 + "3",
    ],
)
def test_three_megabytes_of_nonsense_are_refused_in_time(text):
    start = time.perf_counter()
    with pytest.raises(CallerError):
        read(text)
    assert time.perf_counter() - start < 5
