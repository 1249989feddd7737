"""Tables of JSON: what is read, what is refused, and in which words."""

import json
import time
from contextlib import suppress
from unittest.mock import patch

import numpy as np
import pytest
from hypothesis import example, given, settings
from hypothesis import strategies as st

from service.errors import CallerError, InvalidValue, LimitExceeded, Malformed
from service.payloads import json_table, row_from_json, rows_from_json

MANY = 1 << 30

numbers = st.one_of(
    st.floats(allow_nan=False, allow_infinity=False),
    st.integers(-(2**70), 2**70),
)
tables = st.integers(1, 5).flatmap(
    lambda columns: st.lists(st.lists(numbers, min_size=columns, max_size=columns), min_size=1, max_size=8)
)
spaced = st.sampled_from([(",", ":"), (", ", ": "), (" ,\r\n\t", ":")])


def in_small_pieces(text, *, piece=1):
    with patch.object(json_table, "PIECE", piece):
        return rows_from_json(text, max_cells=MANY)


def fault_of(text, **limits):
    with pytest.raises(CallerError) as caught:
        rows_from_json(text, **{"max_cells": MANY, **limits})
    assert len(caught.value.faults) == 1
    fault = caught.value.faults[0]
    assert fault.detail == caught.value.detail
    assert fault.code == caught.value.code
    return caught.value, fault.pointer


@settings(deadline=None)
@given(tables, spaced, st.integers(0, 40))
def test_any_cut_gives_the_nearest_floats(rows, separators, piece):
    text = json.dumps(rows, separators=separators).encode()
    found = in_small_pieces(text, piece=piece)
    expected = np.array([[float(cell) for cell in row] for row in rows]) + 0.0
    assert found.tobytes() == expected.tobytes()
    assert found.shape == expected.shape
    assert found.flags.c_contiguous
    assert found.dtype == np.float64


@pytest.mark.parametrize("shape", [(5000, 7), (3, 40_000), (1, 1), (20_000, 1)])
def test_tables_of_many_pieces(shape):
    table = np.random.default_rng(1).lognormal(10, 2, shape)
    text = json.dumps(table.tolist()).encode()
    assert np.array_equal(rows_from_json(memoryview(text), max_cells=table.size), table)


@pytest.mark.parametrize("space", [60, 70, 200])
def test_white_space_before_a_cut(space):
    text = b"[[1" + b" " * space + b",2]" + b"\n" * space + b",[3,4]]"
    assert in_small_pieces(text).tolist() == [[1, 2], [3, 4]]


def test_negative_zero_is_zero():
    found = rows_from_json(b"[[-0.0,-0],[-0e5,1]]", max_cells=4)
    assert not np.signbit(found).any()


@pytest.mark.parametrize(
    ("text", "pointer", "words"),
    [
        (b"[[1,2],[3,true]]", "/1/1", "true is not a number"),
        (b"[[1,false]]", "/0/1", "false is not a number"),
        (b"[[1,null]]", "/0/1", "null is not a number"),
        (b'[[1,"2"]]', "/0/1", "'2' is a text, not a number"),
        (b'[[1,"],[,"],[3,4]]', "/0/1", "is a text, not a number"),
        (b"[[1,{}]]", "/0/1", "an object is not a number"),
        (b'[[1,{"a":[1,2]}]]', "/0/1", "an object is not a number"),
        (b"[[1,[2]]]", "/0/1", "an array is not a number"),
        (b"[[1,2],[[],2]]", "/1/0", "an array is not a number"),
        (b"[[1e999]]", "/0/0", "1e999 is beyond the range"),
        (b"[[-1e400, 1]]", "/0/0", "-1e400 is beyond the range"),
        (b"[[" + b"9" * 400 + b"]]", "/0/0", "is beyond the range"),
        (b"[[1,2,3],[1,2,3],[1,2,3],[1,2]]", "/3", "row 3 has 2 values, but row 0 has 3"),
        (b"[[1,2],[1,2,3,4]]", "/1", "row 1 has 4 values, but row 0 has 2"),
        (b'[[1,2],[1,2,"a"]]', "/1", "row 1 has more than 2 values, but row 0 has 2"),
        (b"[[1,2],[1]]", "/1", "row 1 has 1 value, but row 0 has 2"),
        (b"[]", "", "the table has no rows"),
        (b" [ ] ", "", "the table has no rows"),
        (b"[[]]", "/0", "row 0 has no values"),
        (b"[[1],[ ]]", "/1", "row 1 has no values"),
        (b"[1,2]", "/0", "row 0 must be an array of numbers"),
        (b"[[1],2]", "/1", "row 1 must be an array of numbers"),
        (b"[[1],null]", "/1", "row 1 must be an array of numbers"),
        (b"{}", "", "the table must be an array of rows"),
        (b'"[[1]]"', "", "the table must be an array of rows"),
        (b"1", "", "the table must be an array of rows"),
    ],
)
@pytest.mark.parametrize("piece", [1, 3, 1 << 16])
def test_values_that_are_not_allowed(text, pointer, words, piece):
    with patch.object(json_table, "PIECE", piece):
        error, found = fault_of(text)
    assert isinstance(error, InvalidValue)
    assert found == pointer
    assert words in error.detail


