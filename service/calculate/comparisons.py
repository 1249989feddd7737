"""`POST /v1/comparisons`: why a measure moved between two books."""

from collections.abc import Iterator
from contextlib import contextmanager
from dataclasses import asdict, dataclass, is_dataclass, replace
from typing import Any, Literal

import numpy as np
from numpy.typing import NDArray

from service import __version__
from service.answers import Notes, change_result
from service.calculate.calculation import Calculation
from service.canonical import canonical_comparison
from service.errors import CallerError, Fault, InvalidValue, pointing
from service.executors import Work
from service.frames import Demand, has_error, without_errors
from service.intake import Intake
from service.provenance import document_digest
from service.risk.comparisons import Change, compared, parts_of
from service.risk.measures import RiskMeasure
from service.risk.uncertainty import Estimates
from service.schemas.losses import FactorLosses, HistoryLosses, Losses, ScenarioLosses
from service.schemas.requests import ComparisonsRequest, MeasuresRequest
from service.schemas.results import ComparedBook, ComparisonResult, ComparisonsAnswer, Labels, Provenance
from service.settings import Settings
from service.sources import source_of

Which = Literal["before", "after"]


@dataclass(frozen=True, slots=True, eq=False)
class _Book:
    """One of the two books, framed."""

    losses: Losses
    calculation: Calculation

    @property
    def ids(self) -> list[str]:
        """Of its sub-portfolios."""
        return [one.id for one in self.calculation.source.sub_portfolios]


class Comparisons:
    """`POST /v1/comparisons`."""

    def __init__(self, intake: Intake, request: ComparisonsRequest, work: Work, settings: Settings) -> None:
        self.intake, self.request = intake, request
        self.before = _book(intake, request, "before", work.part(0.0, 0.5), settings)
        self.after = _book(intake, request, "after", work.part(0.5, 1.0), settings)
        fewest = min(one.frame.scenarios for one in self._calculations)
        self.notes = Notes(fewest, pointed=True)
        for book in (self.before, self.after):
            self.notes.take(book.calculation.notes)
        self._compare_labels()
        self.paired = self._paired()
        if not self.paired and _overlapping(request.before, request.after, *self._calculations):
            detail = (
                "the books share scenarios but do not have the same ones in the same order, and the error of a change "
                "counts them as independent: it may be far off, mostly too large; with as many scenarios of the same "
                "seed, the same periods, or the same labels in order, it is that of the differences"
            )
            self.notes.add("samples_overlap", detail)

    def answer(self) -> ComparisonsAnswer:
        """Return how each measure and each contribution changed."""
        results = []
        for number, measure in enumerate(self.request.measures):
            for book in (self.before, self.after):
                book.calculation.stage(number, len(self.request.measures))
            with pointing(f"/measures/{number}"):
                results.append(self._result(number, measure))
        after = self.after.calculation
        after.stage(1, 1)  # all are done
        losses = self.request.after
        return ComparisonsAnswer(
            comparisons=results,
            same_scenarios=self.paired,
            before=_record(self.before),
            after=_record(self.after),
            labels=Labels(losses.currency, losses.valuation_date, losses.horizon, self.request.reference),
            notes=self.notes.listed(),
            provenance=Provenance(
                service_version=__version__,
                request_digest=document_digest(
                    canonical_comparison(self.request, self.before.calculation.source, after.source)
                ),
                losses_digest=after.source.digest,
                method=after.source.method,
                seed=after.source.seed,
                scenarios=after.frame.scenarios,
            ),
        )

    @property
    def _calculations(self) -> tuple[Calculation, Calculation]:
        return self.before.calculation, self.after.calculation

    def _result(self, number: int, measure: RiskMeasure) -> ComparisonResult:
        coverage = self.request.interval_coverage
        books = (self.before, self.after)
        then, now = (
            (one.calculation.frame, one.ids, parts_of(one.calculation.frame, measure, coverage)) for one in books
        )
        change = compared(measure, then, now, paired=self.paired, coverage=coverage)
        pooled = [one.calculation.made.scramblings for one in books]
        if any(pooled):
            parts = [
                compared(
                    measure,
                    (first, self.before.ids, parts_of(first, measure, coverage)),
                    (second, self.after.ids, parts_of(second, measure, coverage)),
                    paired=self.paired,
                    coverage=coverage,
                ).changes.values
                for first, second in zip(*pooled, strict=True)
            ]
            change = replace(change, changes=self.after.calculation.made.combined(change.changes, parts))
        change = replace(change, changes=self._surely(measure, change))
        self.notes.of_estimates(number, measure, change.changes)
        totals = [one.calculation.total(number, measure) for one in books]
        return change_result(measure.name, totals, change, coverage)

    def _surely(self, measure: RiskMeasure, change: Change) -> Estimates:
        """Return changes without the errors that the laws of the losses do not have."""
        unknown = np.zeros(len(change.ids) + 1, dtype=bool)
        for book in (self.before, self.after):
            made = book.calculation.made
            if not has_error(measure, made.total):
                unknown[-1] = True
            for row, name in enumerate(change.ids):
                inside = name in book.ids
                if inside and not has_error(measure, made.total, made.law_of(book.ids.index(name))):
                    unknown[row] = True
        return without_errors(change.changes, unknown)

    def _compare_labels(self) -> None:
        """Refuse two currencies, and note other labels that make a change hard to read."""
        then, now = self.request.before, self.request.after
        if then.currency and now.currency and then.currency != now.currency:
            detail = f"before is in {then.currency}, after in {now.currency}: nothing is converted"
            raise InvalidValue.at("/after/currency", detail, code="not_allowed")
        if then.horizon and now.horizon and then.horizon != now.horizon:
            detail = f"the horizons differ, so the books are not all that changed: {then.horizon}, then {now.horizon}"
            self.notes.say("labels_differ", detail, "/after/horizon")
        if then.valuation_date and now.valuation_date and then.valuation_date > now.valuation_date:
            detail = f"before is of {then.valuation_date}, later than after, which is of {now.valuation_date}"
            self.notes.say("labels_differ", detail, "/after/valuation_date")

    def _paired(self) -> bool:
        """Return whether the scenarios of both books are the same."""
        then, now = self.before.calculation, self.after.calculation
        if bool(then.made.scramblings) != bool(now.made.scramblings):
            detail = "one book is simulated with Sobol points and the other is not: their errors do not compare"
            raise InvalidValue.at("/after", detail, code="not_allowed")
        given = self.request.same_scenarios
        found = _same(self.request.before, self.request.after, then, now)
        if then.frame.table.sampled != now.frame.table.sampled:
            detail = "one book is a sample and the other a population: their errors do not compare"
            raise InvalidValue.at("/after", detail, code="not_allowed")
        if given and not _same_weights(then, now):
            detail = "the books do not have the same number of scenarios, as probable and as dependent on each other"
            raise InvalidValue.at("/same_scenarios", detail, code="not_allowed")
        return (found if given is None else given) and _same_weights(then, now)


