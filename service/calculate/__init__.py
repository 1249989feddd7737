"""From a request to its answer, one class per calculation; HTTP and terminal share it."""

from collections.abc import Iterator
from contextlib import contextmanager
from dataclasses import replace

from service.calculate.allocations import Allocations
from service.calculate.calculation import Describe
from service.calculate.comparisons import Comparisons
from service.calculate.drawing import Drawing, drawing_of
from service.calculate.increments import Increments
from service.calculate.measures import Measures
from service.errors import CallerError, Fault
from service.executors import Work
from service.intake import Intake
from service.schemas.requests import AllocationsRequest, ComparisonsRequest, IncrementsRequest, MeasuresRequest
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
    work = work.part(0.0, 1.0)  # from here on fractions never go back
    with _outside_books(intake):
        if isinstance(request, ComparisonsRequest):
            return Comparisons(intake, request, work, settings).answer()
        if isinstance(request, IncrementsRequest):
            return Increments(intake, request, work, settings, describe).answer()
        return _figures(intake, request, work, settings).answer()


def drawing(intake: Intake, work: Work, settings: Settings) -> Drawing:
    """Return the answer of a request for measures or allocations, with what its pictures show.

    Raises
    ------
    TailraceError
        As `answer`.
    """
    request = intake.request
    if not isinstance(request, MeasuresRequest):
        raise TypeError("measures and allocations have pictures")
    with _outside_books(intake):
        made = _figures(intake, request, work.part(0.0, 1.0), settings)
        return drawing_of(made.answer(), request.measures, made.frame)


def _figures(intake: Intake, request: MeasuresRequest, work: Work, settings: Settings) -> Allocations | Measures:
    if isinstance(request, AllocationsRequest):
        return Allocations(intake, request, work, settings)
    return Measures(intake, request, work, settings)


@contextmanager
def _outside_books(intake: Intake) -> Iterator[None]:
    """Point at a book as a whole, since what is inside it is not the caller's."""
    try:
        yield
    except CallerError as error:
        error.faults = tuple(_outside(fault, intake) for fault in error.faults)
        raise


def _outside(fault: Fault, intake: Intake) -> Fault:
    inside = (f"/{name}" for name in intake.sources if (fault.pointer or "").startswith(f"/{name}/"))
    return replace(fault, pointer=next(inside, fault.pointer))


__all__ = ["Answer", "Describe", "Drawing", "answer", "drawing"]
