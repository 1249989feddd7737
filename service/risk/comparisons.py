"""Two books compared: how each measure and each Euler contribution changed, paired where the scenarios are the same."""

from collections.abc import Sequence
from dataclasses import dataclass
from typing import Literal

import numpy as np

from service.risk.figures import bounds_of_difference, judged, total
from service.risk.frame import Frame
from service.risk.measures import RiskMeasure, full_influence
from service.risk.quantiles import Array, Indices
from service.risk.uncertainty import Bounds, Estimates, Influence, Spread, leaning_estimates, spread, usual_lean

State = Literal["new", "gone", "changed"]


@dataclass(frozen=True, slots=True, eq=False)
class Parts:
    """A measure of one book and of its sub-portfolios, with influence values in the order of the ranking.

    Attributes
    ----------
    total : Estimates
        Shape (1,).
    contributions : ndarray of shape (d,)
    influence : Influence or None
        Of the d contributions and then of the total, over m kept scenarios; None for a whole population.
    order : ndarray of int of shape (m,)
        Scenario of each.
    """

    total: Estimates
    contributions: Array
    influence: Influence | None
    order: Indices

    def in_scenario_order(self, row: int, scenarios: int) -> Array:
        """Return the influence values of one contribution (-1: the total), shape (n,)."""
        if self.influence is None:
            return np.zeros(scenarios)
        values = np.full(scenarios, self.influence.rest[row])
        values[self.order] = self.influence.values[row]
        return values


@dataclass(frozen=True, slots=True, eq=False)
class Change:
    """How one measure changed.

    Attributes
    ----------
    before, after : Estimates
        Of the totals, shape (1,).
    ids : tuple of str
        Of all sub-portfolios: those after, in order, then those gone.
    states : tuple of State
    contributions : ndarray of shape (k, 2)
        Before and after; NaN where there was none.
    changes : Estimates
        Of the k contributions and then of the total.
    """

    before: Estimates
    after: Estimates
    ids: tuple[str, ...]
    states: tuple[State, ...]
    contributions: Array
    changes: Estimates


def parts_of(frame: Frame, measure: RiskMeasure, coverage: float) -> Parts:
    """Return a measure of a book and its Euler contributions."""
    ranking = frame.ranking(measure)
    ordered, ties = ranking.ordered, ranking.ties
    weights = measure.contribution_weights(ordered, ties, "auto")
    values, influences, rests = [], [], []
    for rows in frame.rows(ranking):
        part = weights.values @ rows
        if measure.above == "mean":
            part = part - ties.p @ rows
        values.append(part)
        if ordered.sampled:
            influence = measure.contribution_influence(ordered, ties, rows, weights)
            moved = influence.values - rows.T if measure.above == "mean" else influence.values
            influences.append(moved)
            rests.append(influence.rest)
    whole = full_influence(measure, ordered) if ordered.sampled else None
    together = None
    if whole is not None:
        together = Influence(np.concatenate([*influences, whole.values]), np.concatenate([*rests, whole.rest]))
    return Parts(total(frame, measure, coverage), np.concatenate(values), together, ranking.order)


def compared(  # two of everything
    measure: RiskMeasure,
    before: tuple[Frame, Sequence[str], Parts],
    after: tuple[Frame, Sequence[str], Parts],
    *,
    paired: bool,
    coverage: float,
) -> Change:
    """Return how a measure changed between two books.

    Parameters
    ----------
    measure : RiskMeasure
    before, after : tuple of (Frame, sequence of str, Parts)
        Each book, the ids of its sub-portfolios and its parts.
    paired : bool
        Whether both have the same scenarios, so that errors are those of differences scenario by scenario;
        else the two samples are independent and their variances add.
    coverage : float
        Nominal coverage of the intervals.
    """
    then, then_ids, then_parts = before
    now, now_ids, now_parts = after
    ids = (*now_ids, *(name for name in then_ids if name not in now_ids))
    was = {name: row for row, name in enumerate(then_ids)}
    rows = {name: row for row, name in enumerate(now_ids)}
    states: list[State] = []
    pairs = np.full((len(ids), 2), np.nan)
    changes = np.empty(len(ids) + 1)
    errors = np.empty((3, len(ids) + 1))
    for place, name in enumerate([*ids, None]):
        old = -1 if name is None else was.get(name)
        new = -1 if name is None else rows.get(name)
        if name is None:
            changes[place] = now_parts.total.values[0] - then_parts.total.values[0]
        else:
            states.append("new" if old is None else "gone" if new is None else "changed")
            first = np.nan if old is None else then_parts.contributions[old]
            second = np.nan if new is None else now_parts.contributions[new]
            pairs[place] = first, second
            changes[place] = np.nan_to_num(second) - np.nan_to_num(first)
        errors[:, place] = _spread(then, then_parts, old, now, now_parts, new, paired=paired)
    counts = [None if tail is None else float(tail[0]) for tail in (_tail_of(measure, then), _tail_of(measure, now))]
    of_total = _amid_ties(measure, then, now, coverage)
    figures = _estimates(measure, now, changes, errors, _fewest(states, counts), of_total, coverage)
    return Change(then_parts.total, now_parts.total, ids, tuple(states), pairs, figures)


