"""From a request to its answer, one function per calculation; HTTP and terminal share it."""

from collections.abc import Iterator, Mapping, Sequence
from contextlib import contextmanager
from dataclasses import asdict, replace
from functools import cached_property
from typing import Any

from service import __version__, answers
from service.answers import Notes, figure_list
from service.errors import CallerError, Fault, Limit, LimitExceeded, pointing
from service.executors import Work
from service.intake import Intake
from service.provenance import PREFIX, losses_digest, request_digest
from service.resolve import loss_table
from service.risk import figures
from service.risk.allocation import RULES, Case
from service.risk.frame import Frame
from service.risk.loss_table import Group, LossTable, groups_of
from service.risk.measures import RiskMeasure
from service.schemas.requests import AllocationsRequest, MeasuresRequest
from service.schemas.results import AllocationsAnswer, Figure, Labels, MeasuresAnswer, Provenance
from service.settings import Settings, variable

METHOD = "given scenarios, exact weighted order statistics"
SEED_DIGITS = 13  # hexadecimal digits of the losses digest that seed what is drawn: 52 bits

Answer = MeasuresAnswer | AllocationsAnswer


def answer(intake: Intake, work: Work, settings: Settings) -> Answer:
    """Return the answer of a request.

    Parameters
    ----------
    intake : Intake
        As read from the caller.
    work : Work
        Threads to use, and the question whether the answer is still wanted.
    settings : Settings

    Raises
    ------
    TailraceError
        Where a figure does not exist, a limit is passed, time is up or the caller has gone.
    """
    request = intake.request
    table = loss_table(request.losses, intake.table, part=intake.part, settings=settings)
    groups = _groups(request, table, settings)
    measures: list[RiskMeasure] = list(request.measures)
    if isinstance(request, AllocationsRequest) and request.capital_measure is not None:
        measures.append(request.capital_measure)
    with placed(intake):
        frame = Frame.of(table, groups, measures, work, stand_alone=request.include_stand_alone)
    if isinstance(request, AllocationsRequest):
        return _Allocations(intake, request, frame).answer()
    return _Measures(intake, request, frame).answer()


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


def _groups(request: MeasuresRequest, table: LossTable, settings: Settings) -> tuple[Group, ...]:
    with pointing("/group_by"):
        groups = groups_of(table.sub_portfolios, request.group_by)
        if len(groups) > settings.max_groups:
            detail = f"{len(groups)} groups are more than the {settings.max_groups} allowed here"
            name = "max_groups"
            limit = Limit(name=name, allowed=settings.max_groups, asked=len(groups), setting=variable(name))
            raise LimitExceeded(detail, limit=limit, faults=[Fault(detail=detail, code=LimitExceeded.code)])
    return groups


class _Calculation:
    """What all calculations on a frame share."""

    def __init__(self, intake: Intake, request: MeasuresRequest, frame: Frame) -> None:
        self.intake, self.frame = intake, frame
        self.coverage = request.interval_coverage
        self.asked = request
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

    def alone(self, number: int, measure: RiskMeasure) -> list[Figure] | None:
        """Return the stand-alone figures, with their notes, if they are asked for."""
        if not self.asked.include_stand_alone:
            return None
        estimates = figures.stand_alone(self.frame, measure, self.coverage)
        self.notes.of_estimates(number, measure, estimates)
        return figure_list(estimates, self.coverage)

    def shared(self) -> dict[str, Any]:
        """Return what every answer holds besides its results."""
        losses = self.asked.losses
        return {
            "expected_loss": figure_list(figures.expected_loss(self.frame, self.coverage), self.coverage)[0],
            "scenarios": self.frame.scenarios,
            "tail": answers.tail(self.frame, self.asked.measures) if self.asked.tail_detail else None,
            "labels": Labels(losses.currency, losses.valuation_date, losses.horizon, self.asked.reference),
            "notes": self.notes.listed(),
            "provenance": Provenance(
                service_version=__version__,
                request_digest=request_digest(canonical_request(self.intake, self.frame.table, self.losses_digest)),
                losses_digest=self.losses_digest,
                method=METHOD,
                seed=None,
                scenarios=self.frame.scenarios,
            ),
        }


class _Measures(_Calculation):
    """`POST /v1/measures`."""

    def answer(self) -> MeasuresAnswer:
        results = []
        for number, measure in enumerate(self.asked.measures):
            with pointing(f"/measures/{number}"):
                total, alone = self.total(number, measure), self.alone(number, measure)
            results.append(answers.measure_result(measure.name, number, total, alone, self.frame, self.notes))
        return MeasuresAnswer(measures=results, **self.shared())


class _Allocations(_Calculation):
    """`POST /v1/allocations`."""

    def __init__(self, intake: Intake, request: AllocationsRequest, frame: Frame) -> None:
        super().__init__(intake, request, frame)
        self.request = request

    def answer(self) -> AllocationsAnswer:
        of = answers.shared(self.frame, self._capital())
        results = []
        for number, measure in enumerate(self.request.measures):
            with pointing(f"/measures/{number}"):
                total, alone = self.total(number, measure), self.alone(number, measure)
                for rule in self.request.rules:
                    split = RULES[rule](self._case(measure))
                    self.notes.of_estimates(number, measure, split.figures)
                    parts = figure_list(split.figures, self.coverage)
                    head = (measure.name, rule)
                    results.append(answers.allocation_result(head, number, total, split, parts, alone, of, self.notes))
        return AllocationsAnswer(allocations=results, **self.shared())

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


def canonical_request(intake: Intake, table: LossTable, digest: str) -> dict[str, Any]:
    """Return a request in one form, whatever it was sent in: defaults filled in, the table by its digest."""
    request = intake.request
    losses = request.losses
    document: dict[str, Any] = {
        "calculation": intake.calculation,
        "losses": {
            "digest": digest,
            "sub_portfolios": [
                {"attributes": one.attributes, "expected_profit": one.expected_profit, "id": one.id}
                for one in table.sub_portfolios
            ],
            "scenarios_are": losses.scenarios_are,
            "scenario_ids": table.scenario_ids,
            "currency": losses.currency,
            "valuation_date": losses.valuation_date,
            "horizon": losses.horizon,
        },
        "measures": _canonical(request.measures),
        "group_by": request.group_by,
        "interval_coverage": request.interval_coverage,
        "include_stand_alone": request.include_stand_alone,
        "tail_detail": request.tail_detail,
        "reference": request.reference,
    }
    if isinstance(request, AllocationsRequest):
        document |= {
            "rules": request.rules,
            "capital": request.capital,
            "capital_measure": None if request.capital_measure is None else _canonical([request.capital_measure])[0],
            "smoothing": request.smoothing,
        }
    return document


def _canonical(measures: Sequence[RiskMeasure]) -> list[Mapping[str, Any]]:
    return [asdict(measure) | {"label": measure.name} for measure in measures]
