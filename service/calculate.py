"""From a request to its answer, one class per calculation; HTTP and terminal share it."""

import sys
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from dataclasses import replace
from typing import Any

import numpy as np
from numpy.typing import NDArray
from pydantic import TypeAdapter, ValidationError

from service import __version__, answers
from service.answers import Notes, figure_list
from service.canonical import canonical_request
from service.errors import (
    CallerError,
    Fault,
    InvalidValue,
    Limit,
    LimitExceeded,
    LossesChanged,
    TailraceError,
    TooLong,
    pointing,
)
from service.executors import Work
from service.frames import Demand, framed
from service.intake import Intake
from service.payloads import json_text
from service.provenance import PREFIX, document_digest
from service.risk import figures, increments
from service.risk.allocation import RULES, Case, Contributions
from service.risk.frame import Frame
from service.risk.increments import Base
from service.risk.loss_table import Group, check_magnitude, groups_of
from service.risk.measures import RangeValueAtRisk, RiskMeasure
from service.risk.uncertainty import Estimates
from service.schemas.losses import FactorLosses, ScenarioLosses
from service.schemas.requests import AllocationsRequest, Candidate, IncrementsRequest, MeasuresRequest
from service.schemas.results import (
    AllocationResult,
    AllocationsAnswer,
    BaseFigure,
    CandidateFigures,
    CandidateResult,
    Figure,
    IncrementsAnswer,
    Labels,
    MeasuresAnswer,
    Provenance,
    Tail,
)
from service.settings import Settings, variable
from service.sources import Source, source_of
from service.validation import echo, refusal

LARGEST = int(sys.float_info.max)
SEED_DIGITS = 13  # hexadecimal digits of the losses digest that seed what is drawn: 52 bits

Answer = MeasuresAnswer | AllocationsAnswer | IncrementsAnswer
Describe = Callable[[TailraceError], dict[str, Any]]

MEAN = RangeValueAtRisk(kind="range_value_at_risk", lower_level=0.0, upper_level=1.0)
"""The expected loss as a measure, for what its error needs."""
CANDIDATE: TypeAdapter[Candidate] = TypeAdapter(Candidate)


def answer(intake: Intake, work: Work, settings: Settings, describe: Describe) -> Answer:
    """Return the answer of a request.

    Parameters
    ----------
    intake : Intake
        As read from the caller.
    work : Work
        Threads to use, and the question whether the answer is still wanted.
    settings : Settings
    describe : callable
        Makes the problem document of an error, for what is refused inside an answer.

    Raises
    ------
    TailraceError
        Where a figure does not exist, a limit is passed, time is up or the caller has gone.
    """
    source = source_of(intake, work, settings)
    request = intake.request
    if isinstance(request, IncrementsRequest):
        return _Increments(intake, request, source, work, settings, describe).answer()
    groups = _groups(request, source, settings)
    if isinstance(request, AllocationsRequest):
        return _Allocations(intake, request, source, groups, work, settings).answer()
    return _Measures(intake, request, source, groups, work, settings).answer()


def _groups(request: MeasuresRequest, source: Source, settings: Settings) -> tuple[Group, ...]:
    with pointing("/group_by"):
        groups = groups_of(source.sub_portfolios, request.group_by)
        if len(groups) > settings.max_groups:
            detail = f"{len(groups)} groups are more than the {settings.max_groups} allowed here"
            name = "max_groups"
            limit = Limit(name=name, allowed=settings.max_groups, asked=len(groups), setting=variable(name))
            raise LimitExceeded(detail, limit=limit, faults=[Fault(detail=detail, code=LimitExceeded.code)])
    return groups


@contextmanager
def placed(intake: Intake) -> Iterator[None]:
    """Say of a fault found at a scenario where the caller put that scenario."""
    try:
        yield
    except CallerError as error:
        error.faults = tuple(_placed(fault, intake) for fault in error.faults)
        raise


def _placed(fault: Fault, intake: Intake) -> Fault:
    number = (fault.pointer or "").removeprefix("/")
    if not number.isdigit():
        return fault
    losses = intake.request.losses
    if isinstance(losses, ScenarioLosses):
        if intake.part is not None:
            return replace(fault, pointer=None, part=intake.part, row=int(number) + 1)
        if losses.values is not None and losses.layout == "by_scenario":
            return fault.beneath("/losses/values")
    return replace(fault, pointer="/losses")


