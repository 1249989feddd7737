"""From a request to its answer, one class per calculation; HTTP and terminal share it."""

from collections.abc import Callable, Iterator
from contextlib import contextmanager
from dataclasses import replace
from functools import cached_property
from typing import Any

import numpy as np
import orjson
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
    pointing,
)
from service.executors import Work
from service.intake import Intake
from service.provenance import PREFIX, document_digest, losses_digest
from service.resolve import loss_table
from service.risk import figures, increments
from service.risk.allocation import RULES, Case
from service.risk.frame import Frame
from service.risk.increments import Base
from service.risk.loss_table import Group, LossTable, check_magnitude, groups_of
from service.risk.measures import RiskMeasure
from service.schemas.requests import AllocationsRequest, Candidate, IncrementsRequest, MeasuresRequest
from service.schemas.results import (
    AllocationsAnswer,
    BaseFigure,
    CandidateFigures,
    CandidateResult,
    Figure,
    IncrementsAnswer,
    Labels,
    MeasuresAnswer,
    Provenance,
)
from service.settings import Settings, variable
from service.validation import echo, refusal

METHOD = "given scenarios, exact weighted order statistics"
SEED_DIGITS = 13  # hexadecimal digits of the losses digest that seed what is drawn: 52 bits

Answer = MeasuresAnswer | AllocationsAnswer | IncrementsAnswer
Describe = Callable[[TailraceError], dict[str, Any]]

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
    table = loss_table(intake.request.losses, intake.table, part=intake.part, settings=settings)
    request = intake.request
    if isinstance(request, IncrementsRequest):
        return _Increments(intake, request, table, work, describe).answer()
    groups = _groups(request, table, settings)
    if isinstance(request, AllocationsRequest):
        return _Allocations(intake, request, table, groups, work).answer()
    return _Measures(intake, request, table, groups, work).answer()


def _groups(request: MeasuresRequest, table: LossTable, settings: Settings) -> tuple[Group, ...]:
    with pointing("/group_by"):
        groups = groups_of(table.sub_portfolios, request.group_by)
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
    if fault.pointer is None:
        return fault
    if intake.part is not None:
        return replace(fault, pointer=None, part=intake.part, row=int(fault.pointer.strip("/")) + 1)
    rows = intake.request.losses.values is not None and intake.request.losses.layout == "by_scenario"
    return fault.beneath("/losses/values") if rows else replace(fault, pointer="/losses")


class _Calculation:
    """What all calculations on a frame share."""

    def __init__(self, intake: Intake, frame: Frame) -> None:
        self.intake, self.frame = intake, frame
        self.coverage = intake.request.interval_coverage
        self.notes = Notes(frame.scenarios, pointed=intake.part != "body")
        if not frame.table.sampled:
            self.notes.add("population", "the scenarios are the whole distribution: no figure has a sampling error")

    @cached_property
    def losses_digest(self) -> str:
        """The digest of the losses."""
        table = self.frame.table
        ids = [one.id for one in table.sub_portfolios]
        return losses_digest(ids, table.losses, table.probabilities, self.frame.effort)

    def total(self, number: int, measure: RiskMeasure) -> Figure:
        """Return the figure of the total, with its notes."""
        estimates = figures.total(self.frame, measure, self.coverage)
        self.notes.of_estimates(number, measure, estimates)
        return figure_list(estimates, self.coverage)[0]

    def alone(self, number: int, measure: RiskMeasure) -> list[Figure]:
        """Return the stand-alone figures, with their notes."""
        estimates = figures.stand_alone(self.frame, measure, self.coverage)
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
                request_digest=document_digest(canonical_request(self.intake, self.frame.table, self.losses_digest)),
                losses_digest=self.losses_digest,
                method=METHOD,
                seed=None,
                scenarios=self.frame.scenarios,
            ),
        }

    def shared(self, request: MeasuresRequest) -> dict[str, Any]:
        """Return what measures and allocations hold besides their results."""
        expected = figures.expected_loss(self.frame, self.coverage)
        return {
            "expected_loss": figure_list(expected, self.coverage)[0],
            "scenarios": self.frame.scenarios,
            "tail": answers.tail(self.frame, request.measures) if request.tail_detail else None,
            **self.record(),
        }


