"""One pass over a loss table in blocks that fit the cache: totals, column sums and the tail of each column.

Whatever depends on the order of summation is kept per block and folded in block order, so that the
result is the same bytes for any number of threads.
"""

from collections.abc import Sequence
from dataclasses import dataclass
from itertools import chain
from typing import Protocol

import numpy as np
from numpy.typing import NDArray

from service.risk.effort import Effort
from service.risk.quantiles import Array, Indices

BLOCK_BYTES = 1 << 19  # of one block of rows: half of a usual second-level cache
SAMPLE = 4096  # rows whose quantile foretells the threshold of a column's tail
SAMPLE_SPREADS = 4.0  # binomial standard deviations of slack on that threshold
LEAST_ROWS = 16  # of a block
BATCH = 1 << 16  # losses that are brought into the order of their columns at a time: they stay in the cache


@dataclass(frozen=True, slots=True)
class Fold:
    """What one pass over an (n, d) table leaves.

    Attributes
    ----------
    totals : ndarray of shape (n,)
        Row sums; each the same bits wherever its row stands.
    sums : ndarray of shape (d,)
        Column sums (of probability times loss where probabilities were given).
    products : ndarray of shape (d,) or None
        Sums of loss times total, if asked for.
    tails : ndarray of shape (d, k) or None
        The k largest losses of each column, descending, if asked for.
    """

    totals: Array
    sums: Array
    products: Array | None
    tails: Array | None


@dataclass(frozen=True, slots=True)
class Survivors:
    """Losses above their column's threshold, from some blocks.

    Attributes
    ----------
    starts : list of int, length d + 1
        Where the losses of each column begin, and where those of the last one end.
    losses : ndarray of shape (k,)
    """

    starts: list[int]
    losses: Array


