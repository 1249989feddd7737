"""P22: how often intervals hold the truth, by simulation from laws that are known, and whether parts add up."""

import multiprocessing
from collections import defaultdict
from collections.abc import Mapping
from concurrent.futures import ProcessPoolExecutor
from dataclasses import dataclass
from functools import lru_cache, partial
from math import inf
from zlib import crc32

import numpy as np
from threadpoolctl import threadpool_limits

from benchmarks.books import table_of
from benchmarks.laws import LAWS, Array, Law
from benchmarks.rows import Outcome, Pace, Row, Span, at_least, at_most
from service.risk import figures
from service.risk.allocation import Case, euler
from service.risk.effort import Alone
from service.risk.frame import Frame
from service.risk.measures import ExpectedShortfall, StandardDeviation, ValueAtRisk
from service.risk.uncertainty import Estimates

SCENARIOS, LEVEL, TAIL = 2000, 0.95, 100  # TAIL of the scenarios lie beyond LEVEL
NOMINAL = 0.95
GOOD = Span(0.93, 0.97)
OFTEN = 0.95  # share of runs with an interval from which on its coverage counts
PROCESSES = 2
DOUBTS = frozenset({"no_error", "thin_tail", "few_scenarios"})


@dataclass(slots=True)
class Tally:
    """How often the intervals of one figure (or of its parts) held the truth, where they were given without doubt."""

    runs: int
    given: Array
    hits: Array

    def add(self, estimates: Estimates, truth: Array) -> None:
        """Count one run; a missing interval, or one with a note that few scenarios carry it, claims nothing."""
        given = np.isfinite(estimates.lower) & (not estimates.remarks & DOUBTS)
        self.runs += 1
        self.given = self.given + given
        self.hits = self.hits + (given & (estimates.lower <= truth) & (truth <= estimates.upper))

    @property
    def coverage(self) -> float:
        """The share of intervals; of several parts that which is farthest from what it ought to be."""
        shares = self.hits / np.maximum(self.given, 1)
        return float(shares[np.argmax(np.abs(shares - NOMINAL))])

    @property
    def share(self) -> float:
        """The share of runs that gave an interval."""
        return float(self.given.min() / self.runs)

    def __str__(self) -> str:
        """Return the coverage, and how often there was an interval if not always."""
        return f"{self.coverage:.3f}" + (f" (given in {self.share:.0%})" if self.share < 1.0 else "")


@dataclass(frozen=True, slots=True)
class Simulated:
    """What the runs of one law gave: the tally of each figure, and the largest gap between parts and total."""

    law: Law
    tallies: Mapping[str, Tally]
    gap: float

    def judged(self) -> list[float]:
        """Return the coverages that count.

        Figures that are seldom given without doubt do not, for those that are given are no fair sample; and an
        atom's quantile, whose interval holds it more often than it says, can only be held too seldom.
        """
        return [
            min(tally.coverage, NOMINAL) if self.law.discrete and name.startswith("VaR") else tally.coverage
            for name, tally in self.tallies.items()
            if tally.share >= OFTEN
        ]


def _simulated(name: str, runs: int) -> Simulated:
    law = next(law for law in LAWS if law.name == name)
    truth = law.truth(LEVEL)
    rng = np.random.default_rng(crc32(name.encode()))
    var = ValueAtRisk(kind="value_at_risk", level=LEVEL)
    shortfall = ExpectedShortfall(kind="expected_shortfall", level=LEVEL)
    sd = StandardDeviation(kind="standard_deviation")
    true_parts = ((var, "VaR", truth.value_at_risk), (shortfall, "ES", truth.expected_shortfall))
    tallies: dict[str, Tally] = defaultdict(lambda: Tally(0, np.zeros(1), np.zeros(1)))
    gap = 0.0
    for _ in range(runs):
        table = table_of(law.draw(rng, SCENARIOS))
        frame = Frame.of(table, (), (var, shortfall, sd), Alone(), stand_alone=False)
        for measure, title, parts in true_parts:
            total = figures.total(frame, measure, NOMINAL)
            split = euler(Case(frame=frame, measure=measure, coverage=NOMINAL)).figures
            tallies[title].add(total, parts.sum(keepdims=True))
            tallies[f"{title} contributions"].add(split, parts)
            gap = max(gap, abs(float(split.values.sum() - total.values[0])) / float(np.abs(split.values).sum()))
        tallies["expected loss"].add(figures.expected_loss(frame, NOMINAL), np.array([truth.mean]))
        tallies["standard deviation"].add(figures.total(frame, sd, NOMINAL), np.array([truth.sd]))
    return Simulated(law, dict(tallies), gap)


def _one_thread() -> None:
    threadpool_limits(1, "blas")


@lru_cache(maxsize=1)
def _all(runs: int) -> list[Simulated]:
    names = [law.name for law in LAWS]
    fresh = multiprocessing.get_context("spawn")
    with ProcessPoolExecutor(PROCESSES, mp_context=fresh, initializer=_one_thread) as pool:
        return list(pool.map(partial(_simulated, runs=runs), names))


def coverage(pace: Pace) -> Outcome:
    """Judge the coverage that is farthest from what it ought to be."""
    found = _all(pace.runs)
    figures_found = [share for one in found for share in one.judged()]
    worst = max(figures_found, key=lambda share: abs(share - NOMINAL))
    return Outcome(worst, min(figures_found), max(figures_found), figures_found, _table(found, pace.runs))


def gap(pace: Pace) -> Outcome:
    """Return the largest gap between the total and its parts, over the sum of the absolute parts."""
    gaps = [one.gap for one in _all(pace.runs)]
    return Outcome(max(gaps), min(gaps), max(gaps), gaps)


def _table(found: list[Simulated], runs: int) -> list[str]:
    titles = list(found[0].tallies)
    error = 2.0 * np.sqrt(NOMINAL * (1.0 - NOMINAL) / runs)
    rows = [[one.law.name, *map(str, one.tallies.values())] for one in found]
    head = (
        f"coverage of {NOMINAL:.0%} intervals, n = {SCENARIOS}, level {LEVEL}, k = {TAIL}, {runs} runs, "
        f"binomial error ± {error:.3f}; of contributions the worst"
    )
    return [head, *(" | ".join(row) for row in (["law", *titles], *rows))]


ROWS = (
    Row(
        "P22", f"coverage of {NOMINAL:.0%} intervals, the worst of all laws and figures", GOOD, at_least(0.9), coverage
    ),
    Row("P22", "gap between the total and its parts / sum of absolute parts", at_most(1e-12), at_most(inf), gap),
)