class _Measures(_Calculation):
    """`POST /v1/measures`."""

    def __init__(
        self, intake: Intake, request: MeasuresRequest, table: LossTable, groups: tuple[Group, ...], work: Work
    ) -> None:
        with placed(intake):
            frame = Frame.of(table, groups, request.measures, work, stand_alone=request.include_stand_alone)
        super().__init__(intake, frame)
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
        self, intake: Intake, request: AllocationsRequest, table: LossTable, groups: tuple[Group, ...], work: Work
    ) -> None:
        measures: list[RiskMeasure] = list(request.measures)
        if request.capital_measure is not None:
            measures.append(request.capital_measure)
        with placed(intake):
            frame = Frame.of(table, groups, measures, work, stand_alone=request.include_stand_alone)
        super().__init__(intake, frame)
        self.request = request

    def answer(self) -> AllocationsAnswer:
        of = answers.shared(self.frame, self._capital())
        results = []
        for number, measure in enumerate(self.request.measures):
            with pointing(f"/measures/{number}"):
                total = self.total(number, measure)
                alone = self.alone(number, measure) if self.request.include_stand_alone else None
                for rule in self.request.rules:
                    split = RULES[rule](self._case(measure))
                    self.notes.of_estimates(number, measure, split.figures)
                    parts = figure_list(split.figures, self.coverage)
                    head = (measure.name, rule)
                    results.append(answers.allocation_result(head, number, total, split, parts, alone, of, self.notes))
        return AllocationsAnswer(allocations=results, **self.shared(self.request))

    def _capital(self) -> float | None:
        if self.request.capital_measure is None:
            return self.request.capital
        with pointing("/capital_measure"):
            estimates = figures.total(self.frame, self.request.capital_measure, self.coverage)
            return figure_list(estimates, self.coverage)[0].value

    def _case(self, measure: RiskMeasure) -> Case:
        return Case(
            frame=self.frame,
            measure=measure,
            coverage=self.coverage,
            smoothing=self.request.smoothing,
            seed=int(self.losses_digest.removeprefix(PREFIX)[:SEED_DIGITS], 16),
        )


class _Increments(_Calculation):
    """`POST /v1/increments`."""

    def __init__(
        self, intake: Intake, request: IncrementsRequest, table: LossTable, work: Work, describe: Describe
    ) -> None:
        with placed(intake):
            frame = Frame.of(table, (), request.measures, work, stand_alone=False)
        super().__init__(intake, frame)
        self.request, self.describe = request, describe
        self.ids = [one.id for one in table.sub_portfolios]

    def answer(self) -> IncrementsAnswer:
        if self.request.base_digest not in (None, self.losses_digest):
            detail = f"the losses have the digest {self.losses_digest}, not the one given"
            raise LossesChanged.at("/base_digest", detail)
        bases, totals = [], []
        for number, measure in enumerate(self.request.measures):
            with pointing(f"/measures/{number}"):
                totals.append(BaseFigure(measure.name, self.total(number, measure)))
                bases.append(increments.base_of(self.frame, measure))
        results = self.frame.effort.map(
            lambda number: self._candidate(number, bases), range(len(self.request.candidates))
        )
        refused = sum(one.status == "refused" for one in results)
        return IncrementsAnswer(base=totals, candidates=results, refused=refused, **self.record())

    def _candidate(self, number: int, bases: list[Base]) -> CandidateResult:
        """Return what one candidate changes, or its problem."""
        document = self.request.candidates[number]
        self.frame.effort.checkpoint(number / len(self.request.candidates))
        name = document.get("id") if isinstance(document, dict) else None
        try:
            with pointing(f"/candidates/{number}"):
                candidate = self._read(number, document)
                with pointing("/values"):
                    loss = self._loss(document["values"])
                parts = [self._figures(candidate, base, loss, measure) for measure, base in enumerate(bases)]
        except CallerError as error:
            return CandidateResult(name if isinstance(name, str) else None, "refused", [], self.describe(error))
        return CandidateResult(candidate.id, "ok", parts, None)

    def _read(self, number: int, document: Any) -> Candidate:
        shell = document | {"values": [0.0]} if isinstance(document, dict) and "values" in document else document
        try:
            candidate = CANDIDATE.validate_json(orjson.dumps(shell))
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
        wrong = next((number for number, value in enumerate(values) if type(value) not in (int, float)), None)
        loss = np.array(values if wrong is None else values[:wrong], dtype=np.float64) + 0.0
        if wrong is None and not np.isfinite(loss).all():
            wrong = int(np.argmin(np.isfinite(loss)))
        if wrong is not None:
            raise InvalidValue.at(f"/{wrong}", f"{echo(values[wrong])} is not a finite number", code="wrong_type")
        check_magnitude(self.frame.totals + loss)
        return loss

    def _figures(self, candidate: Candidate, base: Base, loss: NDArray[np.float64], number: int) -> CandidateFigures:
        increment = increments.increment_of(self.frame, base, loss, self.coverage)
        for estimates in (increment.increment, increment.contribution, increment.stand_alone):
            self.notes.of_estimates(number, base.measure, estimates)
        return answers.candidate_figures(
            self.request, candidate.expected_profit, number, base, increment, self.ids, self.notes
        )
