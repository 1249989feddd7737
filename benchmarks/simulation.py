"""P5 – P10, P23, P24: simulation against raw random numbers and a plain script; streams; what one more deal changes."""

import hashlib
import subprocess
import sys
from collections.abc import Callable, Iterable
from dataclasses import dataclass
from functools import partial
from pathlib import Path

import numpy as np
from numpy.random import PCG64DXSM, Generator
from scipy import special

from benchmarks.books import COVERAGE, normals, table_of
from benchmarks.memory import LEVEL
from benchmarks.models import CASES, LAWS, SHAPE, Array, Case, columns, plan, script
from benchmarks.rows import Outcome, Pace, Row, Span, at_least, at_most
from benchmarks.timing import one_by_one, ratios, taking_turns
from service.executors import Work
from service.risk import figures
from service.risk.allocation import Case as Split
from service.risk.allocation import euler
from service.risk.effort import Effort
from service.risk.factors import ModelScratch
from service.risk.frame import Frame
from service.risk.increments import base_of, increments_of
from service.risk.measures import ExpectedShortfall, RiskMeasure, ValueAtRisk
from service.risk.score_tables import ScoreTable
from service.risk.scores import NormalScores
from service.risk.simulation import Plan, simulated
from service.risk.streaming import streamed
from service.risk.streams import BLOCK

SHORT = 10 * BLOCK
FACTORS = 50
WIDE = (524_288, 100)
LONG = (3_276_800, 100)
QUICK_REPEATS = 3
BOOK = (100_000, 50)
ROOT = Path(__file__).parent.parent
TAIL: tuple[RiskMeasure, ...] = (
    ExpectedShortfall(kind="expected_shortfall", level=LEVEL),
    ValueAtRisk(kind="value_at_risk", level=LEVEL),
)


def blocks(made: Plan, effort: Effort) -> None:
    """Simulate block after block and keep none, each worker into memory of its own."""
    workers = effort.threads

    def work(worker: int) -> None:
        scratch, out = ModelScratch(), np.empty((made.block_size, made.columns))
        for number in range(worker, made.blocks, workers):
            part = made.part(number)
            made.losses(number, scratch, out=out[: part.stop - part.start])

    effort.map(work, range(workers))


def over_raw_normals(pace: Pace, *, case: Case) -> Outcome:
    """Time the simulation on one thread over as many independent normals."""
    made = plan(case, FACTORS, SHORT)
    generator, out = Generator(PCG64DXSM(1)), np.empty((BLOCK, FACTORS))

    def raw() -> None:
        for _ in range(made.blocks):
            generator.standard_normal(out=out)

    return Outcome.of(one_by_one(lambda: blocks(made, Work(1)), raw, 3 * pace.repeats))


def script_over_simulation(pace: Pace, *, case: Case) -> Outcome:
    """Time the plain script over the simulation on two threads."""
    made = plan(case, FACTORS, SHORT)
    blocks(made, Work(2))
    repeats = min(pace.repeats, QUICK_REPEATS) if case == "student_t, gamma" else pace.repeats
    return Outcome.of(
        one_by_one(lambda: script(case, FACTORS, SHORT), lambda: blocks(made, Work(2)), repeats, warm=False)
    )


def one_thread_over_two(pace: Pace) -> Outcome:
    """Time one thread over two."""
    made = plan("gaussian, gamma", FACTORS, 4 * SHORT)
    return Outcome.of(one_by_one(lambda: blocks(made, Work(1)), lambda: blocks(made, Work(2)), pace.repeats))


def _euler_of_a_stream(made: Plan, effort: Effort, *, stand_alone: bool = False) -> Frame:
    frame = streamed(made, columns(made.columns), (), TAIL, effort, stand_alone=stand_alone)
    for measure in TAIL:
        figures.total(frame, measure, COVERAGE)
        euler(Split(frame=frame, measure=measure, coverage=COVERAGE))
    return frame


