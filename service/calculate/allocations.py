"""`POST /v1/allocations`: each measure, split among the sub-portfolios by each rule."""

from service import answers
from service.answers import figure_list
from service.calculate.calculation import Calculation, groups_asked, source_asked
from service.errors import pointing
from service.executors import Work
from service.frames import Demand
from service.intake import Intake
from service.provenance import PREFIX
from service.risk import figures
from service.risk.allocation import RULES, Case, Contributions
from service.risk.frame import Frame
from service.risk.measures import RiskMeasure
from service.risk.uncertainty import Estimates
from service.schemas.requests import AllocationsRequest
from service.schemas.results import AllocationResult, AllocationsAnswer, Figure
from service.settings import Settings

SEED_DIGITS = 13  # hexadecimal digits of the losses digest that seed what is drawn: 52 bits


class Allocations(Calculation):
    """`POST /v1/allocations`."""

    def __init__(self, intake: Intake, request: AllocationsRequest, work: Work, settings: Settings) -> None:
        source = source_asked(intake, request.losses, work, settings)
        groups = groups_asked(request, source, settings)
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
        stages = 1 + len(self.request.rules)  # of each measure: its figures, and each rule
        count = stages * len(self.request.measures)
        for number, measure in enumerate(self.request.measures):
            self.stage(number * stages, count)
            with pointing(f"/measures/{number}"):
                total = self.total(number, measure)
                alone = self.alone(number, measure) if self.request.include_stand_alone else None
                for place, rule in enumerate(self.request.rules, start=1):
                    self.stage(number * stages + place, count)
                    results.append(self._split(number, measure, rule, total, alone, of))
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
