"""Components that are functions of the factors alone: constant, linear, delta and gamma, revaluation grid."""

import math
from collections.abc import Iterable
from dataclasses import dataclass as plain
from typing import Annotated, Literal, Self

import numpy as np
from pydantic import Field, model_validator
from pydantic.dataclasses import dataclass
from pydantic_core import PydanticCustomError

from service.errors import Fault, NotDefined
from service.risk.components.contract import (
    Array,
    Block,
    Component,
    FactorSet,
    Growth,
    Indices,
    PreparedComponent,
    finite_sum,
    growth_along,
    once,
    refuse,
    unknown_factors,
)
from service.risk.covers import Tails, harmonic
from service.risk.marginals import NormalMarginal
from service.risk.words import STRICT, Text

TINY = 1e-300  # in place of a reach of 0
FEW_PAIRS = 4  # pairs per factor up to which they are added one by one instead of by a matrix product


@dataclass(frozen=True, kw_only=True, config=STRICT)
class ConstantComponent(Component):
    """A fixed loss."""

    kind: Literal["constant"]
    """Tag of this component."""
    amount: float
    """The loss, in currency; negative is a gain."""

    def prepared(self, factors: FactorSet) -> PreparedComponent:  # noqa: ARG002  # as the contract
        return _Constant(self.amount)

    def mean(self, factors: FactorSet) -> float | None:  # noqa: ARG002  # as the contract
        return self.amount


@plain(frozen=True, slots=True)
class _Constant:
    amount: float

    def losses(self, block: Block, out: Array) -> None:  # noqa: ARG002  # as the contract
        out.fill(self.amount)


@dataclass(frozen=True, kw_only=True, config=STRICT)
class FactorExposure:
    """A loss per unit of a factor."""

    factor: Text
    """Id of the factor."""
    amount: float
    """Loss in currency per unit of the factor; negative where the loss falls as the factor rises."""


@dataclass(frozen=True, kw_only=True, config=STRICT)
class LinearComponent(Component):
    """The sum of amount × factor."""

    kind: Literal["linear"]
    """Tag of this component."""
    exposures: Annotated[list[FactorExposure], Field(min_length=1)]
    """Loss per unit of each factor; several exposures to one factor add up."""

    @property
    def used(self) -> tuple[str, ...]:
        return once(one.factor for one in self.exposures)

    @property
    def amounts(self) -> dict[str, float]:
        """Summed exposure by factor, in currency per unit."""
        return _summed(self.exposures)

    def check(self, factors: FactorSet) -> None:
        refuse(unknown_factors(_named("/exposures", self.exposures), factors))

    def prepared(self, factors: FactorSet) -> PreparedComponent:
        amounts = self.amounts
        return _Linear(factors.columns(amounts), np.array(list(amounts.values())))

    def tails(self, factors: FactorSet) -> Tails:
        return _linear_tails(self.amounts, factors)

    def growth(self, factors: FactorSet, factor: float) -> Growth:
        return _linear_growth(self.amounts, factors, factor)

    def mean(self, factors: FactorSet) -> float | None:
        return finite_sum(amount * factors.marginal(name).mean for name, amount in self.amounts.items())


def _named(pointer: str, exposures: Iterable[FactorExposure]) -> list[tuple[str, str]]:
    return [(f"{pointer}/{number}/factor", one.factor) for number, one in enumerate(exposures)]


def _summed(exposures: Iterable[FactorExposure]) -> dict[str, float]:
    amounts: dict[str, float] = {}
    for one in exposures:
        amounts[one.factor] = amounts.get(one.factor, 0.0) + one.amount
    return amounts


def _linear_tails(amounts: dict[str, float], factors: FactorSet) -> Tails:
    tails = Tails()
    for name, amount in amounts.items():
        tails = tails.plus(factors.tails(name).times(amount), independent=factors.independent)
    return tails


def _linear_growth(amounts: dict[str, float], factors: FactorSet, factor: float) -> Growth:
    growth = Growth()
    for name, amount in amounts.items():
        growth = growth.plus(growth_along(name, factors.tails(name), factor * amount, factor * amount))
    return growth


