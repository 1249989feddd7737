"""Figures of a measure with their errors: of the total, of each column alone, of any loss."""

from collections.abc import Callable
from dataclasses import dataclass, replace

import numpy as np
from scipy import special

from service.risk.frame import Frame
from service.risk.measures import ExpectedShortfall, Marks, RiskMeasure, full_influence, full_values
from service.risk.quantiles import ERROR_COVERAGE, Array, Indices, Ordered
from service.risk.uncertainty import (
    Estimates,
    Influence,
    Sampling,
    Spread,
    judged_by_carriers,
    judged_by_tail,
    leaning_estimates,
    spread,
    usual_lean,
)


@dataclass(frozen=True, slots=True)
class Moved:
    """What the errors of the figures of c ordered distributions are made of.

    Attributes
    ----------
    influence : Influence
    of : Spread
        Of the influence values.
    lean : ndarray of shape (c,)
        Of the intervals.
    method : str
        How they are made.
    """

    influence: Influence
    of: Spread
    lean: Array
    method: str

    @classmethod
    def by(cls, measure: RiskMeasure, ordered: Ordered) -> "Moved":
        """Return what moves the figures of `measure`."""
        values = measure.values(ordered)
        influence = full_influence(measure, ordered, values)
        of = spread(influence, Sampling.of(ordered))
        lean = measure.lean(ordered, values, of)
        if lean is None:
            return cls(influence, of, usual_lean(of), "skewness_adjusted")
        return cls(influence, of, lean, "log_mean_excess")


def estimates(
    measure: RiskMeasure, ordered: Ordered, coverage: float, moved: Callable[[], Moved] | None = None
) -> Estimates:
    """Return the figures of c ordered distributions with their errors.

    Parameters
    ----------
    measure : RiskMeasure
    ordered : Ordered
        c distributions.
    coverage : float
        Nominal coverage of the intervals.
    moved : callable, optional
        Gives what the errors are made of, where it may be known.
    """
    values = full_values(measure, ordered)
    if not ordered.sampled:
        return Estimates.exact(values)
    tail = measure.tail_of(ordered)
    if measure.above == "zero":
        interval, own = measure.interval(ordered, coverage), measure.errors(ordered)
        if interval is not None and own is not None and tail is not None:
            return without_gaps(Estimates(values, own, interval.lower, interval.upper, tail, "order_statistics"))
    made_of = Moved.by(measure, ordered) if moved is None else moved()
    of, lean, method = made_of.of, made_of.lean, made_of.method
    counts = of.effective if tail is None else tail
    figures = leaning_estimates(values, of, lean, coverage=coverage, tail_scenarios=counts, method=method)
    return judged(measure, untied(figures, measure.on_atom(ordered)))


def untied(figures: Estimates, tied: Marks) -> Estimates:
    """Take the errors from the figures (c,) that `tied` (c,) marks as built on a quantile amid equal losses."""
    if not tied.any():
        return figures
    errors, lower, upper = (
        np.where(tied, np.nan, part) for part in (figures.standard_errors, figures.lower, figures.upper)
    )
    return replace(figures, standard_errors=errors, lower=lower, upper=upper).remarked("tied_quantile")


def difference(measure: RiskMeasure, figure: Estimates, first: Ordered, second: Ordered, coverage: float) -> Estimates:
    """Return the figure of `second` less that of `first` with an error that also holds amid equal losses.

    There it has the interval from the lower end of the one to the upper end of the other, each at half the chance
    of missing (Bonferroni), and as error its width at `ERROR_COVERAGE` over that of a normal interval.

    Parameters
    ----------
    measure : RiskMeasure
    figure : Estimates
        Shape (1,), with its error from influence values.
    first, second : Ordered
        A single distribution each.
    coverage : float
        Nominal coverage of the interval.
    """
    tied = measure.on_atom(first) | measure.on_atom(second)
    if not tied.any():
        return figure
    ends = [
        (measure.interval(first, (1.0 + share) / 2.0), measure.interval(second, (1.0 + share) / 2.0))
        for share in (coverage, ERROR_COVERAGE)
    ]
    if measure.above == "mean" or any(one is None for pair in ends for one in pair):
        return without_gaps(untied(figure, tied))
    (lower, upper), (least, most) = (
        (now.lower - then.upper, now.upper - then.lower) for then, now in ends if then is not None and now is not None
    )
    errors = (most - least) / (2.0 * float(special.ndtri((1.0 + ERROR_COVERAGE) / 2.0)))
    bounded = replace(
        figure, standard_errors=errors, lower=lower, upper=upper, method="order_statistics", remarks=frozenset()
    )
    return judged(measure, bounded).remarked("tied_quantile")


