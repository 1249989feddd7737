"""From the arithmetic's arrays to the words of an answer: figures, rows, ratios and notes."""

from collections.abc import Sequence
from dataclasses import dataclass, field
from math import ceil, inf, isfinite
from typing import NamedTuple

import numpy as np

from service.errors import NotDefined
from service.risk.allocation import Contributions
from service.risk.comparisons import Change, State
from service.risk.frame import Frame
from service.risk.increments import Base, Increment
from service.risk.measures import RiskMeasure
from service.risk.quantiles import Array
from service.risk.uncertainty import FULL_TAIL, Estimates
from service.schemas.requests import Candidate, IncrementsRequest
from service.schemas.results import (
    AllocationResult,
    AllocationRow,
    CandidateFigures,
    ChangeByState,
    ChangedPart,
    ComparisonResult,
    Figure,
    GroupFigure,
    GroupRow,
    Interval,
    MeasureResult,
    Moved,
    Note,
    NoteCode,
    SmoothingWindow,
    StandAloneFigure,
    SubPortfolioLoss,
    Tail,
    TailFactor,
    TailScenario,
)
from service.sources import FactorMean

WORST_LISTED = 10
BOUNDED = "order_statistics"  # the method of intervals that hold amid equal losses
TOO_LARGE = "a figure or its error is too large for a binary64 number"
MOST_NAMED = 1e15  # scenarios that a note proposes
ROUNDING = 1e-13  # of the largest total: a figure below it is 0 but for rounding, and no denominator
LEAST_LEVEL = 0.5  # below which a level may be meant as the probability of the tail
USUAL_LEVEL = 0.99  # of the tail detail where no measure has a level


@dataclass(slots=True)
class Notes:
    """Collects the notes of an answer; the same note is made once for each measure.

    Attributes
    ----------
    scenarios : int
        Number of scenarios of the request.
    pointed : bool
        Whether the request is a JSON document that can be pointed into.
    made : dict
        The notes by code and measure.
    undefined : dict
        By measure: why its first ratio is null, and how many are.
    """

    scenarios: int
    pointed: bool
    made: dict[tuple[str, int | None], Note] = field(default_factory=dict)
    undefined: dict[int, tuple[str, int]] = field(default_factory=dict)

    def add(self, code: NoteCode, detail: str, number: int | None = None) -> None:
        """Make a note, of measure `number` if given."""
        self.made.setdefault((code, number), Note(code, detail, self._pointer(number)))

    def say(self, code: str, detail: str, pointer: str | None) -> None:
        """Make a note on something else than a measure."""
        known: NoteCode = code  # type: ignore[assignment]  # the sources know the codes of notes
        self.made.setdefault((pointer or code, None), Note(known, detail, pointer if self.pointed else None))

    def of_estimates(self, number: int, measure: RiskMeasure, estimates: Estimates) -> None:
        """Make the notes that the remarks on `estimates` call for."""
        level = measure.parameters.get("level", 1.0)
        if measure.of_tail and level < LEAST_LEVEL:
            rest = 1.0 - level
            words = f"{measure.name} looks at the worst {100.0 * rest:.4g} % of all losses"
            self.add("low_level", f"{words}; level {rest:.15g} looks at the worst {100.0 * level:.4g} %", number)
        for code in sorted(estimates.remarks):
            known: NoteCode = code  # type: ignore[assignment]  # the remarks are codes of notes
            self.add(known, self._detail(code, measure, estimates), number)

    def no_ratio(self, why: str, number: int, count: int = 1) -> None:
        """Make one note on all ratios of measure `number` that are null: why the first is, and how many more are."""
        first, before = self.undefined.get(number, (why, 0))
        self.undefined[number] = first, before + count
        others = before + count - 1
        more = f"; {others:,} more {'is' if others == 1 else 'are'} null likewise" if others else ""
        note = Note("ratio_not_defined", f"a ratio is null: {first}{more}", self._pointer(number))
        self.made["ratio_not_defined", number] = note

    def take(self, others: "Notes") -> None:
        """Add the notes of others that are not made yet, and count their ratios."""
        for number, (why, count) in others.undefined.items():
            self.no_ratio(why, number, count)
        for key, note in others.made.items():
            self.made.setdefault(key, note)

    def name(self, book: str) -> None:
        """Say of all notes so far which of two books they are about."""
        pointers = {key: note.pointer for key, note in self.made.items()}
        self.made = {
            (f"{book} {key[0]}", key[1]): Note(
                note.code,
                f"{book}: {note.detail}",
                (pointers[key] or "").replace("/losses", f"/{book}", 1) or None,
            )
            for key, note in self.made.items()
        }

    def listed(self) -> list[Note]:
        """Return the notes made, in the order of the measures."""
        return list(self.made.values())

    def _pointer(self, number: int | None) -> str | None:
        return f"/measures/{number}" if self.pointed and number is not None else None

    def _detail(self, code: str, measure: RiskMeasure, estimates: Estimates) -> str:
        tail = estimates.tail_scenarios
        known = tail[np.isfinite(tail)]
        fewest = float(known.min()) if known.size else 0.0
        shown = f"{fewest:.3g}"
        noun, verb = ("scenario", "carries") if shown == "1" else ("scenarios", "carry")
        role = f"tail {noun} {verb}" if measure.of_tail else f"{noun} {verb} the error of"
        counts = f"{shown} {role} {measure.name}"
        enough = FULL_TAIL * self.scenarios / fewest if measure.of_tail and fewest > 0.0 else inf
        if enough < MOST_NAMED:
            counts += f"; {ceil(enough):,} scenarios in all would do"
        if fewest < 1.0 and self._beyond(measure):
            less = " less the mean" if measure.above == "mean" else ""
            counts += f"; the level is beyond the set: the figure is simply the worst loss{less}"
        return {
            "infinite_variance": (
                f"the law of a loss has too few moments for {measure.name} to have a standard error, however many "
                "scenarios there are"
            ),
            "tied_quantile": (
                f"a figure of {measure.name} is one of many equal losses: what is built on it has the widest interval "
                "that order statistics allow, or no error"
            ),
            "thin_tail": f"the error rests on few scenarios: {counts}",
            "no_error": f"too few scenarios to say how sure a figure is: {counts}",
            "few_scenarios": f"a few scenarios carry the error, so intervals may be too narrow: {counts}",
            "smoothed_quantile": f"contributions to {measure.name} are smoothed over neighbouring scenarios",
            "does_not_add_up": "with_without contributions do not add up to the total; `residual` is the rest",
            "sampled_shapley": "Shapley values are averaged over drawn orders of entry; the error includes the drawing",
        }[code]

    def _beyond(self, measure: RiskMeasure) -> bool:
        """Return whether the tail of a measure holds less than one scenario."""
        numbers = measure.parameters
        if "return_period" in numbers:
            return numbers["return_period"] * numbers.get("scenarios_per_period", 1.0) > self.scenarios
        return "level" in numbers and (1.0 - numbers["level"]) * self.scenarios < 1.0


