"""``python -m benchmarks``: ratios, each against its target, as a table.

Times of other machines say nothing, so every row is a ratio of two works that took turns on this one.
"""

import argparse
import json
import os
import platform
import sys
import traceback
from dataclasses import asdict
from pathlib import Path
from time import perf_counter

import numpy as np
from threadpoolctl import threadpool_limits

from benchmarks import core, coverage, decoding, simulation, transport
from benchmarks.rows import Outcome, Pace, Row
from service.executors import keep_freed_memory

ROWS = (*core.ROWS, *transport.ROWS, *decoding.ROWS, *coverage.ROWS, *simulation.ROWS)

FULL = Pace(repeats=5, slow=5, runs=2000, seconds=1.0)
QUICK = Pace(repeats=3, slow=1, runs=100, seconds=0.25)


def main() -> int:
    """Run the rows asked for; the exit code tells whether all of them ran, not how they came out."""
    options = _options()
    keep_freed_memory()
    rows = sorted(
        (row for row in ROWS if options.only is None or row.number in options.only),
        key=lambda row: int(row.number.removeprefix("P")),
    )
    began = perf_counter()
    print(f"{os.cpu_count()} CPUs, Python {platform.python_version()}, NumPy {np.__version__}, {_load()}\n")
    print("| # | measured | target | bound | figure (least – most) | verdict | load |")
    print("| --- | --- | --- | --- | --- | --- | --- |")
    found, details, crashed = [], [], 0
    for row in rows:
        load = os.getloadavg()[0]
        try:
            with threadpool_limits(1, "blas"):
                outcome = row.measure(QUICK if options.quick else FULL)
        except Exception:  # noqa: BLE001  # the other rows are still worth their time
            crashed += 1
            details.append(f"{row.number}, {row.what}:\n{traceback.format_exc()}")
            print(f"| {row.number} | {row.what} | {row.target} | {row.bound} | | crashed | {load:.1f} |", flush=True)
            continue
        print(_line(row, outcome, load), flush=True)
        details += [f"{row.number}: {line}" for line in outcome.details]
        found.append(_record(row, outcome, load))
    print("", *details, "", f"{perf_counter() - began:.0f} s, {_load()}", sep="\n")
    if options.json:
        options.json.write_text(json.dumps(found, indent=1) + "\n")
    return 1 if crashed else 0


def _options() -> argparse.Namespace:
    parser = argparse.ArgumentParser(prog="python -m benchmarks", description=__doc__.splitlines()[0])
    parser.add_argument("--quick", action="store_true", help="fewer repeats and runs: under a minute, less sure")
    parser.add_argument("--only", type=lambda text: text.split(","), metavar="P1,P2", help="these rows alone")
    parser.add_argument("--json", type=Path, metavar="FILE", help="write the figures to a file as well")
    options = parser.parse_args()
    unknown = set(options.only or ()) - {row.number for row in ROWS}
    if unknown:
        parser.error(f"no such rows: {', '.join(sorted(unknown))}")
    return options


def _load() -> str:
    return "load average " + " ".join(f"{load:.1f}" for load in os.getloadavg())


def _line(row: Row, outcome: Outcome, load: float) -> str:
    figure = f"{outcome.figure:.3g} ({outcome.least:.3g} – {outcome.most:.3g})"
    verdict = row.verdict(outcome.figure)
    return f"| {row.number} | {row.what} | {row.target} | {row.bound} | {figure} | {verdict} | {load:.1f} |"


def _record(row: Row, outcome: Outcome, load: float) -> dict[str, object]:
    return {
        "number": row.number,
        "what": row.what,
        "target": str(row.target),
        "bound": str(row.bound),
        "verdict": row.verdict(outcome.figure),
        "load": load,
        **asdict(outcome),
    }


if __name__ == "__main__":
    sys.exit(main())
