"""Measures of the tail beyond a quantile: value at risk, return level, expected shortfall, range value at risk."""

from dataclasses import replace
from fractions import Fraction
from functools import lru_cache
from typing import Annotated, Literal, Self

import numpy as np
from pydantic import Field, model_validator
from pydantic.dataclasses import dataclass
from pydantic_core import PydanticCustomError

from service.risk.measures.contract import (
    ContributionWeights,
    LocatedMeasure,
    Needs,
    Smoothing,
)
from service.risk.measures.local_line import LocalLine, local_line
from service.risk.quantiles import (
    Array,
    Ordered,
    QuantileInterval,
    Ties,
    decimal,
    distribution_error,
    quantile_error,
    quantile_interval,
)
from service.risk.uncertainty import Influence, Marks, Spread
from service.risk.words import STRICT, Level

WINDOW = Fraction(9, 10)  # half width of the smoothing window as a part of the tail count
LEAST_RANKS = 10  # of the smoothing window on each side
ATOM_OF_ITS_OWN = 10  # scenarios at the quantile from which their own mean needs no smoothing
SAME = 1e-12  # of the quantile: sums that differ from it by less are equal to it but for rounding
RANK_SPREADS = 7.0  # how many binomial standard deviations below the quantile its interval may reach


@lru_cache(maxsize=1024)
def beyond(level: float) -> Fraction:
    """Return the mass beyond a level, on the caller's decimal."""
    return 1 - decimal(level)


def quantile_influence(ordered: Ordered, share: Fraction) -> Influence:
    """Return influence values (level - 1{L <= q}) / f(q) of the quantile with `share` above.

    The density f(q) is the one that the order-statistic interval implies: the standard error of the
    distribution function over that of the quantile (Serfling, Approximation Theorems of Mathematical
    Statistics, 1980, section 2.3.3).
    """
    level = float(1 - share)
    q = ordered.at(ordered.position(share))[:, None]
    scale = quantile_error(ordered, share) / distribution_error(ordered, share)
    return Influence(scale[:, None] * (level - (ordered.values <= q)), scale * (level - 1.0))


@lru_cache(maxsize=1024)
def window_depth(share: float, scenarios: int, *, smoothed: bool) -> float:
    """Return the share of worst scenarios that the error (and the smoothing) of a quantile looks at."""
    reach = RANK_SPREADS * (share * (1.0 - share) / scenarios) ** 0.5
    if smoothed:
        reach = max(reach, float(WINDOW) * share, (LEAST_RANKS + 1) / scenarios)
    return min(1.0, share + reach + 3.0 / scenarios)


def line_at_quantile(ordered: Ordered, ties: Ties, share: Fraction) -> LocalLine:
    """Return the local line at the lower quantile with `share` of the mass above it."""
    position = int(ordered.position(share)[0])
    one_rank = ordered.unit / ordered.scenarios
    if ordered.probabilities is not None:
        one_rank = float(np.sum(ordered.probabilities**2))
    half_width = max(float(WINDOW) * ordered.mass(share), LEAST_RANKS * one_rank) + one_rank
    return local_line(ordered, ties, position, half_width)