def _refuse_infinite(*arrays: Array) -> None:
    if any(np.isinf(array).any() for array in arrays):
        raise NotDefined(TOO_LARGE)


def _amount(value: float) -> float:
    """Return an amount, zero without a sign.

    Raises
    ------
    NotDefined
        For one that is not finite.
    """
    if not isfinite(value):
        raise NotDefined(TOO_LARGE)
    return value + 0.0


def figure_list(estimates: Estimates, coverage: float) -> list[Figure]:
    """Return figures of the answer from estimates of shape (c,).

    Raises
    ------
    NotDefined
        For a figure that is not finite.
    """
    _refuse_infinite(estimates.values, estimates.standard_errors, estimates.lower, estimates.upper)
    if np.isnan(estimates.values).any():  # but an error that is NaN is none
        raise NotDefined(TOO_LARGE)
    values = (estimates.values + 0.0).tolist()
    if np.isnan(estimates.standard_errors).all() and np.isnan(estimates.tail_scenarios).all():
        return [Figure(value, None, None, None) for value in values]
    methods = [BOUNDED if bounded else estimates.method for bounded in estimates.is_bounded.tolist()]
    rows = zip(
        values,
        (estimates.standard_errors + 0.0).tolist(),
        (estimates.lower + 0.0).tolist(),
        (estimates.upper + 0.0).tolist(),
        estimates.tail_scenarios.tolist(),
        methods,
        strict=True,
    )
    return [
        Figure(
            value,
            None if error != error else error,  # noqa: PLR0124  # NaN is the one number that differs from itself
            None if lower != lower else Interval(lower, upper, coverage, method),  # noqa: PLR0124
            None if tail != tail else tail,  # noqa: PLR0124
        )
        for value, error, lower, upper, tail, method in rows
    ]


class Shared(NamedTuple):
    """What the rows of all allocations of a request need."""

    frame: Frame
    expected: list[float]
    profits: list[float | None]
    capital: float | None


