"""Requests of two parts."""

import time
from contextlib import suppress

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from service.errors import CallerError, InvalidValue, Malformed, UnsupportedMediaType
from service.payloads import ARROW, CSV, PARQUET, split_multipart

HEADER = "multipart/form-data; boundary=xyz"


def part(name, content, *lines):
    head = b"\r\n".join([b'Content-Disposition: form-data; name="%s"' % name, *lines])
    return b"--xyz\r\n" + head + b"\r\n\r\n" + content + b"\r\n"


def body_of(request=b"{}", table=b"a\n1\n", *, request_lines=(), table_lines=(b"Content-Type: text/csv",)):
    return part(b"request", request, *request_lines) + part(b"table", table, *table_lines) + b"--xyz--\r\n"


@pytest.mark.parametrize("boundary", ["xyz", '"xyz"'])
@pytest.mark.parametrize("media_type", [CSV, ARROW, PARQUET])
@pytest.mark.parametrize(
    "table",
    [
        b"a\n1\n",
        b"",
        b"\r\n",
        b"\r\n--xy",
        b"\r\n--xyzz",
        b"--xyz",
        b"\r\n\r\n--xya\r\n--",
        bytes(range(256)) * 999,
    ],
)
def test_the_two_parts(boundary, media_type, table):
    body = body_of(b'{"a": 1}', table, table_lines=[b"content-type: " + media_type.encode()])
    parts = split_multipart(body, f"multipart/form-data; charset=utf-8; boundary={boundary}")
    assert parts.request == b'{"a": 1}'
    assert bytes(parts.table) == table
    assert parts.table.obj is body
    assert parts.table_media_type == media_type


@pytest.mark.parametrize(
    ("request_lines", "table_lines"),
    [
        ([b"Content-Type: application/json"], [b"Content-Type: text/csv"]),
        (
            [b"Content-Type: application/json; charset=UTF-8"],
            [b"Content-Type: TEXT/CSV; charset=utf-8; header=present"],
        ),
        (
            [b"Content-Transfer-Encoding: 8bit"],
            [b"Content-Type: text/csv", b"Content-Transfer-Encoding: binary"],
        ),
        ([b"X-Other: 1"], [b"Content-Type: text/csv", b"Content-Length: 4"]),
    ],
)
def test_headers_that_are_understood(request_lines, table_lines):
    parts = split_multipart(body_of(request_lines=request_lines, table_lines=table_lines), HEADER)
    assert (parts.request, bytes(parts.table), parts.table_media_type) == (b"{}", b"a\n1\n", CSV)


def test_an_empty_request_part():
    assert split_multipart(body_of(b""), HEADER).request == b""


def test_file_names_and_an_epilogue():
    body = part(b'request"; filename="r.json', b"{}") + part(
        b'table"; filename="t.csv', b"a", b"Content-Type: text/csv"
    )
    assert bytes(split_multipart(body + b"--xyz--\r\nepilogue", HEADER).table) == b"a"


TABLE = part(b"table", b"a\n1\n", b"Content-Type: text/csv")
REQUEST = part(b"request", b"{}")


@pytest.mark.parametrize(
    ("body", "words"),
    [
        (b"--xyz--\r\n", "two parts are needed"),
        (REQUEST + b"--xyz--\r\n", "found: 'request'"),
        (TABLE + b"--xyz--\r\n", "found: 'table'"),
        (TABLE + REQUEST + b"--xyz--\r\n", "found: 'table', 'request'"),
        (REQUEST + REQUEST + b"--xyz--\r\n", "found: 'request', 'request'"),
        (REQUEST + TABLE + TABLE + b"--xyz--\r\n", "there are more"),
        (REQUEST + TABLE + part(b"x", b"") * 100_000, "there are more"),
        (b"--xyz\r\n\r\n{}\r\n" + TABLE + b"--xyz--\r\n", "two parts are needed"),
    ],
)
def test_other_parts(body, words):
    with pytest.raises(CallerError) as caught:
        split_multipart(body, HEADER)
    if not body.startswith(b"--xyz--"):  # a body that ends before it begins is no multipart body to the parser
        assert isinstance(caught.value, InvalidValue)
        assert words in caught.value.detail


