"""What a component is: a map from the factors, and from draws of its own, to the loss of a sub-portfolio.

A component is first checked and then prepared against a set of factors; what `prepared` returns holds
all that does not change from block to block and writes the losses of a block of scenarios.
"""

import math
from collections.abc import Iterable, Sequence
from dataclasses import dataclass as plain
from dataclasses import field
from functools import cached_property
from typing import Protocol, TypeVar

import numpy as np
from numpy.random import Generator
from numpy.typing import NDArray
from pydantic.dataclasses import dataclass

from service.errors import Fault, InvalidValue
from service.risk.copulas import CopulaFamily, IndependentCopula, Sampler
from service.risk.copulas.elliptical import GaussianSampler
from service.risk.covers import Tails
from service.risk.marginals import MarginalLaw
from service.risk.words import STRICT, Text
from service.suggestions import suggestion

Array = NDArray[np.float64]
Indices = NDArray[np.intp]
_Key = TypeVar("_Key")


@plain(frozen=True, slots=True)
class Growth:
    """How fast a loss grows far out with the normal scores z of the factors: at most as a sum of squares and products.

    Attributes
    ----------
    rising, falling : dict of str to float
        Coefficients of z²/2 where z is above, or below, 0; negative where the loss falls; infinity where an
        exponential does not keep up.
    products : dict of (str, str) to float
        Coefficients of z_a z_b, ids in order.
    sharp : bool
        Whether the loss grows as fast as that, not more slowly.
    """

    rising: dict[str, float] = field(default_factory=dict)
    falling: dict[str, float] = field(default_factory=dict)
    products: dict[tuple[str, str], float] = field(default_factory=dict)
    sharp: bool = True

    def plus(self, other: "Growth") -> "Growth":
        """Return the growth of the sum."""
        return Growth(
            _added(self.rising, other.rising),
            _added(self.falling, other.falling),
            _added(self.products, other.products),
            self.sharp and other.sharp,
        )

    def covered(self, rate: float) -> "Growth":
        """Return the growth once a cover leaves exponential moments up to `rate` of what had them up to 1.

        No gain may come through to make up for another loss: each part counts where it is a loss.
        """
        rising, falling = ({name: max(one, 0.0) / rate for name, one in part.items()} for part in self._squares)
        for pair, coefficient in self.products.items():  # 2 |z_a z_b| is at most z_a² + z_b²
            for name in pair:
                rising[name] = rising.get(name, 0.0) + abs(coefficient) / rate
                falling[name] = falling.get(name, 0.0) + abs(coefficient) / rate
        gains = any(one < 0.0 for part in self._squares for one in part.values())
        return Growth(rising, falling, {}, self.sharp and not gains and not self.products)

    @property
    def _squares(self) -> tuple[dict[str, float], dict[str, float]]:
        return self.rising, self.falling


def _added(first: dict[_Key, float], second: dict[_Key, float]) -> dict[_Key, float]:
    sums = dict(first)
    for key, coefficient in second.items():
        sums[key] = sums.get(key, 0.0) + coefficient
    return sums


def growth_along(name: str, tails: Tails, rising: float, falling: float) -> Growth:
    """Return the growth of a loss that changes by `rising` per unit of a factor far up, by `falling` far down.

    A factor with exponential moments up to a rate is about z²/(2 rate) far out: -ln P(Z > z) is about z²/2.
    """
    above, below = _square(rising, tails.upper_exponential), _square(-falling, tails.lower_exponential)
    return Growth({name: above[0]}, {name: below[0]}, {}, above[1] and below[1])


def _square(slope: float, rate: float) -> tuple[float, bool]:
    """Return the coefficient of z²/2, and whether it is sharp: a gain without bound counts as none."""
    if slope == 0.0 or math.isinf(rate):
        return 0.0, True
    coefficient = math.inf if rate == 0.0 else abs(slope) / rate
    if slope > 0.0:
        return coefficient, True
    return (-coefficient, True) if math.isfinite(coefficient) else (0.0, False)


@plain(frozen=True)
class FactorSet:
    """The factors that components refer to.

    Attributes
    ----------
    ids : tuple of str
        Unique, in the order of the factors' columns.
    marginals : tuple of MarginalLaw or None
        One each; None for observed changes, which have no law.
    dependence : CopulaFamily or None
        Their copula; None for observed changes.
    sampler : Sampler or None
        The copula bound to these factors.
    """

    ids: tuple[str, ...]
    marginals: tuple[MarginalLaw, ...] | None = None
    dependence: CopulaFamily | None = None
    sampler: Sampler | None = None

    @cached_property
    def positions(self) -> dict[str, int]:
        """Number of the column by id."""
        return {name: number for number, name in enumerate(self.ids)}

    def columns(self, names: Iterable[str]) -> Indices:
        """Return the columns of the factors named."""
        return np.array([self.positions[name] for name in names], dtype=np.intp)

    def marginal(self, name: str) -> MarginalLaw:
        """Return the law of a factor."""
        if self.marginals is None:
            raise LookupError(name)
        return self.marginals[self.positions[name]]

    def tails(self, name: str) -> Tails:
        """Return the tails of a factor."""
        if name not in self._tails:
            self._tails[name] = tails_of(self.marginal(name))
        return self._tails[name]

    @cached_property
    def _tails(self) -> dict[str, Tails]:
        return {}

    @property
    def independent(self) -> bool:
        """Whether the factors are independent of each other."""
        return isinstance(self.dependence, IndependentCopula)

    def correlation(self, columns: Indices) -> Array | None:
        """Return the correlation (k, k) of the normal scores; None if more than a correlation ties them."""
        if self.independent:
            return np.eye(columns.size)
        if isinstance(self.sampler, GaussianSampler):
            return self.sampler.root.correlations(columns)
        return None


