"""The JSON body, parted from its table."""

import base64
import json
import time
from contextlib import suppress

import numpy as np
import pytest
from hypothesis import example, given, settings
from hypothesis import strategies as st

from service.errors import CallerError, Malformed
from service.payloads import rows_from_json, split_envelope, unpack


def split(body):
    envelope = split_envelope(body)
    assert json.loads(envelope.text) == envelope.document
    return envelope


def refused(body, words):
    with pytest.raises(Malformed) as caught:
        split_envelope(body)
    assert words in caught.value.detail
    assert caught.value.faults[0].detail == caught.value.detail
    assert caught.value.faults[0].pointer == ""
    return caught.value.detail


def restored(envelope):
    """Return the whole document, as a plain parser would have read it."""
    document = json.loads(envelope.text)
    for pointer, text in envelope.apart.items():
        *steps, last = (int(step) if step.isdigit() else step for step in pointer.split("/")[1:])
        node = document
        for step in steps:
            node = node[step]
        quote = b'"' if last == "data" else b""
        assert node[last] == ("" if quote else [])
        node[last] = json.loads(quote + bytes(text) + quote)
    return document


@pytest.mark.parametrize(
    "body",
    [
        b'{"losses":{"values":[[1,2],[3,4]]}}',
        b'{"losses":{"values":[[1,2],[3,4]],"sign":"loss"},"level":0.9}',
        b' {\n"losses" : { "kind":"scenarios", "values" :\t[ [1 , 2] ] , "sign":"loss" }, "x":[1,[2]]}\n',
        b'{"x":{"values":[[9]]},"losses":{"values":[[1]]}}',
        b'{"x":{"values":[[9]]},"losses":{"values":[]}}',
        b'{"x":"\\"values\\":[[9]]","losses":{"values":[[1]]}}',
        b'{"losses":{"y":{"values":[[9]]},"values":[[1]],"z":{"values":[[9]]}}}',
        b'{"losses":{"values":[["a]",{"b":"c"}],[true]]},"level":[]}',
        b'{"losse\\u0073":{"valu\\u0065s":[[1]]}}',
        b'{"losses":{"values":[[1]],"packed":{"data":"AAAA"}}}',
        b'{"losses":{"packed":{"data":"AAAA","dtype":"float64"},"values":[[1]]}}',
        b'{"losses":{"packed":{"dtype":"float64","data":"AA\\/A"}},"data":"no"}',
        b'{"data":"no","losses":{"packed":{"data":"a\\"b"}}}',
        b'{"losses":{"packed":{"data":"a\\"b"}}}',
        b'{"losses":{"packed":{"data":"a\\\\"}}}',
        b'{"losses":{"packed":{"data":""}}}',
        b'{"losses":{"packed":{"data":null},"values":null}}',
        b'{"losses":{"packed":[],"values":"text"}}',
        b'{"losses":{"packed":null,"values":{"a":[1]}}}',
        b'{"losses":[{"values":[[1]]}],"values":[[2]]}',
        b'{"losses":null}',
        b"{}",
        b'{"losses":{"values":[[1]]},"candidates":[{"id":"a","values":[1]},{"values":[2,3],"x":[4]},{"values":"no"},[5]]}',
        b'{"candidates":[{"values":[1]}],"losses":{"values":[[1]]}}',
        b'{"candidates":{"values":[1]},"losses":{"kind":"book"}}',
        b'{"before":{"values":[[1]]},"after":{"packed":{"data":"AAAA"}},"x":{"values":[[2]]}}',
        b'{"a":"\\ud83d\\ude00 \\\\ud800"}',
        '{"größe":"é","losses":{"values":[[1]],"währung":"€"}}'.encode(),
    ],
)
@pytest.mark.parametrize("kind", [bytes, bytearray])
def test_the_parts_make_up_the_document(body, kind):
    assert restored(split(kind(body))) == json.loads(body)


@pytest.mark.parametrize(
    ("body", "table"),
    [
        (b'{"losses":{"values":[[1,2],[3,4]],"sign":"loss"}}', b"[[1,2],[3,4]]"),
        (b'{"x":{"values":[[9]]},"losses":{"values": [ ]}}', b"[ ]"),
        (b'{"losses":{"values":[["a"]]}}', b'[["a"]]'),
    ],
)
def test_the_table_is_kept_as_text(body, table):
    assert bytes(split(body).apart["/losses/values"]) == table


def test_what_is_no_table_stays_in_the_document():
    envelope = split(b'{"losses":{"values":"text","packed":{"data":7}}}')
    assert envelope.apart == {}
    assert envelope.document == {"losses": {"values": "text", "packed": {"data": 7}}}


