"""Allocation rules: a measure of the total, split among sub-portfolios and groups, with errors.

Every rule answers with its contributions and their influence values, in one place each; the errors of
groups, shares and differences follow from these. With `above: mean` everything is on rho(X) - E[X].
"""

from collections.abc import Callable, Mapping
from dataclasses import dataclass, replace

import numpy as np

from service.errors import NotDefined
from service.risk.figures import bounds_of_difference, figure_in_order, figure_of, judged, moved_total
from service.risk.frame import Frame
from service.risk.measures import RiskMeasure, Smoothing
from service.risk.quantiles import Array
from service.risk.ranking import tie_tolerance
from service.risk.shapley import shapley_values
from service.risk.uncertainty import (
    Bounds,
    Estimates,
    Influence,
    Marks,
    Sampling,
    Spread,
    lean_of_parts,
    leaning_estimates,
    spread,
)

ROUNDING = 1e-13  # of the largest total: a sum of figures below it is 0 but for rounding


@dataclass(frozen=True, slots=True, kw_only=True)
class Case:
    """One measure to be split.

    Attributes
    ----------
    frame : Frame
        Of d sub-portfolios and G groups.
    measure : RiskMeasure
    coverage : float
        Nominal coverage of the intervals.
    smoothing : Smoothing
        Of contributions to a quantile.
    seed : int
        For the rules that draw.
    """

    frame: Frame
    measure: RiskMeasure
    coverage: float
    smoothing: Smoothing = "auto"
    seed: int = 1

    def estimates(
        self, values: Array, of: Spread, lean: float, bounds: Bounds | None = None, tied: Marks | None = None
    ) -> Estimates:
        """Return contributions with their errors.

        Parameters
        ----------
        values : ndarray of shape (c,)
        of : Spread
            Of their influence values, with the correlation with those of the total.
        lean : float
            Of the total's interval.
        bounds : Bounds, optional
            Of those that `tied` (c,) marks.
        """
        tail = self.measure.tail_of(self.frame.ranking(self.measure).ordered)
        counts = of.effective if tail is None else np.broadcast_to(tail, values.shape)
        leans = lean_of_parts(of, lean)
        figures = leaning_estimates(values, of, leans, coverage=self.coverage, tail_scenarios=counts)
        if bounds is not None and tied is not None:
            figures = figures.within(bounds, tied)
        return judged(self.measure, figures)

    def in_scenario_order(
        self,
        values: Array,
        influence: Array,
        total: Array,
        *,
        extra: Array | None = None,
        within: tuple[Bounds, Marks] | None = None,
    ) -> Estimates:
        """Return contributions with their errors from influence values (c, n), those of the total (n,).

        `extra` (c,) are variances that come on top, such as those of drawn orders; `within` bounds those that rest
        on a quantile amid equal losses. Where that of the total is one, others have no error.
        """
        if not self.frame.table.sampled:
            return Estimates.exact(values)
        on_atom = bool(self.measure.on_atom(self.frame.ranking(self.measure).ordered)[0])
        lean = float(moved_total(self.frame, self.measure).lean[0])
        of = spread(_free(influence), self.frame.sampling, beside=_free(total[None, :]))
        if extra is not None:
            of = replace(of, errors=np.sqrt(of.errors**2 + extra))
        if within is not None:
            return self.estimates(values, of, lean, *within)
        return self.estimates(values, of, lean).within(nothing(values.shape), np.full(values.shape, on_atom))

    def with_groups(self, per_sub_portfolio: Array) -> Array:
        """Return values (d, ...) followed by their sums over each group, shape (d + G, ...)."""
        sums = [per_sub_portfolio[group.members].sum(axis=0) for group in self.frame.groups]
        return np.concatenate([per_sub_portfolio, np.stack(sums)]) if sums else per_sub_portfolio


@dataclass(frozen=True, slots=True)
class Contributions:
    """What a rule gives to each sub-portfolio and each group.

    Attributes
    ----------
    figures : Estimates
        Of d sub-portfolios, then G groups.
    window : tuple of (float, float, int) or None
        Over which contributions to a quantile were smoothed.
    additive : bool
        Whether they add up to the total.
    """

    figures: Estimates
    window: tuple[float, float, int] | None = None
    additive: bool = True


def euler(case: Case) -> Contributions:
    """Return derivatives of the measure along the size of each sub-portfolio.

    Tasche, Risk contributions and performance measurement (1999), theorem 4.4; a group is one more column.
    """
    frame, measure = case.frame, case.measure
    ranking = frame.ranking(measure)
    ordered, ties = ranking.ordered, ranking.ties
    weights = measure.contribution_weights(ordered, ties, case.smoothing)
    moved = moved_total(frame, measure) if ordered.sampled else None

    def part(rows: Array) -> tuple[Array, Spread | None]:
        values = weights.values @ rows
        if measure.above == "mean":
            values = values - ties.p @ rows
        if moved is None:
            return values, None
        influence = measure.contribution_influence(ordered, ties, rows, weights)
        if measure.above == "mean":
            influence = Influence(influence.values - rows.T, influence.rest)
        return values, spread(influence, Sampling.of(ordered), beside=moved.influence)

    parts = frame.effort.map(part, frame.rows(ranking))
    values = np.concatenate([part for part, _ in parts])
    if moved is None:
        figures = Estimates.exact(values)
    else:
        of = Spread.joined([of for _, of in parts if of is not None])
        figures = case.estimates(values, of, float(moved.lean[0]))
    return Contributions(figures.remarked("smoothed_quantile") if weights.window else figures, weights.window)