@plain(frozen=True, slots=True)
class _Linear:
    columns: Indices
    amounts: Array

    def losses(self, block: Block, out: Array) -> None:
        values = block.values(self.columns)
        if self.columns.size == 1:
            np.multiply(values[0], self.amounts[0], out=out)
        else:
            np.matmul(self.amounts, values, out=out)


@dataclass(frozen=True, kw_only=True, config=STRICT)
class FactorPair:
    """A second-order loss of a pair of factors."""

    first: Text
    """Id of a factor."""
    second: Text
    """Id of the other factor, or of the same."""
    amount: float
    """Second derivative of the loss, in currency per product of the units of the two factors."""


@dataclass(frozen=True, kw_only=True, config=STRICT)
class DeltaGammaComponent(Component):
    """A quadratic loss δ′x + ½x′Γx: a pair (a, a) adds ½·amount·xₐ², a pair (a, b) adds amount·xₐx_b once."""

    kind: Literal["delta_gamma"]
    """Tag of this component."""
    delta: list[FactorExposure] = Field(default_factory=list)
    """First derivatives; several of one factor add up."""
    gamma: list[FactorPair] = Field(default_factory=list)
    """Second derivatives; several of one pair add up, whichever factor comes first."""

    @model_validator(mode="after")
    def _something(self) -> Self:
        if not self.delta and not self.gamma:
            raise PydanticCustomError("missing", "delta or gamma must hold at least one term")
        return self

    @property
    def used(self) -> tuple[str, ...]:
        paired = (name for one in self.gamma for name in (one.first, one.second))
        return once([*(one.factor for one in self.delta), *paired])

    @property
    def amounts(self) -> dict[str, float]:
        """Summed delta by factor."""
        return _summed(self.delta)

    @property
    def halves(self) -> dict[tuple[str, str], float]:
        """Coefficient of the product of each pair of factors (ids in order): the amount, half of it for squares."""
        sums: dict[tuple[str, str], float] = {}
        for one in self.gamma:
            pair = (min(one.first, one.second), max(one.first, one.second))
            amount = 0.5 * one.amount if one.first == one.second else one.amount
            sums[pair] = sums.get(pair, 0.0) + amount
        return sums

    def check(self, factors: FactorSet) -> None:
        named = _named("/delta", self.delta)
        for number, one in enumerate(self.gamma):
            named += [(f"/gamma/{number}/first", one.first), (f"/gamma/{number}/second", one.second)]
        refuse(unknown_factors(named, factors))

    def prepared(self, factors: FactorSet) -> PreparedComponent:
        place = {name: number for number, name in enumerate(self.used)}
        linear = np.zeros(len(place))
        for name, amount in self.amounts.items():
            linear[place[name]] = amount
        pairs = [(place[a], place[b], half) for (a, b), half in self.halves.items() if half != 0.0]
        columns = factors.columns(self.used)
        if len(pairs) <= FEW_PAIRS * len(place):
            return _FewPairs(columns, linear, tuple(pairs))
        matrix = np.zeros((len(place), len(place)))
        for row, column, half in pairs:
            matrix[row, column] += half
        return _ManyPairs(columns, linear, matrix)

    def tails(self, factors: FactorSet) -> Tails:
        tails = _linear_tails(self.amounts, factors)
        for (first, second), half in self.halves.items():
            tails = tails.plus(_product_tails(first, second, factors).times(half))
        return tails

    def growth(self, factors: FactorSet, factor: float) -> Growth:
        growth = _linear_growth(self.amounts, factors, factor)
        for (first, second), half in self.halves.items():
            growth = growth.plus(_product_growth(first, second, factors, factor * half))
        return growth

    def mean(self, factors: FactorSet) -> float | None:
        """Return δ′μ + ½Σγ(σ² + μ²); None with a product of two factors, which the copula would decide."""
        terms = [amount * factors.marginal(name).mean for name, amount in self.amounts.items()]
        for (first, second), half in self.halves.items():
            if first != second:
                return None
            law = factors.marginal(first)
            terms.append(half * (law.variance + law.mean**2))
        return finite_sum(terms)


