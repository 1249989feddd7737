"""Measures of the whole distribution that are no distortions: standard deviation, expectile, entropic."""

from itertools import pairwise
from typing import Annotated, Literal

import numpy as np
from pydantic import Field
from pydantic.dataclasses import dataclass
from scipy import special

from service.errors import NotDefined
from service.risk.measures.contract import (
    ContributionWeights,
    LocatedMeasure,
    Needs,
    RiskMeasure,
    Smoothing,
    means,
)
from service.risk.measures.local_line import local_line
from service.risk.quantiles import Array, Ordered, Ties, decimal
from service.risk.uncertainty import Influence
from service.risk.words import STRICT, Level

EXPECTILE_WINDOW = 0.9  # half width of the window for the density at an expectile, as a part of the smaller side
AT_EXPECTILE = 1e-12  # of the largest loss: an atom so near is at the expectile, whose own rounding is of this order
NODES = 16  # Gauss-Legendre nodes of each panel of the Aumann-Shapley integral
MOST_PANELS = 64  # aversion times range up to 2^64; beyond it the measure is the largest loss in all but name
LEAST_EXPONENT = 2.0**-1022  # the smallest normal binary64 number
UNDERFLOW = 746.0  # exp(-746) is 0 in binary64


def _per_position(ordered: Ordered) -> Array:
    """Return the probability of each position, shape (1, m) or (c, m)."""
    if ordered.probabilities is None:
        return np.full((1, ordered.values.shape[-1]), 1.0 / ordered.scenarios)
    return ordered.probabilities


@dataclass(frozen=True, kw_only=True, config=STRICT)
class StandardDeviation(RiskMeasure):
    """A multiple of the population standard deviation; translation-invariant, so it has no `above`."""

    kind: Literal["standard_deviation"]
    """Tag of this measure."""
    multiple: Annotated[float, Field(gt=0.0)] = 1.0
    """Factor on the standard deviation."""

    @property
    def needs(self) -> Needs:
        return Needs(upper_index=2.0, lower_index=2.0, error_index=4.0)

    @property
    def parameters(self) -> dict[str, float]:
        return {} if self.multiple == 1.0 else {"multiple": self.multiple}

    def weights(self, ordered: Ordered) -> Array:
        """Return p (L - mean) / sd; zero where the losses do not vary."""
        deviations, sd = self._deviations(ordered)
        safe = np.where(sd > 0.0, sd, 1.0)
        return self.multiple * _per_position(ordered) * deviations / safe[:, None]

    def values(self, ordered: Ordered) -> Array:
        return self.multiple * self._deviations(ordered)[1]

    def influence(self, ordered: Ordered, values: Array) -> Influence:  # as the contract
        """Return ((L - mean)^2 - sd^2) / (2 sd): delta method on the variance."""
        deviations, sd = self._deviations(ordered)
        safe = np.where(sd > 0.0, sd, 1.0)[:, None]
        values = self.multiple * (deviations**2 - sd[:, None] ** 2) / (2.0 * safe)
        return Influence(values, np.zeros(sd.size))

    def contribution_weights(self, ordered: Ordered, ties: Ties, smoothing: Smoothing) -> ContributionWeights:
        if ties.starts.size == 1 or not self.values(ordered)[0] > 0.0:
            detail = "the total does not vary: its standard deviation has no derivative, so no Euler contributions"
            raise NotDefined(detail)
        return RiskMeasure.contribution_weights(self, ordered, ties, smoothing)

    def contribution_influence(
        self,
        ordered: Ordered,
        ties: Ties,
        rows: Array,
        weights: ContributionWeights,
    ) -> Influence:
        """Return (X_i - E X_i) z - c_i z^2 / 2 with z = (L - mean)/sd: delta method on Cov/sd."""
        deviations, sd = self._deviations(ordered)
        z = deviations[0] / sd[0]
        contributions = weights.values @ rows / self.multiple
        centred = rows - ties.p @ rows
        values = self.multiple * (centred.T * z - contributions[:, None] * (z * z / 2.0))
        return Influence(values, np.zeros(contributions.size))

    @staticmethod
    def _deviations(ordered: Ordered) -> tuple[Array, Array]:
        """Return deviations from the mean (c, m) and standard deviations (c,), without overflow or underflow."""
        deviations = ordered.values - means(ordered)[:, None]
        scale = np.max(np.abs(deviations), axis=-1)
        # deviations at the rounding error of the values themselves are no variation
        scale = np.where(scale > 4.0 * np.spacing(np.max(np.abs(ordered.values), axis=-1)), scale, 0.0)
        unit = np.where(scale > 0.0, scale, 1.0)[:, None]
        share = deviations / unit
        variance = np.einsum("ij,ij->i", np.broadcast_to(_per_position(ordered), share.shape), share * share)
        return deviations, np.where(scale > 0.0, scale * np.sqrt(variance), 0.0)


