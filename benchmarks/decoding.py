"""P14 and P15: what a table costs to decode, in JSON and in base64."""

import base64

import numpy as np
import orjson

from benchmarks.books import Array, arithmetic, normals, table_of
from benchmarks.rows import Outcome, Pace, Row, at_most
from benchmarks.timing import one_by_one
from service.payloads import rows_from_json, unpack

SIZE = (100_000, 20)


def pieces_over_whole(pace: Pace) -> Outcome:
    """Time the decoding of rows of JSON numbers in pieces over a parse of the whole and one conversion."""
    losses = normals(*SIZE)
    text = orjson.dumps(losses, option=orjson.OPT_SERIALIZE_NUMPY)
    assert np.array_equal(rows_from_json(text, max_cells=losses.size), losses)
    return Outcome.of(
        one_by_one(
            lambda: rows_from_json(text, max_cells=losses.size), lambda: np.asarray(orjson.loads(text)), pace.repeats
        )
    )


def packed_over_core(pace: Pace) -> Outcome:
    """Time the decoding of base64 over the full core."""
    losses = normals(*SIZE)
    rows, columns = losses.shape
    table, text = table_of(losses), base64.b64encode(losses.tobytes())

    def decode() -> Array:
        return unpack(text, dtype="float64", rows=rows, columns=columns, max_cells=losses.size)

    assert np.array_equal(decode(), losses)
    return Outcome.of(one_by_one(decode, lambda: arithmetic(table, stand_alone=True), pace.repeats))


ROWS = (
    Row(
        "P14",
        "JSON rows decoded in pieces / orjson whole and np.asarray, 100k × 20",
        at_most(0.5),
        at_most(0.8),
        pieces_over_whole,
    ),
    Row("P15", "base64 field decoded / full core, 100k × 20", at_most(0.2), at_most(1), packed_over_core),
)
