"""From a source of losses to the frame that figures are computed on: held, streamed, or one of each scrambling."""

from collections.abc import Callable, Sequence
from dataclasses import dataclass, replace
from math import ceil
from typing import Literal

import numpy as np
from numpy.typing import NDArray
from scipy import special

from service.errors import Fault, Limit, LimitExceeded, NotDefined
from service.executors import Work
from service.risk import figures
from service.risk.covers import Tails
from service.risk.frame import Frame, depth_of
from service.risk.loss_table import Group, LossTable
from service.risk.measures import RiskMeasure
from service.risk.quantiles import Array
from service.risk.simulation import Plan, simulated
from service.risk.streaming import streamed
from service.risk.streams import BLOCK, SCRAMBLINGS
from service.risk.uncertainty import Estimates
from service.schemas.losses import StopWhen
from service.settings import Settings, variable
from service.sources import Note, Source

FIRST_LOOK = 65_536  # scenarios before the first look at the error
TAIL_OF_FIRST_LOOK = 1_000  # tail scenarios before it
LOOKS_IN_A_ROW = 2  # that must meet the target
CELL_BYTES = 8
PART_HELD = 2  # a table may take one part in so many of the memory; sorted copies of it take the rest
SIMULATED = 0.9  # of the progress of making a frame, where its scenarios have to be simulated


@dataclass(frozen=True, slots=True)
class Demand:
    """What a calculation needs of the scenarios.

    Attributes
    ----------
    measures : sequence of RiskMeasure
    coverage : float
        Nominal coverage of the intervals.
    groups : sequence of Group
    stand_alone : bool
        Whether each column is looked at alone.
    all_losses : bool
        Whether a rule or a candidate needs more than the tail.
    """

    measures: Sequence[RiskMeasure]
    coverage: float
    groups: Sequence[Group] = ()
    stand_alone: bool = True
    all_losses: bool = False


@dataclass(frozen=True, slots=True)
class Framed:
    """The frame of all scenarios and, for Sobol points, one of each scrambling.

    Attributes
    ----------
    frame : Frame
    coverage : float
    scramblings : tuple of Frame
        Empty where errors come from the scenarios themselves.
    plan : Plan or None
        As it was carried out.
    columns : sequence of Tails
        Of each sub-portfolio and group, where the law is known; else empty.
    total : Tails
    notes : tuple of (str, str, str or None)
        Code, detail and pointer into the request.
    """

    frame: Frame
    coverage: float
    scramblings: tuple[Frame, ...] = ()
    plan: Plan | None = None
    columns: Sequence[Tails] = ()
    total: Tails = Tails()  # noqa: RUF009  # frozen: thin tails, as scenarios that were given have
    notes: tuple[Note, ...] = ()

    def again(self, work: Work) -> "Framed":
        """Return the same for other work on the same scenarios."""
        return replace(
            self, frame=self.frame.again(work), scramblings=tuple(frame.again(work) for frame in self.scramblings)
        )

    @property
    def size(self) -> int:
        """Bytes that it takes, about."""
        return sum(frame.size for frame in (self.frame, *self.scramblings))

    def estimated(
        self, measure: RiskMeasure, of: Literal["total", "alone", "parts"], function: Callable[[Frame], Estimates]
    ) -> Estimates:
        """Return the figures that `function` finds on the frame, with such errors as the scenarios allow.

        With Sobol points the figure is that of all points and its error that of the mean over the
        scramblings, with Student's t (Owen, Lecture Notes in Statistics 106, 1995, 299-317). Where the law
        is known to have no second moment there is no error.
        """
        values = [function(frame).values for frame in self.scramblings]
        return self._sure(measure, of, self.combined(function(self.frame), values))

    def combined(self, pooled: Estimates, values: Sequence[Array]) -> Estimates:
        """Return pooled figures with the error that their `values` in each scrambling show; unchanged without any."""
        if not values:
            return pooled
        errors = np.stack(values).std(axis=0, ddof=1) / np.sqrt(SCRAMBLINGS)
        half = float(special.stdtrit(SCRAMBLINGS - 1, (1.0 + self.coverage) / 2.0)) * errors
        lower, upper = pooled.values - half, pooled.values + half
        return replace(pooled, standard_errors=errors, lower=lower, upper=upper, method="scramblings")

    def _sure(self, measure: RiskMeasure, of: Literal["total", "alone", "parts"], figures_: Estimates) -> Estimates:
        """Take the error from figures whose law has none."""
        if not self.columns:
            return figures_
        laws = [self.total] if of == "total" else list(self.columns)
        known = np.array([_has_error(measure, law) for law in laws])
        if of == "parts":
            known &= _has_error(measure, self.total)
        return without_errors(figures_, ~known)

    def law_of(self, column: int) -> Tails:
        """Return what is known of the law of a sub-portfolio; thin tails where nothing is."""
        return self.columns[column] if self.columns else Tails()