def stream_over_simulation(pace: Pace) -> Outcome:
    """Time a streamed simulation with contributions over the simulation alone."""
    made = plan("gaussian, gamma", WIDE[1], WIDE[0])
    return Outcome.of(
        one_by_one(
            lambda: _euler_of_a_stream(made, Work(2)),
            lambda: blocks(made, Work(2)),
            min(pace.repeats, QUICK_REPEATS),
            warm=False,
        )
    )


def memory_over_tail(_pace: Pace) -> Outcome:
    """Divide the peak memory of a streamed simulation by the bytes of the rows in the tail."""
    scenarios, count = LONG
    command = [sys.executable, "-m", "benchmarks.memory", str(scenarios), str(count)]
    taken = int(subprocess.run(command, check=True, capture_output=True, cwd=ROOT).stdout)  # noqa: S603  # our own module
    tail = (1.0 - LEVEL) * scenarios * count * 8
    detail = f"{taken / 2**20:.0f} MiB, of them {8 * scenarios / 2**20:.0f} of totals; value at risk keeps 1.9 tails"
    return Outcome.of([taken / tail], [detail])


@dataclass(frozen=True, slots=True)
class Backwards:
    """Does the last piece first."""

    threads: int = 3

    def map(self, function: Callable[..., object], pieces: Iterable[object]) -> list[object]:
        """Return the results in the order of the pieces."""
        return [function(piece) for piece in reversed(list(pieces))][::-1]

    def checkpoint(self, fraction: float = 0.0) -> None:
        """Do nothing."""


def distinct_results(_pace: Pace) -> Outcome:
    """Count the different results of several threads and orders."""
    made = plan("student_t, gamma", 20, 50 * BLOCK + 1000)
    found = set()
    for effort in (Work(1), Work(2), Work(3), Backwards()):
        frame = _euler_of_a_stream(made, effort, stand_alone=True)
        digest = hashlib.sha256(frame.totals.tobytes() + frame.expected.tobytes())
        for measure in TAIL:
            contributions = euler(Split(frame=frame, measure=measure, coverage=COVERAGE)).figures
            alone = figures.stand_alone(frame, measure, COVERAGE)
            for part in (contributions, alone):
                digest.update(part.values.tobytes() + part.standard_errors.tobytes())
        digest.update(simulated(made, effort).tobytes())
        found.add(digest.hexdigest())
    return Outcome.of([float(len(found))])


def error_of_tables(pace: Pace) -> Outcome:
    """Return the largest relative error of the tables of the marginals used here, over ±8 normal scores."""
    scores = np.random.default_rng(2).uniform(-8.0, 8.0, 2000 * pace.repeats)
    exact = {
        "lognormal": np.exp(scores),
        "gamma": np.where(
            scores < 0.0,
            special.gammaincinv(SHAPE, special.ndtr(scores)),
            special.gammainccinv(SHAPE, special.ndtr(-scores)),
        ),
    }
    errors = [
        float(np.max(np.abs(ScoreTable.of(law, NormalScores()).values(scores) / exact[name] - 1.0)))
        for name, law in LAWS.items()
    ]
    return Outcome.of([max(errors)])


def _plain_increment(losses: Array, deal: Array) -> list[float]:
    """Return what a deal adds to both measures, as a script that recomputes everything finds it."""
    found = []
    for table in (losses, np.column_stack([losses, deal])):
        total = table.sum(axis=1)
        quantile = np.quantile(total, LEVEL, method="inverted_cdf")
        tail = total >= quantile
        table[tail].mean(axis=0)  # the contributions
        found.append((quantile, total[tail].mean()))
    return [after - before for before, after in zip(*found, strict=True)]


def _judged(frame: Frame, deals: Iterable[Array]) -> None:
    bases = [base_of(frame, measure) for measure in TAIL]
    Work(2).map(lambda deal: increments_of(frame, bases, deal, COVERAGE), deals)


def _deals(count: int) -> list[Array]:
    return list(np.random.default_rng(3).standard_normal((count, BOOK[0])))