def shared(frame: Frame, capital: float | None) -> Shared:
    """Return expected losses and profits of the d sub-portfolios and then of the groups."""
    profits = [one.expected_profit for one in frame.table.sub_portfolios]
    sums: list[float | None] = []
    for group in frame.groups:
        members = [profits[member] for member in group.members]
        known = [profit for profit in members if profit is not None]
        sums.append(_amount(sum(known)) if len(known) == len(members) else None)
    return Shared(frame, (frame.expected + 0.0).tolist(), profits + sums, capital)


def rounding_of(frame: Frame) -> float:
    """Return the size up to which a figure of the losses may be nothing but rounding."""
    return ROUNDING * float(np.max(np.abs(frame.totals)))


def measure_result(
    name: str, number: int, total: Figure, alone: Sequence[Figure] | None, frame: Frame, notes: Notes
) -> MeasureResult:
    """Return one measure of the whole book and of each part alone."""
    if alone is None:
        return MeasureResult(name, total, [], [], None, None)
    count = len(frame.table)
    whole = sum(figure.value for figure in alone[:count])
    benefit = _ratio(
        whole - total.value, whole, "the sum of the stand-alone figures", number, notes, rounding_of(frame)
    )
    return MeasureResult(
        name,
        total,
        [StandAloneFigure(one.id, figure) for one, figure in zip(frame.table.sub_portfolios, alone, strict=False)],
        [
            GroupFigure(group.attribute, group.name, figure)
            for group, figure in zip(frame.groups, alone[count:], strict=True)
        ],
        benefit,
        whole - total.value,
    )


def allocation_result(
    head: tuple[str, str],
    number: int,
    total: Figure,
    split: Contributions,
    parts: Sequence[Figure],
    alone: Sequence[Figure] | None,
    of: Shared,
    notes: Notes,
) -> AllocationResult:
    """Return one measure split by one rule.

    Parameters
    ----------
    head : tuple of (str, str)
        Names of measure and rule.
    number : int
        Of the measure.
    total : Figure
    split : Contributions
    parts : sequence of Figure
        The contributions of d sub-portfolios and then of the groups.
    alone : sequence of Figure or None
        Their stand-alone figures.
    of : Shared
    notes : Notes
    """
    frame = of.frame
    count = len(frame.table)
    whole = total.value if split.additive else sum(part.value for part in parts[:count])
    least = rounding_of(frame)
    shares = [_ratio(part.value, whole, "the total to be shared", number, notes, least) for part in parts]
    rows = []
    names = [one.id for one in frame.table.sub_portfolios]
    names += [f"{group.attribute} {group.name or '(none)'}" for group in frame.groups]
    role = "contribution" if of.capital is None else "capital"
    for j, (name, part, share) in enumerate(zip(names, parts, shares, strict=True)):
        allocated = None if of.capital is None or share is None else _amount(share * of.capital)
        base = part.value if of.capital is None else allocated
        single = None if alone is None else alone[j]
        rows.append(
            {
                "contribution": part,
                "share": share,
                "stand_alone": single,
                "diversification_benefit": None
                if single is None
                else _ratio(single.value - part.value, single.value, _alone(name), number, notes, least),
                "expected_loss": of.expected[j],
                "expected_profit": of.profits[j],
                "return_on_capital": _return(of.profits[j], base, f"the {role} of {name}", number, notes),
                "allocated_capital": allocated,
            }
        )
    window = None if split.window is None else SmoothingWindow(*split.window)
    return AllocationResult(
        *head,
        total,
        [AllocationRow(one.id, **row) for one, row in zip(frame.table.sub_portfolios, rows, strict=False)],  # type: ignore[arg-type]  # as the rows above
        [GroupRow(group.attribute, group.name, **row) for group, row in zip(frame.groups, rows[count:], strict=True)],  # type: ignore[arg-type]  # likewise
        of.capital,
        _total_return(of, total.value if of.capital is None else of.capital, number, notes),
        window,
        None if split.additive else total.value - whole,
    )


def _ratio(  # a ratio is of something, and noted somewhere
    numerator: float, denominator: float, of: str, number: int, notes: Notes, least: float = 0.0
) -> float | None:
    """Return a ratio, or None with a note where its denominator is not above `least`, or too small to divide by."""
    if denominator > least and isfinite(ratio := numerator / denominator):
        return ratio + 0.0
    why = "too small to divide by" if denominator > least else "not positive"
    notes.no_ratio(f"{of} is {denominator:.6g}, {why}", number)
    return None


