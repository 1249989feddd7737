"""Arrow IPC streams and Parquet files: the same columns by two wires."""

import builtins
import io
import sys
from decimal import Decimal

import numpy as np
import pyarrow as pa
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from pyarrow import parquet

from service.errors import CallerError, InvalidValue, LimitExceeded, Malformed, UnsupportedMediaType
from service.payloads import (
    ARROW,
    CSV,
    PARQUET,
    TABLE_READERS,
    arrow_table,
    table_from_arrow,
    table_from_parquet,
)

MANY = 1 << 30


def stream(table, *, rows=None, **options):
    sink = io.BytesIO()
    with pa.ipc.new_stream(sink, table.schema, options=pa.ipc.IpcWriteOptions(**options)) as writer:
        writer.write_table(table, max_chunksize=rows)
    return sink.getvalue()


def file(table, *, rows=None, **options):
    sink = io.BytesIO()
    parquet.write_table(table, sink, row_group_size=rows, **options)
    return sink.getvalue()


WIRES = {"arrow": (stream, table_from_arrow), "parquet": (file, table_from_parquet)}


@pytest.fixture(params=WIRES)
def wire(request):
    return WIRES[request.param]


def read(wire, columns, **options):
    write, reader = wire
    table = columns if isinstance(columns, pa.Table) else pa.table(columns)
    return reader(write(table), **{"max_cells": MANY, **options})


def fault_of(kind, wire, columns, **options):
    with pytest.raises(kind) as caught:
        read(wire, columns, **options)
    assert len(caught.value.faults) == 1
    fault = caught.value.faults[0]
    assert fault.part == "body"
    assert fault.detail == caught.value.detail
    return fault


@pytest.mark.parametrize("shape", [(1, 1), (3, 2), (70_000, 3), (5_000, 150)])
@pytest.mark.parametrize("rows", [None, 1_000, 7])
def test_the_numbers_come_back(wire, shape, rows):
    if shape[0] > 50 * (rows or shape[0]) and rows == 7:
        shape = (350, shape[1])
    values = np.random.default_rng(1).normal(size=shape)
    values[0, 0] = -0.0
    table = pa.table({f"c{index}": values[:, index].copy() for index in range(shape[1])})
    write, reader = wire
    sheet = reader(memoryview(write(table, rows=rows)), max_cells=values.size)
    assert sheet.values.tobytes() == (values + 0.0).tobytes()
    assert sheet.values.flags.c_contiguous
    assert sheet.names == tuple(table.column_names)
    assert sheet.texts == {}


@pytest.mark.parametrize(
    "kind",
    [
        *[pa.float64(), pa.float32(), pa.float16(), pa.int8(), pa.int16(), pa.int32(), pa.int64()],
        *[pa.uint8(), pa.uint16(), pa.uint32(), pa.uint64()],
    ],
)
def test_every_type_of_number(wire, kind):
    column = pa.array(np.array([0, 1, 100], kind.to_pandas_dtype()), kind)
    assert read(wire, {"a": column}).values.tolist() == [[0], [1], [100]]


@pytest.mark.parametrize("kind", [pa.int64(), pa.uint64()])
def test_whole_numbers_that_float64_holds(wire, kind):
    held = [0, 2**53, 2**53 - 1, 2**53 + 2, 2**62, 2**62 + 1024]
    held += [-(2**63), -(2**53), -(2**53) - 2, -1] if kind == pa.int64() else [2**63, 2**64 - 2048]
    assert read(wire, {"a": pa.array(held, kind)}).values[:, 0].tolist() == held


@pytest.mark.parametrize(
    ("value", "kind"),
    [(2**53 + 1, pa.int64()), (-(2**53) - 1, pa.int64()), (2**63 - 1, pa.int64()), (2**64 - 1, pa.uint64())],
)
def test_whole_numbers_that_float64_does_not_hold(wire, value, kind):
    fault = fault_of(InvalidValue, wire, {"x": [0.5, 1, 2], "a": pa.array([1, 2, value], kind)})
    assert f"{value} is beyond 2^53" in fault.detail
    assert (fault.row, fault.column) == (3, "a")


