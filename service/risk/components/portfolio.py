"""Portfolio: the components of all sub-portfolios, their signs and covers, put together for blocks of scenarios."""

import math
from collections.abc import Callable, Sequence
from dataclasses import dataclass, replace
from itertools import product
from typing import Literal

import numpy as np
from numpy.random import Generator
from numpy.typing import NDArray

from service.errors import CallerError, Fault, pointing
from service.risk.components.contract import (
    Array,
    Component,
    FactorSet,
    Growth,
    Indices,
    PreparedComponent,
    refuse,
)
from service.risk.components.of_factors import ConstantComponent, LinearComponent
from service.risk.copulas import ComonotonicCopula
from service.risk.covers import CoverStep, Tails, check_cover, covered, tails_after

PADDING = 8  # doubles between rows of scratch: rows a power of two apart would share their place in the cache
MOST_OF_ONE = 64  # factors of a sub-portfolio up to which the exponential moment of a normal dependence is exact
MOST_OF_ALL = 400  # likewise of the total
MOST_SPLIT = 8  # factors up to which each pattern of their signs is looked at
MOST_BESIDE = 32  # factors in all up to which they are
NEGLIGIBLE = 1e-10  # difference of eigenvalues, in parts of the largest
TIE = 1e-8  # by which ties of eigenvalues are broken, in parts of the coefficients
TIE_LEFT = 1e-2  # part of it below which a tie is not broken
ROUNDING = 1e-6  # error, in parts of a growth, up to which it is known
SLACK = 1e-5  # of a score that is taken for 0, in a direction of length 1: its square is about a broken tie
GOLDEN = 0.5 * (math.sqrt(5.0) - 1.0)
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

    def existence(self, *, exponential: bool = True, pause: Callable[[], None] = go_on) -> tuple[list[Tails], Tails]:
        """Return which moments exist of each sub-portfolio's loss and of the total.

        Parameters
        ----------
        exponential : bool
            Whether exponential moments are worth the work; if not, they may be said to be missing where they exist.
        pause : callable
            Called before each; may raise to stop.
        """
        each = []
        for terms in self.sub_portfolios:
            pause()
            tails = terms.tails(self.factors)
            each.append(self._judged([terms], tails, MOST_OF_ONE) if exponential else tails)
        return each, self.of_sum(range(len(each)), each, exponential=exponential)

    def of_sum(self, members: Sequence[int], each: Sequence[Tails], *, exponential: bool = True) -> Tails:
        """Return which moments exist of the summed loss of some sub-portfolios, given those of every one."""
        terms = [self.sub_portfolios[member] for member in members]
        parts = [(one.used, each[member]) for one, member in zip(terms, members, strict=True)]
        tails = together(parts, self.factors)
        return self._judged(terms, tails, MOST_OF_ALL) if exponential else tails

    def _judged(self, terms: Sequence[SubPortfolioTerms], tails: Tails, most: int) -> Tails:
        """Return the tails with the exponential moment that a normal dependence allows, where that is known."""
        upper, lower = (exponential_rate(terms, self.factors, sign, most=most) for sign in (1.0, -1.0))
        if upper is None or lower is None:
            return tails
        above = _better(upper, (tails.upper_exponential, tails.upper_sharp))
        below = _better(lower, (tails.lower_exponential, tails.lower_sharp))
        return replace(
            tails,
            upper_exponential=above[0],
            lower_exponential=below[0],
            upper_sharp=above[1],
            lower_sharp=below[1],
        )


def _better(first: tuple[float, bool], second: tuple[float, bool]) -> tuple[float, bool]:
    """Return the higher of two sure rates, sharp if one that is as high is."""
    rate = max(first[0], second[0])
    return rate, any(sharp and one >= rate * (1.0 - NEGLIGIBLE) for one, sharp in (first, second))


def exponential_rate(
    sub_portfolios: Sequence[SubPortfolioTerms], factors: FactorSet, sign: float, *, most: int = MOST_OF_ALL
) -> tuple[float, bool] | None:
    """Return up to which t the summed loss (times `sign`) surely has E[exp(tL)] under normal dependence, if sharp.

    Far out the loss is at most Q(z)/2 in the factors' normal scores z = Cu, Q a quadratic form in each orthant, and
    E[exp(t Q(Cu)/2)] is finite if and only if t Q(Cu) is below |u|² for all u. Independent parts are judged one by
    one. None under any dependence but the independent, the normal and the comonotonic, and with more than `most`
    factors.
    """
    growth = Growth()
    least = (math.inf, True)
    for terms in sub_portfolios:
        part, own = _growth(terms, factors, sign)
        growth = growth.plus(part)
        least = min(least, own, key=lambda one: one[0])
    coefficients = [one for part in (growth.rising, growth.falling, growth.products) for one in part.values()]
    if not all(map(math.isfinite, coefficients)):
        return 0.0, growth.sharp
    names = sorted(
        {name for part in (growth.rising, growth.falling) for name, one in part.items() if one != 0.0}
        | {name for pair, one in growth.products.items() if one != 0.0 for name in pair}
    )
    if not names:
        return least
    if len(names) > most:
        return None
    correlation = _correlation(factors, names)
    if correlation is None:
        return None
    largest, sharp = _largest(_form(growth, names), correlation)
    rate = 1.0 / largest if largest > 0.0 else math.inf
    return least if least[0] <= rate else (rate, sharp and growth.sharp)