def _product_tails(first: str, second: str, factors: FactorSet) -> Tails:
    """Return the tails of the product of two factors (or of a square), whatever their dependence.

    The product is large and positive where both are far out on the same side, and then its index is the
    harmonic sum of theirs (Hölder; half of it for a square).
    """
    (low_a, high_a), (low_b, high_b) = (factors.marginal(name).support for name in (first, second))
    a, b = factors.tails(first), factors.tails(second)
    sides = {
        (1, 1): harmonic(a.upper_index, b.upper_index) if high_a > 0.0 < high_b else math.inf,
        (-1, -1): harmonic(a.lower_index, b.lower_index) if low_a < 0.0 > low_b else math.inf,
        (1, -1): harmonic(a.upper_index, b.lower_index) if high_a > 0.0 > low_b else math.inf,
        (-1, 1): harmonic(a.lower_index, b.upper_index) if low_a < 0.0 < high_b else math.inf,
    }
    upper, lower = min(sides[1, 1], sides[-1, -1]), min(sides[1, -1], sides[-1, 1])
    rate = _product_rate(first, second, factors)
    if first == second:  # a square is not negative
        return Tails(upper_index=upper, upper_exponential=rate)
    sharp = math.isinf(rate)
    return Tails(upper, lower, rate, rate, sharp, sharp)


def _product_rate(first: str, second: str, factors: FactorSet) -> float:
    """Return up to which t the exponential moment E[exp(t |XY|)] surely exists.

    |XY| is at most (w X² + Y²/w)/2; of laws on the line only the normal has E[exp(t X²)], for
    t < 1/(2σ²), and with w = σ_Y/σ_X and Hölder's inequality that is t < 1/(2 σ_X σ_Y).
    """
    laws = [factors.marginal(name) for name in (first, second)]
    reaches = [max(abs(end) for end in law.support) for law in laws]
    if all(isinstance(law, NormalMarginal) for law in laws):
        return 1.0 / (2.0 * math.prod(law.variance for law in laws) ** 0.5)
    if math.isfinite(max(reaches)):
        return math.inf
    if math.isinf(min(reaches)):
        return 0.0
    bounded = int(reaches[1] < reaches[0])
    other = factors.tails((second, first)[bounded])
    return min(other.upper_exponential, other.lower_exponential) / max(reaches[bounded], TINY)


def _product_growth(first: str, second: str, factors: FactorSet, half: float) -> Growth:
    """Return the growth of half × X_a X_b: half σ_a σ_b z_a z_b of two normals, a sure bound of others."""
    if half == 0.0:
        return Growth()
    laws = [factors.marginal(name) for name in (first, second)]
    if all(isinstance(law, NormalMarginal) for law in laws):
        coefficient = half * math.prod(law.variance for law in laws) ** 0.5
        if first != second:
            return Growth(products={(first, second): coefficient})
        return Growth({first: 2.0 * coefficient}, {first: 2.0 * coefficient})
    rate = _product_rate(first, second, factors)
    if math.isinf(rate):
        return Growth()
    size = math.inf if rate == 0.0 else abs(half) / rate
    bounded = max(abs(end) for end in laws[0].support) < math.inf
    name = second if bounded else first
    return Growth({name: size}, {name: size}, sharp=False)


@plain(frozen=True, slots=True)
class _FewPairs:
    columns: Indices
    linear: Array
    pairs: tuple[tuple[int, int, float], ...]

    def losses(self, block: Block, out: Array) -> None:
        values = block.values(self.columns)
        np.matmul(self.linear, values, out=out)
        product = np.empty_like(out)
        for first, second, half in self.pairs:
            np.multiply(values[first], values[second], out=product)
            product *= half
            out += product