def test_texts_and_ignored_columns(wire):
    table = pa.table(
        {
            "id": pa.array(["é", "x", ""]),
            "a": [1, 2, 3],
            "n": pa.array([7, 8, 2**53 + 1]),
            "f": [1.0, 2.5, -0.0],
            "when": pa.array([0, None, 1], pa.date32()),
            "b": [4.0, 5, 6],
            "nested.b": pa.array([[1], None, []]),
        }
    )
    sheet = read(wire, table, text_columns=("n", "id", "f"), ignore={"when", "nested.b"})
    assert sheet.names == ("a", "b")
    assert sheet.values.tolist() == [[1, 4], [2, 5], [3, 6]]
    assert list(sheet.texts.items()) == [
        ("n", ("7", "8", "9007199254740993")),
        ("id", ("é", "x", "")),
        ("f", ("1", "2.5", "0")),
    ]


@pytest.mark.parametrize("kind", [pa.string(), pa.large_string()])
def test_texts_of_many_batches(wire, kind):
    ids = [f"S{index}" for index in range(300)]
    write, reader = wire
    body = write(pa.table({"id": pa.array(ids, kind), "a": range(300)}), rows=40)
    sheet = reader(body, text_columns=["id"], max_cells=300)
    assert sheet.texts["id"] == tuple(ids)
    assert sheet.values[:, 0].tolist() == list(range(300))


@pytest.mark.parametrize(
    ("column", "words"),
    [
        (pa.array(["1"]), "'a' is string: ignore it"),
        (pa.array([True]), "'a' is bool"),
        (pa.array([Decimal("1.5")]), "'a' is decimal128: cast it to float64"),
        (pa.array([[1.0]]), "'a' is list"),
        (pa.array([{"x": 1.0}]), "'a' is struct"),
        (pa.array([0], pa.date32()), "'a' is date32"),
        (pa.array([0], pa.timestamp("s")), "'a' is timestamp"),
        (pa.array(["x"]).dictionary_encode(), "dictionary-encoded columns are not read"),
        (pa.nulls(1), "'a' is null"),
    ],
)
def test_columns_that_are_no_numbers(wire, column, words):
    fault = fault_of(InvalidValue, wire, {"b": [1.0], "a": column})
    assert words in fault.detail
    assert fault.column == "a"


@pytest.mark.parametrize("column", [pa.array([True]), pa.array([[1]]), pa.array(["x"]).dictionary_encode()])
def test_columns_that_are_no_texts(wire, column):
    fault = fault_of(InvalidValue, wire, {"b": [1.0], "a": column}, text_columns=["a"])
    assert "cast it to a plain text column" in fault.detail


@pytest.mark.parametrize("rows", [1, 3, 1000])
def test_missing_values(wire, rows):
    write, reader = wire
    for column in ("a", "id"):
        cells = {"b": [1.0, 2, 3, 4], "a": [1.0, 2, 3, 4], "id": ["x", "y", "z", "w"]}
        cells[column][2] = None
        with pytest.raises(InvalidValue, match=r"row 3, column .*missing") as caught:
            reader(write(pa.table(cells), rows=rows), text_columns=["id"], max_cells=8)
        assert (caught.value.faults[0].row, caught.value.faults[0].column) == (3, column)


@pytest.mark.parametrize("value", [np.nan, np.inf, -np.inf])
@pytest.mark.parametrize("kind", [np.float64, np.float32, np.float16])
def test_numbers_that_are_not_finite(wire, value, kind):
    column = np.ones(100_000, kind)
    column[77_777] = value
    fault = fault_of(InvalidValue, wire, {"b": np.ones(100_000), "a": column})
    assert fault.detail == f"row 77778, column 'a': {value} is not a finite number"
    assert (fault.row, fault.column) == (77_778, "a")