def _framed() -> tuple[Array, Frame]:
    losses = normals(*BOOK)
    frame = Frame.of(table_of(losses), (), TAIL, Work(2), stand_alone=False)
    _judged(frame, _deals(1))
    return losses, frame


def script_over_increments(pace: Pace) -> Outcome:
    """Time the plain script over one candidate of a batch against a framed book, with errors."""
    losses, frame = _framed()
    deals = _deals(32)
    plainly = taking_turns(
        {"script": lambda: _plain_increment(losses, deals[0]), "batch": lambda: _judged(frame, deals)}, pace.repeats
    )
    return Outcome.of([one * len(deals) for one in ratios(plainly["script"], plainly["batch"])])


def increment_over_read(pace: Pace) -> Outcome:
    """Time one candidate with two measures over one read of its column and of the totals."""
    _, frame = _framed()
    [deal] = _deals(1)
    bases = [base_of(frame, measure) for measure in TAIL]

    def read() -> None:
        np.add.reduce(deal)
        np.add.reduce(frame.totals)

    def judge() -> None:
        increments_of(frame, bases, deal, COVERAGE)

    return Outcome.of(one_by_one(judge, read, 10 * pace.repeats))


def batch_over_one(pace: Pace) -> Outcome:
    """Time a batch of 200 candidates over 200 times the marginal cost of one."""
    _, frame = _framed()
    deals = _deals(200)
    seconds = taking_turns(
        {str(count): partial(_judged, frame, deals[:count]) for count in (1, 9, 200)}, min(pace.repeats, QUICK_REPEATS)
    )
    figures_ = [
        whole / (200.0 * (nine - one) / 8.0)
        for one, nine, whole in zip(seconds["1"], seconds["9"], seconds["200"], strict=True)
    ]
    return Outcome.of(figures_)


def _of_cases(*limits: tuple[float, float]) -> Iterable[tuple[Case, float, float]]:
    return ((case, *limit) for case, limit in zip(CASES, limits, strict=True))


ROWS = (
    *(
        Row(
            "P5",
            f"simulation, {case}, {FACTORS} factors, 1 thread / raw normals",
            at_most(target),
            at_most(bound),
            partial(over_raw_normals, case=case),
        )
        for case, target, bound in _of_cases((2.2, 4), (2.8, 5), (4, 8))
    ),
    *(
        Row(
            "P6",
            f"plain SciPy script / simulation, {case}, 2 threads",
            at_least(target),
            at_least(bound),
            partial(script_over_simulation, case=case),
        )
        for case, target, bound in _of_cases((8, 3), (30, 10), (30, 10))
    ),
    Row("P7", "simulation on 1 thread / on 2, idle machine", at_least(1.8), Span(), one_thread_over_two),
    Row(
        "P8",
        f"streamed simulation with Euler tail / simulation alone, {WIDE[0] // 1000}k × {WIDE[1]}",
        at_most(1.1),
        at_most(1.3),
        stream_over_simulation,
    ),
    Row(
        "P9",
        f"peak memory of a stream / bytes of the tail rows, {LONG[0] / 1e6:.1f}M × {LONG[1]} at 99 %",
        at_most(2.5),
        at_most(6),
        memory_over_tail,
    ),
    Row("P10", "distinct results of 1, 2, 3 threads and last block first", at_most(1), at_most(1), distinct_results),
    Row("P23", "error of marginal tables over ±8 normal scores", at_most(1e-10), at_most(1e-9), error_of_tables),
    Row(
        "P24",
        f"plain script / one candidate of a batch, two measures with errors, {BOOK[0] // 1000}k × {BOOK[1]}",
        at_least(20),
        at_least(10),
        script_over_increments,
    ),
    Row(
        "P24",
        "one candidate, two measures with errors / one read of its column and the totals",
        at_most(3),
        at_most(3),
        increment_over_read,
    ),
    Row("P24", "200 candidates / 200 times the marginal cost of one", at_most(1.1), at_most(1.5), batch_over_one),
)
