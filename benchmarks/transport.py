"""P12, P13, P16 and P17: whole requests to a running server, against the framework's own way and against nothing."""

import io
from collections.abc import Mapping
from contextlib import ExitStack, closing
from itertools import chain
from statistics import quantiles
from urllib.parse import urlencode

import orjson
import pyarrow as pa

from benchmarks.books import LEVELS, Array, arithmetic, names, normals, table_of
from benchmarks.client import Connection, calling, latencies, per_second, request_of
from benchmarks.rows import Outcome, Pace, Row, at_least, at_most
from benchmarks.servers import rivals, tailrace
from benchmarks.timing import one_by_one, ratios, taking_turns

LARGE = (100_000, 20)
SMALL = (1000, 10)
CONNECTIONS = 8  # enough that neither of two processes is ever without a request
JSON = "application/json"
ARROW = "application/vnd.apache.arrow.stream"
KINDS = ("value_at_risk", "expected_shortfall")
DEFAULT_PATH = "/allocations"  # of the framework's own route
ONE = "expected_shortfall 0.99"
ONE_ASKED: list[dict[str, object]] = [{"kind": "expected_shortfall", "level": 0.99}]
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


def arrow_request(losses: Array, path: str, options: dict[str, object]) -> bytes:
    """Return a request whose body is an Arrow IPC stream and whose options are query parameters."""
    table = pa.table(dict(zip(names(losses.shape[1]), losses.T, strict=True)))
    body = io.BytesIO()
    with pa.ipc.new_stream(body, table.schema) as stream:
        stream.write_table(table)
    return request_of("POST", f"{path}?{urlencode(options, doseq=True)}", body.getvalue(), ARROW)


def _levels() -> list[dict[str, object]]:
    return [{"kind": kind, "level": level} for kind in KINDS for level in LEVELS]


def default_over_json(pace: Pace) -> Outcome:
    """Time the framework's default route over tailrace's, both with the same JSON and the same arithmetic."""
    losses = normals(*LARGE)
    with ExitStack() as stack:
        ours = stack.enter_context(closing(Connection(stack.enter_context(tailrace()))))
        other = stack.enter_context(closing(Connection(stack.enter_context(rivals()))))
        default = calling(other, json_request(losses, DEFAULT_PATH, _levels()))
        json = calling(ours, json_request(losses, "/v1/allocations", _levels()))
        same = [orjson.loads(answer())["allocations"] for answer in (default, json)]
        assert same[0] == same[1]
        return Outcome.of(one_by_one(default, json, pace.slow))


def arrow_over_core(pace: Pace) -> Outcome:
    """Time an Arrow request over the sum of a request that only drops the same bytes and of the full core."""
    losses = normals(*LARGE)
    table = table_of(losses)
    options: dict[str, object] = {"measure": KINDS, "level": LEVELS}
    with ExitStack() as stack:
        ours = stack.enter_context(closing(Connection(stack.enter_context(tailrace()))))
        other = stack.enter_context(closing(Connection(stack.enter_context(rivals()))))
        seconds = taking_turns(
            {
                "arrow": calling(ours, arrow_request(losses, "/v1/allocations", options)),
                "drop": calling(other, arrow_request(losses, "/drop", {})),
                "core": lambda: arithmetic(table, stand_alone=True),
            },
            pace.repeats,
        )
    least = [drop + core for drop, core in zip(seconds["drop"], seconds["core"], strict=True)]
    return Outcome.of(ratios(seconds["arrow"], least))


