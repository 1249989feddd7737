"""Figures of a measure with their errors: of the total, of each column alone, of any loss."""

from collections.abc import Callable
from dataclasses import dataclass, replace

import numpy as np
from scipy import special

from service.risk.frame import Frame
from service.risk.measures import ExpectedShortfall, RiskMeasure, full_influence, full_values, means
from service.risk.quantiles import ERROR_COVERAGE, Array, Indices, Ordered
from service.risk.uncertainty import (
    Bounds,
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
    tied = measure.on_atom(ordered)
    if tied.any():
        figures = figures.within(bounds(measure, ordered, coverage), tied)
    return judged(measure, figures)


def bounds(measure: RiskMeasure, ordered: Ordered, coverage: float) -> Bounds:
    """Return errors and intervals of a quantile (or its excess over the mean) that hold amid equal losses.

    The interval is that of order statistics; the error is its width at `ERROR_COVERAGE` over that of a normal one.
    """
    return _bounds(lambda share: _ends(measure, ordered, share), coverage)


def bounds_of_difference(measure: RiskMeasure, first: Ordered, second: Ordered, coverage: float) -> Bounds:
    """Return the same for the figures of `second` less those of `first`.

    From the lower end of the one to the upper end of the other, each at half the chance of missing (Bonferroni).
    """

    def ends(share: float) -> tuple[Array, Array]:
        (lower, upper), (least, most) = (_ends(measure, one, (1.0 + share) / 2.0) for one in (first, second))
        return least - upper, most - lower

    return _bounds(ends, coverage)


def _bounds(ends: Callable[[float], tuple[Array, Array]], coverage: float) -> Bounds:
    lower, upper = ends(coverage)
    least, most = ends(ERROR_COVERAGE)
    return Bounds((most - least) / (2.0 * float(special.ndtri((1.0 + ERROR_COVERAGE) / 2.0))), lower, upper)


def _ends(measure: RiskMeasure, ordered: Ordered, coverage: float) -> tuple[Array, Array]:
    """Return the ends of the interval of a quantile, or of its excess over the mean; NaN where there are none."""
    each = (1.0 + coverage) / 2.0 if measure.above == "mean" else coverage
    interval = measure.interval(ordered, each)
    if interval is None:
        raise ValueError("only quantiles have such intervals")
    if measure.above == "zero":
        return interval.lower, interval.upper
    of_mean = spread(Influence(ordered.values, np.zeros(len(ordered.values))), Sampling.of(ordered)).errors
    middle, half = means(ordered), float(special.ndtri((1.0 + each) / 2.0)) * of_mean
    return interval.lower - middle - half, interval.upper - middle + half


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
    return figure_in_order(measure, *frame.one(loss, measure))


def figure_in_order(measure: RiskMeasure, ordered: Ordered, order: Indices) -> tuple[float, Array]:
    """Return the same of a single distribution whose positions hold the scenarios `order`."""
    value = float(full_values(measure, ordered)[0])
    influence = full_influence(measure, ordered)
    values = np.full(ordered.scenarios, influence.rest[0])
    values[order] = influence.values[0]
    return value, values