def framed(source: Source, demand: Demand, stop: StopWhen | None, work: Work, settings: Settings) -> Framed:
    """Return the frame of a source's scenarios, simulating them if need be.

    Raises
    ------
    NotDefined
        For a figure that the law of the losses does not have.
    LimitExceeded
        For a simulation that neither fits into memory nor can be streamed.
    """
    if source.table is not None:
        frame = Frame.of(source.table, demand.groups, demand.measures, work, stand_alone=demand.stand_alone)
        return Framed(frame, demand.coverage, notes=source.notes)
    if source.plan is None:
        raise ValueError("a source has a table or a plan")
    columns, total = _laws(source.plan, demand, work)
    _refuse_missing(source, demand, columns, total)
    if stop is None:
        made = _carried_out(source, source.plan, demand, work, settings)
    else:
        made = _until(source, source.plan, demand, stop, work, settings)
    return replace(made, columns=columns, total=total, notes=source.notes + made.notes)


def _laws(plan: Plan, demand: Demand, work: Work) -> tuple[list[Tails], Tails]:
    """Return the tails of each sub-portfolio and group, and of the total: a group is judged as the total is."""
    exponential = any(measure.needs.exponential > 0.0 for measure in demand.measures)
    each, total = plan.model.existence(exponential=exponential, pause=work.checkpoint)
    groups = []
    for group in demand.groups:
        work.checkpoint()
        groups.append(plan.model.portfolio.of_sum(group.members.tolist(), each, exponential=exponential))
    return each + groups, total


def _carried_out(
    source: Source, plan: Plan, demand: Demand, work: Work, settings: Settings, *, before: Array | None = None
) -> Framed:
    """Return the frame of one plan; `before` are the first scenarios where a shorter one gave them."""
    size = CELL_BYTES * plan.scenarios * plan.columns
    if size <= settings.max_memory_bytes // PART_HELD:
        losses = simulated(plan, work.part(0.0, SIMULATED), before=before)
        return _held(source, plan, demand, work.part(SIMULATED, 1.0), losses)
    partial = all(depth_of(measure, plan.scenarios, contributions=True) < 1.0 for measure in demand.measures)
    if plan.sobol or demand.all_losses or not partial:
        raise _too_large(size, settings)
    effort = work.part(0.0, SIMULATED)
    frame = streamed(
        plan, source.sub_portfolios, demand.groups, demand.measures, effort, stand_alone=demand.stand_alone
    )
    return Framed(frame, demand.coverage, plan=plan)


def _held(source: Source, plan: Plan, demand: Demand, work: Work, losses: Array) -> Framed:
    """Return the frame of simulated losses in memory."""

    def of(part: Array) -> Frame:
        table = LossTable(part, None, not plan.sobol, source.sub_portfolios, points=bool(plan.sobol))
        return Frame.of(table, demand.groups, demand.measures, work, stand_alone=demand.stand_alone)

    size = plan.scenarios // SCRAMBLINGS
    parts = [losses[k * size : (k + 1) * size] for k in range(SCRAMBLINGS)] if plan.sobol else []
    scramblings = tuple(of(part) for part in parts)
    return Framed(of(losses), demand.coverage, scramblings, plan)