class _Calculation:
    """What all calculations on a frame share."""

    def __init__(self, intake: Intake, source: Source, demand: Demand, work: Work, settings: Settings) -> None:
        losses = intake.request.losses
        stop = losses.simulation.stop_when if isinstance(losses, FactorLosses) else None
        with placed(intake):
            self.made = framed(source, demand, stop, work, settings)
        self.intake, self.source, self.frame = intake, source, self.made.frame
        self.coverage = demand.coverage
        self.notes = Notes(self.frame.scenarios, pointed=intake.part != "body")
        for code, detail, pointer in self.made.notes:
            self.notes.say(code, detail, pointer)
        if source.table is not None and not source.table.sampled:
            self.notes.add("population", "the scenarios are the whole distribution: no figure has a sampling error")

    def total(self, number: int, measure: RiskMeasure) -> Figure:
        """Return the figure of the total, with its notes."""
        estimates = self.made.estimated(measure, "total", lambda frame: figures.total(frame, measure, self.coverage))
        self.notes.of_estimates(number, measure, estimates)
        return figure_list(estimates, self.coverage)[0]

    def alone(self, number: int, measure: RiskMeasure) -> list[Figure]:
        """Return the stand-alone figures, with their notes."""
        estimates = self.made.estimated(
            measure, "alone", lambda frame: figures.stand_alone(frame, measure, self.coverage)
        )
        self.notes.of_estimates(number, measure, estimates)
        return figure_list(estimates, self.coverage)

    def record(self) -> dict[str, Any]:
        """Return labels, notes and provenance, which every answer holds."""
        request = self.intake.request
        losses = request.losses
        return {
            "labels": Labels(losses.currency, losses.valuation_date, losses.horizon, request.reference),
            "notes": self.notes.listed(),
            "provenance": Provenance(
                service_version=__version__,
                request_digest=document_digest(canonical_request(self.intake, self.source)),
                losses_digest=self.source.digest,
                method=self.source.method,
                seed=self.source.seed,
                scenarios=self.frame.scenarios,
            ),
        }

    def shared(self, request: MeasuresRequest) -> dict[str, Any]:
        """Return what measures and allocations hold besides their results."""
        expected = self.made.estimated(MEAN, "total", lambda frame: figures.expected_loss(frame, self.coverage))
        return {
            "expected_loss": figure_list(expected, self.coverage)[0],
            "scenarios": self.frame.scenarios,
            "tail": self._tail(request) if request.tail_detail else None,
            **self.record(),
        }

    def _tail(self, request: MeasuresRequest) -> Tail:
        """Return the worst scenarios, and what the factors are in the tail."""
        level = answers.tail_level(request.measures)
        numbers, weights = figures.tail_scenarios(self.frame, level)
        source = replace(self.source, plan=self.made.plan)
        return answers.tail(self.frame, level, source.factor_means(numbers, weights))


class _Measures(_Calculation):
    """`POST /v1/measures`."""

    def __init__(
        self,
        intake: Intake,
        request: MeasuresRequest,
        source: Source,
        groups: tuple[Group, ...],
        work: Work,
        settings: Settings,
    ) -> None:
        demand = Demand(request.measures, request.interval_coverage, groups, request.include_stand_alone)
        super().__init__(intake, source, demand, work, settings)
        self.request = request

    def answer(self) -> MeasuresAnswer:
        results = []
        for number, measure in enumerate(self.request.measures):
            with pointing(f"/measures/{number}"):
                total = self.total(number, measure)
                alone = self.alone(number, measure) if self.request.include_stand_alone else None
            results.append(answers.measure_result(measure.name, number, total, alone, self.frame, self.notes))
        return MeasuresAnswer(measures=results, **self.shared(self.request))


class _Allocations(_Calculation):
    """`POST /v1/allocations`."""

    def __init__(
        self,
        intake: Intake,
        request: AllocationsRequest,
        source: Source,
        groups: tuple[Group, ...],
        work: Work,
        settings: Settings,
    ) -> None:
        measures: list[RiskMeasure] = list(request.measures)
        if request.capital_measure is not None:
            measures.append(request.capital_measure)
        demand = Demand(
            measures,
            request.interval_coverage,
            groups,
            request.include_stand_alone,
            all_losses=request.rules != ["euler"],
        )
        super().__init__(intake, source, demand, work, settings)
        self.request = request

    def answer(self) -> AllocationsAnswer:
        of = answers.shared(self.frame, self._capital())
        results = []
        for number, measure in enumerate(self.request.measures):
            with pointing(f"/measures/{number}"):
                total = self.total(number, measure)
                alone = self.alone(number, measure) if self.request.include_stand_alone else None
                results += [self._split(number, measure, rule, total, alone, of) for rule in self.request.rules]
        return AllocationsAnswer(allocations=results, **self.shared(self.request))

    def _split(  # each is made once for all rules
        self,
        number: int,
        measure: RiskMeasure,
        rule: str,
        total: Figure,
        alone: list[Figure] | None,
        of: answers.Shared,
    ) -> AllocationResult:
        """Return one measure split by one rule."""
        splits: list[Contributions] = []

        def split(frame: Frame) -> Estimates:
            splits.append(RULES[rule](self._case(frame, measure)))
            return splits[-1].figures

        estimates = self.made.estimated(measure, "parts", split)
        self.notes.of_estimates(number, measure, estimates)
        parts = figure_list(estimates, self.coverage)
        return answers.allocation_result((measure.name, rule), number, total, splits[0], parts, alone, of, self.notes)

    def _capital(self) -> float | None:
        if self.request.capital_measure is None:
            return self.request.capital
        with pointing("/capital_measure"):
            estimates = figures.total(self.frame, self.request.capital_measure, self.coverage)
            return figure_list(estimates, self.coverage)[0].value

    def _case(self, frame: Frame, measure: RiskMeasure) -> Case:
        return Case(
            frame=frame,
            measure=measure,
            coverage=self.coverage,
            smoothing=self.request.smoothing,
            seed=int(self.source.digest.removeprefix(PREFIX)[:SEED_DIGITS], 16),
        )


