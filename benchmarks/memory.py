"""``python -m benchmarks.memory SCENARIOS COUNT``: the peak memory of one streamed simulation, in a process of its own.

Prints the bytes that were taken beyond what the process had before.
"""

import sys
from pathlib import Path

from threadpoolctl import threadpool_limits

from benchmarks.models import columns, plan
from service.executors import Work, keep_freed_memory
from service.risk import figures
from service.risk.allocation import Case, euler
from service.risk.measures import ExpectedShortfall, ValueAtRisk
from service.risk.streaming import streamed

LEVEL = 0.99
COVERAGE = 0.95


def _peak() -> int:
    """Return the most memory held so far; what `resource` says includes the process that started this one."""
    lines = Path("/proc/self/status").read_text().splitlines()
    return 1024 * next(int(line.split()[1]) for line in lines if line.startswith("VmHWM"))


def main() -> None:
    """Simulate, and compute both measures with their contributions."""
    scenarios, count = (int(text) for text in sys.argv[1:3])
    keep_freed_memory()
    made = plan("gaussian, lognormal", count, scenarios)
    measures = (
        ExpectedShortfall(kind="expected_shortfall", level=LEVEL),
        ValueAtRisk(kind="value_at_risk", level=LEVEL),
    )
    before = _peak()
    with threadpool_limits(1, "blas"):
        frame = streamed(made, columns(count), (), measures, Work(2), stand_alone=False)
        for measure in measures:
            figures.total(frame, measure, COVERAGE)
            euler(Case(frame=frame, measure=measure, coverage=COVERAGE))
    print(_peak() - before)


if __name__ == "__main__":
    main()