def test_a_large_table_and_its_decoding():
    table = np.random.default_rng(1).normal(size=(2000, 30))
    body = json.dumps({"losses": {"kind": "scenarios", "values": table.tolist()}, "level": 0.99}).encode()
    envelope = split(body)
    assert envelope.document == {"losses": {"kind": "scenarios", "values": []}, "level": 0.99}
    assert np.array_equal(rows_from_json(envelope.apart["/losses/values"], max_cells=table.size), table)


def test_what_is_kept_apart():
    body = (
        b'{"before":{"values":[[1]]},"after":{"packed":{"data":"AA"}},"losses":{"values":[[2]]},'
        b'"candidates":[{"id":"x"},{"values":[3, 4]},{"values":"no"}]}'
    )
    texts = {pointer: bytes(text) for pointer, text in split(body).apart.items()}
    assert texts == {
        "/before/values": b"[[1]]",
        "/after/packed/data": b"AA",
        "/losses/values": b"[[2]]",
        "/candidates/1/values": b"[3, 4]",
    }


def test_a_large_packed_table_is_not_copied():
    table = np.random.default_rng(1).normal(size=(2000, 30))
    text = base64.b64encode(table.tobytes()).decode()
    body = json.dumps({"losses": {"packed": {"data": text, "rows": 2000}}}).encode()
    envelope = split(body)
    assert envelope.apart["/losses/packed/data"].obj is body
    assert np.array_equal(
        unpack(envelope.apart["/losses/packed/data"], dtype="float64", rows=2000, columns=30, max_cells=table.size),
        table,
    )


@pytest.mark.parametrize(
    ("body", "words"),
    [
        (b"", "empty"),
        (b" \n ", "empty"),
        (b"\xef\xbb\xbf{}", "byte order mark"),
        ('{"a":1}'.encode("utf-16"), "not UTF-8"),
        ('{"a":1}'.encode("utf-16-le"), "not UTF-8"),
        (b"[1]", "must be a JSON object"),
        (b'"a"', "must be a JSON object"),
        (b"null", "must be a JSON object"),
        (b"{", "not JSON"),
        (b"{} x", "not JSON"),
        (b'{"losses":{"values":[[1]]}} ]', "not JSON"),
        (b'{"losses":{"values":[[1]]]}}', ""),
        (b'{"losses":{"values":[[1]],}}', "not JSON"),
        (b'{"losses":{"values":[[1]]', "not JSON"),
        (b'{"losses":{"values":[[1', "not JSON"),
        (b'{"a":1,"a":2}', "'a' occurs twice"),
        (b'{"losses":{"values":[[1]],"values":[[2]]}}', "'values' occurs twice"),
        (b'{"losses":{"values":[[1]]},"losses":{"values":[[2]]}}', "'losses' occurs twice"),
        (b'{"losses":{"values":[[1]]},"losses":null}', "'losses' occurs twice"),
        (b'{"losses":{"packed":{"data":"A","data":"B"}}}', "'data' occurs twice"),
        (b'{"x":[{"b":1,"c":{"d":1,"d":1}}]}', "'d' occurs twice"),
        (b'{"a":1,\n"b":NaN}', "NaN is not JSON: every number must be finite (line 2, column 5)"),
        (b'{"losses":{"values":[[1]]},"a":NaN}', "NaN"),
        (
            b'{"losses":{"values":[[1]]},"a":-Infinity}',
            "Infinity is not JSON: every number must be finite (line 1, column",
        ),
        (b'{"a":"\xff"}', "not UTF-8"),
        (b'{"\xff":1}', "UTF-8"),
        (b'{"a":"\xed\xa0\x80"}', "not UTF-8"),
        (b'{"a":"\\ud800"}', "\\ud800 is half of a surrogate pair"),
        (b'{"a":"\\udc00\\ud800"}', "half of a surrogate pair"),
        (
            b'{"a":"\\ud83d\\ude00\\uDE00"}',
            "\\uDE00 is half of a surrogate pair and no character (line 1, column 19)",
        ),
        (b'{"\\ud800":1}', "half of a surrogate pair"),
        (b'{"a":"x\ny"}', "not JSON"),
        (b'{"a":01}', "not JSON"),
        (b"{'a':1}", "not JSON"),
        (b'{"a":' + b"9" * 5000 + b"}", "too many digits"),
        (b'{"a":' + b"[" * 100_000, "nested too deeply"),
        (b'{"a":' + b"[" * 100_000 + b"]" * 100_000 + b"}", "nested too deeply"),
        (b'{"losses":' + b'{"losses":' * 100_000, "nested too deeply"),
    ],
)
def test_what_is_not_a_json_object(body, words):
    if body == b'{"losses":{"values":[[1]]]}}':  # the guess leaves the superfluous bracket to the table's decoder
        with pytest.raises(Malformed):
            rows_from_json(split_envelope(body).apart["/losses/values"], max_cells=9)
        return
    refused(body, words)