@dataclass(frozen=True, kw_only=True, config=STRICT)
class Expectile(LocatedMeasure):
    """The e with level E(L - e)+ = (1 - level) E(e - L)+.

    Newey and Powell, Econometrica 55 (1987) 819-847; Bellini and Di Bernardino, European J. of Finance 23
    (2017) 487-506.
    """

    kind: Literal["expectile"]
    """Tag of this measure."""
    level: Level
    """Weight of the losses above the expectile, between 0 and 1."""

    @property
    def needs(self) -> Needs:
        return Needs(upper_index=1.0, lower_index=1.0, error_index=2.0)

    @property
    def parameters(self) -> dict[str, float]:
        return {"level": self.level}

    def weights(self, ordered: Ordered) -> Array:
        """Return p times level above the expectile and 1 - level below it, over their sum."""
        above = self._number_above(ordered)
        a = self._asymmetry(ordered, above)
        weighted = a * _per_position(ordered)
        return np.asarray(weighted / weighted.sum(axis=-1, keepdims=True))

    def influence(self, ordered: Ordered, values: Array) -> Influence:
        """Return (level (L - e)+ - (1 - level)(e - L)+) / E[weight]: an M-estimator's (Newey and Powell, theorem 3)."""
        above = self._number_above(ordered)
        a = self._asymmetry(ordered, above)
        mean_weight = np.sum(a * _per_position(ordered), axis=-1, keepdims=True)
        return Influence(a * (ordered.values - values[:, None]) / mean_weight, np.zeros(values.size))

    def contribution_weights(self, ordered: Ordered, ties: Ties, smoothing: Smoothing) -> ContributionWeights:  # noqa: ARG002
        """Return the weights; an atom at the expectile takes the mean of the two."""
        e = float(self.values(ordered)[0])
        level = float(decimal(self.level))
        values = ties.spread(ties.means(ordered.values[0][:, None]))[:, 0]
        near = np.abs(values - e) <= AT_EXPECTILE * np.max(np.abs(values))
        a = np.where(near, 0.5, np.where(values > e, level, 1.0 - level))
        weighted = a * ties.p
        return ContributionWeights(ties.shared(weighted / weighted.sum()))

    def contribution_influence(
        self,
        ordered: Ordered,
        ties: Ties,
        rows: Array,
        weights: ContributionWeights,
    ) -> Influence:
        """Return (w/p)(X_i - c_i) + dc_i/de IF(e).

        c_i(e) = E[a X_i]/E[a] with a = level above e and 1 - level below; moving e past a scenario changes
        its weight by 1 - 2 level, so dc_i/de = -(2 level - 1) f(e) (E[X_i given L = e] - c_i) / E[a].
        """
        values = self.values(ordered)
        level = float(decimal(self.level))
        contributions = weights.values @ rows
        per_scenario = np.divide(weights.values, ties.p, out=np.zeros_like(ties.p), where=ties.p > 0.0)
        moved = self.influence(ordered, values).values[0]
        a = np.where(ordered.values[0] > values[0], level, 1.0 - level)
        density, at_expectile = self._around(ordered, ties, rows, float(values[0]))
        slope = (1.0 - 2.0 * level) * density * (at_expectile - contributions) / float(a @ ties.p)
        values_ = (per_scenario[:, None] * (rows - contributions)).T + slope[:, None] * moved
        return Influence(values_, np.zeros(contributions.size))

    @staticmethod
    def _around(ordered: Ordered, ties: Ties, rows: Array, e: float) -> tuple[float, Array]:
        """Return the density of the total at e and E[X_i given L = e], shape (c,), from a window in rank."""
        values = ordered.values[0]
        position = min(int(np.count_nonzero(values > e)), values.size - 1)
        upper = ordered.upper[0]
        side = min(float(upper[position]), ordered.unit - float(upper[position]))
        half_width = max(EXPECTILE_WINDOW * side, 10.0 * ordered.unit / ordered.scenarios)
        line = local_line(ordered, ties, position, half_width)
        lower, higher, count = line.window
        if not higher > lower or count >= values.size:
            return 0.0, line.weights @ rows
        mass = float(ties.p[line.kernel > 0.0].sum())
        return mass / (higher - lower), line.weights @ rows + line.slopes(rows) * (e - float(values[position]))

    def _number_above(self, ordered: Ordered) -> Array:
        """Return how many positions lie above the expectile of each distribution, shape (c, 1).

        With j positions at the higher weight the weighted mean is largest (level above 1/2) or smallest
        exactly at the expectile, so all j are tried in one pass of running sums.
        """
        level = float(decimal(self.level))
        p = _per_position(ordered)
        mass = np.cumsum(p, axis=-1)
        tail = np.cumsum(p * ordered.values, axis=-1)
        mean = tail[:, -1:]
        tries = (level * tail + (1.0 - level) * (mean - tail)) / (level * mass + (1.0 - level) * (1.0 - mass))
        best = np.argmax(tries, axis=-1) if level >= 0.5 else np.argmin(tries, axis=-1)  # noqa: PLR2004  # the mean
        return best[:, None] + 1

    def _asymmetry(self, ordered: Ordered, above: Array) -> Array:
        level = float(decimal(self.level))
        return np.where(np.arange(ordered.values.shape[-1]) < above, level, 1.0 - level)


