"""From a request to its answer, one class per calculation; HTTP and terminal share it."""

from service.calculate.allocations import Allocations
from service.calculate.calculation import Describe
from service.calculate.comparisons import Comparisons
from service.calculate.increments import Increments
from service.calculate.measures import Measures
from service.executors import Work
from service.intake import Intake
from service.schemas.requests import AllocationsRequest, ComparisonsRequest, IncrementsRequest
from service.schemas.results import AllocationsAnswer, ComparisonsAnswer, IncrementsAnswer, MeasuresAnswer
from service.settings import Settings

Answer = MeasuresAnswer | AllocationsAnswer | IncrementsAnswer | ComparisonsAnswer


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
    request = intake.request
    if isinstance(request, ComparisonsRequest):
        return Comparisons(intake, request, work, settings).answer()
    if isinstance(request, IncrementsRequest):
        return Increments(intake, request, work, settings, describe).answer()
    if isinstance(request, AllocationsRequest):
        return Allocations(intake, request, work, settings).answer()
    return Measures(intake, request, work, settings).answer()


__all__ = ["Answer", "Describe", "answer"]