def _until(source: Source, plan: Plan, demand: Demand, stop: StopWhen, work: Work, settings: Settings) -> Framed:
    """Simulate, look at the errors of the totals, and double until they are small enough twice in a row."""
    light = replace(demand, stand_alone=False, groups=())
    shares = [share for one in demand.measures if (share := one.tail_share) is not None]
    first = max(FIRST_LOOK, ceil(TAIL_OF_FIRST_LOOK / min(shares))) if shares else FIRST_LOOK
    most = plan.most(stop.max_scenarios)
    scenarios = min(-(-first // BLOCK) * BLOCK, most)
    met, done, before = 0, 0, None
    while True:
        longer = plan.of_size(scenarios)
        looking = work.part(done / most, longer.scenarios / most)
        made = _carried_out(source, longer, light, looking, settings, before=before)
        worst = max(_relative_errors(made, demand))
        met = met + 1 if worst <= stop.relative_standard_error else 0
        done, before = longer.scenarios, _first_of_more(made)
        if met == LOOKS_IN_A_ROW or done >= most:
            break
        scenarios = min(2 * done, most)
    reached = f"the largest relative standard error of a total is {worst:.3g}"
    if met < LOOKS_IN_A_ROW:
        where = f"the most scenarios allowed, {most:,}"
        if most < stop.max_scenarios:
            where = f"{most:,} Sobol points, as many as fit into the {stop.max_scenarios:,} scenarios allowed"
        note = f"stopped at {where}: {reached}"
    else:
        note = f"stopped after {longer.scenarios:,} scenarios: {reached}; intervals are not corrected for stopping"
    looking = work.part(done / most, 1.0)
    made = _carried_out(source, longer, demand, looking, settings, before=before)
    return replace(made, notes=(*made.notes, ("stopped", note, "/losses/simulation/stop_when")))


def _first_of_more(made: Framed) -> Array | None:
    """Return the losses that a longer simulation begins with; None where they are not held, or with Sobol points."""
    if made.scramblings or made.frame.columns is None:
        return None
    return made.frame.columns[0]


def _relative_errors(made: Framed, demand: Demand) -> list[float]:
    """Return the standard error of each measure of the total over its size; infinite where there is none."""
    ratios = []
    for measure in demand.measures:
        total = made.estimated(measure, "total", lambda frame, measure=measure: figures.total(frame, measure, 0.95))  # type: ignore[misc]
        ratio = float(total.standard_errors[0]) / abs(float(total.values[0])) if total.values[0] != 0.0 else np.inf
        ratios.append(ratio if np.isfinite(ratio) else np.inf)
    return ratios


def sure(measure: RiskMeasure, figures_: Estimates, *laws: Tails) -> Estimates:
    """Take the errors from figures where one of the laws that they rest on has none."""
    return without_errors(figures_, np.full(figures_.values.shape, not has_error(measure, *laws)))


def without_errors(figures_: Estimates, unknown: NDArray[np.bool_]) -> Estimates:
    """Take the errors from the figures (c,) whose laws have none, by `unknown` (c,)."""
    if not unknown.any():
        return figures_
    errors, lower, upper = (
        np.where(unknown, np.nan, part) for part in (figures_.standard_errors, figures_.lower, figures_.upper)
    )
    return replace(figures_, standard_errors=errors, lower=lower, upper=upper).remarked("infinite_variance")


def has_error(measure: RiskMeasure, *laws: Tails) -> bool:
    """Return whether all laws have the moments that an error of the measure needs."""
    return all(_has_error(measure, law) for law in laws)


def _has_error(measure: RiskMeasure, law: Tails) -> bool:
    needs = measure.needs
    lower = needs.lower_index == 0.0 or law.lower_index > needs.error_index
    return law.upper_index > needs.error_index and lower and law.upper_exponential >= 2.0 * needs.exponential


def _missing(measure: RiskMeasure, law: Tails) -> str | None:
    """Return that a figure does not exist, or may not, and why; None if it does."""
    needs = measure.needs
    if law.upper_index <= needs.upper_index:
        index = f"its upper tail index is {law.upper_index:.6g} and must be above {needs.upper_index:.6g}"
        return f"does not exist: {index}"
    if law.lower_index <= needs.lower_index:
        index = f"its lower tail index is {law.lower_index:.6g} and must be above {needs.lower_index:.6g}"
        return f"does not exist: {index}"
    rate = law.upper_exponential
    if needs.exponential <= 0.0 or rate > needs.exponential:
        return None
    if law.upper_sharp:
        below = f"is finite for t below {rate:.6g} only" if rate > 0.0 else "is infinite for every t above 0"
        return f"does not exist: E[exp(t L)] {below}"
    below = f"surely finite only for t below {rate:.6g}" if rate > 0.0 else "not surely finite for any t above 0"
    return f"may not exist: E[exp(t L)] is {below}"


def missing(measures: Sequence[RiskMeasure], law: Tails) -> str | None:
    """Return why a loss of this law does not have its mean or one of the measures; None if it has all."""
    if min(law.upper_index, law.lower_index) <= 1.0:
        return f"the loss has no mean: a tail index is {min(law.upper_index, law.lower_index):.6g}"
    reasons = ((measure, _missing(measure, law)) for measure in measures)
    return next((f"{measure.name} {reason}" for measure, reason in reasons if reason), None)


def _refuse_missing(source: Source, demand: Demand, columns: Sequence[Tails], total: Tails) -> None:
    """Refuse means and measures that the laws of the losses do not have."""
    for number, (one, law) in enumerate(zip(source.sub_portfolios, columns, strict=False)):
        if min(law.upper_index, law.lower_index) <= 1.0:
            detail = f"the loss of {one.id!r} has no mean: a tail index is {min(law.upper_index, law.lower_index):.6g}"
            raise NotDefined.at(f"/losses/sub_portfolios/{number}", detail, code="infinite_mean")
    names = [one.id for one in source.sub_portfolios] + [f"{one.attribute} {one.name}" for one in demand.groups]
    for number, measure in enumerate(demand.measures):
        laws = [("the total", total)]
        if demand.stand_alone:
            laws += [(repr(name), law) for name, law in zip(names, columns, strict=True)]
        for name, law in laws:
            reason = _missing(measure, law)
            if reason is not None:
                detail = f"{measure.name} of {name} {reason}"
                raise NotDefined.at(f"/measures/{number}", detail, code="infinite_figure")


def _too_large(size: int, settings: Settings) -> LimitExceeded:
    name = "max_memory_bytes"
    detail = (
        f"the simulated losses take {size} bytes, and {settings.max_memory_bytes // PART_HELD} may be held; value at "
        "risk, expected shortfall, range value at risk and return level above zero by the rule euler need no more "
        "than their tails, so ask for these alone, or for fewer scenarios"
    )
    limit = Limit(name=name, allowed=settings.max_memory_bytes, asked=PART_HELD * size, setting=variable(name))
    fault = Fault(detail=detail, code=LimitExceeded.code, pointer="/losses/simulation/scenarios")
    return LimitExceeded(detail, limit=limit, faults=[fault])
