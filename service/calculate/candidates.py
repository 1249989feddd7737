"""Candidates as sent, each read alone: a name, and a loss in every scenario of the base."""

from collections.abc import Iterator, Mapping, Sequence
from contextlib import contextmanager
from dataclasses import dataclass, field, replace
from typing import Any

import numpy as np
from pydantic import TypeAdapter, ValidationError

from service.errors import CallerError, InvalidValue, Malformed, TooLong, pointing
from service.frames import Framed, missing
from service.payloads import json_text, row_from_json
from service.provenance import losses_digest, text_digest
from service.risk.components import ObservedComponent
from service.risk.components.portfolio import SubPortfolioTerms
from service.risk.covers import Tails
from service.risk.factors import FactorModel
from service.risk.frame import Frame
from service.risk.history import history_losses
from service.risk.loss_table import check_magnitude
from service.risk.measures import RiskMeasure
from service.risk.quantiles import Array
from service.risk.simulation import Plan, simulated
from service.risk.words import unsafe
from service.schemas.requests import Candidate, ScaledCopy
from service.sources import Source
from service.suggestions import suggestion
from service.validation import echo, refusal

CANDIDATE: TypeAdapter[Candidate] = TypeAdapter(Candidate)
OBSERVED: TypeAdapter[Any] = TypeAdapter(list[ObservedComponent])


@dataclass(frozen=True, slots=True, eq=False)
class Read:
    """A candidate that was read, or the reason why it was not.

    Attributes
    ----------
    number : int
        In the request.
    name : str or None
    candidate : Candidate or None
    loss : ndarray of shape (n,) or None
        In scenario order.
    laws : tuple of two Tails
        Of the candidate, and of the book with it, as far as they are known.
    error : CallerError or None
    """

    number: int
    name: str | None
    candidate: Candidate | None = None
    loss: Array | None = None
    laws: tuple[Tails, Tails] = (Tails(), Tails())  # frozen: thin tails
    error: CallerError | None = None


