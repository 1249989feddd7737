"""A simulation too large to be held: blocks stream through, and what stays is the totals and the tails.

The table that a `Frame` sees gives any rows asked for: those of the tail are kept, others are simulated again.
"""

from collections.abc import Callable, Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from service.risk.effort import Effort
from service.risk.fold import Sieve, completed_tails, sample_thresholds
from service.risk.frame import Frame, column_tail, deepest
from service.risk.loss_table import Group, SubPortfolio, check_magnitude, group_losses
from service.risk.measures import RiskMeasure
from service.risk.quantiles import Array, Indices
from service.risk.ranking import ranked, worst
from service.risk.simulation import Plan, Workbench

SAMPLED = 64  # one block in so many foretells the thresholds, and is then simulated once more
MOST_SAMPLED = 16  # such blocks


@dataclass(frozen=True, slots=True, eq=False)
class StreamedLosses:
    """Rows of an (n, d) table of which only some are held.

    Attributes
    ----------
    plan : Plan
    effort : Effort
    numbers : ndarray of int of shape (k,)
        Scenarios that are held, ascending.
    places : ndarray of int of shape (k,)
        Where each stands in the columns.
    columns : ndarray of shape (d + G, k)
        Their losses, groups at the end.
    """

    plan: Plan
    effort: Effort
    numbers: Indices
    places: Indices
    columns: Array

    @classmethod
    def of(
        cls, plan: Plan, effort: Effort, order: Indices, parts: "Sequence[_Kept]", groups: Sequence[Group]
    ) -> "StreamedLosses":
        """Hold the scenarios `order` (k,), in that order, and let the workers' own rows go.

        What no worker kept is simulated once more.
        """
        places = np.argsort(order)
        numbers = order[places]
        held = cls(plan, effort, numbers, places, np.empty((plan.columns + len(groups), order.size)))
        found = np.zeros(order.size, dtype=bool)
        for part in parts:
            while part.rows:
                effort.checkpoint()
                held._put(part.numbers.pop(), part.rows.pop(), found)
        missing = np.flatnonzero(~found[places])
        if missing.size:
            held._put(numbers[missing], _extended(held._again(numbers[missing]), groups), found)
        return held

    def _put(self, numbers: Indices, rows: Array, found: NDArray[np.bool_]) -> None:
        """Put rows (m, d + G) of scenarios (m,) into their places, if they have one."""
        near = np.minimum(np.searchsorted(self.numbers, numbers), self.numbers.size - 1)
        wanted = self.numbers[near] == numbers
        places = self.places[near[wanted]]
        found[places] = True
        self.columns[:, places] = rows[wanted].T

    @property
    def shape(self) -> tuple[int, int]:
        """Scenarios and sub-portfolios."""
        return self.plan.scenarios, self.plan.columns

    def __getitem__(self, number: int) -> Array:
        """Return the losses of one scenario, shape (d,)."""
        return self.take(np.array([number]))[0]

    def take(self, numbers: Indices, axis: int = 0) -> Array:  # noqa: ARG002  # as NumPy's
        """Return the losses of scenarios (m,), shape (m, d), C order; those not held are simulated again."""
        near = np.minimum(np.searchsorted(self.numbers, numbers), self.numbers.size - 1)
        held = self.numbers[near] == numbers
        out = np.empty((numbers.size, self.plan.columns))
        places = self.places[near[held]]
        for column, losses in enumerate(self.columns[: self.plan.columns]):
            out[held, column] = losses[places]
        if not held.all():
            out[~held] = self._again(numbers[~held])
        return out

    def _again(self, numbers: Indices) -> Array:
        """Simulate the blocks that hold the scenarios once more."""
        out = np.empty((numbers.size, self.plan.columns))
        blocks = numbers // self.plan.block_size
        bench = Workbench()

        def work(block: int) -> None:
            self.effort.checkpoint()
            losses = self.plan.losses(block, bench.scratch, pause=self.effort.checkpoint)
            inside = np.flatnonzero(blocks == block)
            out[inside] = losses[numbers[inside] - self.plan.part(block).start] + 0.0

        self.effort.map(work, np.unique(blocks).tolist())
        return out


@dataclass(frozen=True, slots=True, eq=False)
class StreamedTable:
    """What a `Frame` asks of a loss table, for a simulation that is not held."""

    losses: StreamedLosses
    sub_portfolios: tuple[SubPortfolio, ...]
    probabilities: None = None
    clusters: None = None
    scenario_ids: None = None
    sampled: bool = True
    points: bool = False
    plain: bool = True

    @property
    def scenarios(self) -> int:
        """Number n of scenarios."""
        return self.losses.shape[0]

    def __len__(self) -> int:
        """Return the number d of sub-portfolios."""
        return self.losses.shape[1]