def test_a_signalling_nan(wire):
    for pattern, bits, kind in (
        (0x7FF0000000000001, np.uint64, np.float64),
        (0x7F800001, np.uint32, np.float32),
    ):
        column = np.array([pattern], bits).view(kind)
        assert "not a finite number" in fault_of(InvalidValue, wire, {"a": column}).detail


@pytest.mark.parametrize(
    ("names", "options", "words"),
    [
        (["a", "a"], {}, "two columns are named 'a'"),
        (["a", ""], {}, "column 2 has no name"),
        (["a", "b"], {"text_columns": ["c"]}, "there is no column 'c'"),
        (["a", "b"], {"ignore": ["a", "b"]}, "no column of numbers"),
    ],
)
def test_names_that_cannot_be_used(wire, names, options, words):
    table = pa.table([pa.array([1.0]), pa.array([2.0])], names=names)
    assert words in fault_of(InvalidValue, wire, table, **options).detail


def test_a_table_without_rows(wire):
    assert "no rows" in fault_of(InvalidValue, wire, {"a": pa.array([], pa.float64())}).detail


def test_more_cells_than_allowed(wire):
    columns = {"a": [1.0, 2, 3], "b": [1.0, 2, 3], "id": ["x", "y", "z"]}
    assert read(wire, columns, ignore=["id"], max_cells=6).values.size == 6
    with pytest.raises(LimitExceeded) as caught:
        read(wire, columns, ignore=["id"], max_cells=5)
    assert caught.value.limit.asked == 6


def test_a_file_that_unpacks_to_more_than_its_cells():
    table = pa.table({"a": np.ones(100), "id": [f"{index}" + "x" * 200_000 for index in range(100)]})
    body = file(table, compression="zstd", use_dictionary=False)
    assert len(body) < 1_000_000
    with pytest.raises(LimitExceeded):
        table_from_parquet(body, ignore=["id"], max_cells=1000)


@pytest.mark.parametrize("codec", ["lz4", "zstd"])
def test_compressed_buffers_are_refused(codec):
    body = stream(pa.table({"a": np.zeros(100_000)}), compression=codec)
    with pytest.raises(InvalidValue, match="send uncompressed buffers or Parquet"):
        table_from_arrow(body, max_cells=MANY)


def test_a_stream_of_dictionaries_is_refused_even_if_ignored():
    body = stream(pa.table({"a": [1.0], "d": pa.array(["x"]).dictionary_encode()}))
    with pytest.raises(InvalidValue, match="dictionary-encoded columns are not read"):
        table_from_arrow(body, ignore=["d"], max_cells=MANY)


@pytest.mark.parametrize("options", [{"compression": "none"}, {"compression": "gzip"}, {"data_page_version": "2.0"}])
@pytest.mark.parametrize("dictionary", [True, False])
def test_encodings_of_parquet(options, dictionary):
    column = np.random.default_rng(1).integers(0, 9, 5000) / 4
    body = file(pa.table({"a": column}), use_dictionary=dictionary, **options)
    assert table_from_parquet(body, max_cells=5000).values[:, 0].tolist() == column.tolist()


def test_every_cut_of_a_stream_is_refused():
    body = stream(pa.table({"a": [1.0, 2, 3, 4], "b": [1, 2, 3, 4]}), rows=2)
    assert table_from_arrow(body, max_cells=8).values.shape == (4, 2)
    for end in range(len(body)):
        with pytest.raises(CallerError):
            table_from_arrow(body[:end], max_cells=8)
    with pytest.raises(Malformed, match="cut"):
        table_from_arrow(body[:-8], max_cells=8)
    with pytest.raises(CallerError):
        table_from_arrow(body + b"x", max_cells=8)


def test_every_cut_of_a_file_is_refused():
    body = file(pa.table({"a": [1.0, 2, 3, 4]}), rows=2)
    for end in range(len(body)):
        with pytest.raises(Malformed):
            table_from_parquet(body[:end], max_cells=8)


