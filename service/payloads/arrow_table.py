"""An Arrow IPC stream or file, read to numbers and texts."""

import struct
from collections.abc import Collection
from typing import Any

from service.errors import Fault
from service.payloads.arrow_columns import malformed, pyarrow, reading, require_types, sheet_of
from service.payloads.cells import require_cells
from service.payloads.sheet import PART, Sheet, invalid_cell, select

END_OF_STREAM = b"\xff\xff\xff\xff\x00\x00\x00\x00"
"""The marker behind the last message of a stream ("IPC Streaming Format" of the Arrow columnar format)."""

MAGIC = b"ARROW1"
"""First and last bytes of a file ("IPC File Format"): magic, padding, a stream, footer, its length, magic."""
START = 8
"""Bytes before the stream in a file."""
END = 4 + len(MAGIC)
"""Bytes behind the footer."""

# Positions of fields in the tables Message and RecordBatch of the format's Message.fbs.
_MESSAGE_HEADER = 2
_BATCH_LENGTH = 0
_BATCH_COMPRESSION = 3

_WHAT = "an Arrow IPC stream or file"
_PLACE = Fault(detail="", code="", part=PART)


def table_from_arrow(
    body: bytes | memoryview,
    *,
    text_columns: Collection[str] = (),
    ignore: Collection[str] = (),
    max_cells: int,
) -> Sheet:
    """Read a table from an Arrow IPC stream, or from the stream inside an Arrow IPC file.

    Parameters
    ----------
    body : bytes or memoryview
        The stream up to its end-of-stream marker, with uncompressed buffers.
    text_columns, ignore : collection of str
        Headers of the columns that are read as text, and of those that are dropped unread.
    max_cells : int
        Limit on rows times columns of numbers.

    Returns
    -------
    Sheet
        float32, float16 and whole numbers are widened.

    Raises
    ------
    InvalidValue
        With the column, and the row if there is one, for other types, missing and non-finite values, and
        whole numbers that float64 does not hold.
    Malformed
        If the stream is damaged or cut.
    LimitExceeded
        If there are more than `max_cells` cells of numbers.
    UnsupportedMediaType
        If pyarrow is not installed.

    Notes
    -----
    Every message is looked at before a batch is read. A batch with compressed buffers is refused, because a
    small body could then take any amount of memory; the sign is that its metadata (a flatbuffer, which
    pyarrow has verified) names a compression. A stream may end without a marker by its specification, but
    over HTTP that cannot be told from one that was cut between two batches, so the marker is required.
    """
    pa = pyarrow()
    with reading(_WHAT):
        buffer = pa.py_buffer(_stream_of(memoryview(body)))
        aligned = pa.ipc.Alignment.DataTypeSpecific
        stream = pa.ipc.open_stream(buffer, options=pa.ipc.IpcReadOptions(ensure_alignment=aligned))
        schema = stream.schema
        selection = select(schema.names, text_columns=text_columns, ignore=ignore)
        require_types(schema, selection)
        rows = _count_rows(buffer)
        if not rows:
            raise invalid_cell("the table has no rows")
        require_cells(rows * len(selection.numbers), max_cells=max_cells, fault=_PLACE)
        wanted = sorted(selection.numbers + selection.texts)
        if len(wanted) < len(schema.names):
            options = pa.ipc.IpcReadOptions(included_fields=wanted, ensure_alignment=aligned)
            stream = pa.ipc.open_stream(buffer, options=options)
        table = stream.read_all()
        return sheet_of(iter([table]), selection, rows=rows)


def _stream_of(body: memoryview) -> memoryview:
    """Return the stream inside a file, and anything else as it is."""
    if bytes(body[: len(MAGIC)]) != MAGIC:
        return body
    if len(body) < START + END or bytes(body[-len(MAGIC) :]) != MAGIC:
        raise malformed("the file is cut: it does not end as it begins")
    footer = struct.unpack_from("<i", body, len(body) - END)[0]
    end = len(body) - END - footer
    if footer < 0 or end < START:
        raise malformed("the file says that its footer is longer than the file")
    return body[START:end]


def _count_rows(buffer: Any) -> int:
    """Return the rows that the batches of a whole and uncompressed stream say they have."""
    pa = pyarrow()
    source = pa.BufferReader(buffer)
    messages = pa.ipc.MessageReader.open_stream(source)
    rows = 0
    while True:
        start = source.tell()
        try:
            message = messages.read_next_message()
        except StopIteration:
            break
        if message.type == "dictionary":
            raise invalid_cell("dictionary-encoded columns are not read: send them plain, or leave them out")
        if message.type == "record batch":
            rows += _batch_length(memoryview(message.metadata))
    if bytes(buffer.slice(start)) != END_OF_STREAM:
        raise malformed("the stream is cut: it does not end with the end-of-stream marker")
    return rows


def _batch_length(metadata: memoryview) -> int:
    """Return the rows of a record batch, whose buffers must not be compressed."""
    try:
        message = _follow(metadata, 0)
        batch = _follow(metadata, _field(metadata, message, _MESSAGE_HEADER))
        compressed = _field(metadata, batch, _BATCH_COMPRESSION)
        place = _field(metadata, batch, _BATCH_LENGTH)
        length: int = struct.unpack_from("<q", metadata, place)[0] if place else 0
    except struct.error as error:
        raise malformed("the metadata of a batch cannot be read") from error
    if compressed:
        raise invalid_cell("the batches are compressed: send uncompressed buffers or Parquet")
    if length < 0:
        raise malformed("a batch says that it has fewer than no rows")
    return length


def _follow(data: memoryview, place: int) -> int:
    """Return where the table stands to which the offset at `place` leads."""
    return place + int(struct.unpack_from("<I", data, place)[0])


def _field(data: memoryview, table: int, position: int) -> int:
    """Return where a field of a flatbuffer's table stands, or 0 if the table does without it.

    A table begins with the distance back to its vtable, which holds its own size, the size of the table
    and, in two bytes each, the distance of every field from the start of the table.
    """
    vtable = table - struct.unpack_from("<i", data, table)[0]
    size = struct.unpack_from("<H", data, vtable)[0]
    entry = 4 + 2 * position
    distance = struct.unpack_from("<H", data, vtable + entry)[0] if entry < size else 0
    return table + int(distance) if distance else 0