@dataclass(slots=True)
class _Kept:
    """What one worker keeps of its blocks."""

    numbers: list[Indices]
    rows: list[Array]
    sieve: Sieve | None


def streamed(
    plan: Plan,
    sub_portfolios: tuple[SubPortfolio, ...],
    groups: Sequence[Group],
    measures: Sequence[RiskMeasure],
    effort: Effort,
    *,
    stand_alone: bool,
) -> Frame:
    """Return the frame of a simulation in one pass over its blocks.

    Parameters
    ----------
    plan : Plan
    sub_portfolios : tuple of SubPortfolio
    groups : sequence of Group
    measures : sequence of RiskMeasure
        All of a tail (see `Frame`).
    effort : Effort
    stand_alone : bool
        Whether the tails of the columns are needed.

    Raises
    ------
    NotDefined
        Where losses add up to more than can be squared.
    """
    scenarios, columns = plan.scenarios, plan.columns + len(groups)
    depth = deepest(measures, scenarios, contributions=True)
    tail = column_tail(measures, scenarios) if stand_alone else None
    bench = Workbench()

    def made(number: int) -> Array:
        return _extended(plan.losses(number, bench.scratch, pause=effort.checkpoint), groups)

    def sampled(number: int) -> tuple[Array, Array | None]:
        block = made(number)
        return np.add.reduce(block[:, : plan.columns], axis=1), None if tail is None else block

    samples = effort.map(sampled, range(min(max(1, plan.blocks // SAMPLED), MOST_SAMPLED)))
    known = np.concatenate([total for total, _ in samples])[:, None]
    least = sample_thresholds(known, int(depth * scenarios) + 1, scenarios)[0]
    thresholds = None
    if tail is not None:
        rows = np.concatenate([block for _, block in samples if block is not None])
        thresholds = sample_thresholds(rows, tail, scenarios)
        del rows
    del samples
    totals = np.empty(scenarios)
    sums = np.empty((plan.blocks, columns))
    workers = min(effort.threads, plan.blocks)

    def work(worker: int) -> _Kept:
        kept = _Kept([], [], None if thresholds is None else Sieve(thresholds, plan.block_size))
        for number in range(worker, plan.blocks, workers):
            effort.checkpoint(number / plan.blocks)
            part = plan.part(number)
            block = made(number)
            total = np.add.reduce(block[:, : plan.columns], axis=1, out=totals[part])
            np.add.reduce(block, axis=0, out=sums[number])
            chosen = np.flatnonzero(total > least)
            kept.numbers.append(chosen + part.start)
            kept.rows.append(block[chosen])
            if kept.sieve is not None:
                kept.sieve.add(block)
        return kept

    parts = effort.map(work, range(workers))
    check_magnitude(totals)
    losses = StreamedLosses.of(plan, effort, worst(totals, depth), parts, groups)
    table = StreamedTable(losses, sub_portfolios)
    tails = None
    if tail is not None and thresholds is not None:
        found = [one for part in parts if part.sieve is not None for one in part.sieve.survivors()]
        tails = completed_tails(thresholds, found, tail, effort, _Again(plan, groups, effort))
    ranking = ranked(totals, table, depth=depth)
    frame = Frame(table, groups, effort, None, totals, sums.sum(axis=0) / scenarios, tails, ranking)
    if ranking.order.size == losses.numbers.size:
        frame.hold(losses.columns)
    else:  # ties reached further than what is held
        frame.hold(np.ascontiguousarray(_extended(losses.take(ranking.order), groups).T))
    return frame


def _extended(losses: Array, groups: Sequence[Group]) -> Array:
    """Return a block with its groups at the right and no negative zero, in fresh memory."""
    if not groups:
        return losses + 0.0
    return np.concatenate([losses, group_losses(losses, groups)], axis=1) + 0.0


@dataclass(frozen=True, slots=True)
class _Again:
    """The columns of a simulation, by simulating it once more."""

    plan: Plan
    groups: Sequence[Group]
    effort: Effort

    def equal(self, columns: Indices, values: Array) -> Indices:
        """Return how often each of some columns takes its value, shape (k,)."""

        def count(block: Array) -> Indices:
            return np.count_nonzero(block[:, columns] == values, axis=0)

        counts = self._mapped(count)
        return np.sum(counts, axis=0)

    def column(self, column: int) -> Array:
        """Return all losses of one column, shape (n,)."""
        return np.concatenate(self._mapped(lambda block: block[:, column].copy()))

    def _mapped(self, function: Callable[[Array], Any]) -> list[Any]:
        bench = Workbench()

        def work(number: int) -> Any:
            self.effort.checkpoint()
            losses = self.plan.losses(number, bench.scratch, pause=self.effort.checkpoint)
            return function(_extended(losses, self.groups))

        return self.effort.map(work, range(self.plan.blocks))
