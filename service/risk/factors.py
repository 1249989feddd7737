"""FactorModel: marginals, copula, components and covers together give the losses of one block of scenarios."""

from collections.abc import Callable, Sequence
from dataclasses import dataclass
from functools import cached_property

import numpy as np
from numpy.random import Generator

from service.errors import Fault, InvalidValue, pointing
from service.risk.components.claims import CompoundComponent
from service.risk.components.contract import Array, FactorSet, Indices
from service.risk.components.portfolio import BlockScratch, FactorRows, Portfolio, SubPortfolioTerms, go_on
from service.risk.copulas import CopulaFamily, Sampler
from service.risk.covers import Tails
from service.risk.marginals import MarginalLaw
from service.risk.score_tables import ScoreTable
from service.risk.score_tables import Scratch as TableScratch
from service.risk.scores import Law, Scores
from service.risk.streams import BLOCK, Draw, RandomDraw, Scratch, stream

FACTORS = "factors"
"""Owner of the draws of all factors together."""


class ModelScratch(BlockScratch):
    """Arrays of one thread that each block fills anew, those of the draws included."""

    __slots__ = ("draws", "tables")

    def __init__(self) -> None:
        super().__init__()
        self.draws = Scratch()
        self.tables = TableScratch()


class _SampledRows(FactorRows):
    """Factors of a block made of scores; normal scores and uniforms only as they are asked for."""

    __slots__ = ("_normal", "_scores")

    def __init__(self, scores: Scores, rows: Array, places: Indices) -> None:
        super().__init__(rows.shape[1], rows, places)
        self._scores = scores
        self._normal: dict[int, Array] = {}

    def normal_scores(self, columns: Indices) -> Array:
        """Return the normal scores of factors, shape (k, n)."""
        rows = np.empty((columns.size, self.scenarios))
        for row, column in zip(rows, columns.tolist(), strict=True):
            if column not in self._normal:
                self._normal[column] = self._scores.laws[column].normal(self._scores.values[:, column])
            row[:] = self._normal[column]
        return rows

    def uniform(self, column: int) -> Array:
        """Return the uniform of a factor, shape (n,)."""
        return self._scores.laws[column].lower(self._scores.values[:, column])


@dataclass(frozen=True, slots=True)
class FactorDraws:
    """All factors in some scenarios of a block, for the detail of a tail.

    Attributes
    ----------
    values : ndarray of shape (m, k)
        In their units.
    normal_scores : ndarray of shape (m, k)
    """

    values: Array
    normal_scores: Array