def _correlation(factors: FactorSet, names: Sequence[str]) -> Array | None:
    """Return the correlation of the normal scores, where it says all; None where it does not."""
    if len(names) == 1 or isinstance(factors.dependence, ComonotonicCopula):
        return np.ones((len(names), len(names)))
    return factors.correlation(factors.columns(names))


def _growth(terms: SubPortfolioTerms, factors: FactorSet, sign: float) -> tuple[Growth, tuple[float, bool]]:
    """Return the growth of a sub-portfolio's loss (times `sign`), and the least rate of its independent parts."""
    if terms.scale == 0.0:
        return Growth(), (math.inf, True)
    sign *= terms.scale
    kept = tails_after(terms.cover, Tails(upper_exponential=1.0, lower_exponential=1.0))
    rate = kept.upper_exponential if sign > 0.0 else kept.lower_exponential
    growth, least = Growth(), (math.inf, True)
    if math.isinf(rate):
        return growth, least
    for one in terms.components:
        if one.independent:
            own = one.tails(factors).times(sign * terms.factor)
            least = min(least, (own.upper_exponential * rate, own.upper_sharp), key=lambda own: own[0])
        else:
            growth = growth.plus(one.growth(factors, sign * terms.factor))
    return growth.covered(rate) if terms.cover else growth, least


@dataclass(frozen=True, slots=True, eq=False)
class _Form:
    """A function Q of z that is a quadratic form in each orthant: z'Mz, where only the diagonal depends on signs.

    Attributes
    ----------
    rising, falling : ndarray of shape (k,)
        Diagonal where z is above, or below, 0.
    products : ndarray of shape (k, k)
        The rest.
    """

    rising: Array
    falling: Array
    products: Array


def _form(growth: Growth, names: Sequence[str]) -> _Form:
    place = {name: number for number, name in enumerate(names)}
    rising, falling = (np.array([part.get(name, 0.0) for name in names]) for part in (growth.rising, growth.falling))
    products = np.zeros((len(names), len(names)))
    for (first, second), coefficient in growth.products.items():
        if coefficient != 0.0:
            products[place[first], place[second]] = products[place[second], place[first]] = coefficient
    return _Form(rising, falling, products)


def _largest(form: _Form, correlation: Array) -> tuple[float, bool]:
    """Return the largest Q(Cu)/|u|², or 0, CC' the correlation, and whether it is that or only not below it.

    Q is differentiable, so a largest one is at an eigenvector of C'MC with M of an orthant that holds Cu; with the
    smaller diagonal where Cu is 0 it belongs to the largest eigenvalue, since there is none above it nearby.
    So the answer is the largest of those of all orthants whose eigenvector lies in them.
    """
    scale = max(float(np.max(np.abs(part))) for part in (form.rising, form.falling, form.products))
    rising, falling, products = (part / scale for part in (form.rising, form.falling, form.products))
    root = _root(correlation)
    higher = np.maximum(rising, falling)
    split = np.flatnonzero(rising != falling)
    upward = np.where(rising >= falling, 1.0, -1.0)[split]
    values, vectors = np.linalg.eigh(root.T @ (products + np.diag(higher)) @ root)
    top = values >= values[-1] - NEGLIGIBLE * abs(values[-1])
    if values[-1] <= 0.0:
        return 0.0, True
    if np.any(_inside(root[split] @ vectors[:, top], upward[:, None])):
        return scale * float(values[-1]), True
    if split.size > MOST_SPLIT or higher.size > MOST_BESIDE:
        return scale * float(values[-1]), False
    signs = np.array(list(product((1.0, -1.0), repeat=split.size)))
    sizes = np.tile(higher, (signs.shape[0], 1))
    sizes[:, split] = np.where(signs > 0.0, rising[split], falling[split])
    sizes += TIE * (1.0 + np.modf(GOLDEN * np.arange(higher.size))[0])  # eigenvalues become simple
    matrices = (root.T * sizes[:, None, :]) @ root + root.T @ products @ root
    values, vectors = np.linalg.eigh(matrices)
    inside = _inside((root[split] @ vectors[:, :, -1:])[:, :, 0].T, signs.T)
    tied = values[:, -1] - values[:, -2] <= TIE * TIE_LEFT if values.shape[1] > 1 else np.zeros(1, dtype=bool)
    largest = float(np.max(values[:, -1], where=inside | tied, initial=0.0))
    found = np.max(values[:, -1], where=inside, initial=0.0)
    return scale * largest, bool(found == largest > TIE / ROUNDING)


def _root(correlation: Array) -> Array:
    """Return C (k, r) of full rank with CC' the correlation."""
    values, vectors = np.linalg.eigh(correlation)
    there = values > NEGLIGIBLE
    return np.asarray(vectors[:, there] * np.sqrt(values[there]))


def _inside(z: Array, signs: Array) -> NDArray[np.bool_]:
    """Return which columns z (k, n), or their negatives, have these signs, nearly."""
    signed = z * signs
    return np.asarray(np.all(signed >= -SLACK, axis=0) | np.all(signed <= SLACK, axis=0))


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
