"""The scenarios in the order of their total, worst first, tied scenarios known."""

from dataclasses import dataclass

import numpy as np

from service.risk.quantiles import Array, Indices, Ordered, Ties

MOST_PARTIAL = 0.5  # share of scenarios from which on all are ordered


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
    tolerance : float
        Difference up to which neighbours are tied.
    """

    ordered: Ordered
    order: Indices
    ties: Ties
    tolerance: float

    def cut(self, depth: float) -> "Ranking":
        """Return the ranking of at least the worst `depth` of all scenarios, no atom cut in two."""
        least = int(np.ceil(depth * self.ordered.scenarios)) + 1
        kept = self.order.size
        if self.ordered.probabilities is not None or least >= kept:
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
        )
        return Ranking(ordered, self.order[:size], Ties.of(ordered, tolerance=self.tolerance), self.tolerance)


def _worst_first(values: Array, least: float) -> Indices:
    """Return the numbers of all values not below `least`, worst first; equal ones in scenario order."""
    kept = np.flatnonzero(values >= least)
    return np.asarray(kept[np.argsort(-values[kept], kind="stable")])


def worst(values: Array, depth: float) -> Indices:
    """Return the numbers of at least the worst `depth` of `values` (n,), worst first."""
    count = int(np.ceil(depth * values.size)) + 1
    if count >= MOST_PARTIAL * values.size:
        return np.argsort(-values, kind="stable")
    return _worst_first(values, np.partition(values, values.size - count)[values.size - count])


def tie_tolerance(columns: int, largest: float) -> float:
    """Return the difference below which two totals are one atom.

    Sums of d floats that differ by their rounding alone differ by at most d 2^-52 times the largest sum of
    absolute losses; a single column has no rounding.
    """
    return columns * 2.0**-52 * largest if columns > 1 else 0.0


def ranked(totals: Array, losses: Array, *, probabilities: Array | None, sampled: bool, depth: float) -> Ranking:
    """Return the ranking of `totals` (n,), the row sums of `losses` (n, d).

    Parameters
    ----------
    depth : float
        Share of the worst scenarios needed; all are kept with unequal probabilities, and always enough that
        no atom is cut.
    """
    columns = losses.shape[1]
    order = worst(totals, 1.0 if probabilities is not None else depth)
    tolerance = 0.0
    while columns > 1:
        rows = losses if order.size == totals.size else losses.take(order, axis=0)
        tolerance = tie_tolerance(columns, float(np.max(np.add.reduce(np.abs(rows), axis=1))))
        edge = totals[order[-1]] - tolerance
        if order.size == totals.size or np.count_nonzero(totals >= edge) == order.size:
            break
        order = _worst_first(totals, edge)
    ordered = Ordered.of(
        totals[order][None, :],
        scenarios=totals.size,
        probabilities=None if probabilities is None else probabilities[order][None, :],
        sampled=sampled,
    )
    return Ranking(ordered, order, Ties.of(ordered, tolerance=tolerance), tolerance)
