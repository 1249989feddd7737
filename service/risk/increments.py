"""What one more loss changes: the measures with it and without it, errors paired, and how the others' parts move."""

from collections.abc import Sequence
from dataclasses import dataclass, field

import numpy as np

from service.risk.figures import Moved, bounds_of_difference, estimates, judged
from service.risk.frame import Frame
from service.risk.measures import ContributionWeights, RiskMeasure, full_influence, full_values
from service.risk.quantiles import Array, Indices, Ordered
from service.risk.ranking import Ranking, ranked_with
from service.risk.uncertainty import (
    Estimates,
    Influence,
    Sampling,
    Spread,
    lean_of_parts,
    leaning_estimates,
    spread,
    usual_lean,
)


@dataclass(frozen=True, slots=True, eq=False)
class Base:
    """A measure of the book as it is, made once for all candidates.

    Attributes
    ----------
    measure : RiskMeasure
    value : float
        Of the total.
    influence : ndarray of shape (n,)
        Of the total, in scenario order.
    order : ndarray of int of shape (m,)
        Scenarios whose influence is not that of the rest.
    rest : float
        Influence of the rest.
    contributions : ndarray of shape (d,)
        Euler contributions of the sub-portfolios.
    ordered : Ordered
        The total.
    """

    measure: RiskMeasure
    value: float
    influence: Array
    order: Indices
    rest: float
    contributions: Array
    ordered: Ordered

    @property
    def size(self) -> int:
        """Bytes that it takes, about."""
        held = (self.influence, self.order, self.contributions, self.ordered.values, self.ordered.upper)
        return sum(one.nbytes for one in held)


@dataclass(frozen=True, slots=True)
class Increment:
    """One measure with and without one candidate; each estimate has shape (1,).

    Attributes
    ----------
    total_with : Estimates
        The measure of the enlarged book.
    increment : Estimates
        With less without; its error is that of the difference on the same scenarios.
    contribution : Estimates
        Euler contribution of the candidate inside the enlarged book.
    stand_alone : Estimates
        The measure of the candidate alone.
    moved : ndarray of shape (d,)
        Euler contributions of the others inside the enlarged book.
    """

    total_with: Estimates
    increment: Estimates
    contribution: Estimates
    stand_alone: Estimates
    moved: Array

    @property
    def estimated(self) -> tuple[Estimates, Estimates, Estimates, Estimates]:
        """What has an error, in the order of the fields."""
        return self.total_with, self.increment, self.contribution, self.stand_alone


def base_of(frame: Frame, measure: RiskMeasure) -> Base:
    """Return what all candidates share."""
    ordered, order = frame.one(frame.totals, measure)
    influence = full_influence(measure, ordered)
    rest = float(influence.rest[0])
    values = np.full(frame.scenarios, rest)
    values[order] = influence.values[0]
    contributions = _parts(measure, frame.ranking(measure), frame)
    return Base(measure, float(full_values(measure, ordered)[0]), values, order, rest, contributions, ordered)


@dataclass(frozen=True, slots=True, eq=False)
class _Enlarged:
    """A book with a candidate, and the candidate alone, in order; measures that look equally deep share them."""

    frame: Frame
    loss: Array
    _ranked: dict[float, tuple[Ranking, Array]] = field(default_factory=dict)
    _alone: dict[float, Ordered] = field(default_factory=dict)

    def ranked(self, measure: RiskMeasure) -> tuple[Ranking, Array]:
        """Return the enlarged book as deep as `measure` looks, and its rows (m, d + 1) in that order."""
        depth = self.frame.depth(measure)
        if depth not in self._ranked:
            self._ranked[depth] = ranked_with(self.frame.totals, self.frame.table, self.loss, depth=depth)
        return self._ranked[depth]

    def alone(self, measure: RiskMeasure) -> Ordered:
        """Return the candidate alone as deep as `measure` looks."""
        depth = self.frame.depth(measure, contributions=False)
        if depth not in self._alone:
            self._alone[depth] = self.frame.one(self.loss, measure)[0]
        return self._alone[depth]


def increments_of(frame: Frame, bases: Sequence[Base], loss: Array, coverage: float) -> list[Increment]:
    """Return what a candidate changes in each measure.

    Parameters
    ----------
    frame : Frame
        The book; its scenarios are the candidate's.
    bases : sequence of Base
        One for each measure.
    loss : ndarray of shape (n,)
        The candidate's loss in scenario order.
    coverage : float
        Nominal coverage of the intervals.
    """
    enlarged = _Enlarged(frame, loss)
    return [_increment(enlarged, base, coverage) for base in bases]


