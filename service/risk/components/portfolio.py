"""Portfolio: the components of all sub-portfolios, their signs and covers, put together for blocks of scenarios."""

import math
from collections.abc import Callable, Sequence
from dataclasses import dataclass, replace
from typing import Literal

import numpy as np
from numpy.random import Generator

from service.errors import CallerError, Fault, pointing
from service.risk.components.contract import (
    Array,
    Component,
    Exponents,
    FactorSet,
    Indices,
    PreparedComponent,
    refuse,
)
from service.risk.components.of_factors import ConstantComponent, LinearComponent
from service.risk.covers import CoverStep, Tails, check_cover, covered, tails_after

PADDING = 8  # doubles between rows of scratch: rows a power of two apart would share their place in the cache
MOST_OF_ONE = 64  # factors of a sub-portfolio up to which the exponential moment of a normal dependence is exact
MOST_OF_ALL = 400  # likewise of the total
FEW_FACTORS = 0.06  # filled part of the exposure matrix up to which factors are added one by one


@dataclass(frozen=True, slots=True)
class SubPortfolioTerms:
    """A sub-portfolio as the arithmetic sees it: components are added, the sign applied, then each cover step.

    With a `scale` it stands for so many times its loss in questions of existence; losses are those of one.
    """

    id: str
    components: tuple[Component, ...]
    sign: Literal["loss", "profit"] = "loss"
    cover: tuple[CoverStep, ...] = ()
    scale: float = 1.0

    @property
    def factor(self) -> float:
        """What the sum of the components is multiplied by."""
        return -1.0 if self.sign == "profit" else 1.0

    @property
    def used(self) -> frozenset[str]:
        """Ids of all factors that it depends on."""
        return frozenset(name for one in self.components for name in (*one.used, *one.used_scores))

    def owner(self, number: int) -> str:
        """Return the owner of the stream of its component with this number."""
        return f"sub_portfolio/{self.id}/{number}"

    def tails(self, factors: FactorSet) -> Tails:
        """Return which moments of its loss exist, after sign, cover and scale."""
        groups = [(frozenset((*one.used, *one.used_scores)), one.tails(factors)) for one in self.components]
        return tails_after(self.cover, together(groups, factors).times(self.factor)).times(self.scale)


def together(parts: Sequence[tuple[frozenset[str], Tails]], factors: FactorSet) -> Tails:
    """Return the tails of the sum of parts, each with the factors that it depends on.

    Parts without factors are independent of all others; with independent factors so are parts without a
    factor in common. All others may be as dependent as can be.
    """
    groups: list[tuple[frozenset[str], Tails]] = []
    for part in parts:
        names, tails = part
        for other in [one for one in groups if names and one[0] and (not factors.independent or names & one[0])]:
            groups.remove(other)
            names, tails = names | other[0], tails.plus(other[1])
        groups.append((names, tails))
    total = Tails()
    for _, tails in groups:
        total = total.plus(tails, independent=True)
    return total


def go_on() -> None:
    """Let a draw go on."""


class BlockScratch:
    """Arrays of one thread that each block fills anew."""

    __slots__ = ("_arrays",)

    def __init__(self) -> None:
        self._arrays: dict[str, Array] = {}

    def empty(self, name: str, rows: int, columns: int) -> Array:
        """Return an array (rows, columns) with anything in it; the same one for the same name."""
        known = self._arrays.get(name)
        if known is None or known.shape[0] < rows or known.shape[1] < columns:
            known = self._arrays[name] = np.empty((rows, columns + PADDING))
        return known[:rows, :columns]


class FactorRows:
    """Values, normal scores and uniforms of the factors that a portfolio uses, in one block of n scenarios.

    Attributes
    ----------
    scenarios : int
    rows : ndarray of shape (k used, n)
        Values of the factors used, in the order of `Portfolio.used`.
    """

    __slots__ = ("_places", "rows", "scenarios")

    def __init__(self, scenarios: int, rows: Array, places: Indices) -> None:
        self.scenarios = scenarios
        self.rows = rows
        self._places = places

    def values(self, columns: Indices) -> Array:
        """Return the values of factors, shape (k, n)."""
        return taken(self.rows, self._places[columns])

    def normal_scores(self, columns: Indices) -> Array:
        """Return the normal scores of factors, shape (k, n)."""
        raise NotImplementedError

    def uniform(self, column: int) -> Array:
        """Return the uniform of a factor, shape (n,)."""
        raise NotImplementedError


