"""Shapley values of a measure over sub-portfolios: exact for few, by drawn orders of entry for many.

Shapley, A value for n-person games (1953); the game's worth is v(T) = rho(sum of L_i over T), v of nothing is 0.
Drawn orders: Castro, Gomez and Tejada, Computers & Operations Research 36 (2009) 1726-1730, each order
taken with its reverse.
"""

from collections.abc import Callable
from dataclasses import dataclass
from itertools import pairwise
from math import factorial

import numpy as np

from service.risk.figures import figure_of
from service.risk.frame import Frame
from service.risk.measures import RiskMeasure
from service.risk.quantiles import Array

MOST_EXACT = 12  # sub-portfolios whose every subset is looked at
EVALUATIONS = 4096  # of the measure, over all drawn orders: as many as the largest exact case takes
PIECES = 4  # of the work, so that it can use several threads
LEAST_PAIRS = 8
MOST_PAIRS = 128


@dataclass(frozen=True, slots=True)
class ShapleyValues:
    """Shapley values of d sub-portfolios.

    Attributes
    ----------
    values : ndarray of shape (d,)
    influence : ndarray of shape (d, n)
        In scenario order.
    orders : ndarray of shape (pairs, d) or None
        The increments of each drawn pair of orders; None where all orders were taken.
    """

    values: Array
    influence: Array
    orders: Array | None


def shapley_values(frame: Frame, measure: RiskMeasure, *, seed: int) -> ShapleyValues:
    """Return the Shapley values of the sub-portfolios of `frame`.

    Parameters
    ----------
    frame : Frame
    measure : RiskMeasure
    seed : int
        Of the orders drawn for more than `MOST_EXACT` sub-portfolios.
    """
    if len(frame.table) <= MOST_EXACT:
        return _exact(frame, measure)
    return _drawn(frame, measure, seed)


def _exact(frame: Frame, measure: RiskMeasure) -> ShapleyValues:
    """Go through all subsets T: one with i counts (|T|-1)!(d-|T|)!/d! for i, one without less |T|!(d-|T|-1)!/d!."""
    losses = np.ascontiguousarray(frame.table.losses.T)
    count, scenarios = losses.shape
    everyone = (1 << count) - 1

    def part(subsets: range) -> tuple[Array, Array]:
        values, influence = np.zeros(count), np.zeros((count, scenarios))
        for subset in subsets:
            frame.effort.checkpoint((subset - subsets.start) / len(subsets))
            inside = np.array([bool(subset >> i & 1) for i in range(count)])
            loss = frame.totals if subset == everyone else losses[inside].sum(axis=0)
            worth, moved = figure_of(frame, measure, loss)
            size = int(inside.sum())
            joined = factorial(size - 1) * factorial(count - size) / factorial(count)
            missed = factorial(size) * factorial(count - size - 1) / factorial(count) if size < count else 0.0
            weight = np.where(inside, joined, -missed)
            values += weight * worth
            _add(influence, weight, moved)
        return values, influence

    values, influence = _added(frame, part, _pieces(range(1, everyone + 1)))
    return ShapleyValues(values, influence, None)


def _drawn(frame: Frame, measure: RiskMeasure, seed: int) -> ShapleyValues:
    """Draw orders of entry and take each with its reverse."""
    losses = frame.table.losses
    scenarios, count = losses.shape
    pairs = int(np.clip(EVALUATIONS // (2 * count), LEAST_PAIRS, MOST_PAIRS))
    generator = np.random.Generator(np.random.Philox(seed))
    drawn = [generator.permutation(count) for _ in range(pairs)]
    everyone = figure_of(frame, measure, frame.totals)
    nobody = (0.0, np.zeros(scenarios))

    def part(numbers: range) -> tuple[Array, Array]:
        orders, influence = np.zeros((pairs, count)), np.zeros((count, scenarios))
        for pair in numbers:
            for sequence in (drawn[pair], drawn[pair][::-1]):
                loss = np.zeros(scenarios)
                before = nobody
                for place, i in enumerate(sequence):
                    frame.effort.checkpoint((pair - numbers.start + place / count) / len(numbers))
                    loss += losses[:, i]
                    after = everyone if place == count - 1 else figure_of(frame, measure, loss)
                    orders[pair, i] += (after[0] - before[0]) / 2.0
                    influence[i] += (after[1] - before[1]) / (2.0 * pairs)
                    before = after
        return orders, influence

    orders, influence = _added(frame, part, _pieces(range(pairs)))
    return ShapleyValues(orders.mean(axis=0), influence, orders)


def _pieces(numbers: range) -> list[range]:
    """Return `numbers` in `PIECES` parts, whatever the number of threads, so that sums are the same bytes."""
    edges = np.linspace(0, len(numbers), PIECES + 1).astype(int).tolist()
    return [numbers[start:stop] for start, stop in pairwise(edges) if stop > start]


def _added(frame: Frame, part: Callable[[range], tuple[Array, Array]], pieces: list[range]) -> tuple[Array, Array]:
    """Return the sums of what each piece gives, in the order of the pieces."""
    (values, influence), *others = frame.effort.map(part, pieces)
    for more, further in others:
        values += more
        influence += further
    return values, influence


def _add(influence: Array, weight: Array, moved: Array) -> None:
    """Add weight (d,) times influence values (n,), most of which have one common value outside the tail."""
    touched = np.flatnonzero(moved != moved[0])
    influence += (weight * moved[0])[:, None]
    influence[:, touched] += np.outer(weight, moved[touched] - moved[0])
