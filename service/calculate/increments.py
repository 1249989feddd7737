"""`POST /v1/increments`: what one more deal would change, each candidate judged alone."""

from collections.abc import Sequence
from dataclasses import dataclass, replace
from typing import Any

import numpy as np

from service import answers
from service.answers import Notes
from service.calculate.calculation import Calculation, Describe, source_asked
from service.calculate.candidates import Read, Reader
from service.canonical import canonical_base
from service.errors import CallerError, LossesChanged, TooLong, pointing
from service.executors import Work
from service.frames import Demand, Framed, sure
from service.intake import Intake
from service.provenance import document_digest
from service.risk.covers import Tails
from service.risk.increments import Base, Increment, base_of, increments_of
from service.risk.measures import RiskMeasure
from service.risk.quantiles import Array
from service.schemas.requests import Candidate, IncrementsRequest
from service.schemas.results import BaseFigure, CandidateFigures, CandidateResult, IncrementsAnswer
from service.settings import Settings

BATCH_BYTES = 1 << 28  # of losses of candidates held at a time


@dataclass(frozen=True, slots=True, eq=False)
class _Ready:
    """What candidates are judged against: the same for all requests with this base and these measures.

    Attributes
    ----------
    made : Framed
    bases : list of list of Base
        For each frame, those of the measures.
    """

    made: Framed
    bases: list[list[Base]]

    @property
    def size(self) -> int:
        """Bytes that it takes, about."""
        return self.made.size + sum(base.size for of in self.bases for base in of)


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
        self._key = document_digest(canonical_base(request, source))
        self._ready: _Ready | None = source.held.get(self._key)
        super().__init__(intake, source, demand, work, settings, self._ready and self._ready.made)
        self.request, self.describe = request, describe
        self._digests: dict[int, str] = {}
        self.ids = [one.id for one in source.sub_portfolios]

    def answer(self) -> IncrementsAnswer:
        totals = []
        for number, measure in enumerate(self.request.measures):
            with pointing(f"/measures/{number}"):
                totals.append(BaseFigure(measure.name, self.total(number, measure)))
        for name in ("hurdle_rate", "cost_of_capital"):
            rate = getattr(self.request, name)
            if rate is not None and rate >= 1.0:
                detail = f"{name} {rate:g} is {100.0 * rate:g} % of the capital; a rate is a fraction, 0.08 for 8 %"
                self.notes.say("high_rate", detail, f"/{name}")
        if self._ready is None:
            frames = (self.frame, *self.made.scramblings)
            bases = [[base_of(frame, measure) for measure in self.request.measures] for frame in frames]
            self._ready = _Ready(self.made.again(Work()), bases)  # nobody works on what is kept
            self.source.held.put(self._key, self._ready, self._ready.size)
        bases = self._ready.bases
        candidates = self.request.candidates
        plan = replace(self.source, plan=self.made.plan)
        reader = Reader(plan, self.made, self.request.measures, candidates, self.intake.candidates, self._digests)
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

    def canonical(self) -> dict[str, Any]:
        """Return the canonical form of the request, long lists of values by their digests."""
        document = super().canonical()
        candidates = list(document["candidates"])
        for number, digest in self._digests.items():
            candidates[number] = candidates[number] | {"values": digest}
        return document | {"candidates": candidates}

    def _judged(self, read: Read, fraction: float, bases: list[list[Base]]) -> tuple[CandidateResult, Notes]:
        """Return what one candidate changes, or its problem; several are judged at the same time."""
        notes = Notes(self.frame.scenarios, pointed=self.notes.pointed)
        self.frame.effort.checkpoint(fraction)
        if read.candidate is None or read.loss is None or read.error is not None:
            return CandidateResult(read.name, "refused", None, [], self._problem(read.error)), notes
        try:
            with pointing(f"/candidates/{read.number}"):
                parts = self._figures(read.candidate, read.laws, bases, read.loss, notes)
        except TooLong:
            raise
        except CallerError as error:
            return CandidateResult(read.name, "refused", None, [], self._problem(error)), notes
        profit = read.candidate.expected_profit
        profit = None if profit is None else profit + 0.0
        return CandidateResult(read.candidate.id, "ok", profit, parts, None), notes

    def _problem(self, error: CallerError | None) -> dict[str, object] | None:
        return None if error is None else self.describe(error)

    def _figures(
        self, candidate: Candidate, laws: tuple[Tails, Tails], bases: list[list[Base]], loss: Array, notes: Notes
    ) -> list[CandidateFigures]:
        """Return what a candidate changes in each measure; the first frame is that of all scenarios."""
        pooled, *others = bases
        found = increments_of(self.frame, pooled, loss, self.coverage)
        if others:
            parts = np.split(loss, len(others))
            apart = [
                increments_of(frame, of_frame, part, self.coverage)
                for frame, of_frame, part in zip(self.made.scramblings, others, parts, strict=True)
            ]
            found = [self._combined(one, each) for one, *each in zip(found, *apart, strict=True)]
        figures = []
        for number, (base, seen) in enumerate(zip(pooled, found, strict=True)):
            increment = self._surely(base.measure, seen, *laws)
            for estimates in increment.estimated:
                notes.of_estimates(number, base.measure, estimates)
            figures.append(answers.candidate_figures(self.request, candidate, number, base, increment, self.ids, notes))
        return figures

    def _surely(self, measure: RiskMeasure, seen: Increment, own: Tails, enlarged: Tails) -> Increment:
        """Return an increment without the errors that the laws of the losses do not have."""
        return replace(
            seen,
            total_with=sure(measure, seen.total_with, enlarged),
            increment=sure(measure, seen.increment, self.made.total, enlarged),
            contribution=sure(measure, seen.contribution, own, enlarged),
            stand_alone=sure(measure, seen.stand_alone, own),
        )

    def _combined(self, pooled: Increment, parts: Sequence[Increment]) -> Increment:
        """Return an increment with the errors that those of the scramblings show."""
        apart = zip(pooled.estimated, *(part.estimated for part in parts), strict=True)
        total_with, increment, contribution, stand_alone = (
            self.made.combined(one, [part.values for part in each]) for one, *each in apart
        )
        return Increment(total_with, increment, contribution, stand_alone, pooled.moved)