@dataclass(frozen=True, kw_only=True, config=STRICT)
class _Quantile(LocatedMeasure):
    """A single quantile; members say what share of the mass lies above it."""

    of_tail = True

    @property
    def share(self) -> Fraction:
        """Mass above the quantile."""
        raise NotImplementedError

    @property
    def tail_share(self) -> float:
        return float(min(self.share, 1 - self.share))

    def depth(self, scenarios: int, *, contributions: bool) -> float:
        return 1.0 if self.above == "mean" else window_depth(float(self.share), scenarios, smoothed=contributions)

    def weights(self, ordered: Ordered) -> Array:
        """Return 1 on the position of inf{x : P(L <= x) >= level}."""
        positions = ordered.position(self.share)
        weights = np.zeros((positions.size, ordered.values.shape[-1]))
        weights[np.arange(positions.size), positions] = 1.0
        return weights

    @property
    def needs(self) -> Needs:
        """A quantile always exists, and its order-statistic interval too."""
        return Needs(upper_index=1.0, lower_index=1.0) if self.above == "mean" else Needs()

    def values(self, ordered: Ordered) -> Array:
        return ordered.at(ordered.position(self.share))

    def influence(self, ordered: Ordered, values: Array) -> Influence:  # noqa: ARG002  # as the contract
        return quantile_influence(ordered, self.share)

    def interval(self, ordered: Ordered, coverage: float) -> QuantileInterval:
        """Return the order-statistic interval."""
        return quantile_interval(ordered, self.share, coverage)

    def errors(self, ordered: Ordered) -> Array:
        """Return the error that the width of the order-statistic interval gives."""
        return quantile_error(ordered, self.share)

    def tail_of(self, ordered: Ordered) -> Array:
        return ordered.effective_tail(min(self.share, 1 - self.share))

    def on_atom(self, ordered: Ordered) -> Marks:
        """Return where at least `ATOM_OF_ITS_OWN` losses equal the quantile but for the rounding of sums."""
        values = ordered.values
        q = ordered.at(ordered.position(self.share))[:, None]
        return np.count_nonzero(np.abs(values - q) <= SAME * np.abs(q), axis=-1) >= ATOM_OF_ITS_OWN

    def contribution_weights(self, ordered: Ordered, ties: Ties, smoothing: Smoothing) -> ContributionWeights:
        """Return weights that estimate E[L_i given L = q].

        A local line of L_i on L at q (see `local_line`): they sum to 1 and their mean of L is q, so that
        the contributions add up by construction. With `ATOM_OF_ITS_OWN` or more scenarios at q,
        with too few for a window, with a whole population, or without smoothing: the mean over those scenarios.
        """
        line = line_at_quantile(ordered, ties, self.share)
        place = quantile_influence(ordered, self.share)
        few = ordered.scenarios <= 2 * LEAST_RANKS or ordered.whole
        if smoothing == "none" or few or line.at_centre >= ATOM_OF_ITS_OWN:
            weights = np.where(line.centre, ties.p, 0.0)
            return ContributionWeights(weights / weights.sum(), None, (line,), place)
        return ContributionWeights(line.weights, line.window, (line,), place)

    def contribution_influence(
        self,
        ordered: Ordered,
        ties: Ties,
        rows: Array,
        weights: ContributionWeights,
    ) -> Influence:
        """Return (w/p) times the residual from the local line, plus its slope times that of the quantile.

        The first part is the error of the regression, the second that of the place where it is read;
        se^2 = sum w^2 (X_i - fit)^2 + (slope se(q))^2 up to their small covariance.
        """
        (line,) = weights.lines
        place = weights.place or quantile_influence(ordered, self.share)
        slopes = line.slopes(rows)[:, None]
        values = rows.T - (weights.values @ rows)[:, None]
        values -= slopes * line.excess
        if weights.window is None and line.at_centre < ATOM_OF_ITS_OWN:
            values = _spread_residuals(line, ties, values, weights)
        else:
            values *= np.divide(weights.values, ties.p, out=np.zeros_like(ties.p), where=ties.p > 0.0)
        values += slopes * place.values
        return Influence(values, place.rest * slopes[:, 0])


def _spread_residuals(line: LocalLine, ties: Ties, residuals: Array, weights: ContributionWeights) -> Array:
    """Return influence values (c, m) of a mean over the few scenarios at the quantile, by their neighbours' residuals.

    A single scenario has no residual of its own; the variance around the local line stands in for it.
    """
    kernel = line.kernel / line.kernel.sum()
    variance = residuals**2 @ kernel * float(np.sum(weights.values**2))
    near = np.where(kernel > 0.0, residuals, 0.0)
    spread = np.sum((ties.p * near) ** 2, axis=1)
    return near * np.sqrt(np.divide(variance, spread, out=np.zeros_like(variance), where=variance > 0.0))[:, None]


@dataclass(frozen=True, kw_only=True, config=STRICT)
class ValueAtRisk(_Quantile):
    """Lower quantile inf{x : P(L <= x) >= level}."""

    kind: Literal["value_at_risk"]
    """Tag of this measure."""
    level: Level
    """Confidence level, between 0 and 1."""

    @property
    def parameters(self) -> dict[str, float]:
        return {"level": self.level}

    @property
    def share(self) -> Fraction:
        return beyond(self.level)