def _increment(enlarged: _Enlarged, base: Base, coverage: float) -> Increment:
    """Return what the candidate changes in one measure."""
    measure, expected = base.measure, enlarged.frame.expected
    ranking, rows = enlarged.ranked(measure)
    ordered = ranking.ordered
    weights = measure.contribution_weights(ordered, ranking.ties, "auto")
    parts = weights.values @ rows
    if measure.above == "mean":
        parts -= np.append(expected[: parts.size - 1], ranking.ties.p @ rows[:, -1])
    change = full_values(measure, ordered) - base.value
    alone = estimates(measure, enlarged.alone(measure), coverage)
    if not ordered.sampled:
        whole = full_values(measure, ordered)
        total_with, increment, contribution = map(Estimates.exact, (whole, change, parts[-1:]))
        return Increment(total_with, increment, _noted(contribution, weights), alone, parts[:-1])
    moved = Moved.by(measure, ordered)
    of = _spread_of_difference(enlarged.frame, base, ranking, moved.influence)
    counts = measure.tail_of(ordered)
    tail = of.effective if counts is None else counts
    usual = leaning_estimates(change, of, usual_lean(of), coverage=coverage, tail_scenarios=tail)
    tied = measure.on_atom(base.ordered) | measure.on_atom(ordered)
    if tied.any():
        usual = usual.within(bounds_of_difference(measure, base.ordered, ordered, coverage), tied)
    return Increment(
        total_with=estimates(measure, ordered, coverage, lambda: moved),
        increment=judged(measure, usual),
        contribution=_contribution(measure, ranking, weights, parts[-1:], rows[:, -1:], moved, coverage),
        stand_alone=alone,
        moved=parts[:-1],
    )


def _spread_of_difference(frame: Frame, base: Base, ranking: Ranking, influence: Influence) -> Spread:
    """Return how the influence values of the enlarged total less those of the base spread."""
    enlarged = np.full(frame.scenarios, influence.rest[0])
    enlarged[ranking.order] = influence.values[0]
    rest = influence.rest - base.rest
    if not frame.table.plain or base.order.size + ranking.order.size >= frame.scenarios:
        return spread(Influence((enlarged - base.influence)[None, :], rest), frame.sampling)
    either = np.zeros(frame.scenarios, dtype=bool)
    either[base.order] = either[ranking.order] = True
    inside = np.flatnonzero(either)  # elsewhere all differ by the same
    return spread(Influence((enlarged[inside] - base.influence[inside])[None, :], rest), Sampling(frame.scenarios))


def _contribution(  # of one column, as the measure has weighted it
    measure: RiskMeasure,
    ranking: Ranking,
    weights: ContributionWeights,
    value: Array,
    column: Array,
    moved: Moved,
    coverage: float,
) -> Estimates:
    """Return the Euler contribution `value` (1,) of one column (m, 1) to the ranked total, with its error."""
    ordered = ranking.ordered
    influence = measure.contribution_influence(ordered, ranking.ties, column, weights)
    if measure.above == "mean":
        influence = Influence(influence.values - column.T, influence.rest)
    of = spread(influence, Sampling.of(ordered), beside=moved.influence)
    counts = measure.tail_of(ordered)
    tail = of.effective if counts is None else counts
    leans = lean_of_parts(of, float(moved.lean[0]))
    figures = judged(measure, leaning_estimates(value, of, leans, coverage=coverage, tail_scenarios=tail))
    return _noted(figures, weights)


def _noted(figures: Estimates, weights: ContributionWeights) -> Estimates:
    return figures.remarked("smoothed_quantile") if weights.window else figures


def _parts(measure: RiskMeasure, ranking: Ranking, frame: Frame) -> Array:
    """Return the Euler contributions of the sub-portfolios to the ranked total, shape (d,)."""
    weights = measure.contribution_weights(ranking.ordered, ranking.ties, "auto").values
    inside = np.flatnonzero(weights)
    parts = weights[inside] @ frame.table.losses.take(ranking.order[inside], axis=0)
    return parts - frame.expected[: parts.size] if measure.above == "mean" else parts