def _spread(  # two of everything
    then: Frame, then_parts: Parts, old: int | None, now: Frame, now_parts: Parts, new: int | None, *, paired: bool
) -> Array:
    """Return error, skewness and effective number of scenarios of one change."""
    first = None if old is None else then_parts.in_scenario_order(old, then.scenarios)
    second = None if new is None else now_parts.in_scenario_order(new, now.scenarios)
    if paired:
        moved = (0.0 if second is None else second) - (0.0 if first is None else first)
        of = spread(Influence(np.asarray(moved)[None, :], np.zeros(1)), now.sampling)
        return np.array([of.errors[0], of.skewness[0], of.effective[0]])
    spreads = [
        spread(Influence(sign * values[None, :], np.zeros(1)), frame.sampling)
        for frame, values, sign in ((now, second, 1.0), (then, first, -1.0))
        if values is not None
    ]
    errors = np.array([one.errors[0] for one in spreads])
    scale = float(errors.max())  # powers of errors could overflow, those of their ratios cannot
    if scale == 0.0:
        return np.array([0.0, 0.0, min(float(one.effective[0]) for one in spreads)])
    ratios = errors / scale
    squares = ratios**2
    variance = float(squares.sum())
    skewness = float(np.array([one.skewness[0] for one in spreads]) @ ratios**3) / variance**1.5
    fourth = sum(
        (square / variance) ** 2 / float(one.effective[0]) for square, one in zip(squares, spreads, strict=True)
    )
    return np.array([scale * np.sqrt(variance), skewness, 1.0 / fourth])


def _tail_of(measure: RiskMeasure, frame: Frame) -> Array | None:
    return measure.tail_of(frame.ranking(measure).ordered)


def _fewest(states: Sequence[State], counts: Sequence[float | None]) -> Array | None:
    """Return the tail scenarios of the thinner book that each change, and at last the total, rests on."""
    then, now = counts
    if then is None or now is None:
        return None
    of = {"new": now, "gone": then, "changed": min(then, now)}
    return np.array([*(of[state] for state in states), min(then, now)])


def _estimates(  # what a change is judged by
    measure: RiskMeasure,
    frame: Frame,
    changes: Array,
    errors: Array,
    tail: Array | None,
    of_total: Bounds | None,
    coverage: float,
) -> Estimates:
    """Return changes with their intervals, judged as the measure asks."""
    if not frame.table.sampled:
        return Estimates.exact(changes)
    of = Spread(errors[0], errors[1], errors[2])
    counts = of.effective if tail is None else tail
    figures = leaning_estimates(changes, of, usual_lean(of), coverage=coverage, tail_scenarios=counts)
    if of_total is not None:
        last = np.arange(changes.size) == changes.size - 1
        figures = figures.within(of_total, last)
    return judged(measure, figures)


def _amid_ties(measure: RiskMeasure, then: Frame, now: Frame, coverage: float) -> Bounds | None:
    """Return what bounds the change of the total where a quantile is one of many equal losses."""
    first, second = (frame.ranking(measure).ordered for frame in (then, now))
    if not now.table.sampled or not (measure.on_atom(first) | measure.on_atom(second)).any():
        return None
    return bounds_of_difference(measure, first, second, coverage)