@pytest.mark.parametrize(
    ("lines", "words"),
    [
        ({"table_lines": []}, "must say its media type"),
        ({"table_lines": [b"Content-Type: application/octet-stream"]}, "found: 'application/octet-stream'"),
        ({"table_lines": [b"Content-Type: text/csv; charset=latin-1"]}, "in UTF-8"),
        (
            {"table_lines": [b"Content-Type: text/csv", b"Content-Transfer-Encoding: base64"]},
            "transfer encoding",
        ),
        ({"request_lines": [b"Content-Type: text/csv"]}, "the part request must be application/json"),
        ({"request_lines": [b"Content-Type: application/json; charset=utf-16"]}, "in UTF-8"),
        ({"request_lines": [b"Content-Transfer-Encoding: quoted-printable"]}, "transfer encoding"),
    ],
)
def test_media_types_that_are_not_read(lines, words):
    with pytest.raises(UnsupportedMediaType) as caught:
        split_multipart(body_of(**lines), HEADER)
    assert words in caught.value.detail
    assert caught.value.faults[0].part in {"request", "table"}


@pytest.mark.parametrize(
    "header",
    [
        "",
        "multipart/form-data",
        "multipart/form-data; boundary=",
        "multipart/mixed; boundary=xyz",
        "text/csv",
        "multipart/form-data; boundary=xyz; x=" + "y" * 2000,
        "multipart/form-data; boundary=" + "x" * 300,
        "multipart/form-data; boundary=€",
        "multipart/form-data; boundary=other",
    ],
)
def test_headers_that_are_not_understood(header):
    with pytest.raises(Malformed) as caught:
        split_multipart(body_of(), header)
    assert caught.value.faults[0].detail == caught.value.detail


def test_every_cut_is_refused():
    body = body_of().removesuffix(b"\r\n")
    assert split_multipart(body, HEADER).request == b"{}"
    for end in range(len(body)):
        with pytest.raises(CallerError):
            split_multipart(body[:end], HEADER)


def test_the_same_header_twice():
    lines = [b"Content-Type: text/csv", b"Content-Type: " + ARROW.encode()]
    with pytest.raises(Malformed, match="one header twice"):
        split_multipart(body_of(table_lines=lines), HEADER)


@settings(deadline=None)
@given(st.binary(max_size=60), st.text(max_size=30))
def test_any_bytes_raise_nothing_else(junk, header):
    for body in (junk, b"--xyz\r\n" + junk, body_of()[:-10] + junk):
        for content_type in (HEADER, header, "multipart/form-data; boundary=" + header):
            with suppress(CallerError):
                split_multipart(body, content_type)


@settings(deadline=None)
@given(st.data())
def test_damaged_bodies_raise_nothing_else(data):
    body = bytearray(body_of())
    place = data.draw(st.integers(0, len(body) - 1))
    body[place : place + data.draw(st.integers(0, 3))] = data.draw(
        st.sampled_from([b"", b"\r\n", b"\xff", b":", b'"', b";", b"-"])
    )
    try:
        parts = split_multipart(bytes(body), HEADER)
    except CallerError:
        return
    assert parts.table_media_type in {CSV, ARROW, PARQUET}


@pytest.mark.parametrize("filler", [b"\r\n--xy", b"\r\n--xyzx", b"\r", b"\r\n", b'name="'])
def test_three_megabytes_of_near_boundaries(filler):
    table = filler * (3_000_000 // len(filler))
    start = time.perf_counter()
    assert bytes(split_multipart(body_of(table=table), HEADER).table) == table
    assert time.perf_counter() - start < 5