def _return(profit: float | None, base: float | None, of: str, number: int, notes: Notes) -> float | None:
    if profit is None or base is None:
        return None
    return _ratio(profit, base, of, number, notes)


def _alone(name: str) -> str:
    return f"the stand-alone figure of {name}"


def _total_return(of: Shared, base: float, number: int, notes: Notes) -> float | None:
    """Return the sum of expected profits over the capital; None, with a note, where some are not given."""
    profits = of.profits[: len(of.frame.table)]
    known = [profit for profit in profits if profit is not None]
    if not known:
        return None
    if len(known) < len(profits):
        lacking = len(profits) - len(known)
        noun = "sub-portfolio has" if lacking == 1 else "sub-portfolios have"
        notes.add("no_expected_profit", f"{lacking:,} {noun} no expected profit")
        return None
    return _ratio(_amount(sum(known)), base, "the capital", number, notes)


def candidate_figures(
    request: IncrementsRequest,
    candidate: Candidate,
    number: int,
    base: Base,
    of: Increment,
    ids: Sequence[str],
    notes: Notes,
) -> CandidateFigures:
    """Return what one candidate changes in measure `number`."""
    coverage = request.interval_coverage
    _refuse_infinite(base.contributions, of.moved)
    total_with, increment, contribution, alone = (
        figure_list(part, coverage)[0] for part in (of.total_with, of.increment, of.contribution, of.stand_alone)
    )
    profit = candidate.expected_profit
    needed = None if request.hurdle_rate is None else _amount(request.hurdle_rate * increment.value)
    cost, most = request.cost_of_capital, request.capital_limit
    return CandidateFigures(
        measure=base.measure.name,
        total_with=total_with,
        increment=increment,
        contribution=contribution,
        stand_alone=alone,
        diversification_benefit=_ratio(alone.value - increment.value, alone.value, _alone(candidate.id), number, notes),
        return_on_capital=_return(profit, increment.value, f"the increment of {candidate.id}", number, notes),
        required_profit=None if cost is None else _amount(cost * increment.value),
        meets_hurdle=None if needed is None or profit is None else profit >= needed,
        within_limit=None if most is None else total_with.value <= most,
        moved=[
            Moved(name, before, after)
            for name, before, after in zip(
                ids, (base.contributions + 0.0).tolist(), (of.moved + 0.0).tolist(), strict=True
            )
        ],
    )


def change_result(name: str, totals: Sequence[Figure], change: Change, coverage: float) -> ComparisonResult:
    """Return how one measure changed; `totals` are before and after."""
    _refuse_infinite(change.contributions)
    *changes, total = figure_list(change.changes, coverage)
    pairs = [[None if value != value else value + 0.0 for value in pair] for pair in change.contributions.tolist()]  # noqa: PLR0124
    parts = [
        ChangedPart(one, state, before, after, figure)
        for one, state, (before, after), figure in zip(change.ids, change.states, pairs, changes, strict=True)
    ]
    states: tuple[State, ...] = ("new", "gone", "changed")
    by_state = [
        ChangeByState(state, len(those), sum((part.change.value for part in those), 0.0))
        for state in states
        for those in [[part for part in parts if part.state == state]]
    ]
    return ComparisonResult(name, totals[0], totals[1], total, parts, by_state)


def tail_level(measures: Sequence[RiskMeasure]) -> float:
    """Return the level of the first measure that has one."""
    return next((level for one in measures if (level := one.parameters.get("level")) is not None), USUAL_LEVEL)


def tail(frame: Frame, level: float, factors: Sequence[FactorMean]) -> Tail:
    """Return the worst scenarios of the total, and the factors beyond its quantile at `level`."""
    table, totals = frame.table, frame.totals
    ranked = np.argsort(-totals, kind="stable")
    possible = ranked if table.probabilities is None else ranked[table.probabilities[ranked] > 0.0]
    worst = possible[:WORST_LISTED]
    rows = table.losses.take(worst, axis=0)
    listed = []
    for number, row in zip(worst.tolist(), rows.tolist(), strict=True):
        losses = [SubPortfolioLoss(one.id, value) for one, value in zip(table.sub_portfolios, row, strict=True)]
        probability = 1.0 / table.scenarios if table.probabilities is None else float(table.probabilities[number])
        label = None if table.scenario_ids is None else table.scenario_ids[number]
        listed.append(TailScenario(number, label, probability, float(totals[number]), losses))
    return Tail(level, listed, [TailFactor(one.id, one.mean, one.normal_score) for one in factors])
