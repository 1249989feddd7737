"""An answer as an Arrow IPC stream: the columns of the CSV, texts as strings and numbers as float64."""

from typing import Protocol

from service.errors import Fault, NotAcceptable
from service.representations.table import Table


class Tabular(Protocol):
    """An answer that offers a flat view of itself."""

    def table(self) -> Table: ...


def arrow_bytes(answer: Tabular) -> bytes:
    """Return the answer's table as one record batch; nulls stay null, zero has no sign.

    Raises
    ------
    NotAcceptable
        Where the optional package that writes it is not installed.
    """
    try:
        import pyarrow as pa
    except ImportError:
        detail = "Arrow needs the package pyarrow: install tailrace with its extra `arrow`. CSV and JSON need nothing."
        raise NotAcceptable(detail, faults=[Fault(detail=detail, code=NotAcceptable.code)]) from None
    table = answer.table()
    arrays, fields = [], []
    for number, column in enumerate(table.columns):
        cells = [row[number] for row in table.rows]
        metadata = None if column.unit is None else {"unit": column.unit}
        if column.kind == "number":
            numbers = [None if cell is None else float(str(cell)) + 0.0 for cell in cells]
            arrays.append(pa.array(numbers, type=pa.float64()))
            fields.append(pa.field(column.name, pa.float64(), metadata=metadata))
        else:
            arrays.append(pa.array(cells, type=pa.string()))
            fields.append(pa.field(column.name, pa.string(), metadata=metadata))
    schema = pa.schema(fields)
    sink = pa.BufferOutputStream()
    with pa.ipc.new_stream(sink, schema) as writer:
        writer.write_batch(pa.record_batch(arrays, schema=schema))
    return sink.getvalue().to_pybytes()