@dataclass(frozen=True, eq=False)
class FactorModel:
    """A factor spec, checked and prepared; the same for all threads.

    Attributes
    ----------
    factors : FactorSet
    sampler : Sampler
        The copula bound to the factors.
    portfolio : Portfolio
    tables : tuple of ScoreTable
        From score to value, for the factors whose values the portfolio uses, in the order of `portfolio.used`.
    """

    factors: FactorSet
    sampler: Sampler
    portfolio: Portfolio
    tables: tuple[ScoreTable, ...]

    @classmethod
    def of(
        cls,
        factors: Sequence[tuple[str, MarginalLaw]],
        dependence: CopulaFamily,
        sub_portfolios: Sequence[SubPortfolioTerms],
    ) -> "FactorModel":
        """Check and prepare.

        Parameters
        ----------
        factors : sequence of (str, MarginalLaw)
            Id and law of each.
        dependence : CopulaFamily
        sub_portfolios : sequence of SubPortfolioTerms

        Raises
        ------
        InvalidValue
            With pointers relative to the source of losses.
        """
        ids = tuple(name for name, _ in factors)
        _unique(ids)
        with pointing("/dependence"):
            dependence.check(ids)
            sampler = dependence.prepared(ids)
        bound = FactorSet(ids, tuple(law for _, law in factors), dependence, sampler)
        portfolio = Portfolio.of(sub_portfolios, bound)
        laws = sampler.laws
        tables = tuple(_table(bound, column, laws[column]) for column in portfolio.used.tolist())
        return cls(bound, sampler, portfolio, tables)

    def block(
        self,
        number: int,
        seed: int,
        *,
        draw: Draw | None = None,
        scenarios: int = BLOCK,
        scratch: ModelScratch | None = None,
        out: Array | None = None,
        pause: Callable[[], None] = go_on,
    ) -> Array:
        """Return the losses of a block, shape (n, d), C order, in currency.

        Parameters
        ----------
        number : int
            Of the block; with several scramblings of Sobol points they must be numbered through.
        seed : int
        draw : Draw, optional
            What drives the factors; by default their random stream in this block.
        scenarios : int
            Number n of scenarios, where no draw is given.
        scratch : ModelScratch, optional
            Of the thread; without one all arrays are fresh.
        out : ndarray of shape (n, d), optional
            Written into and returned.
        pause : callable
            Called between pieces of long draws; may raise to stop them.

        Notes
        -----
        The factors draw from the stream of the owner ``factors``, a component from that of
        ``sub_portfolio/{id}/{its number}``, so another sub-portfolio changes no draw of these.
        """
        scratch = scratch or ModelScratch()
        draw = draw or self.random_draw(number, seed, scenarios, scratch)
        if out is None:
            out = np.empty((draw.scenarios, len(self.portfolio.sub_portfolios)))

        def streams(owner: str) -> Generator:
            return stream(seed, owner, number)

        return self.portfolio.losses(self._rows(draw, scratch), streams, scratch=scratch, out=out, pause=pause)

    def random_draw(
        self, number: int, seed: int, scenarios: int = BLOCK, scratch: ModelScratch | None = None
    ) -> RandomDraw:
        """Return the random draw that drives the factors of a block."""
        return RandomDraw(stream(seed, FACTORS, number), scenarios, scratch.draws if scratch else None)

    def factor_draws(self, draw: Draw, scenarios: Indices) -> FactorDraws:
        """Return all factors in some scenarios (m,) of the block that `draw` drives, counted from 0 in the block."""
        scores = self.sampler.scores(draw)
        values = np.empty((scenarios.size, len(self.factors.ids)))
        normal = np.empty_like(values)
        for column, law in enumerate(scores.laws):
            chosen = scores.values[scenarios, column]
            normal[:, column] = law.normal(chosen)
            values[:, column] = self._all_tables[column].values(chosen)
        return FactorDraws(values, normal)

    @cached_property
    def _all_tables(self) -> tuple[ScoreTable, ...]:
        return tuple(_table(self.factors, column, law) for column, law in enumerate(self.sampler.laws))

    def _rows(self, draw: Draw, scratch: ModelScratch) -> FactorRows:
        if not self.portfolio.used.size and not self._scored:
            return FactorRows(draw.scenarios, np.empty((0, draw.scenarios)), self.portfolio.places)
        scores = self.sampler.scores(draw)
        rows = scratch.empty("factors", len(self.tables), draw.scenarios)
        for row, column, table in zip(rows, self.portfolio.used.tolist(), self.tables, strict=True):
            table.values(scores.values[:, column], out=row, scratch=scratch.tables)
        return _SampledRows(scores, rows, self.portfolio.places)

    @cached_property
    def _scored(self) -> bool:
        """Whether a component needs normal scores or uniforms of factors."""
        return any(one.used_scores for terms in self.portfolio.sub_portfolios for one in terms.components)

    @property
    def draws_per_scenario(self) -> float:
        """Expected number of random draws in a scenario: what a simulation costs, roughly."""
        components = (one for terms in self.portfolio.sub_portfolios for one in terms.components)
        return self.sampler.dimensions + sum(one.draws_per_scenario for one in components)

    @property
    def not_driven(self) -> tuple[tuple[int, int], ...]:
        """Sub-portfolio and number of each component with draws of its own, which Sobol points do not drive."""
        return tuple(
            (row, number)
            for row, terms in enumerate(self.portfolio.sub_portfolios)
            for number, one in enumerate(terms.components)
            if one.own_draws
        )

    @property
    def notes(self) -> tuple[tuple[str, str, str], ...]:
        """Code, words and pointer of what the caller may doubt: repaired correlations, grids of driven sums."""
        notes = []
        repair = self.sampler.repair
        if repair is not None:
            notes.append((repair.code, repair.detail, "/dependence/correlation"))
        for row, terms in enumerate(self.portfolio.sub_portfolios):
            for number, one in enumerate(terms.components):
                if isinstance(one, CompoundComponent) and one.driver is not None:
                    pointer = f"/sub_portfolios/{row}/components/{number}"
                    detail = f"the aggregate claims of {terms.id} {one.law_of_sum.statement}"
                    notes.append(("driven_sum", detail, pointer))
        return tuple(notes)

    def existence(self, *, exponential: bool = True, pause: Callable[[], None] = go_on) -> tuple[list[Tails], Tails]:
        """Return which moments exist of each sub-portfolio's loss and of the total; parameters as of the portfolio."""
        return self.portfolio.existence(exponential=exponential, pause=pause)


def _table(factors: FactorSet, column: int, law: Law) -> ScoreTable:
    return ScoreTable.of(factors.marginal(factors.ids[column]), law)


def _unique(ids: tuple[str, ...]) -> None:
    known: set[str] = set()
    faults = []
    for number, name in enumerate(ids):
        if name in known:
            pointer = f"/factors/{number}/id"
            faults.append(Fault(detail=f"the id '{name}' is taken", code="not_unique", pointer=pointer))
        known.add(name)
    if faults:
        raise InvalidValue(faults[0].detail, faults=faults)