@pytest.mark.parametrize(
    ("text", "pointer", "words"),
    [
        (b"", "", "ends too early"),
        (b"[", "/0", "ends too early"),
        (b"[[1,2", "/0/1", "2"),
        (b"[[1,2]", "", "not JSON"),
        (b"[[1,2],", "/1", "ends too early"),
        (b"[[1,2],]", "/1", "a value is missing"),
        (b"[[1,,2]]", "/0/1", "a value is missing"),
        (b"[[1,2,],[3,4]]", "/0/2", "a value is missing"),
        (b"[[,1]]", "/0/0", "a value is missing"),
        (b"[[1]]]", "", "not JSON"),
        (b"[[1]],[[2]]", "", "not JSON"),
        (b"[[1]] x", "", "not JSON"),
        (b"[[NaN]]", "/0/0", "NaN is not JSON"),
        (b"[[-Infinity]]", "/0/0", "-Infinity is not JSON"),
        (b"[[01]]", "/0/0", "'01' is not a JSON number"),
        (b"[[1.]]", "/0/0", "'1.' is not a JSON number"),
        (b"[[.5]]", "/0/0", "'.5' is not a JSON number"),
        (b"[[+1]]", "/0/0", "'+1' is not a JSON number"),
        (b"[[1 2]]", "/0/0", "is not a JSON number"),
        (b"[[0x10]]", "/0/0", "is not a JSON number"),
        (b"[[1_000]]", "/0/0", "is not a JSON number"),
        (b"[[\xff]]", "/0/0", "is not a JSON number"),
        (b'[[1,"a],[2,3]]', "", "not JSON"),
        (b"[[1,true],[", "", "not JSON"),
        (b"[" * 100_000, "", "nested too deeply"),
        (b"[" * 100_000 + b"]" * 100_000, "", "nested too deeply"),
    ],
)
@pytest.mark.parametrize("piece", [1, 1 << 16])
def test_what_is_not_json(text, pointer, words, piece):
    with patch.object(json_table, "PIECE", piece):
        error, found = fault_of(text)
    assert isinstance(error, Malformed)
    assert found == pointer
    assert words in error.detail


def test_the_fault_is_found_far_behind_the_start():
    rows = [[1.5] * 20 for _ in range(20_000)]
    rows[17_123][4] = True
    error, pointer = fault_of(json.dumps(rows).encode())
    assert pointer == "/17123/4"
    assert error.detail == "true is not a number"


def test_more_cells_than_allowed():
    error, pointer = fault_of(b"[[1,2],[3,4],[5,6]]", max_cells=5)
    assert isinstance(error, LimitExceeded)
    assert pointer == ""
    assert (error.limit.name, error.limit.allowed, error.limit.asked) == ("max_cells", 5, 6)
    assert error.limit.setting == "TAILRACE_MAX_CELLS"
    assert rows_from_json(b"[[1,2],[3,4],[5,6]]", max_cells=6).shape == (3, 2)


def test_the_excerpt_of_a_value_is_short():
    error, _ = fault_of(b'[["' + b"x" * 10_000 + b'"]]')
    assert len(error.detail) < 100


JSONISH = st.lists(
    st.sampled_from(
        [
            b"[",
            b"]",
            b"[",
            b"]",
            b",",
            b",",
            b"1",
            b"0",
            b"-",
            b".5",
            b"e3",
            b" ",
            b'"',
            b"true",
            b"{}",
            b"[1,2],",
        ]
    ),
    max_size=40,
).map(b"".join)


