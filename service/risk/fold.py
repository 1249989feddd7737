"""One pass over a loss table in blocks that fit the cache: totals, column sums and the tail of each column.

Whatever depends on the order of summation is kept per block and folded in block order, so that the
result is the same bytes for any number of threads.
"""

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from service.risk.effort import Effort
from service.risk.quantiles import Array, Indices

BLOCK_BYTES = 1 << 19  # of one block of rows: half of a usual second-level cache
SAMPLE = 4096  # rows whose quantile foretells the threshold of a column's tail
SAMPLE_SPREADS = 4.0  # binomial standard deviations of slack on that threshold
LEAST_ROWS = 16  # of a block


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
class _Survivors:
    """Losses above their column's threshold, from one worker's blocks."""

    columns: Indices
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
    thresholds = None if tail is None else _thresholds(losses, tail)
    totals = np.empty(scenarios)
    sums = np.empty((len(edges), count))
    crossed = np.empty((len(edges), count)) if products else None
    workers = min(effort.threads, len(edges))

    def work(worker: int) -> _Survivors | None:
        sieve = None if thresholds is None else _Sieve(thresholds, rows)
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
        return None if sieve is None else sieve.survivors()

    survivors = effort.map(work, range(workers))
    tails = None
    if tail is not None and thresholds is not None:
        tails = _tails(losses, thresholds, [part for part in survivors if part is not None], tail, effort)
    return Fold(totals, sums.sum(axis=0), None if crossed is None else crossed.sum(axis=0), tails)


def _thresholds(losses: Array, tail: int) -> Array:
    """Return per column a value that a little more than `tail` losses ought to exceed."""
    scenarios = losses.shape[0]
    sample = losses[:: max(1, scenarios // SAMPLE)].T.copy()
    size = sample.shape[1]
    share = min(1.0, tail / scenarios)
    rank = int(size * share + SAMPLE_SPREADS * np.sqrt(size * share * (1.0 - share)) + 2.0)
    place = max(0, size - rank)
    return np.asarray(np.partition(sample, place, axis=1)[:, place])


class _Sieve:
    """Collects the losses above their column's threshold; its scratch is made once and used for every block."""

    def __init__(self, thresholds: Array, rows: int) -> None:
        self._wall = np.tile(thresholds, (rows, 1))
        self._column = np.tile(np.arange(thresholds.size, dtype=np.uint16), rows)
        self._above = np.empty(self._wall.shape, dtype=bool)
        self._columns: list[NDArray[np.uint16]] = []
        self._losses: list[Array] = []
        self._count = thresholds.size

    def add(self, block: Array) -> None:
        """Take what exceeds the thresholds."""
        rows = block.shape[0]
        np.greater(block, self._wall[:rows], out=self._above[:rows])
        found = np.flatnonzero(self._above[:rows])
        self._columns.append(self._column.take(found))
        self._losses.append(block.reshape(-1).take(found))

    def survivors(self) -> _Survivors:
        """Return them column by column."""
        columns = np.concatenate(self._columns)
        order = np.argsort(columns, kind="stable")
        starts = np.concatenate([[0], np.cumsum(np.bincount(columns, minlength=self._count))])
        return _Survivors(starts, np.concatenate(self._losses).take(order))


def _tails(losses: Array, thresholds: Array, parts: list[_Survivors], tail: int, effort: Effort) -> Array:
    """Return the `tail` largest losses of each column, descending, shape (d, tail)."""
    count = losses.shape[1]
    tails = np.empty((count, tail))

    def work(columns: Indices) -> None:
        effort.checkpoint()
        for j in columns:
            found = np.concatenate([part.losses[part.columns[j] : part.columns[j + 1]] for part in parts])
            missing = tail - found.size
            if missing > 0:
                found = _completed(losses[:, j], found, float(thresholds[j]), missing)
            found.sort()
            tails[j] = found[: -tail - 1 : -1]

    pieces = np.array_split(np.arange(count), min(count, 4 * effort.threads))
    effort.map(work, pieces)
    return tails


def _completed(column: Array, found: Array, threshold: float, missing: int) -> Array:
    """Return the tail of a column of which fewer losses than needed exceed the threshold.

    All others are at or below it, so if the threshold itself is common enough it is what is missing
    (columns that are mostly zero); else the column is partitioned.
    """
    if np.count_nonzero(column == threshold) >= missing:
        return np.concatenate([found, np.full(missing, threshold)])
    place = column.size - found.size - missing
    return np.partition(column, place)[place:]