def _same_weights(then: Calculation, now: Calculation) -> bool:
    """Return whether two samples are as long, as probable and as dependent, scenario by scenario."""
    first, second = then.frame.table, now.frame.table
    alike = _alike(first.probabilities, second.probabilities) and _alike(first.clusters, second.clusters)
    return first.scenarios == second.scenarios and alike


def _alike(first: NDArray[Any] | None, second: NDArray[Any] | None) -> bool:
    if first is None or second is None:
        return first is second
    return bool(np.array_equal(first, second))


def _same(before: Losses, after: Losses, then: Calculation, now: Calculation) -> bool:
    """Return whether two sources have the same losses, or say of themselves that they have the same scenarios."""
    if then.source.digest == now.source.digest:
        return True
    if isinstance(before, ScenarioLosses) and isinstance(after, ScenarioLosses):
        labels = then.frame.table.scenario_ids
        return labels is not None and labels == now.frame.table.scenario_ids
    if isinstance(before, FactorLosses) and isinstance(after, FactorLosses):
        return _plain(before.simulation) == _plain(after.simulation)  # the same draws, whatever laws they are put to
    if isinstance(before, HistoryLosses) and isinstance(after, HistoryLosses):
        observed = ("factors", "decay", "horizon_scaling")
        first, second = then.source.changes, now.source.changes
        same = first is not None and second is not None and np.array_equal(first.values, second.values)
        return same and all(_plain(getattr(before, name)) == _plain(getattr(after, name)) for name in observed)
    return False


def _overlapping(before: Losses, after: Losses, then: Calculation, now: Calculation) -> bool:
    """Return whether two samples have scenarios in common: draws of one seed, or periods that both observed."""
    if isinstance(before, FactorLosses) and isinstance(after, FactorLosses):
        return before.simulation.seed == after.simulation.seed
    if isinstance(before, ScenarioLosses) and isinstance(after, ScenarioLosses):
        labels = (one.frame.table.scenario_ids or () for one in (then, now))
        return not set(next(labels)).isdisjoint(next(labels))
    first, second = then.source.changes, now.source.changes
    if first is None or second is None or first.values.shape[1] != second.values.shape[1]:
        return False
    return not {row.tobytes() for row in first.values}.isdisjoint(row.tobytes() for row in second.values)


def _plain(value: object) -> object:
    """Return a value that compares by what it says."""
    if isinstance(value, list):
        return [_plain(one) for one in value]
    return asdict(value) if is_dataclass(value) and not isinstance(value, type) else value


def _book(intake: Intake, request: ComparisonsRequest, which: Which, work: Work, settings: Settings) -> _Book:
    """Return one of the books; the pointers of what is wrong with it begin with its name."""
    losses = request.before if which == "before" else request.after
    asked = MeasuresRequest(
        losses=losses,
        measures=request.measures,
        interval_coverage=request.interval_coverage,
        include_stand_alone=False,
    )
    table = intake.tables.get(which)
    with _named(which):
        known = intake.sources.get(which)
        source = known or source_of(losses, table, part=None, work=work, settings=settings)
        demand = Demand(request.measures, request.interval_coverage, stand_alone=False)
        inner = Intake("measures", asked, table, sources={} if known is None else {"losses": known})
        calculation = Calculation(inner, source, demand, work, settings)
    calculation.notes.name(which)
    return _Book(losses, calculation)


@contextmanager
def _named(which: Which) -> Iterator[None]:
    try:
        yield
    except CallerError as error:
        error.faults = tuple(_under(fault, which) for fault in error.faults)
        raise


def _under(fault: Fault, which: Which) -> Fault:
    """Point into the book instead of into `losses`."""
    if fault.pointer is None or not fault.pointer.startswith("/losses"):
        return fault
    return replace(fault, pointer=f"/{which}" + fault.pointer.removeprefix("/losses"))


def _record(book: _Book) -> ComparedBook:
    calculation = book.calculation
    return ComparedBook(
        calculation.source.digest, calculation.frame.scenarios, book.losses.valuation_date, book.losses.horizon
    )