def proportional_stand_alone(case: Case) -> Contributions:
    """Return rho(L) rho(L_i) / sum rho(L_j).

    Raises
    ------
    NotDefined
        If the stand-alone figures do not add up to more than 0.
    """
    frame = case.frame
    total, moved = figure_of(frame, case.measure, frame.totals)
    count = len(frame.table)
    alone = np.empty(count)
    influence = np.empty((count, frame.scenarios))

    def one(column: int) -> None:
        frame.effort.checkpoint(column / count)
        alone[column], influence[column] = figure_of(frame, case.measure, frame.table.losses[:, column])

    frame.effort.map(one, range(count))
    whole = float(alone.sum())
    if not whole > ROUNDING * float(np.max(np.abs(frame.totals))):
        detail = f"the stand-alone figures add up to {whole:g}: no shares in proportion to them exist"
        raise NotDefined(detail)
    shares = alone / whole
    sums = influence.sum(axis=0)
    influence *= total / whole
    influence += shares[:, None] * (moved - sums * (total / whole))
    values = case.with_groups(total * shares)
    return Contributions(case.in_scenario_order(values, case.with_groups(influence), moved))


def covariance(case: Case) -> Contributions:
    """Return E[L_i] + (rho(L) - E[L]) Cov(L_i, L) / Var(L); without E[L_i] for a measure above the mean.

    Raises
    ------
    NotDefined
        If the total does not vary.
    """
    frame = case.frame
    figure, moved = figure_of(frame, case.measure, frame.totals)
    p = frame.table.probabilities
    weight = np.full(frame.scenarios, 1.0 / frame.scenarios) if p is None else p
    mean = float(weight @ frame.totals)
    deviation = frame.totals - mean
    variance = float(weight @ (deviation * deviation))
    if not (variance > 0.0 and np.ptp(frame.totals) > tie_tolerance(frame.table.losses).max()):
        detail = "the total does not vary: nothing can be split by covariance with it"
        raise NotDefined(detail)
    located = case.measure.above == "mean"
    excess = figure if located else figure - mean
    moved_excess = moved if located else moved - deviation
    parts = []
    for columns in frame.chunks():
        centred = columns.T - (weight @ columns)[:, None]
        betas = (centred @ (weight * deviation)) / variance
        squares = deviation * deviation / variance
        influence = betas[:, None] * (moved_excess - excess * squares) + centred * (excess * deviation / variance)
        values = excess * betas
        if not located:
            values = values + weight @ columns
            influence += centred
        parts.append(case.in_scenario_order(values, influence, moved))
    return Contributions(Estimates.joined(parts))


def with_without(case: Case) -> Contributions:
    """Return rho(L) - rho(L - L_i); a group is removed as one."""
    frame, measure = case.frame, case.measure
    whole, order = frame.one(frame.totals, measure)
    total, moved = figure_in_order(measure, whole, order)
    parts = []
    for columns in frame.chunks():
        count = columns.shape[1]
        values, influence = np.empty(count), np.empty((count, frame.scenarios))
        ends, tied = np.zeros((3, count)), np.zeros(count, dtype=bool)

        def one(  # its arrays are those of this chunk
            j: int,
            columns: Array = columns,
            values: Array = values,
            influence: Array = influence,
            ends: Array = ends,
            tied: Marks = tied,
        ) -> None:
            frame.effort.checkpoint(j / columns.shape[1])
            rest, order = frame.one(frame.totals - columns[:, j], measure)
            worth, moved_rest = figure_in_order(measure, rest, order)
            values[j] = total - worth
            np.subtract(moved, moved_rest, out=influence[j])
            tied[j] = frame.table.sampled and (measure.on_atom(whole) | measure.on_atom(rest))[0]
            if tied[j]:
                of = bounds_of_difference(measure, rest, whole, case.coverage)
                ends[:, j] = of.errors[0], of.lower[0], of.upper[0]

        frame.effort.map(one, range(count))
        parts.append(case.in_scenario_order(values, influence, moved, within=(Bounds(*ends), tied)))
    return Contributions(Estimates.joined(parts).remarked("does_not_add_up"), additive=False)


def shapley(case: Case) -> Contributions:
    """Return each sub-portfolio's increment, averaged over all orders of entry (see `shapley_values`)."""
    frame = case.frame
    result = shapley_values(frame, case.measure, seed=case.seed)
    extra = None
    if result.orders is not None:
        drawn = case.with_groups(result.orders.T)
        extra = drawn.var(axis=1, ddof=1) / drawn.shape[1]
    _, moved = figure_of(frame, case.measure, frame.totals)
    values, influence = case.with_groups(result.values), case.with_groups(result.influence)
    figures = case.in_scenario_order(values, influence, moved, extra=extra)
    return Contributions(figures.remarked("sampled_shapley") if result.orders is not None else figures)


def nothing(shape: tuple[int, ...]) -> Bounds:
    """Return the bounds of figures whose errors cannot be told."""
    unknown = np.full(shape, np.nan)
    return Bounds(unknown, unknown, unknown)


def _free(influence: Array) -> Influence:
    """Return influence values (c, n) in scenario order, where no scenario is left out."""
    return Influence(influence, np.zeros(influence.shape[0]))


RULES: Mapping[str, Callable[[Case], Contributions]] = {
    "euler": euler,
    "proportional_stand_alone": proportional_stand_alone,
    "covariance": covariance,
    "with_without": with_without,
    "shapley": shapley,
}
"""The rules by their names on the wire."""