def taken(rows: Array, places: Indices) -> Array:
    """Return rows (k, n): a view where they lie side by side."""
    first = int(places[0]) if places.size else 0
    if np.array_equal(places, np.arange(first, first + places.size)):
        return rows[first : first + places.size]
    return rows[places]


class _OwnBlock:
    """A block as one component sees it: the factors, and its own stream when it asks for it."""

    __slots__ = ("_factors", "_generator", "_owner", "_streams", "pause")

    def __init__(
        self, factors: FactorRows, streams: Callable[[str], Generator], owner: str, pause: Callable[[], None]
    ) -> None:
        self._factors = factors
        self._streams = streams
        self.pause = pause
        self._owner = owner
        self._generator: Generator | None = None

    @property
    def scenarios(self) -> int:
        return self._factors.scenarios

    def values(self, columns: Indices) -> Array:
        return self._factors.values(columns)

    def normal_scores(self, columns: Indices) -> Array:
        return self._factors.normal_scores(columns)

    def uniform(self, column: int) -> Array:
        return self._factors.uniform(column)

    @property
    def generator(self) -> Generator:
        if self._generator is None:
            self._generator = self._streams(self._owner)
        return self._generator


@dataclass(frozen=True, slots=True)
class _Added:
    """A component that is added to a row of losses, and the pointer to it."""

    row: int
    prepared: PreparedComponent
    owner: str
    factor: float
    pointer: str