@plain(frozen=True, slots=True)
class _ManyPairs:
    columns: Indices
    linear: Array
    matrix: Array

    def losses(self, block: Block, out: Array) -> None:
        values = block.values(self.columns)
        slopes = self.matrix @ values
        slopes += self.linear[:, None]
        np.einsum("kn,kn->n", slopes, values, out=out)


@dataclass(frozen=True, kw_only=True, config=STRICT)
class RevaluationGridComponent(Component):
    """The loss revalued at points of one factor and interpolated linearly between them."""

    kind: Literal["revaluation_grid"]
    """Tag of this component."""
    factor: Text
    """Id of the factor."""
    points: Annotated[list[float], Field(min_length=2)]
    """Values of the factor, in its unit, strictly increasing."""
    losses: Annotated[list[float], Field(min_length=2)]
    """Loss at each point, in currency."""
    beyond: Literal["flat", "linear", "refuse"]
    """Outside the points: the loss at the nearest point, the line through the last two, or a refusal."""

    @model_validator(mode="after")
    def _fits(self) -> Self:
        if len(self.points) != len(self.losses):
            raise PydanticCustomError(
                "grid",
                "there are {points} points and {losses} losses; each point needs its loss",
                {"points": len(self.points), "losses": len(self.losses)},
            )
        falls = next((i for i in range(1, len(self.points)) if not self.points[i] > self.points[i - 1]), None)
        if falls is not None:
            raise PydanticCustomError(
                "grid",
                "points must strictly increase, but {later} at position {number} follows {earlier}",
                {"later": self.points[falls], "number": falls, "earlier": self.points[falls - 1]},
            )
        return self

    @property
    def used(self) -> tuple[str, ...]:
        return (self.factor,)

    @property
    def slopes(self) -> tuple[float, float]:
        """Loss per unit of the factor below the first and above the last point, if `beyond` is linear."""
        (a, b), (c, d) = self.points[:2], self.points[-2:]
        return (self.losses[1] - self.losses[0]) / (b - a), (self.losses[-1] - self.losses[-2]) / (d - c)

    def check(self, factors: FactorSet) -> None:
        refuse(unknown_factors([("/factor", self.factor)], factors))

    def prepared(self, factors: FactorSet) -> PreparedComponent:
        return _Grid(
            self.factor,
            factors.columns([self.factor]),
            np.array(self.points),
            np.array(self.losses),
            self.slopes if self.beyond == "linear" else None,
            refused=self.beyond == "refuse",
        )

    def tails(self, factors: FactorSet) -> Tails:
        if self.beyond != "linear":
            return Tails()
        factor, (left, right) = factors.tails(self.factor), self.slopes
        above = factor.bounded_below().times(right)
        below = factor.bounded_above().times(left)
        return above.plus(below, independent=True)  # never both at once

    def growth(self, factors: FactorSet, factor: float) -> Growth:
        if self.beyond != "linear":
            return Growth()
        left, right = self.slopes
        return growth_along(self.factor, factors.tails(self.factor), factor * right, factor * left)


@plain(frozen=True, slots=True)
class _Grid:
    factor: str
    columns: Indices
    points: Array
    values: Array
    slopes: tuple[float, float] | None
    refused: bool

    def losses(self, block: Block, out: Array) -> None:
        """Write the interpolated losses.

        Raises
        ------
        NotDefined
            For a value outside the points where the component refuses it.
        """
        factor = block.values(self.columns)[0]
        low, high = self.points[0], self.points[-1]
        if self.refused and not (low <= np.min(factor) and np.max(factor) <= high):
            outside = factor[(factor < low) | (factor > high)][0]
            detail = (
                f"factor '{self.factor}' takes the value {outside:.6g}, outside the points of a revaluation_grid "
                f"from {low:.6g} to {high:.6g} with beyond: refuse"
            )
            raise NotDefined(detail, faults=[Fault(detail=detail, code="beyond_grid", pointer="/points")])
        out[:] = np.interp(factor, self.points, self.values)
        if self.slopes is not None:
            out += self.slopes[0] * np.minimum(factor - low, 0.0)
            out += self.slopes[1] * np.maximum(factor - high, 0.0)
