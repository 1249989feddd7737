"""What all calculations on the scenarios of one source share."""

from collections.abc import Callable, Iterator
from contextlib import contextmanager
from dataclasses import replace
from typing import Any

from service import __version__, answers, limits
from service.answers import Notes, figure_list
from service.canonical import canonical_request
from service.errors import CallerError, Fault, TailraceError, pointing
from service.executors import Work
from service.frames import Demand, Framed, framed
from service.intake import Intake
from service.provenance import document_digest
from service.risk import figures
from service.risk.loss_table import Group, groups_of
from service.risk.measures import RangeValueAtRisk, RiskMeasure
from service.schemas.losses import FactorLosses, Losses, ScenarioLosses
from service.schemas.requests import ComparisonsRequest, MeasuresRequest
from service.schemas.results import Figure, Labels, Provenance, Tail
from service.settings import Settings
from service.sources import Source, source_of

FRAMED = 0.8  # of the progress of a calculation, where figures look at tails alone
FRAMED_FOR_ALL = 0.4  # where rules or candidates look at all losses

Describe = Callable[[TailraceError], dict[str, Any]]
"""Makes the problem document of an error, for what is refused inside an answer."""

MEAN = RangeValueAtRisk(kind="range_value_at_risk", lower_level=0.0, upper_level=1.0)
"""The expected loss as a measure, for what its error needs."""


def source_asked(intake: Intake, losses: Losses, work: Work, settings: Settings) -> Source:
    """Return the source of a request's losses, which is there already if it is a book."""
    known = intake.sources.get("losses")
    return known or source_of(losses, intake.table, part=intake.part, work=work, settings=settings)


def groups_asked(request: MeasuresRequest, source: Source, settings: Settings) -> tuple[Group, ...]:
    """Return the groups that a request asks for."""
    with pointing("/group_by"):
        groups = groups_of(source.sub_portfolios, request.group_by)
        limits.check("max_groups", len(groups), settings, None)
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
    if (fault.pointer or "").startswith("/sub_portfolios/"):  # found in the simulation
        return fault.beneath("/losses")
    number = (fault.pointer or "").removeprefix("/")
    if not number.isdigit():
        return fault
    if isinstance(intake.request, ComparisonsRequest):
        return fault
    losses = intake.request.losses
    if isinstance(losses, ScenarioLosses) and not intake.sources:
        if intake.part is not None:
            return replace(fault, pointer=None, part=intake.part, row=int(number) + 1)
        if losses.values is not None and losses.layout == "by_scenario":
            return fault.beneath("/losses/values")
    return replace(fault, pointer="/losses")


class Calculation:
    """What all calculations on a frame share."""

    def __init__(  # all that a calculation starts from
        self,
        intake: Intake,
        source: Source,
        demand: Demand,
        work: Work,
        settings: Settings,
        made: Framed | None = None,
    ) -> None:
        if isinstance(intake.request, ComparisonsRequest):
            raise TypeError("a comparison is made of two calculations")
        self.asked = intake.request
        losses = self.asked.losses
        stop = losses.simulation.stop_when if isinstance(losses, FactorLosses) else None
        with placed(intake):
            self._framed_at = FRAMED_FOR_ALL if demand.all_losses else FRAMED
            part = work.part(0.0, self._framed_at)
            self.made = framed(source, demand, stop, part, settings) if made is None else made.again(part)
        self.work = work
        self.intake, self.source, self.frame = intake, source, self.made.frame
        self.coverage = demand.coverage
        self.notes = Notes(self.frame.scenarios, pointed=intake.pointed)
        for code, detail, pointer in self.made.notes:
            self.notes.say(code, detail, pointer)
        if source.table is not None and not source.table.sampled:
            self.notes.add("population", "the scenarios are the whole distribution: no figure has a sampling error")

    def stage(self, number: int, count: int) -> None:
        """Let what follows be one of the `count` stages of the work on the frame, counted from 0."""
        width = (1.0 - self._framed_at) / count
        start = self._framed_at + number * width
        effort = self.work.part(start, start + width)
        effort.checkpoint()
        for frame in (self.frame, *self.made.scramblings):
            frame.effort = effort

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

    def canonical(self) -> dict[str, Any]:
        """Return the canonical form of the request."""
        return canonical_request(self.intake, self.source)

    def record(self) -> dict[str, Any]:
        """Return labels, notes and provenance, which every answer holds."""
        request = self.asked
        losses = request.losses
        self.stage(1, 1)  # all are done
        return {
            "labels": Labels(losses.currency, losses.valuation_date, losses.horizon, request.reference),
            "notes": self.notes.listed(),
            "provenance": Provenance(
                service_version=__version__,
                request_digest=document_digest(self.canonical()),
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