@dataclass(frozen=True, slots=True, eq=False)
class Portfolio:
    """d sub-portfolios bound to their factors.

    Attributes
    ----------
    sub_portfolios : tuple of SubPortfolioTerms
    factors : FactorSet
    used : ndarray of shape (k used,)
        Columns of the factors whose values are needed, in order.
    places : ndarray of shape (k,)
        Row of each factor among those used; -1 for the rest.
    exposures : ndarray of shape (d, k used)
        Of all linear components together, with sign.
    amounts : ndarray of shape (d,)
        Of all constant components together, with sign.
    added : tuple of _Added
        All other components.
    """

    sub_portfolios: tuple[SubPortfolioTerms, ...]
    factors: FactorSet
    used: Indices
    places: Indices
    exposures: Array
    amounts: Array
    added: tuple[_Added, ...]

    @classmethod
    def of(cls, sub_portfolios: Sequence[SubPortfolioTerms], factors: FactorSet) -> "Portfolio":
        """Check and prepare.

        Raises
        ------
        InvalidValue
            With pointers that begin at `sub_portfolios`.
        """
        refuse(_faults(sub_portfolios, factors))
        names = {name for terms in sub_portfolios for one in terms.components for name in one.used}
        used = np.array(sorted(factors.positions[name] for name in names), dtype=np.intp)
        places = np.full(len(factors.ids), -1, dtype=np.intp)
        places[used] = np.arange(used.size)
        exposures = np.zeros((len(sub_portfolios), used.size))
        amounts = np.zeros(len(sub_portfolios))
        added = []
        for row, terms in enumerate(sub_portfolios):
            for number, one in enumerate(terms.components):
                if isinstance(one, LinearComponent):
                    for name, amount in one.amounts.items():
                        exposures[row, places[factors.positions[name]]] += terms.factor * amount
                elif isinstance(one, ConstantComponent):
                    amounts[row] += terms.factor * one.amount
                else:
                    pointer = f"/sub_portfolios/{row}/components/{number}"
                    prepared = one.prepared(factors)
                    added.append(_Added(row, prepared, terms.owner(number), terms.factor, pointer))
        return cls(tuple(sub_portfolios), factors, used, places, exposures, amounts, tuple(added))

    def losses(
        self,
        rows: FactorRows,
        streams: Callable[[str], Generator],
        *,
        scratch: BlockScratch,
        out: Array,
        pause: Callable[[], None] = go_on,
    ) -> Array:
        """Return the losses (n, d) of a block, written into `out` in C order.

        Parameters
        ----------
        rows : FactorRows
        streams : callable
            The generator of an owner in this block.
        scratch : BlockScratch
            Of the thread.
        out : ndarray of shape (n, d)
        pause : callable
            Called between pieces of long draws; may raise to stop them.
        """
        covers = any(terms.cover for terms in self.sub_portfolios)
        if not self.added and not covers and not self._sparse:
            np.matmul(rows.rows.T, self.exposures.T, out=out)
            out += self.amounts
            return out
        work = scratch.empty("losses", len(self.sub_portfolios), rows.scenarios)
        self._linear(rows.rows, work)
        component = scratch.empty("component", 1, rows.scenarios)[0]
        for one in self.added:
            with pointing(one.pointer):
                one.prepared.losses(_OwnBlock(rows, streams, one.owner, pause), component)
            if one.factor < 0.0:
                np.subtract(work[one.row], component, out=work[one.row])
            else:
                work[one.row] += component
        for row, terms in enumerate(self.sub_portfolios):
            if terms.cover:
                covered(terms.cover, work[row], out=work[row])
        np.copyto(out, work.T)
        return out

    @property
    def _sparse(self) -> bool:
        filled = np.count_nonzero(self.exposures)
        return bool(filled <= max(FEW_FACTORS * self.exposures.size, 2 * self.exposures.shape[0]))

    def _linear(self, values: Array, work: Array) -> None:
        """Write the losses of the linear and constant components into `work` (d, n)."""
        if not self._sparse:
            np.matmul(self.exposures, values, out=work)
            work += self.amounts[:, None]
            return
        term = np.empty(work.shape[1])
        for row, exposures in enumerate(self.exposures):
            filled = np.flatnonzero(exposures)
            if not filled.size:
                work[row] = self.amounts[row]
                continue
            np.multiply(values[filled[0]], exposures[filled[0]], out=work[row])
            for place in filled[1:]:
                work[row] += np.multiply(values[place], exposures[place], out=term)
            if self.amounts[row] != 0.0:
                work[row] += self.amounts[row]

    def existence(self) -> tuple[list[Tails], Tails]:
        """Return which moments exist of each sub-portfolio's loss and of the total."""
        each = [self._judged([terms], terms.tails(self.factors), MOST_OF_ONE) for terms in self.sub_portfolios]
        return each, self.of_sum(range(len(each)), each)

    def of_sum(self, members: Sequence[int], each: Sequence[Tails], *, exponential: bool = True) -> Tails:
        """Return which moments exist of the summed loss of some sub-portfolios.

        Parameters
        ----------
        members : sequence of int
            Their numbers.
        each : sequence of Tails
            Of every sub-portfolio.
        exponential : bool
            Whether exponential moments are worth the work; if not, they may be said to be missing where they exist.
        """
        terms = [self.sub_portfolios[member] for member in members]
        parts = [(one.used, each[member]) for one, member in zip(terms, members, strict=True)]
        tails = together(parts, self.factors)
        return self._judged(terms, tails, MOST_OF_ALL) if exponential else tails

    def _judged(self, terms: Sequence[SubPortfolioTerms], tails: Tails, most: int) -> Tails:
        """Return the tails with the exponential moment that a normal dependence allows, where that is known."""
        upper, lower = (exponential_rate(terms, self.factors, sign, most=most) for sign in (1.0, -1.0))
        if upper is None or lower is None:
            return tails
        return replace(
            tails,
            upper_exponential=max(upper, tails.upper_exponential),
            lower_exponential=max(lower, tails.lower_exponential),
        )