@dataclass(frozen=True, kw_only=True, config=STRICT)
class ReturnLevel(_Quantile):
    """The loss reached once in `return_period` periods: quantile at 1 - 1/(return_period x scenarios_per_period)."""

    kind: Literal["return_level"]
    """Tag of this measure."""
    return_period: Annotated[float, Field(gt=0.0)]
    """Return period, in periods (usually years)."""
    scenarios_per_period: Annotated[float, Field(gt=0.0)] = 1.0
    """Scenarios that make one period; its product with `return_period` is above 1."""

    @model_validator(mode="after")
    def _beyond_one(self) -> Self:
        if not 0 < self.share < 1:
            raise PydanticCustomError("return_period", "return_period times scenarios_per_period must be above 1")
        return self

    @property
    def parameters(self) -> dict[str, float]:
        numbers = {"return_period": self.return_period, "scenarios_per_period": self.scenarios_per_period}
        return numbers if self.scenarios_per_period != 1.0 else {"return_period": self.return_period}

    @property
    def share(self) -> Fraction:
        return 1 / (decimal(self.return_period) * decimal(self.scenarios_per_period))


@dataclass(frozen=True, kw_only=True, config=STRICT)
class ExpectedShortfall(LocatedMeasure):
    """Mean of the worst 1 - level of probability, the atom at the quantile split exactly.

    Acerbi and Tasche, J. Banking & Finance 26 (2002) 1487-1503, definition 2.6.
    """

    of_tail = True

    kind: Literal["expected_shortfall"]
    """Tag of this measure."""
    level: Level
    """Confidence level, between 0 and 1."""

    @property
    def parameters(self) -> dict[str, float]:
        return {"level": self.level}

    @property
    def share(self) -> Fraction:
        """Mass of the tail."""
        return beyond(self.level)

    @property
    def tail_share(self) -> float:
        return float(self.share)

    def depth(self, scenarios: int, *, contributions: bool) -> float:
        return 1.0 if self.above == "mean" else window_depth(float(self.share), scenarios, smoothed=contributions)

    def weights(self, ordered: Ordered) -> Array:
        return ordered.tail_weights(self.share)

    def influence(self, ordered: Ordered, values: Array) -> Influence:  # noqa: ARG002  # as the contract
        """Return (L - q)+ / (1 - level): Manistre and Hancock, North American Actuarial J. 9(2), 2005, 129-156."""
        return _shortfall_influence(ordered, self.share)

    def lean(self, ordered: Ordered, values: Array, of: Spread) -> Array | None:
        """Return se/(figure - q), for an interval symmetric in the logarithm of the mean excess."""
        if self.above == "mean":
            return None
        excess = values - ordered.at(ordered.position(self.share))
        return np.divide(of.errors, excess, out=np.zeros_like(excess), where=excess > 0.0)

    def tail_of(self, ordered: Ordered) -> Array:
        return ordered.effective_tail(self.share)

    def contribution_weights(self, ordered: Ordered, ties: Ties, smoothing: Smoothing) -> ContributionWeights:
        weights = LocatedMeasure.contribution_weights(self, ordered, ties, smoothing)
        return replace(weights, lines=(line_at_quantile(ordered, ties, self.share),))

    def contribution_influence(
        self,
        ordered: Ordered,  # noqa: ARG002  # as the contract
        ties: Ties,
        rows: Array,
        weights: ContributionWeights,
    ) -> Influence:
        """Return t (L_i - m_i) / (1 - level), t the scenario's part in the tail, m_i = E[L_i given L = q]."""
        return _shortfall_contribution_influence(weights.lines[0], ties, rows, weights.values)


def _shortfall_influence(ordered: Ordered, share: Fraction) -> Influence:
    """Return (L - q)+ / share for each of c distributions."""
    q = ordered.at(ordered.position(share))
    beyond = np.maximum(ordered.values - q[:, None], 0.0)
    beyond /= float(share)
    return Influence(beyond, np.zeros(q.size))


def _shortfall_contribution_influence(line: LocalLine, ties: Ties, rows: Array, weights: Array) -> Influence:
    """Return (w/p) (L_i - m_i), m_i read off the local line at the quantile; zero outside the tail."""
    at_quantile = line.fitted(rows)
    if line.at_centre >= ATOM_OF_ITS_OWN:
        centre = np.where(line.centre, ties.p, 0.0)
        at_quantile = (centre / centre.sum()) @ rows
    tail = np.flatnonzero(weights)
    inside = int(tail[-1]) + 1 if tail.size else 0
    values = np.zeros((rows.shape[1], rows.shape[0]))
    np.subtract(rows[:inside].T, at_quantile[:, None], out=values[:, :inside])
    values[:, :inside] *= np.divide(weights, ties.p, out=np.zeros_like(weights), where=ties.p > 0.0)[:inside]
    return Influence(values, np.zeros(rows.shape[1]))