class _Increments(_Calculation):
    """`POST /v1/increments`."""

    def __init__(
        self,
        intake: Intake,
        request: IncrementsRequest,
        source: Source,
        work: Work,
        settings: Settings,
        describe: Describe,
    ) -> None:
        if request.base_digest not in (None, source.digest):
            detail = f"the losses have the digest {source.digest}, not the one given"
            raise LossesChanged.at("/base_digest", detail)
        demand = Demand(request.measures, request.interval_coverage, stand_alone=False, all_losses=True)
        super().__init__(intake, source, demand, work, settings)
        self.request, self.describe = request, describe
        self.ids = [one.id for one in source.sub_portfolios]

    def answer(self) -> IncrementsAnswer:
        bases, totals = [], []
        for number, measure in enumerate(self.request.measures):
            with pointing(f"/measures/{number}"):
                totals.append(BaseFigure(measure.name, self.total(number, measure)))
                bases.append(increments.base_of(self.frame, measure))
        judged = self.frame.effort.map(
            lambda number: self._candidate(number, bases), range(len(self.request.candidates))
        )
        results = [result for result, _ in judged]
        for _, notes in judged:  # in the order of the candidates, whichever was ready first
            self.notes.take(notes)
        refused = sum(one.status == "refused" for one in results)
        return IncrementsAnswer(base=totals, candidates=results, refused=refused, **self.record())

    def _candidate(self, number: int, bases: list[Base]) -> tuple[CandidateResult, Notes]:
        """Return what one candidate changes, or its problem; several are judged at the same time."""
        notes = Notes(self.frame.scenarios, pointed=self.notes.pointed)
        document = self.request.candidates[number]
        self.frame.effort.checkpoint(number / len(self.request.candidates))
        name = document.get("id") if isinstance(document, dict) else None
        try:
            with pointing(f"/candidates/{number}"):
                candidate = self._read(number, document)
                with pointing("/values"):
                    loss = self._loss(document["values"])
                parts = [self._figures(candidate, base, loss, measure, notes) for measure, base in enumerate(bases)]
        except TooLong:
            raise
        except CallerError as error:
            known = name if isinstance(name, str) else None
            return CandidateResult(known, "refused", [], self.describe(error)), notes
        return CandidateResult(candidate.id, "ok", parts, None), notes

    def _read(self, number: int, document: Any) -> Candidate:
        shell = document | {"values": [0.0]} if isinstance(document, dict) and "values" in document else document
        try:
            candidate = CANDIDATE.validate_json(json_text(shell))
        except ValidationError as error:
            raise refusal(error, shell, Candidate) from None
        earlier = [one.get("id") for one in self.request.candidates[:number] if isinstance(one, dict)]
        if candidate.id in self.ids or candidate.id in earlier:
            raise InvalidValue.at("/id", f"{candidate.id!r} is taken already", code="repeated")
        return candidate

    def _loss(self, values: Any) -> NDArray[np.float64]:
        """Return the candidate's losses (n,): its values are checked here, many at a time."""
        if not isinstance(values, list) or len(values) != self.frame.scenarios:
            count = f"{len(values)} values are" if isinstance(values, list) else "no list is"
            detail = f"{count} given, but the book has {self.frame.scenarios} scenarios"
            raise InvalidValue.at("", detail, code="wrong_count")
        wrong = next((number for number, value in enumerate(values) if not _is_number(value)), None)
        loss = np.array(values if wrong is None else values[:wrong], dtype=np.float64) + 0.0
        if wrong is None and not np.isfinite(loss).all():
            wrong = int(np.argmin(np.isfinite(loss)))
        if wrong is not None:
            raise InvalidValue.at(f"/{wrong}", f"{echo(values[wrong])} is not a finite number", code="wrong_type")
        check_magnitude(self.frame.totals + loss)
        return loss

    def _figures(
        self, candidate: Candidate, base: Base, loss: NDArray[np.float64], number: int, notes: Notes
    ) -> CandidateFigures:
        increment = increments.increment_of(self.frame, base, loss, self.coverage)
        for estimates in (increment.increment, increment.contribution, increment.stand_alone):
            notes.of_estimates(number, base.measure, estimates)
        return answers.candidate_figures(
            self.request, candidate.expected_profit, number, base, increment, self.ids, notes
        )


def _is_number(value: Any) -> bool:
    """Return whether a decoded JSON value is a number that binary64 can hold, or its infinity."""
    return type(value) is float or (type(value) is int and abs(value) <= LARGEST)