def tails_of(marginal: MarginalLaw) -> Tails:
    """Return the tails of a marginal law."""
    return Tails(
        upper_index=marginal.upper_tail_index,
        lower_index=marginal.lower_tail_index,
        upper_exponential=marginal.exponential_moment,
        lower_exponential=marginal.lower_exponential_moment,
    )


class Block(Protocol):
    """A block of n scenarios as one component sees it; factors are named by their columns in the `FactorSet`."""

    @property
    def scenarios(self) -> int:
        """Number n of scenarios."""
        ...

    def values(self, columns: Indices) -> Array:
        """Return the values of factors, shape (k, n), in their units; not to be written to."""
        ...

    def normal_scores(self, columns: Indices) -> Array:
        """Return the normal scores of factors, shape (k, n), without unit; not to be written to."""
        ...

    def uniform(self, column: int) -> Array:
        """Return the uniform of a factor, shape (n,), in [0, 1]."""
        ...

    @property
    def generator(self) -> Generator:
        """The stream of this component in this block; the same object each time."""
        ...

    def pause(self) -> None:
        """Called between pieces of a long draw; may raise to stop it."""
        ...


class PreparedComponent(Protocol):
    """A component bound to its factors."""

    def losses(self, block: Block, out: Array) -> None:
        """Write the losses of the block into `out` (n,), C order, in currency."""
        ...


@dataclass(frozen=True, kw_only=True, config=STRICT)
class Component:
    """The contract, and what components without factors or draws of their own share."""

    @property
    def used(self) -> tuple[str, ...]:
        """Ids of the factors whose values it needs, each once."""
        return ()

    @property
    def used_scores(self) -> tuple[str, ...]:
        """Ids of the factors whose normal scores or uniforms it needs, each once."""
        return ()

    @property
    def own_draws(self) -> bool:
        """Whether it draws from a stream of its own."""
        return False

    @property
    def draws_per_scenario(self) -> float:
        """Expected number of draws of its own in a scenario."""
        return 0.0

    def check(self, factors: FactorSet) -> None:
        """Refuse what does not fit the factors.

        Raises
        ------
        InvalidValue
            With pointers relative to the component.
        """

    def prepared(self, factors: FactorSet) -> PreparedComponent:
        """Return the component bound to factors that passed `check`."""
        raise NotImplementedError

    def tails(self, factors: FactorSet) -> Tails:  # noqa: ARG002  # members use them
        """Return which moments of the loss exist; factors have marginals here."""
        return Tails()

    def growth(self, factors: FactorSet, factor: float) -> Growth:  # noqa: ARG002  # members use them
        """Return how fast `factor` times the loss grows with the factors' normal scores far out.

        What has draws of its own is left out.
        """
        return Growth()

    @property
    def independent(self) -> bool:
        """Whether its loss is independent of the factors and of all other components."""
        return False

    def mean(self, factors: FactorSet) -> float | None:  # noqa: ARG002  # members use them
        """Return the expected loss in currency where it has a closed form, else None."""
        return None


def unknown_factors(named: Sequence[tuple[str, str]], factors: FactorSet) -> list[Fault]:
    """Return a fault for each (pointer, id) that names no factor."""
    faults = []
    for pointer, name in named:
        if name not in factors.positions:
            detail = f"there is no factor '{name}'{suggestion(name, factors.ids)}"
            faults.append(Fault(detail=detail, code="unknown_factor", pointer=pointer))
    return faults


def refuse(faults: Sequence[Fault]) -> None:
    """Raise the faults, if any."""
    if faults:
        detail = faults[0].detail if len(faults) == 1 else f"{len(faults)} values are not allowed."
        raise InvalidValue(detail, faults=faults)


def once(names: Iterable[str]) -> tuple[str, ...]:
    """Return each name once, in order of first appearance."""
    return tuple(dict.fromkeys(names))


def finite_sum(terms: Iterable[float | None]) -> float | None:
    """Return the sum; None if a term is missing or not finite."""
    total = 0.0
    for term in terms:
        if term is None or not math.isfinite(term):
            return None
        total += term
    return total


__all__ = [
    "Array",
    "Block",
    "Component",
    "FactorSet",
    "Growth",
    "Indices",
    "PreparedComponent",
    "Text",
    "finite_sum",
    "growth_along",
    "once",
    "refuse",
    "tails_of",
    "unknown_factors",
]