def fold(
    losses: Array,
    effort: Effort,
    *,
    probabilities: Array | None = None,
    products: bool = False,
    tail: int | None = None,
) -> Fold:
    """Return the fold of `losses`.

    Parameters
    ----------
    losses : ndarray of shape (n, d)
        C order.
    effort : Effort
    probabilities : ndarray of shape (n,), optional
        Weights of the column sums.
    products : bool
        Whether to sum loss times total.
    tail : int, optional
        How many of the largest losses of each column to keep; None for no tails.
    """
    scenarios, count = losses.shape
    rows = max(LEAST_ROWS, BLOCK_BYTES // (8 * count))
    edges = range(0, scenarios, rows)
    step = max(1, scenarios // SAMPLE)
    thresholds = None if tail is None else sample_thresholds(losses[::step], tail, scenarios)
    totals = np.empty(scenarios)
    sums = np.empty((len(edges), count))
    crossed = np.empty((len(edges), count)) if products else None
    workers = min(effort.threads, len(edges))

    def work(worker: int) -> list[Survivors]:
        sieve = None if thresholds is None else Sieve(thresholds, rows)
        for number in range(worker, len(edges), workers):
            effort.checkpoint(number / len(edges))
            part = slice(edges[number], edges[number] + rows)
            block = losses[part]
            total = np.add.reduce(block, axis=1, out=totals[part])
            if probabilities is None:
                np.add.reduce(block, axis=0, out=sums[number])
            else:
                np.matmul(probabilities[part], block, out=sums[number])
            if crossed is not None:
                np.matmul(total, block, out=crossed[number])
            if sieve is not None:
                sieve.add(block)
        return [] if sieve is None else sieve.survivors()

    parts = effort.map(work, range(workers))
    tails = None
    if tail is not None and thresholds is not None:
        survivors = list(chain.from_iterable(parts))
        tails = completed_tails(thresholds, survivors, tail, effort, HeldColumns(losses))
    return Fold(totals, sums.sum(axis=0), None if crossed is None else crossed.sum(axis=0), tails)


def sample_thresholds(sample: Array, tail: int, scenarios: int) -> Array:
    """Return per column a value that a little more than `tail` of all losses ought to exceed.

    Parameters
    ----------
    sample : ndarray of shape (m, d)
        Some of the scenarios.
    tail : int
    scenarios : int
        Number of all scenarios.
    """
    columns = sample.T.copy()
    size = columns.shape[1]
    share = min(1.0, tail / scenarios)
    rank = int(size * share + SAMPLE_SPREADS * np.sqrt(size * share * (1.0 - share)) + 2.0)
    place = max(0, size - rank)
    return np.asarray(np.partition(columns, place, axis=1)[:, place])


class Columns(Protocol):
    """What the tail of a column may still need once the pass is over."""

    def equal(self, columns: Indices, values: Array) -> Indices:
        """Return how often each of some columns takes its value, shape (k,)."""

    def column(self, column: int) -> Array:
        """Return all losses of one column, shape (n,)."""


@dataclass(frozen=True, slots=True)
class HeldColumns:
    """The columns of a table in memory."""

    losses: Array

    def equal(self, columns: Indices, values: Array) -> Indices:
        """Return how often each of some columns takes its value, shape (k,)."""
        counts = np.zeros(columns.size, dtype=np.intp)
        height = max(LEAST_ROWS, BLOCK_BYTES // (8 * self.losses.shape[1]))
        for start in range(0, self.losses.shape[0], height):
            counts += np.count_nonzero(self.losses[start : start + height, columns] == values, axis=0)
        return counts

    def column(self, column: int) -> Array:
        """Return all losses of one column, shape (n,)."""
        return self.losses[:, column]


class Sieve:
    """Collects the losses above their column's threshold; its scratch is made once and used for every block."""

    def __init__(self, thresholds: Array, rows: int) -> None:
        self._wall = np.tile(thresholds, (rows, 1))
        numbers = np.arange(thresholds.size, dtype=np.min_scalar_type(thresholds.size))  # small ones are faster
        self._column = np.tile(numbers, rows)
        self._above = np.empty(self._wall.shape, dtype=bool)
        self._columns: list[NDArray[np.unsignedinteger]] = []
        self._losses: list[Array] = []
        self._waiting = 0
        self._count = thresholds.size
        self._survivors: list[Survivors] = []

    def add(self, block: Array) -> None:
        """Take what exceeds the thresholds."""
        rows = block.shape[0]
        np.greater(block, self._wall[:rows], out=self._above[:rows])
        found = np.flatnonzero(self._above[:rows])
        self._columns.append(self._column.take(found))
        self._losses.append(block.reshape(-1).take(found))
        self._waiting += found.size
        if self._waiting >= BATCH:
            self._arrange()

    def survivors(self) -> list[Survivors]:
        """Return them, in batches."""
        if self._waiting or not self._survivors:
            self._arrange()
        return self._survivors

    def _arrange(self) -> None:
        """Bring what waits into the order of its columns."""
        columns = np.concatenate(self._columns)
        order = np.argsort(columns, kind="stable")
        starts = np.cumsum(np.bincount(columns, minlength=self._count)).tolist()
        self._survivors.append(Survivors([0, *starts], np.concatenate(self._losses).take(order)))
        self._columns.clear()
        self._losses.clear()
        self._waiting = 0


def completed_tails(
    thresholds: Array, parts: Sequence[Survivors], tail: int, effort: Effort, columns: Columns
) -> Array:
    """Return the `tail` largest losses of each column, descending, shape (d, tail).

    Where fewer losses than needed exceed the threshold, all others are at or below it; so if the threshold
    itself is common enough it is what is missing (columns that are mostly zero), else the column is partitioned.
    """
    count = thresholds.size
    sizes = np.sum([np.diff(part.starts) for part in parts], axis=0)
    short = np.flatnonzero(sizes < tail)
    common = dict(zip(short.tolist(), columns.equal(short, thresholds[short]) if short.size else (), strict=True))
    partitioned = {
        j: np.partition(columns.column(j), -tail)[-tail:] for j, times in common.items() if times < tail - sizes[j]
    }
    tails = np.empty((count, tail))

    def work(piece: Indices) -> None:
        effort.checkpoint()
        for j in piece.tolist():
            found = partitioned.get(j)
            if found is None:
                found = np.concatenate([part.losses[part.starts[j] : part.starts[j + 1]] for part in parts])
            if found.size < tail:
                found = np.concatenate([found, np.full(tail - found.size, thresholds[j])])
            found.sort()
            tails[j] = found[: -tail - 1 : -1]

    pieces = min(count, 4 * effort.threads, 1 + count * tail // BATCH)
    effort.map(work, np.array_split(np.arange(count), pieces))
    return tails
