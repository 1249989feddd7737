"""What one more loss changes: the measures with it and without it, errors paired, and how the others' parts move."""

from dataclasses import dataclass

import numpy as np

from service.risk.figures import estimates, judged
from service.risk.frame import Frame
from service.risk.measures import ContributionWeights, RiskMeasure, full_influence, full_values
from service.risk.quantiles import Array, Indices
from service.risk.ranking import Ranking, ranked_with
from service.risk.uncertainty import (
    Estimates,
    Influence,
    Sampling,
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
    """

    measure: RiskMeasure
    value: float
    influence: Array
    order: Indices
    rest: float
    contributions: Array


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


def base_of(frame: Frame, measure: RiskMeasure) -> Base:
    """Return what all candidates share."""
    ordered, order = frame.one(frame.totals, measure)
    influence = full_influence(measure, ordered)
    rest = float(influence.rest[0])
    values = np.full(frame.scenarios, rest)
    values[order] = influence.values[0]
    contributions = _parts(measure, frame.ranking(measure), frame)
    return Base(measure, float(full_values(measure, ordered)[0]), values, order, rest, contributions)


def increment_of(frame: Frame, base: Base, loss: Array, coverage: float) -> Increment:
    """Return what a candidate changes.

    Parameters
    ----------
    frame : Frame
        The book; its scenarios are the candidate's.
    base : Base
        Of the measure.
    loss : ndarray of shape (n,)
        The candidate's loss in scenario order.
    coverage : float
        Nominal coverage of the intervals.
    """
    measure = base.measure
    ranking, rows = ranked_with(frame.totals, frame.table, loss, depth=frame.depth(measure))
    ordered = ranking.ordered
    total_with = estimates(measure, ordered, coverage)
    alone, _ = frame.one(loss, measure)
    weights = measure.contribution_weights(ordered, ranking.ties, "auto")
    moved = weights.values @ rows[:, :-1]
    if measure.above == "mean":
        moved = moved - frame.expected[: moved.size]
    return Increment(
        total_with=total_with,
        increment=_difference(frame, base, ranking, coverage),
        contribution=_contribution(measure, ranking, weights, rows[:, -1:], coverage),
        stand_alone=estimates(measure, alone, coverage),
        moved=moved,
    )


def _difference(frame: Frame, base: Base, ranking: Ranking, coverage: float) -> Estimates:
    """Return the figure of the enlarged total less that of the base, with the error of the difference."""
    measure, ordered = base.measure, ranking.ordered
    difference = full_values(measure, ordered) - base.value
    if not ordered.sampled:
        return Estimates.exact(difference)
    influence = full_influence(measure, ordered)
    sampling = frame.sampling
    inside = np.arange(frame.scenarios)
    if frame.table.plain and base.order.size + ranking.order.size < frame.scenarios:
        inside = np.union1d(base.order, ranking.order)  # elsewhere all differ by the same
        sampling = Sampling(frame.scenarios)
    values = influence.rest[0] - base.influence[inside]
    values[np.searchsorted(inside, ranking.order)] = influence.values[0] - base.influence[ranking.order]
    of = spread(Influence(values[None, :], influence.rest - base.rest), sampling)
    tail = measure.tail_of(ordered)
    counts = of.effective if tail is None else tail
    figures = leaning_estimates(difference, of, usual_lean(of), coverage=coverage, tail_scenarios=counts)
    return judged(measure, figures)


def _parts(measure: RiskMeasure, ranking: Ranking, frame: Frame) -> Array:
    """Return the Euler contributions of the sub-portfolios to the ranked total, shape (d,)."""
    weights = measure.contribution_weights(ranking.ordered, ranking.ties, "auto").values
    inside = np.flatnonzero(weights)
    parts = weights[inside] @ frame.table.losses.take(ranking.order[inside], axis=0)
    return parts - frame.expected[: parts.size] if measure.above == "mean" else parts


def _contribution(
    measure: RiskMeasure, ranking: Ranking, weights: ContributionWeights, rows: Array, coverage: float
) -> Estimates:
    """Return the Euler contribution of one column `rows` (m, 1) to the ranked total."""
    ordered, ties = ranking.ordered, ranking.ties
    values = weights.values @ rows
    if measure.above == "mean":
        values = values - ties.p @ rows
    if not ordered.sampled:
        return Estimates.exact(values)
    influence = measure.contribution_influence(ordered, ties, rows, weights)
    if measure.above == "mean":
        influence = Influence(influence.values - rows.T, influence.rest)
    total = full_influence(measure, ordered)
    sampling = Sampling.of(ordered)
    of_total = spread(total, sampling)
    lean = measure.lean(ordered, full_values(measure, ordered), of_total)
    lean = usual_lean(of_total) if lean is None else lean
    of = spread(influence, sampling, beside=total)
    tail = measure.tail_of(ordered)
    counts = of.effective if tail is None else tail
    leans = lean_of_parts(of, float(lean[0]))
    figures = judged(measure, leaning_estimates(values, of, leans, coverage=coverage, tail_scenarios=counts))
    return figures.remarked("smoothed_quantile") if weights.window else figures
