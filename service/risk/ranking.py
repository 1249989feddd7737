"""The scenarios in the order of their total, worst first, tied scenarios known."""

from dataclasses import dataclass, replace

import numpy as np

from service.risk.loss_table import Scenarios
from service.risk.quantiles import Array, Indices, Ordered, Ties

BLOCK_CELLS = 1 << 15  # of rows looked at together: they and their absolute values stay in the cache
MOST_PARTIAL = 0.5  # share of scenarios from which on all are ordered
SAMPLED = 16  # every so manieth value tells about where the worst begin
SPREADS = 4.0  # standard deviations of a count in that sample by which it looks deeper


@dataclass(frozen=True, slots=True)
class Ranking:
    """One distribution in order.

    Attributes
    ----------
    ordered : Ordered
        A single distribution of m kept positions.
    order : ndarray of int of shape (m,)
        Scenario number of each position.
    ties : Ties
    tolerance : ndarray of shape (m,)
        Difference up to which each position and the next are tied.
    """

    ordered: Ordered
    order: Indices
    ties: Ties
    tolerance: Array

    def cut(self, depth: float) -> "Ranking":
        """Return the ranking of at least the worst `depth` of all scenarios, no atom cut in two."""
        least = int(np.ceil(depth * self.ordered.scenarios)) + 1
        kept = self.order.size
        if self.ordered.probabilities is not None or self.ordered.clusters is not None or least >= kept:
            return self
        ends = np.append(self.ties.starts[1:], kept)
        size = int(ends[self.ties.atom[least - 1]])
        if size == kept:
            return self
        ordered = Ordered.of(
            self.ordered.values[:, :size],
            scenarios=self.ordered.scenarios,
            probabilities=None,
            sampled=self.ordered.sampled,
            points=self.ordered.points,
        )
        tolerance = self.tolerance[:size]
        return Ranking(ordered, self.order[:size], Ties.of(ordered, tolerance=tolerance), tolerance)


def _worst_first(values: Array, least: float) -> Indices:
    """Return the numbers of all values not below `least`, worst first; equal ones in scenario order."""
    kept = np.flatnonzero(values >= least)
    return np.asarray(kept[np.argsort(-values[kept], kind="stable")])


def worst(values: Array, depth: float) -> Indices:
    """Return the numbers of at least the worst `depth` of `values` (n,), worst first."""
    count = int(np.ceil(depth * values.size)) + 1
    if count >= MOST_PARTIAL * values.size:
        return np.argsort(-values, kind="stable")
    kept = _few(values, count)
    few = values if kept is None else values[kept]
    least = np.partition(few, few.size - count)[few.size - count]
    if kept is None:
        return _worst_first(values, least)
    inside = few >= least
    kept, few = kept[inside], few[inside]
    return np.asarray(kept[np.argsort(-few, kind="stable")])


def _few(values: Array, count: int) -> Indices | None:
    """Return the numbers of few values, the worst `count` among them; None where a sample does not tell them."""
    sample = values[::SAMPLED]
    rank = count / SAMPLED
    rank = int(rank + SPREADS * rank**0.5) + 1
    if rank > MOST_PARTIAL * sample.size:
        return None
    kept = np.flatnonzero(values >= np.partition(sample, sample.size - rank)[sample.size - rank])
    return kept if count <= kept.size <= MOST_PARTIAL * values.size else None


def tie_tolerance(rows: Array) -> Array:
    """Return how far the sum of each of the `rows` (m, d) may be from another's and still be one atom with it.

    Sums of d floats that differ by their rounding alone differ by at most d 2^-52 times the larger sum of
    absolute losses; a single column has no rounding. A bound for all rows in one would let a few huge losses tie
    all others.
    """
    count, columns = rows.shape
    if columns == 1:
        return np.zeros(count)
    height = max(1, BLOCK_CELLS // columns)
    sizes = np.empty(count)
    for start in range(0, count, height):
        part = slice(start, start + height)
        np.add.reduce(np.abs(rows[part]), axis=1, out=sizes[part])
    return columns * 2.0**-52 * sizes


def ranked(totals: Array, table: Scenarios, *, depth: float) -> Ranking:
    """Return the ranking of `totals` (n,), the row sums of `table`.

    Parameters
    ----------
    totals : ndarray of shape (n,)
    table : Scenarios
    depth : float
        Share of the worst scenarios needed; all are kept unless the table is plain, and always enough that
        no atom is cut.
    """
    order = worst(totals, depth if table.plain else 1.0)
    while True:
        if order.size == totals.size:
            tolerance = tie_tolerance(table.losses)[order]
        else:
            tolerance = tie_tolerance(table.losses.take(order, axis=0))
        edge = totals[order[-1]] - tolerance.max()
        if order.size == totals.size or np.count_nonzero(totals >= edge) == order.size:
            return ranking_of(totals[order], order, table, tolerance)
        order = _worst_first(totals, edge)


def ranked_with(totals: Array, table: Scenarios, loss: Array, *, depth: float) -> tuple[Ranking, Array]:
    """Return the ranking of a table enlarged by one column, and its rows in that order.

    The totals are those that a request with the enlarged table would have, to the last bit.

    Parameters
    ----------
    totals : ndarray of shape (n,)
        Row sums of `table`.
    table : Scenarios
    loss : ndarray of shape (n,)
        The further column.
    depth : float
        As in `ranked`.

    Returns
    -------
    Ranking
    ndarray of shape (m, d + 1)
    """
    together = totals + loss
    order = worst(together, depth if table.plain else 1.0)
    while True:
        rows = np.column_stack([table.losses.take(order, axis=0), loss[order]])
        tolerance = tie_tolerance(rows)
        edge = together[order[-1]] - tolerance.max()
        if order.size == together.size or np.count_nonzero(together >= edge) == order.size:
            break
        order = _worst_first(together, edge)
    exact = np.add.reduce(rows, axis=1)
    again = np.argsort(-exact, kind="stable")
    return ranking_of(exact[again], order[again], table, tolerance[again]), rows[again]


def ranking_of(values: Array, order: Indices, table: Scenarios, tolerance: Array) -> Ranking:
    """Return the ranking of scenarios that are in order already; tied ones get one value, that of their middle."""
    ordered = Ordered.of(
        values[None, :],
        scenarios=table.scenarios,
        probabilities=None if table.probabilities is None else table.probabilities[order][None, :],
        sampled=table.sampled,
        points=table.points,
        clusters=None if table.clusters is None else table.clusters[order][None, :],
    )
    ties = Ties.of(ordered, tolerance=tolerance)
    if not ties.none:
        ends = np.append(ties.starts[1:], values.size)
        ordered = replace(ordered, values=ties.spread(values[(ties.starts + ends) // 2])[None, :])
    return Ranking(ordered, order, ties, tolerance)