def exponential_rate(
    sub_portfolios: Sequence[SubPortfolioTerms], factors: FactorSet, sign: float, *, most: int = MOST_OF_ALL
) -> float | None:
    """Return up to which t the summed loss (times `sign`) surely has E[exp(tL)] under normal dependence.

    Far out the loss is at most z'Mz/2 in the factors' normal scores z, and E[exp(t z'Mz/2)] is finite if and only
    if t times the largest eigenvalue of MR is below 1. Independent parts are judged one by one. None under any
    other dependence, and with more than `most` factors.
    """
    sums: Exponents = {}
    least = math.inf
    for terms in sub_portfolios:
        exponents, own = _exponents(terms, factors, sign)
        least = min(least, own)
        for pair, coefficient in exponents.items():
            sums[pair] = sums.get(pair, 0.0) + coefficient
    if not all(math.isfinite(coefficient) for coefficient in sums.values()):
        return 0.0
    names = sorted({name for pair, coefficient in sums.items() if coefficient != 0.0 for name in pair})
    if not names:
        return least
    if len(names) > most:
        return None
    correlation = np.eye(1) if len(names) == 1 else factors.correlation(factors.columns(names))
    if correlation is None:
        return None
    form = np.zeros((len(names), len(names)))
    place = {name: number for number, name in enumerate(names)}
    for (first, second), coefficient in sums.items():
        if coefficient != 0.0:
            form[place[first], place[second]] = form[place[second], place[first]] = coefficient
    largest = _largest_eigenvalue(form, correlation)
    return min(least, 1.0 / largest) if largest > 0.0 else least


def _largest_eigenvalue(form: Array, correlation: Array) -> float:
    """Return that of the product of two symmetric matrices, the second positive semi-definite."""
    sizes = np.diag(form)
    if np.count_nonzero(form) == np.count_nonzero(sizes) and np.all(sizes >= 0.0):
        roots = np.sqrt(sizes)
        return float(np.linalg.eigvalsh(roots[:, None] * correlation * roots)[-1])
    return float(np.max(np.linalg.eigvals(form @ correlation).real))


def _exponents(terms: SubPortfolioTerms, factors: FactorSet, sign: float) -> tuple[Exponents, float]:
    """Return the coefficients of a sub-portfolio's loss (times `sign`), and the least rate of its independent parts."""
    if terms.scale == 0.0:
        return {}, math.inf
    sign *= terms.scale
    kept = tails_after(terms.cover, Tails(upper_exponential=1.0, lower_exponential=1.0))
    rate = kept.upper_exponential if sign > 0.0 else kept.lower_exponential
    sums: Exponents = {}
    least = math.inf
    if math.isinf(rate):
        return sums, least
    for one in terms.components:
        if one.independent:
            own = one.tails(factors).times(sign * terms.factor)
            least = min(least, own.upper_exponential * rate)
        for (first, second), coefficient in one.exponents(factors, sign * terms.factor).items():
            if terms.cover and (first != second or coefficient < 0.0):  # a gain may not come through the cover
                parts = [(name, name) for name in (first, second) if first != second]
                size = abs(coefficient)
            else:
                parts, size = [(first, second)], coefficient
            for pair in parts:
                sums[pair] = sums.get(pair, 0.0) + size / rate
    return sums, least


def _faults(sub_portfolios: Sequence[SubPortfolioTerms], factors: FactorSet) -> list[Fault]:
    """Return all that does not fit, with pointers that begin at `sub_portfolios`."""
    faults: list[Fault] = []
    known: set[str] = set()
    for row, terms in enumerate(sub_portfolios):
        here = f"/sub_portfolios/{row}"
        if terms.id in known:
            faults.append(Fault(detail=f"the id '{terms.id}' is taken", code="not_unique", pointer=f"{here}/id"))
        known.add(terms.id)
        checks: list[tuple[str, Callable[[], None]]] = [
            (f"{here}/components/{number}", lambda one=one: one.check(factors))  # type: ignore[misc]
            for number, one in enumerate(terms.components)
        ]
        checks.append((f"{here}/cover", lambda terms=terms: check_cover(terms.cover)))  # type: ignore[misc]
        for pointer, check in checks:
            try:
                with pointing(pointer):
                    check()
            except CallerError as error:
                faults += error.faults
    return faults