@dataclass(frozen=True, kw_only=True, config=STRICT)
class Entropic(LocatedMeasure):
    """ln E[exp(aversion L)] / aversion.

    Foellmer and Schied, Stochastic Finance (2nd ed. 2004), example 4.13. Not homogeneous: contributions are
    the Aumann-Shapley integral of the derivative along the diagonal (Denault, J. of Risk 4(1), 2001, 1-34).
    """

    kind: Literal["entropic"]
    """Tag of this measure."""
    aversion: Annotated[float, Field(gt=0.0)]
    """Risk aversion, in 1/currency."""

    @property
    def needs(self) -> Needs:
        return Needs(exponential=self.aversion)

    @property
    def parameters(self) -> dict[str, float]:
        return {"aversion": self.aversion}

    def weights(self, ordered: Ordered) -> Array:
        """Return the Aumann-Shapley weights: Gibbs weights averaged along the diagonal, shape (c, m)."""
        rows = [self._average_gibbs(values, p) for values, p in self._each(ordered)]
        return np.stack(rows)

    def values(self, ordered: Ordered) -> Array:
        """Return L_max + ln E[exp(aversion (L - L_max))] / aversion, which cannot overflow.

        L_max is the largest loss that has a probability. Where the mean is near 1 its distance from 1 is summed.
        """
        p = _per_position(ordered)
        top = np.max(np.where(p > 0.0, ordered.values, -np.inf), axis=-1)
        raised = self.aversion * (np.minimum(ordered.values, top[:, None]) - top[:, None])
        excess = np.sum(p * np.expm1(raised), axis=-1)
        mean = np.sum(p * np.exp(raised), axis=-1)
        logarithm = np.where(excess > -0.5, np.log1p(np.maximum(excess, -0.5)), np.log(mean))  # noqa: PLR2004  # half of 1
        return np.asarray(top + logarithm / self.aversion)

    def influence(self, ordered: Ordered, values: Array) -> Influence:
        """Return (exp(aversion (L - figure)) - 1) / aversion: delta method on the mean of exp."""
        losses = np.stack([losses for losses, _ in self._each(ordered)])
        raised = np.minimum(self.aversion * (losses - values[:, None]), UNDERFLOW - 40.0)
        return Influence(np.expm1(raised) / self.aversion, np.zeros(values.size))

    def contribution_influence(
        self,
        ordered: Ordered,
        ties: Ties,
        rows: Array,
        weights: ContributionWeights,
    ) -> Influence:
        """Return int g_t (X_i - E_t[X_i]) dt, g_t = exp(t aversion L)/E[exp(t aversion L)], E_t the mean under it."""
        per_scenario = np.divide(weights.values, ties.p, out=np.zeros_like(ties.p), where=ties.p > 0.0)
        values = (per_scenario[:, None] * rows).T
        ((losses, p),) = self._each(ordered)
        for point, share in self._panels(float(losses[0] - losses[-1])):
            gibbs, active = self._gibbs(losses, p, point)
            centre = (gibbs * p[:active]) @ rows[:active]
            values[:, :active] -= share * centre[:, None] * gibbs
        return Influence(values, np.zeros(rows.shape[1]))

    @staticmethod
    def _each(ordered: Ordered) -> "list[tuple[Array, Array]]":
        """Return losses and probabilities of each distribution; losses without any moved to the nearest with some."""
        found = []
        for values, p in zip(
            ordered.values, np.broadcast_to(_per_position(ordered), ordered.values.shape), strict=True
        ):
            ends = values[np.flatnonzero(p)[[0, -1]]]
            found.append((np.clip(values, ends[1], ends[0]), p))
        return found

    def _average_gibbs(self, values: Array, p: Array) -> Array:
        weights = np.zeros_like(values)
        for point, share in self._panels(float(values[0] - values[-1])):
            gibbs, active = self._gibbs(values, p, point)
            weights[:active] += share * gibbs
        return weights * p

    def _gibbs(self, values: Array, p: Array, point: float) -> tuple[Array, int]:
        """Return exp(point aversion L) over its mean for the positions where it is not 0, and how many they are."""
        exponent = max(point * self.aversion, LEAST_EXPONENT)
        active = values.size - int(np.searchsorted(values[::-1], values[0] - UNDERFLOW / exponent, side="left"))
        raised = np.exp(exponent * (values[:active] - values[0]))
        return raised / float(raised @ p[:active]), active

    def _panels(self, spread: float) -> "list[tuple[float, float]]":
        """Return nodes and weights on [0, 1]: panels [0, 2^-K], ..., [1/2, 1] with `NODES` nodes each.

        A fixed rule over [0, 1] misses the layer near 0 when aversion times the range is large.
        """
        reach = self.aversion * spread
        if reach > 2.0**MOST_PANELS:
            detail = (
                f"aversion {self.aversion:g} times the range of the losses is {reach:.3g}: beyond 2^{MOST_PANELS} the "
                "measure is the largest loss and its contributions cannot be told apart; use a smaller aversion"
            )
            raise NotDefined(detail)
        count = 0 if reach <= 1.0 else int(np.ceil(np.log2(reach)))
        edges = [0.0, *(2.0**-k for k in range(count, -1, -1))]
        points, shares = special.roots_legendre(NODES)
        return [
            (low + (high - low) * (1.0 + point) / 2.0, (high - low) * share / 2.0)
            for low, high in pairwise(edges)
            for point, share in zip(points.tolist(), shares.tolist(), strict=True)
        ]