def test_deep_nesting_inside_the_table():
    body = b'{"losses":{"values":' + b"[" * 100_000 + b"]" * 100_000 + b"}}"
    with pytest.raises(Malformed, match="nested too deeply"):
        rows_from_json(split_envelope(body).apart["/losses/values"], max_cells=9)


def test_the_place_is_that_in_the_body():
    body = '{\n"währung": "é", "losses":{"values":[[1,2,3],\n[4,5,6]], "ü": nope}}'.encode()
    assert "(line 3, column 17)" in refused(body, "not JSON")
    assert "(line 2, column 13)" in refused('{\n"währung": nope}'.encode(), "not JSON")


def test_a_value_in_the_wrong_place_is_refused_by_the_decoder():
    envelope = split_envelope(b'{"losses":{"packed":{"data":"A\nAA"}}}')
    with pytest.raises(CallerError):
        unpack(envelope.apart["/losses/packed/data"], dtype="float64", rows=1, columns=1, max_cells=1)


leaves = st.one_of(
    st.none(), st.booleans(), st.integers(-9, 9), st.text(alphabet='a"\\[]{},é\u2028\U0001f600', max_size=4)
)
names = st.sampled_from(["losses", "values", "packed", "data", "candidates", "after", "x"])
values = st.recursive(
    leaves,
    lambda inner: st.lists(inner, max_size=3) | st.dictionaries(names, inner, max_size=3),
    max_leaves=12,
)
documents = st.dictionaries(names, values, max_size=3) | st.fixed_dictionaries(
    {
        "x": values,
        "losses": st.dictionaries(names, values, max_size=4),
        "candidates": st.lists(st.dictionaries(names, values, max_size=2), max_size=3),
    }
)


@settings(deadline=None)
@given(documents, st.sampled_from([None, 1]), st.booleans())
def test_any_document_is_parted_and_made_up_again(document, indent, ascii_only):
    body = json.dumps(document, indent=indent, ensure_ascii=ascii_only).encode()
    assert restored(split(body)) == document


class Repeated(ValueError):
    """A member name occurs twice."""


def distinct(pairs):
    if len(dict(pairs)) < len(pairs):
        raise Repeated
    return dict(pairs)


@settings(deadline=None)
@given(documents, st.data())
@example({"losses": {"values": [[1]]}}, None)
def test_damaged_bodies_are_read_as_a_plain_parser_reads_them(document, data):
    body = bytearray(json.dumps(document).encode())
    if data is not None:
        place = data.draw(st.integers(0, len(body) - 1))
        junk = data.draw(st.sampled_from([b"", b'"', b"\\", b"[", b"]", b"{", b"}", b",", b":", b"\xff", b"]}", b"1"]))
        body[place : place + data.draw(st.integers(0, 2))] = junk
    try:
        expected = json.loads(body, object_pairs_hook=distinct)
        json.dumps(expected, ensure_ascii=False).encode()
    except ValueError:
        expected = None
    try:
        found = restored(split(bytes(body)))
    except (CallerError, json.JSONDecodeError):  # the latter stands for the decoders of the values
        found = None
    if isinstance(expected, dict):
        assert found == expected
    else:
        assert found is None


@settings(deadline=None)
@given(st.binary(max_size=50), st.integers(0, 60))
def test_nothing_else_is_raised(junk, cut):
    for body in (junk, b"{" + junk, (b'{"losses":{"values":[[1,2],[3,4]],"x":"y"}}')[:cut] + junk):
        with suppress(CallerError):
            split_envelope(body)


@pytest.mark.parametrize(
    "body",
    [
        b'{"losses":{"values":[' + b"[" * 3_000_000,
        b'{"losses":{"values":[' + b'"a",' * 700_000,
        b'{"values":[' * 300_000,
        b'{"losses":{"packed":{"data":"' + b'\\"' * 1_500_000,
        b'{"a":"' + b"\\ud83d\\ude00" * 250_000 + b'\\ud800"}',
        b'{"a":' + b" " * 3_000_000,
        b'{"a":' + b"1" * 3_000_000 + b"}",
        b'{"losses":{"values":[[1]],"a":"' + b"\n" * 3_000_000,
    ],
)
def test_three_megabytes_of_nonsense_are_refused_in_time(body):
    start = time.perf_counter()
    with pytest.raises(CallerError):
        split_envelope(body)
    assert time.perf_counter() - start < 5


def test_more_candidates_than_any_request_may_hold_stay_in_the_document():
    many = [{"id": f"d{k}", "values": [k]} for k in range(1100)]
    body = json.dumps({"losses": {"kind": "book", "name": "x"}, "candidates": many}).encode()
    envelope = split(body)
    assert envelope.apart == {}
    assert envelope.document == json.loads(body)
