"""P12, P13, P16 and P17: whole requests to a running server, against the framework's own way and against nothing."""

import io
from contextlib import ExitStack, closing
from functools import partial
from urllib.parse import urlencode

import orjson
import pyarrow as pa

from benchmarks.books import LEVELS, MEASURES, Array, arithmetic, names, normals, table_of
from benchmarks.client import Connection, calling, per_second, request_of
from benchmarks.rows import Outcome, Pace, Row, at_least, at_most
from benchmarks.servers import rivals, tailrace
from benchmarks.timing import one_by_one, ratios, taking_turns

LARGE = (100_000, 20)
SMALL = (1000, 10)
CONNECTIONS = 4  # to a server of one or two processes
JSON = "application/json"
ARROW = "application/vnd.apache.arrow.stream"
DEFAULT_PATH = "/allocations"  # of the framework's own route
ONE = "expected_shortfall 0.99"
SIX = "VaR and ES at 3 levels"


def json_request(losses: Array, path: str, measures: list[dict[str, object]], **options: object) -> bytes:
    """Return an allocations request in JSON."""
    body = {
        "losses": {
            "kind": "scenarios",
            "sub_portfolios": [{"id": name} for name in names(losses.shape[1])],
            "values": losses,
        },
        "measures": measures,
        **options,
    }
    return request_of("POST", path, orjson.dumps(body, option=orjson.OPT_SERIALIZE_NUMPY), JSON)


def arrow_request(losses: Array, options: dict[str, object]) -> bytes:
    """Return an allocations request whose body is an Arrow IPC stream."""
    table = pa.table(dict(zip(names(losses.shape[1]), losses.T, strict=True)))
    body = io.BytesIO()
    with pa.ipc.new_stream(body, table.schema) as stream:
        stream.write_table(table)
    return request_of("POST", "/v1/allocations?" + urlencode(options, doseq=True), body.getvalue(), ARROW)