@dataclass(frozen=True, slots=True, eq=False)
class Reader:
    """Reads candidates against a base.

    Attributes
    ----------
    source : Source
        Of the base, its plan as carried out.
    made : Framed
        Of the base.
    measures : sequence of RiskMeasure
        That are asked of each candidate.
    documents : sequence
        All candidates as sent, but for long lists of values.
    texts : mapping of int to memoryview
        Those values in JSON, by the number of their candidate.
    digests : dict of int to str
        Of those values, or of their text where it holds other things than numbers; filled by reading them.
    """

    source: Source
    made: Framed
    measures: Sequence[RiskMeasure]
    documents: Sequence[Any]
    texts: Mapping[int, memoryview]
    digests: dict[int, str] = field(default_factory=dict)

    @property
    def frame(self) -> Frame:
        """Of all scenarios of the base."""
        return self.made.frame

    def read(self, numbers: Sequence[int]) -> list[Read]:
        """Return some candidates, those made of components simulated together."""
        read = []
        for number in numbers:
            self.frame.effort.checkpoint()
            read.append(self._one(number))
        made = [one for one in read if one.error is None and one.loss is None and one.candidate is not None]
        if not made:
            return read
        try:
            done = dict(zip([one.number for one in made], self._together(made), strict=True))
        except TooLong:
            raise
        except CallerError:  # of one of them
            done = {one.number: self._apart(one) for one in made}
        return [done.get(one.number, one) for one in read]

    def _together(self, made: Sequence[Read]) -> list[Read]:
        """Return candidates made of components, with their losses."""
        terms = [_terms(one.candidate) for one in made if one.candidate is not None]
        losses = np.ascontiguousarray(self._losses(terms).T)
        for loss in losses:
            check_magnitude(self.frame.totals + loss)
        return [replace(one, loss=loss) for one, loss in zip(made, losses, strict=True)]

    def _apart(self, one: Read) -> Read:
        """Return a candidate made of components, with its loss or the reason why it has none."""
        try:
            with pointing(f"/candidates/{one.number}"), _here():
                return self._together([one])[0]
        except TooLong:
            raise
        except CallerError as error:
            return replace(one, error=error)

    def _one(self, number: int) -> Read:
        document = self.documents[number]
        known = document.get("id") if isinstance(document, dict) else None
        name = known if isinstance(known, str) and unsafe(known) is None else None
        try:
            with pointing(f"/candidates/{number}"):
                candidate = self._candidate(number, document)
                loss = None
                if number in self.texts:
                    with pointing("/values"):
                        loss = self._values(number)
                elif candidate.scaled is not None:
                    with pointing("/scaled/sub_portfolio"):
                        candidate, loss = self._scaled(candidate, candidate.scaled)
                else:
                    self._check(candidate, document)
                laws = self._laws(candidate)
        except (TooLong, Malformed):  # the whole is late, or no JSON
            raise
        except CallerError as error:
            return Read(number, name, error=error)
        return Read(number, candidate.id, candidate, loss, laws)

    def _candidate(self, number: int, document: Any) -> Candidate:
        """Return the model of a candidate; its values are looked at apart, many at a time."""
        shell = document | {"values": [0.0]} if number in self.texts else document
        try:
            candidate = CANDIDATE.validate_json(json_text(shell))
        except ValidationError as error:
            raise refusal(error, shell, Candidate) from None
        earlier = [one.get("id") for one in self.documents[:number] if isinstance(one, dict)]
        taken = [one.id for one in self.source.sub_portfolios]
        if candidate.id in taken or candidate.id in earlier:
            raise InvalidValue.at("/id", f"{candidate.id!r} is taken already", code="repeated")
        return candidate

    def _values(self, number: int) -> Array:
        """Return losses (n,) that were sent as a list."""
        text = self.texts[number]
        self.digests[number] = text_digest(text)
        loss = row_from_json(text)
        self.digests[number] = losses_digest([], loss[:, None], None, self.frame.effort)
        if loss.size != self.frame.scenarios:
            detail = f"{loss.size} values are given, but the book has {self.frame.scenarios} scenarios"
            raise InvalidValue.at("", detail, code="wrong_count")
        check_magnitude(self.frame.totals + loss)
        return loss

    def _scaled(self, candidate: Candidate, copy: ScaledCopy) -> tuple[Candidate, Array]:
        """Return a candidate that is a part of a sub-portfolio with its losses (n,), and its profit if not given."""
        names = [one.id for one in self.source.sub_portfolios]
        if copy.sub_portfolio not in names:
            meant = suggestion(copy.sub_portfolio, names)
            detail = f"the book has no sub-portfolio {echo(copy.sub_portfolio)}{meant}"
            raise InvalidValue.at("", detail, code="not_allowed")
        column = names.index(copy.sub_portfolio)
        loss = copy.step * np.asarray(self.frame.table.losses[:, column]) + 0.0
        check_magnitude(self.frame.totals + loss)
        profit = self.source.sub_portfolios[column].expected_profit
        if candidate.expected_profit is None and profit is not None:
            candidate = replace(candidate, expected_profit=copy.step * profit + 0.0)
        return candidate, loss

    def _check(self, candidate: Candidate, document: Any) -> None:
        """Refuse components that do not fit the base."""
        terms = [_terms(candidate)]
        if self.source.plan is not None:
            with _here():
                self._model(terms)
        elif self.source.changes is not None:
            try:
                OBSERVED.validate_json(json_text(document["components"]))
            except ValidationError as error:
                with pointing("/components"):
                    raise refusal(error, document["components"], list[ObservedComponent]) from None
            with _here():
                self._observed(terms)
        else:
            detail = "the base is a table of scenarios: a candidate gives its values in each of them"
            raise InvalidValue.at("/components", detail, code="not_allowed")

    def _laws(self, candidate: Candidate) -> tuple[Tails, Tails]:
        """Return what is known of the laws of a candidate and of the book with it.

        Raises
        ------
        InvalidValue
            Where one of them does not have a measure that is asked for.
        """
        plan = self.source.plan
        if plan is None:
            return Tails(), Tails()
        exact = any(measure.needs.exponential > 0.0 for measure in self.measures)
        book, own, place, gone = list(plan.model.portfolio.sub_portfolios), Tails(), "/values", False
        if candidate.scaled is not None:
            place, step = "/scaled", candidate.scaled.step
            column = [one.id for one in book].index(candidate.scaled.sub_portfolio)
            own = self.made.law_of(column).times(step)
            book[column] = replace(book[column], scale=candidate.scaled.scale)
            gone = candidate.scaled.scale == 0.0
        elif candidate.components is not None:
            place, terms = "/components", _terms(candidate)
            own = self._model([terms]).existence(exponential=exact)[1]
            book.append(terms)
        enlarged = self.made.total.plus(own)
        if exact or gone:
            enlarged = self._model(book).existence(exponential=exact)[1]
        for law, words in ((own, ""), (enlarged, "of the book with it, ")):
            reason = missing(self.measures, law)
            if reason is not None:
                raise InvalidValue.at(place, words + reason, code="infinite_figure")
        return own, enlarged

    def _losses(self, terms: Sequence[SubPortfolioTerms]) -> Array:
        """Return the losses of candidates made of components, shape (n, c)."""
        if self.source.plan is not None:
            return simulated(replace(self.source.plan, model=self._model(terms)), self.frame.effort)
        return self._observed(terms) + 0.0

    def _model(self, terms: Sequence[SubPortfolioTerms]) -> FactorModel:
        """Return the factor model of the base with other sub-portfolios: its factors draw the same numbers."""
        plan = self._plan
        factors = plan.model.factors
        pairs = [(name, factors.marginal(name)) for name in factors.ids]
        if factors.dependence is None:
            raise ValueError("a factor model has a copula")
        return FactorModel.of(pairs, factors.dependence, terms)

    @property
    def _plan(self) -> Plan:
        if self.source.plan is None:
            raise ValueError("the base is not simulated")
        return self.source.plan

    def _observed(self, terms: Sequence[SubPortfolioTerms]) -> Array:
        made = self.source.changes
        if made is None:
            raise ValueError("the base is not observed")
        return history_losses(self.source.factor_ids, made.values, terms).losses


@contextmanager
def _here() -> Iterator[None]:
    """Point into the candidate, not into the source that it was made for a moment."""
    try:
        yield
    except CallerError as error:
        error.faults = tuple(
            replace(fault, pointer=fault.pointer.removeprefix("/sub_portfolios/0")) if fault.pointer else fault
            for fault in error.faults
        )
        raise


def _terms(candidate: Candidate) -> SubPortfolioTerms:
    return SubPortfolioTerms(candidate.id, tuple(candidate.components or ()), candidate.sign, tuple(candidate.cover))