def judged(measure: RiskMeasure, figures: Estimates) -> Estimates:
    """Take away errors that rest on too little, and remark on those that rest on little."""
    if measure.of_tail:
        return without_gaps(judged_by_tail(figures))
    return without_gaps(judged_by_carriers(figures, measure.carrier_factor))


def without_gaps(figures: Estimates) -> Estimates:
    """Give figures no error, or no interval, that could not be estimated, and remark on it."""
    unknown = ~np.isfinite(figures.standard_errors)
    open_ended = unknown | ~(np.isfinite(figures.lower) & np.isfinite(figures.upper))
    if not open_ended.any():
        return figures
    errors = np.where(unknown, np.nan, figures.standard_errors)
    lower, upper = (np.where(open_ended, np.nan, end) for end in (figures.lower, figures.upper))
    return replace(figures, standard_errors=errors, lower=lower, upper=upper).remarked("no_error")


def total(frame: Frame, measure: RiskMeasure, coverage: float) -> Estimates:
    """Return the figure of the total, shape (1,)."""
    return estimates(measure, frame.ranking(measure).ordered, coverage, lambda: moved_total(frame, measure))


def moved_total(frame: Frame, measure: RiskMeasure) -> Moved:
    """Return what the error of the total is made of, in the order of the ranking; made once for all who ask."""
    if measure not in frame.known:
        frame.known[measure] = Moved.by(measure, frame.ranking(measure).ordered)
    moved: Moved = frame.known[measure]
    return moved


def stand_alone(frame: Frame, measure: RiskMeasure, coverage: float) -> Estimates:
    """Return the figure of each sub-portfolio and each group alone, shape (d + G,)."""
    parts = frame.effort.map(lambda ordered: estimates(measure, ordered, coverage), frame.alone(measure))
    return Estimates.joined(parts)


def expected_loss(frame: Frame, coverage: float) -> Estimates:
    """Return the mean of the total with its error, shape (1,)."""
    p = frame.table.probabilities
    mean = float(frame.totals.mean() if p is None else frame.totals @ p)
    values = np.array([mean])
    if not frame.table.sampled:
        return Estimates.exact(values)
    influence = Influence(frame.totals[None, :], np.zeros(1))
    of = spread(influence, frame.sampling)
    unknown = np.full(1, np.nan)
    return without_gaps(leaning_estimates(values, of, usual_lean(of), coverage=coverage, tail_scenarios=unknown))


def tail_scenarios(frame: Frame, level: float) -> tuple[Indices, Array]:
    """Return the scenarios beyond the quantile of the total, and their weights in its expected shortfall.

    Parameters
    ----------
    frame : Frame
    level : float
        Confidence level.

    Returns
    -------
    ndarray of int of shape (m,)
    ndarray of shape (m,)
        Summing to 1.
    """
    measure = ExpectedShortfall(kind="expected_shortfall", level=level)
    ranking = frame.ranking(measure)
    weights = measure.contribution_weights(ranking.ordered, ranking.ties, "auto").values
    inside = np.flatnonzero(weights)
    return ranking.order[inside], weights[inside]


def figure_of(frame: Frame, measure: RiskMeasure, loss: Array) -> tuple[float, Array]:
    """Return the figure of any loss (n,) and its influence values in scenario order, shape (n,)."""
    value, influence, _ = figure_tied(frame, measure, loss)
    return value, influence


def figure_tied(frame: Frame, measure: RiskMeasure, loss: Array) -> tuple[float, Array, bool]:
    """Return the same, and whether the figure is one of many equal losses."""
    ordered, order = frame.one(loss, measure)
    value = float(full_values(measure, ordered)[0])
    influence = full_influence(measure, ordered)
    values = np.full(loss.size, influence.rest[0])
    values[order] = influence.values[0]
    return value, values, bool(measure.on_atom(ordered)[0])
