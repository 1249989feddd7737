"""P1 – P4: the arithmetic on a table in memory, against one read of it, a plain script and untied losses."""

from functools import partial

import numpy as np
import pandas as pd

from benchmarks import script
from benchmarks.books import TIED, arithmetic, normals, table_of
from benchmarks.rows import Outcome, Pace, Row, at_least, at_most
from benchmarks.timing import one_by_one, processor_seconds, ratios, taking_turns
from service.executors import Work
from service.risk.fold import fold

LARGE = (100_000, 500)
TIED_SIZE = (100_000, 100)
SLOW_CELLS = 10_000_000  # from which on the script takes seconds


def over_one_read(pace: Pace, *, stand_alone: bool) -> Outcome:
    """Time the core over one read of its table on one thread.

    The covariances of the columns with the total cost what the sums of products add to a pass.
    """
    losses = normals(*LARGE)
    table = table_of(losses)
    works = {
        "read": lambda: np.add.reduce(losses.reshape(-1)),
        "core": lambda: arithmetic(table, stand_alone=stand_alone),
        "fold": lambda: fold(losses, Work(2)),
        "products": lambda: fold(losses, Work(2), products=True),
    }
    seconds = taking_turns(works, pace.repeats)
    covariances = [over - under for over, under in zip(seconds["products"], seconds["fold"], strict=True)]
    core = [sum(both) for both in zip(seconds["core"], covariances, strict=True)]
    least = processor_seconds(works, pace.repeats)
    share = (least["core"] + least["products"] - least["fold"]) / least["read"]
    return Outcome.of(ratios(core, seconds["read"]), [_by_processor(share, "core / one read")])


def against_a_script(pace: Pace, *, size: tuple[int, int]) -> Outcome:
    """Time the plain script over the full core."""
    losses = normals(*size)
    table, sheet = table_of(losses), pd.DataFrame(losses)
    works = {"script": lambda: script.figures(sheet), "core": lambda: arithmetic(table, stand_alone=True)}
    works["core"]()
    slow = losses.size > SLOW_CELLS
    seconds = taking_turns(works, pace.slow if slow else pace.repeats, warm=not slow)
    least = processor_seconds(works, 1 if slow else pace.repeats)
    details = [_by_processor(least["script"] / least["core"], f"script / core, {_size(size)}")]
    return Outcome.of(ratios(seconds["script"], seconds["core"]), details)


def _by_processor(ratio: float, what: str) -> str:
    return f"{ratio:.3g} by processor time, that of all threads together ({what})"


def tied_over_untied(pace: Pace, *, kind: str) -> Outcome:
    """Time the full core on losses of which many are the same number, over that on normals."""
    tied, untied = (table_of(made(*TIED_SIZE)) for made in (TIED[kind], normals))
    return Outcome.of(
        one_by_one(
            lambda: arithmetic(tied, stand_alone=True), lambda: arithmetic(untied, stand_alone=True), pace.repeats
        )
    )


def _size(size: tuple[int, int]) -> str:
    return f"{size[0] // 1000}k × {size[1]}"


ROWS = (
    Row(
        "P1",
        f"Euler-only core, VaR and ES at 3 levels with errors, means, covariances / one read, {_size(LARGE)}",
        at_most(3),
        at_most(6),
        partial(over_one_read, stand_alone=False),
    ),
    Row(
        "P2",
        f"full core, also each column alone / one read, {_size(LARGE)}",
        at_most(10),
        at_most(20),
        partial(over_one_read, stand_alone=True),
    ),
    *(
        Row(
            "P3",
            f"plain pandas script, without errors / full core, {_size(size)}",
            at_least(target),
            at_least(10),
            partial(against_a_script, size=size),
        )
        for size, target in ((LARGE, 20), ((100_000, 20), 15), ((10_000, 100), 20))
    ),
    *(
        Row(
            "P4",
            f"full core on {kind} / on normals, {_size(TIED_SIZE)}",
            at_most(1.6),
            at_most(2.5),
            partial(tied_over_untied, kind=kind),
        )
        for kind in TIED
    ),
)