@dataclass(frozen=True, kw_only=True, config=STRICT)
class RangeValueAtRisk(LocatedMeasure):
    """Mean quantile between two levels.

    Cont, Deguest and Scandolo, Quantitative Finance 10 (2010) 593-606, section 3.2.
    """

    of_tail = True

    kind: Literal["range_value_at_risk"]
    """Tag of this measure."""
    lower_level: Annotated[float, Field(ge=0.0, lt=1.0)]
    """Lower confidence level, from 0 to below 1."""
    upper_level: Annotated[float, Field(gt=0.0, le=1.0)]
    """Upper confidence level, above `lower_level` and up to 1."""

    @model_validator(mode="after")
    def _in_order(self) -> Self:
        if not decimal(self.lower_level) < decimal(self.upper_level):
            raise PydanticCustomError("levels", "lower_level must be below upper_level")
        return self

    @property
    def parameters(self) -> dict[str, float]:
        return {"lower_level": self.lower_level, "upper_level": self.upper_level}

    @property
    def needs(self) -> Needs:
        """A mean of quantiles exists, but for one that reaches an end of the distribution."""
        outer, inner = self.shares
        upper, lower = (1.0 if inner == 0 else 0.0), (1.0 if outer == 1 else 0.0)
        return Needs(upper_index=upper, lower_index=lower, error_index=2.0 * max(upper, lower))

    @property
    def shares(self) -> tuple[Fraction, Fraction]:
        """Mass above the lower and above the upper level."""
        return beyond(self.lower_level), beyond(self.upper_level)

    @property
    def tail_share(self) -> float:
        outer, inner = self.shares
        return float(outer - inner)

    def depth(self, scenarios: int, *, contributions: bool) -> float:
        return 1.0 if self.above == "mean" else window_depth(float(self.shares[0]), scenarios, smoothed=contributions)

    def weights(self, ordered: Ordered) -> Array:
        outer, inner = self.shares
        weights = float(outer) * ordered.tail_weights(outer)
        if inner > 0:
            weights = weights - float(inner) * ordered.tail_weights(inner)
        return weights / float(outer - inner)

    def influence(self, ordered: Ordered, values: Array) -> Influence:  # noqa: ARG002  # as the contract
        """Return that of the two shortfalls whose difference it is: the loss clipped to the two quantiles."""
        outer, inner = self.shares
        if outer == 1:
            tail, rest = ordered.values.copy(), np.zeros(ordered.values.shape[0])
        else:
            whole = _shortfall_influence(ordered, outer)
            tail, rest = whole.values * float(outer), whole.rest
        if inner > 0:
            tail = tail - float(inner) * _shortfall_influence(ordered, inner).values
        return Influence(tail / float(outer - inner), rest)

    def tail_of(self, ordered: Ordered) -> Array:
        """Return the effective number of scenarios between the two levels."""
        outer, inner = self.shares
        if inner == 0 or ordered.probabilities is None or ordered.clusters is not None:
            return ordered.effective_tail(outer - inner)
        # share^2 / number is the sum of squared probabilities beyond a level, of which the band has the difference
        beyond = float(outer) ** 2 / ordered.effective_tail(outer)
        within = beyond - float(inner) ** 2 / ordered.effective_tail(inner)
        return np.divide(float(outer - inner) ** 2, within, out=np.zeros_like(within), where=within > 0.0)

    def contribution_weights(self, ordered: Ordered, ties: Ties, smoothing: Smoothing) -> ContributionWeights:
        weights = LocatedMeasure.contribution_weights(self, ordered, ties, smoothing)
        lines = tuple(line_at_quantile(ordered, ties, share) for share in self.shares if 0 < share < 1)
        return replace(weights, lines=lines)

    def contribution_influence(
        self,
        ordered: Ordered,
        ties: Ties,
        rows: Array,
        weights: ContributionWeights,
    ) -> Influence:
        """Return that of the two shortfalls whose difference it is."""
        outer, inner = self.shares
        lines = list(weights.lines)
        whole = rows.T if outer == 1 else self._part(ordered, ties, rows, lines.pop(0), outer)
        if inner > 0:
            whole = whole - self._part(ordered, ties, rows, lines.pop(0), inner)
        return Influence(whole / float(outer - inner), np.zeros(rows.shape[1]))

    @staticmethod
    def _part(ordered: Ordered, ties: Ties, rows: Array, line: LocalLine, share: Fraction) -> Array:
        """Return share times the influence of the shortfall contributions beyond `share`."""
        weights = ties.shared(ordered.tail_weights(share)[0])
        return float(share) * _shortfall_contribution_influence(line, ties, rows, weights).values
