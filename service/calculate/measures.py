"""`POST /v1/measures`: risk measures of the whole book, and of each part alone."""

from service import answers
from service.calculate.calculation import Calculation, groups_asked, source_asked
from service.errors import pointing
from service.executors import Work
from service.frames import Demand
from service.intake import Intake
from service.schemas.requests import MeasuresRequest
from service.schemas.results import MeasuresAnswer
from service.settings import Settings


class Measures(Calculation):
    """`POST /v1/measures`."""

    def __init__(self, intake: Intake, request: MeasuresRequest, work: Work, settings: Settings) -> None:
        source = source_asked(intake, request.losses, work, settings)
        groups = groups_asked(request, source, settings)
        demand = Demand(request.measures, request.interval_coverage, groups, request.include_stand_alone)
        super().__init__(intake, source, demand, work, settings)
        self.request = request

    def answer(self) -> MeasuresAnswer:
        results = []
        count = 2 * len(self.request.measures)
        for number, measure in enumerate(self.request.measures):
            with pointing(f"/measures/{number}"):
                self.stage(2 * number, count)
                total = self.total(number, measure)
                self.stage(2 * number + 1, count)
                alone = self.alone(number, measure) if self.request.include_stand_alone else None
            results.append(answers.measure_result(measure.name, number, total, alone, self.frame, self.notes))
        return MeasuresAnswer(measures=results, **self.shared(self.request))