SMALL = pa.table({"a": [1.0, 2, 3, 4, 5, 6], "b": [1, 2, 3, 4, 5, 6], "id": ["u", "v", "w", "x", "y", "z"]})
BODIES = {
    table_from_arrow: stream(SMALL, rows=3),
    table_from_parquet: file(SMALL, rows=3, write_page_checksum=True),
}


@pytest.mark.parametrize("reader", BODIES)
@settings(deadline=None, max_examples=400)
@given(data=st.data())
def test_damaged_bodies_raise_nothing_else(reader, data):
    body = bytearray(BODIES[reader])
    for _ in range(data.draw(st.integers(1, 3))):
        place = data.draw(st.integers(0, len(body) - 1))
        body[place] = data.draw(st.sampled_from([0, 1, 0x7F, 0x80, 0xFF]) | st.integers(0, 255))
    try:
        sheet = reader(bytes(body), text_columns=["id"], max_cells=1000)
    except CallerError:
        return
    assert sheet.values.shape == (len(sheet.texts["id"]), len(sheet.names))
    assert np.isfinite(sheet.values).all()


@settings(deadline=None)
@given(st.binary(max_size=80))
def test_any_bytes_raise_nothing_else(body):
    for reader in BODIES:
        for start in (b"", b"\xff\xff\xff\xff", b"PAR1"):
            with pytest.raises(CallerError):
                reader(start + body, max_cells=1000)


@pytest.mark.parametrize("name", [ARROW, PARQUET])
def test_without_pyarrow(monkeypatch, name):
    plain_import = builtins.__import__

    def refuse(module, *rest):
        if module.partition(".")[0] == "pyarrow":
            raise ImportError(module)
        return plain_import(module, *rest)

    monkeypatch.delitem(sys.modules, "pyarrow")
    monkeypatch.setattr(builtins, "__import__", refuse)
    with pytest.raises(UnsupportedMediaType, match="the extra `arrow`"):
        TABLE_READERS[name](b"", max_cells=1)


def test_metadata_that_ends_too_early():
    with pytest.raises(Malformed, match="metadata"):
        arrow_table._batch_length(memoryview(b"\x10\x00\x00\x00"))


def test_one_reader_for_each_media_type():
    assert list(TABLE_READERS) == [CSV, ARROW, PARQUET]


def arrow_file(table, *, rows=None, **options):
    sink = io.BytesIO()
    with pa.ipc.new_file(sink, table.schema, options=pa.ipc.IpcWriteOptions(**options)) as writer:
        writer.write_table(table, max_chunksize=rows)
    return sink.getvalue()


def test_the_stream_inside_a_file_is_read():
    table = pa.table({"a": np.arange(1000.0), "b": np.arange(1000), "label": [f"s{k}" for k in range(1000)]})
    options = {"text_columns": ["label"], "max_cells": MANY}
    for rows in (None, 77):
        found = table_from_arrow(arrow_file(table, rows=rows), **options)
        wanted = table_from_arrow(stream(table), **options)
        assert np.array_equal(found.values, wanted.values)
        assert (found.names, found.texts) == (wanted.names, wanted.texts)
    with pytest.raises(InvalidValue, match="compressed"):
        table_from_arrow(arrow_file(table, compression="lz4"), **options)
    with pytest.raises(LimitExceeded):
        table_from_arrow(arrow_file(table), text_columns=["label"], max_cells=1999)


def test_damaged_files_are_refused():
    whole = arrow_file(pa.table({"a": np.arange(100.0)}))
    for cut in range(6, len(whole)):
        with pytest.raises(CallerError):
            table_from_arrow(whole[:cut], max_cells=MANY)
    for length in (-1, 0, 2**31 - 1, len(whole)):
        with pytest.raises(CallerError):
            table_from_arrow(whole[:-10] + length.to_bytes(4, "little", signed=True) + whole[-6:], max_cells=MANY)