def strictly(text):
    """Return the table as a plain reading would, or None if it is not one."""
    try:
        rows = json.loads(text)
        ragged = not isinstance(rows, list) or not all(isinstance(row, list) for row in rows)
        if ragged or {type(cell) for row in rows for cell in row} - {int, float}:
            return None
        table = np.array(rows, dtype=np.float64) + 0.0
    except ValueError:
        return None
    return table if table.ndim == 2 and table.size and np.isfinite(table).all() else None


@settings(deadline=None)
@given(JSONISH, st.integers(0, 12))
@example(b"[[1,2,],[3]]", 3)
@example(b"[[,1]]", 1)
@example(b"[[1],]", 1)
@example(b"[[1,2]", 1)
def test_what_looks_like_json_is_read_as_a_plain_reading_does(text, piece):
    expected = strictly(text)
    try:
        found = in_small_pieces(text, piece=piece)
    except CallerError:
        found = None
    if expected is None:
        assert found is None
    else:
        assert np.array_equal(found, expected)


@settings(deadline=None)
@given(tables, st.data(), st.integers(0, 20))
def test_damaged_tables_are_read_as_a_plain_reading_does(rows, data, piece):
    text = bytearray(json.dumps(rows).encode())
    place = data.draw(st.integers(0, len(text) - 1))
    text[place : place + data.draw(st.integers(0, 2))] = data.draw(st.sampled_from([b"", b",", b"[", b"]", b"9", b"a"]))
    expected = strictly(bytes(text))
    try:
        found = in_small_pieces(bytes(text), piece=piece)
    except CallerError:
        found = None
    assert (found is None) == (expected is None)
    if expected is not None:
        assert np.array_equal(found, expected)


@settings(deadline=None)
@given(st.binary(max_size=60))
def test_nothing_else_is_raised(text):
    with suppress(CallerError):
        rows_from_json(text, max_cells=MANY)


@pytest.mark.parametrize(
    "text",
    [
        b"[[" + b"1" * 3_000_000 + b"]]",
        b"[[0." + b"1" * 3_000_000 + b"x]]",
        b"[[1],[" + b"1," * 1_500_000 + b"1]]",
        b"[[1," + b'"' + b"a," * 1_500_000 + b'"]]',
        b"[[1], " + b"[] ," * 700_000 + b"[1]]",
        b"[[1" + b" " * 3_000_000 + b"x]]",
        b"[[" + b"[" * 3_000_000,
    ],
)
def test_three_megabytes_of_nonsense_are_refused_in_time(text):
    start = time.perf_counter()
    fault_of(text)
    assert time.perf_counter() - start < 5


@pytest.mark.parametrize(
    ("text", "values"), [(b"[1]", [1.0]), (b" [ -0, 1e3 ,\n2.5]", [0.0, 1000.0, 2.5]), (b"[7,8]", [7.0, 8.0])]
)
def test_one_row(text, values):
    row = row_from_json(text)
    assert row.tolist() == values
    assert not np.signbit(row).any()


def test_a_long_row():
    values = np.random.default_rng(1).normal(size=30_000)
    assert np.array_equal(row_from_json(json.dumps(values.tolist()).encode()), values)


@pytest.mark.parametrize(
    ("text", "pointer", "words"),
    [
        (b"[1,true]", "/1", "true is not a number"),
        (b"[1,2,[3]]", "/2", "an array is not a number"),
        (b"[1,null]", "/1", "null is not a number"),
        (b'[1,2,"3"]', "/2", "'3' is a text, not a number"),
        (b"[1e999]", "/0", "beyond the range"),
        (b"[]", "", "no values"),
    ],
)
def test_a_row_of_other_things(text, pointer, words):
    with pytest.raises(InvalidValue, match=words) as caught:
        row_from_json(text)
    assert caught.value.faults[0].pointer == pointer


@pytest.mark.parametrize(
    "text", [b"[1],[2]", b"[1],[2,3]", b"[1,,2]", b"[1", b"1]", b"[1] ]", b"", b"[" * 5000, b"[NaN]"]
)
def test_a_row_that_is_no_json(text):
    with pytest.raises(Malformed):
        row_from_json(text)
