"""`POST /v1/increments`: what one more deal would change, each candidate judged alone."""

from collections.abc import Callable
from dataclasses import replace

from service import answers
from service.answers import Notes
from service.calculate.calculation import Calculation, Describe, source_asked
from service.calculate.candidates import Read, Reader
from service.errors import CallerError, LossesChanged, TooLong, pointing
from service.executors import Work
from service.frames import Demand
from service.intake import Intake
from service.risk.increments import Base, Increment, base_of, increment_of
from service.risk.quantiles import Array
from service.risk.uncertainty import Estimates
from service.schemas.requests import Candidate, IncrementsRequest
from service.schemas.results import BaseFigure, CandidateFigures, CandidateResult, IncrementsAnswer
from service.settings import Settings

BATCH_BYTES = 1 << 28  # of losses of candidates held at a time


class Increments(Calculation):
    """`POST /v1/increments`."""

    def __init__(
        self, intake: Intake, request: IncrementsRequest, work: Work, settings: Settings, describe: Describe
    ) -> None:
        source = source_asked(intake, request.losses, work, settings)
        if request.base_digest not in (None, source.digest):
            detail = f"the losses have the digest {source.digest}, not the one given"
            raise LossesChanged.at("/base_digest", detail)
        demand = Demand(request.measures, request.interval_coverage, stand_alone=False, all_losses=True)
        super().__init__(intake, source, demand, work, settings)
        self.request, self.describe = request, describe
        self.ids = [one.id for one in source.sub_portfolios]

    def answer(self) -> IncrementsAnswer:
        totals = []
        for number, measure in enumerate(self.request.measures):
            with pointing(f"/measures/{number}"):
                totals.append(BaseFigure(measure.name, self.total(number, measure)))
        frames = (self.frame, *self.made.scramblings)
        bases = [[base_of(frame, measure) for frame in frames] for measure in self.request.measures]
        candidates = self.request.candidates
        plan = replace(self.source, plan=self.made.plan)
        reader = Reader(plan, self.frame, self.request.measures, candidates)
        batch = max(1, BATCH_BYTES // (8 * self.frame.scenarios))
        results: list[CandidateResult] = []
        starts = range(0, len(candidates), batch)
        for place, start in enumerate(starts):
            self.stage(2 * place, 2 * len(starts))
            read = reader.read(range(start, min(start + batch, len(candidates))))
            self.stage(2 * place + 1, 2 * len(starts))
            pairs = [(one, done / len(read)) for done, one in enumerate(read)]
            judged = self.frame.effort.map(lambda pair: self._judged(*pair, bases), pairs)
            for result, notes in judged:  # in the order of the candidates, whichever was ready first
                results.append(result)
                self.notes.take(notes)
        refused = sum(one.status == "refused" for one in results)
        return IncrementsAnswer(base=totals, candidates=results, refused=refused, **self.record())

    def _judged(self, read: Read, fraction: float, bases: list[list[Base]]) -> tuple[CandidateResult, Notes]:
        """Return what one candidate changes, or its problem; several are judged at the same time."""
        notes = Notes(self.frame.scenarios, pointed=self.notes.pointed)
        self.frame.effort.checkpoint(fraction)
        if read.candidate is None or read.loss is None or read.error is not None:
            return CandidateResult(read.name, "refused", [], self._problem(read.error)), notes
        try:
            with pointing(f"/candidates/{read.number}"):
                parts = [
                    self._figures(read.candidate, base, read.loss, number, notes) for number, base in enumerate(bases)
                ]
        except TooLong:
            raise
        except CallerError as error:
            return CandidateResult(read.name, "refused", [], self._problem(error)), notes
        return CandidateResult(read.candidate.id, "ok", parts, None), notes

    def _problem(self, error: CallerError | None) -> dict[str, object] | None:
        return None if error is None else self.describe(error)

    def _figures(
        self, candidate: Candidate, bases: list[Base], loss: Array, number: int, notes: Notes
    ) -> CandidateFigures:
        """Return what a candidate changes in one measure; the first base is that of all scenarios."""
        pooled, *others = bases
        increment = increment_of(self.frame, pooled, loss, self.coverage)
        if others:
            size = loss.size // len(others)
            parts = [
                increment_of(frame, base, loss[k * size : (k + 1) * size], self.coverage)
                for k, (frame, base) in enumerate(zip(self.made.scramblings, others, strict=True))
            ]

            def combined(of: Callable[[Increment], Estimates]) -> Estimates:
                return self.made.combined(of(increment), [of(part).values for part in parts])

            increment = replace(
                increment,
                total_with=combined(lambda one: one.total_with),
                increment=combined(lambda one: one.increment),
                contribution=combined(lambda one: one.contribution),
                stand_alone=combined(lambda one: one.stand_alone),
            )
        for estimates in (increment.total_with, increment.increment, increment.contribution, increment.stand_alone):
            notes.of_estimates(number, pooled.measure, estimates)
        return answers.candidate_figures(
            self.request, candidate.expected_profit, number, pooled, increment, self.ids, notes
        )