def arrow_over_ping(pace: Pace) -> Outcome:
    """Count Arrow requests a second over pings a second, on one connection."""
    losses = normals(*SMALL)
    one: dict[str, object] = {"measure": "expected_shortfall", "level": 0.99}
    asked: dict[str, dict[str, object]] = {
        ONE: {**one, "include_stand_alone": "false"},
        f"{ONE} with stand-alone figures": one,
        f"{SIX} with stand-alone figures": {"measure": KINDS, "level": LEVELS},
    }
    requests = {what: arrow_request(losses, "/v1/allocations", options) for what, options in asked.items()}
    ping = request_of("GET", "/ping")
    with tailrace() as ours, rivals() as other:
        bursts = _bursts(pace, {"ping": (other, ping), **{what: (ours, one) for what, one in requests.items()}})
    details = [_fastest(bursts[what], bursts["ping"], f"{what} / ping") for what in asked]
    return Outcome.of(_rates(bursts[ONE], bursts["ping"]), details)


def json_over_default(pace: Pace) -> Outcome:
    """Count JSON requests a second over those of the framework's default route, on one connection."""
    losses = normals(*SMALL)
    ours_asked, other_asked = (
        json_request(losses, path, ONE_ASKED, include_stand_alone=False) for path in ("/v1/allocations", DEFAULT_PATH)
    )
    with tailrace() as ours, rivals() as other:
        bursts = _bursts(pace, {"default": (other, other_asked), "json": (ours, ours_asked)})
    details = [_fastest(bursts["json"], bursts["default"], "JSON / default route")]
    return Outcome.of(_rates(bursts["json"], bursts["default"]), details)


def two_over_one(pace: Pace) -> Outcome:
    """Count JSON requests a second that two processes answer over those that one answers."""
    asked = json_request(normals(*SMALL), "/v1/allocations", ONE_ASKED, include_stand_alone=False)
    found = []
    with tailrace(workers=2) as two, tailrace() as one:
        for _ in range(pace.repeats):
            alone = per_second(one, asked, seconds=pace.seconds, connections=CONNECTIONS)
            found.append(per_second(two, asked, seconds=pace.seconds, connections=CONNECTIONS) / alone)
    return Outcome.of(found)


Bursts = list[list[float]]
"""Seconds that each request of each burst took."""


def _bursts(pace: Pace, requests: Mapping[str, tuple[int, bytes]]) -> dict[str, Bursts]:
    """Send each request to its port for a while, in turns."""
    found: dict[str, Bursts] = {what: [] for what in requests}
    for _ in range(pace.repeats):
        for what, (port, request) in requests.items():
            found[what].append(latencies(port, request, seconds=pace.seconds))
    return found


def _rates(above: Bursts, below: Bursts) -> list[float]:
    """Return the requests a second of one over those of another, burst by burst."""
    return [(len(over) / sum(over)) / (len(under) / sum(under)) for over, under in zip(above, below, strict=True)]


def _fastest(above: Bursts, below: Bursts, what: str) -> str:
    """Return the same ratio by the fastest tenth of all requests, which other jobs did not disturb."""
    over, under = (quantiles(chain.from_iterable(bursts), n=10)[0] for bursts in (above, below))
    return f"{what}: {under / over:.3g} by the fastest tenth ({over * 1e3:.2f} and {under * 1e3:.2f} ms)"


ROWS = (
    Row(
        "P12",
        f"default FastAPI route / JSON route, whole request, {SIX} with stand-alone figures, 100k × 20",
        at_least(5),
        at_least(3),
        default_over_json,
    ),
    Row(
        "P13",
        f"Arrow route / (receive and drop + full core), {SIX} with stand-alone figures, 100k × 20",
        at_most(1.3),
        at_most(2),
        arrow_over_core,
    ),
    Row(
        "P16",
        f"requests/s of an Arrow 1000 × 10 request ({ONE}, Euler, with errors) / of a FastAPI ping, 1 connection",
        at_least(0.5),
        at_least(0.3),
        arrow_over_ping,
    ),
    Row(
        "P17",
        f"requests/s of a JSON 1000 × 10 request ({ONE}, Euler, with errors) / on the default route, 1 connection",
        at_least(4.5),
        at_least(3),
        json_over_default,
    ),
    Row(
        "P17",
        f"requests/s of the same, 2 workers / 1 worker, {CONNECTIONS} connections",
        at_least(1.7),
        at_least(1.4),
        two_over_one,
    ),
)
