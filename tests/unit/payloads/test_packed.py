"""Packed tables."""

import base64
import json
from contextlib import suppress

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from hypothesis.extra import numpy as arrays

from service.errors import CallerError, InvalidValue, LimitExceeded
from service.payloads import unpack

finite = arrays.arrays(
    st.sampled_from([np.dtype("<f8"), np.dtype("<f4")]),
    arrays.array_shapes(min_dims=2, max_dims=2, max_side=6),
    elements={"allow_nan": False, "allow_infinity": False},
)


def packed(table, **changes):
    rows, columns = table.shape
    given_ = {"dtype": table.dtype.name, "rows": rows, "columns": columns, "max_cells": table.size}
    return unpack(base64.b64encode(table.tobytes()).decode(), **{**given_, **changes})


@settings(deadline=None)
@given(finite)
def test_the_numbers_come_back(table):
    found = packed(table)
    assert found.tobytes() == (table.astype(np.float64) + 0.0).tobytes()
    assert found.flags.c_contiguous


@pytest.mark.parametrize("wrap", [str, str.encode, lambda text: memoryview(text.encode())])
def test_text_bytes_and_views(wrap):
    text = base64.b64encode(np.array([[1.0, -0.0]]).tobytes()).decode()
    found = unpack(wrap(text), dtype="float64", rows=1, columns=2, max_cells=2)
    assert found.tolist() == [[1.0, 0.0]]
    assert not np.signbit(found).any()


def test_escaped_slashes():
    table = np.frombuffer(b"\xff\xff\xff\xff\xff\xff\xef\x3f" * 3, "<f8").reshape(1, 3)
    text = base64.b64encode(table.tobytes()).decode()
    assert "/" in text
    escaped = json.dumps(text)[1:-1].replace("/", "\\/").encode()
    assert np.array_equal(unpack(memoryview(escaped), dtype="float64", rows=1, columns=3, max_cells=3), table)


@pytest.mark.parametrize("value", [np.nan, np.inf, -np.inf])
@pytest.mark.parametrize("dtype", ["float64", "float32"])
def test_numbers_that_are_not_finite(value, dtype):
    table = np.ones((300, 200), dtype)
    table[299, 7] = value
    with pytest.raises(InvalidValue, match=r"row 299, column 7 \(counted from 0\) is -?(nan|inf)") as caught:
        packed(table)
    assert caught.value.faults[0].pointer == "/data"


@pytest.mark.parametrize(("dtype", "bits"), [("float64", "<u8"), ("float32", "<u4")])
def test_a_signalling_nan(dtype, bits):
    pattern = 0x7FF0000000000001 if dtype == "float64" else 0x7F800001
    table = np.array([[pattern]], bits).view(dtype)
    with pytest.raises(InvalidValue, match="must be finite"):
        packed(table)


def test_the_size_says_both_numbers():
    with pytest.raises(InvalidValue, match="holds 16 bytes, but 2 rows × 3 columns of float64 take 48 bytes") as caught:
        packed(np.ones((1, 2)), rows=2, columns=3, max_cells=6)
    assert caught.value.faults[0].pointer == "/data"


@pytest.mark.parametrize(
    "text",
    [
        "AAAA\n",
        "AA-_",
        "AAA",
        "A===",
        "AA==AA==",
        " AAAA",
        "é",
        "\\u00e9",
        "\\",
        '"',
        '\\n"',
        "\ud800",
        "AA\\nAA",
    ],
)
def test_what_is_not_base64(text):
    for data in (text, text.encode(errors="replace")):
        with pytest.raises(InvalidValue, match="data is not base64") as caught:
            unpack(data, dtype="float64", rows=1, columns=1, max_cells=1)
        assert caught.value.faults[0].pointer == "/data"


def test_the_limit_comes_before_the_bytes():
    with pytest.raises(LimitExceeded) as caught:
        unpack("not base64", dtype="float64", rows=10**12, columns=10**12, max_cells=10)
    assert caught.value.limit.asked == 10**24


@pytest.mark.parametrize(("rows", "columns"), [(0, 1), (1, 0), (-1, -1)])
def test_a_shape_of_nothing(rows, columns):
    with pytest.raises(InvalidValue, match="a table has rows and columns"):
        unpack("", dtype="float64", rows=rows, columns=columns, max_cells=1)


@settings(deadline=None)
@given(st.one_of(st.text(max_size=30), st.binary(max_size=30)), st.integers(-1, 3), st.integers(-1, 3))
def test_nothing_else_is_raised(data, rows, columns):
    with suppress(CallerError):
        unpack(data, dtype="float32", rows=rows, columns=columns, max_cells=6)
