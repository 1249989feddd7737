"""Weighted order statistics: levels as exact decimals, ordered distributions, intervals of quantiles.

Everything here and in the measures works on distributions that are already ordered, worst first.
Position j holds the (j+1)-th worst loss; `upper[j]` is the mass of the positions 0..j. A measure of a
single distribution depends on ties only through their values, so positions need no knowledge of
atoms; only contributions do (see `Ties`).
"""

from dataclasses import dataclass
from fractions import Fraction
from functools import lru_cache

import numpy as np
from numpy.typing import NDArray
from scipy import special

Array = NDArray[np.float64]
Indices = NDArray[np.intp]

SIGNIFICANT_DIGITS = 15  # IEEE 754: every decimal of at most 15 digits survives a round trip through binary64
ERROR_COVERAGE = 0.95  # of the interval from whose width the standard error of a quantile is taken
MASS_SLACK = 1e-12  # probabilities given by the caller: F(q) >= level is judged with this much slack


@lru_cache(maxsize=1024)
def decimal(number: float) -> Fraction:
    """Return the decimal that the caller wrote, e.g. 0.995 as 199/200, from its binary64 neighbour."""
    return Fraction(f"{number:.{SIGNIFICANT_DIGITS}g}")


def compensated_cumsum(terms: Array) -> Array:
    """Return running sums along the last axis, corrected by the rounding error of each addition.

    The rounding errors of ``numpy.cumsum`` are recovered exactly by the two-sum of Knuth (The Art of
    Computer Programming, vol. 2, 4.2.2, theorem B) and their own running sum is added.
    """
    sums = np.cumsum(terms, axis=-1)
    before = sums[..., :-1]
    after = sums[..., 1:]
    added = after - before
    errors = (before - (after - added)) + (terms[..., 1:] - added)
    after += np.cumsum(errors, axis=-1)
    return sums


@dataclass(frozen=True, slots=True)
class Ordered:
    """The worst losses of c distributions, worst first; all of them or only the upper part.

    Attributes
    ----------
    values : ndarray of shape (c, m)
        Losses, descending along the last axis.
    scenarios : int
        Number n of scenarios of each distribution; m < n when only the worst m were kept, which is
        done for equal probabilities alone.
    probabilities : ndarray of shape (c, m) or None
        Probability of each position; None when all are 1/n.
    upper : ndarray of shape (1, m) or (c, m)
        Mass at or before each position, in units of `unit`.
    unit : float
        The mass of everything: n when all probabilities are equal (masses are then counts, and exact),
        else 1.
    sampled : bool
        Whether the scenarios are draws; if not they are the whole distribution and nothing has an error.
    clusters : ndarray of int of shape (1, m) or (c, m), or None
        Number of the cluster of each position where scenarios are dependent within clusters; None where all
        are independent.
    points : bool
        Whether the scenarios are quasi-random points: no draws, but not the whole distribution either.
    """

    values: Array
    scenarios: int
    probabilities: Array | None
    upper: Array
    unit: float
    sampled: bool
    clusters: Indices | None = None
    points: bool = False

    @classmethod
    def of(
        cls,
        values: Array,
        *,
        scenarios: int,
        probabilities: Array | None,
        sampled: bool,
        clusters: Indices | None = None,
        points: bool = False,
    ) -> "Ordered":
        """Make the masses that belong to `values` (c, m), already descending."""
        if probabilities is None:
            upper = np.arange(1.0, values.shape[-1] + 1.0)[None, :]
            return cls(values, scenarios, None, upper, float(scenarios), sampled, clusters, points)
        return cls(values, scenarios, probabilities, compensated_cumsum(probabilities), 1.0, sampled, clusters, points)

    @property
    def whole(self) -> bool:
        """Whether the scenarios are the whole distribution."""
        return not self.sampled and not self.points

    @property
    def complete(self) -> bool:
        """Whether no scenario was left out."""
        return self.values.shape[-1] == self.scenarios

    @property
    def p(self) -> Array | float:
        """Probability of each position: (c, m), or 1/n."""
        return 1.0 / self.scenarios if self.probabilities is None else self.probabilities

    def mass(self, share: Fraction) -> float:
        """Return the mass of a share of everything; exact on the caller's decimal when counts are."""
        return share.numerator * self.scenarios / share.denominator if self.probabilities is None else float(share)

    def snapped(self, mass: float) -> Array:
        """Return `upper` with what lies within the slack of `mass` put on it."""
        if self.probabilities is None:
            return self.upper
        return np.where(np.abs(self.upper - mass) <= MASS_SLACK, mass, self.upper)

    def position(self, share: Fraction) -> Indices:
        """Return, per distribution, the position of the lower quantile with `share` of the mass above.

        inf{x : P(L <= x) >= 1 - share} is the first position whose predecessors hold more than
        nothing beyond `share`: the number of positions with upper <= share.

        Returns
        -------
        ndarray of shape (1,) or (c,)
        """
        mass = self.mass(share)
        if self.probabilities is None:
            return np.array([min(int(mass), self.values.shape[-1] - 1)])
        found = np.count_nonzero(self.upper <= mass + MASS_SLACK, axis=-1)
        return np.minimum(found, self.values.shape[-1] - 1)

    def at(self, positions: Indices) -> Array:
        """Return the values at one position per distribution, shape (c,)."""
        found: Array = self.values[np.arange(self.values.shape[0]), positions]
        return found

    def tail_weights(self, share: Fraction) -> Array:
        """Return weights of the mean over the worst `share`, the position on the boundary split.

        Returns
        -------
        ndarray of shape (1, m) or (c, m)
            Each row sums to 1.
        """
        mass = self.mass(share)
        taken = np.minimum(self.snapped(mass), mass)
        taken[..., 1:] -= taken[..., :-1]
        taken /= mass
        return taken

    def effective_tail(self, share: Fraction) -> Array:
        """Return the effective number of scenarios in the worst `share`: (sum p)^2 / sum p^2, shape (c,).

        Scenarios at the quantile count for the part of their atom that belongs to the tail.
        """
        if self.clusters is not None:
            parts = cluster_sums(np.broadcast_to(self.tail_weights(share), self.values.shape), self.clusters)
            return 1.0 / np.sum(parts * parts, axis=-1)
        if self.probabilities is None:
            return np.full(self.values.shape[0], self.mass(share))
        p, mass = self.probabilities, float(share)
        q = self.at(self.position(share))[:, None]
        beyond, at = np.where(self.values > q, p, 0.0), np.where(self.values == q, p, 0.0)
        atom = at.sum(axis=-1)
        rest = np.maximum(mass - beyond.sum(axis=-1), 0.0)
        part = np.divide(rest, atom, out=np.zeros_like(atom), where=atom > 0.0)
        return mass * mass / (np.sum(beyond * beyond, axis=-1) + part * np.sum(at * at, axis=-1))


@dataclass(frozen=True, slots=True)
class QuantileInterval:
    """Interval of one quantile for each of c distributions.

    Attributes
    ----------
    lower, upper : ndarray of shape (c,)
        NaN where no finite interval of this coverage exists.
    coverage : float
        What the interval covers for a continuous law (exact for equal probabilities).
    """

    lower: Array
    upper: Array
    coverage: float


@lru_cache(maxsize=256)
def order_statistic_ranks(scenarios: int, level: float, coverage: float) -> tuple[int, int, float]:
    """Return ranks l < u (counted from 1, the smallest) with P(x_(l) <= quantile < x_(u)) >= coverage.

    l is the largest rank with P(B <= l-1) <= (1-coverage)/2 and u the smallest with
    P(B <= u-1) >= (1+coverage)/2, B binomial(n, level); l = 0 or u = n + 1 means that there is no such end.
    Common practice; David and Nagaraja, Order Statistics (3rd ed. 2003), section 7.1.

    Returns
    -------
    tuple of (int, int, float)
        l, u and the exact coverage.
    """
    tail = (1.0 - coverage) / 2.0

    def below(rank: int) -> float:
        return float(special.bdtr(rank, scenarios, level)) if rank >= 0 else 0.0

    spread = float(special.ndtri(1.0 - tail)) * np.sqrt(scenarios * level * (1.0 - level))
    low = int(np.clip(np.floor(scenarios * level - spread), 0, scenarios))
    while low > 0 and below(low - 1) > tail:
        low -= 1
    while low < scenarios and below(low) <= tail:
        low += 1
    high = int(np.clip(np.ceil(scenarios * level + spread), 1, scenarios + 1))
    while high > 1 and below(high - 2) >= 1.0 - tail:
        high -= 1
    while high <= scenarios and below(high - 1) < 1.0 - tail:
        high += 1
    return low, high, below(high - 1) - below(low - 1)


def quantile_interval(ordered: Ordered, share: Fraction, coverage: float) -> QuantileInterval:
    """Return the interval of the quantile with `share` of the mass above it.

    Independent and equally probable: exact binomial order statistics. Else the estimated distribution
    function is inverted at level -+ z times its standard error at the quantile (Woodruff, J. American
    Statistical Association 47, 1952, 635-646); see `distribution_error`.
    """
    missing = np.full(ordered.values.shape[0], np.nan)
    level = float(1 - share)
    if ordered.probabilities is None and ordered.clusters is None:
        low, high, actual = order_statistic_ranks(ordered.scenarios, level, coverage)
        deepest = ordered.scenarios - low
        if high > ordered.scenarios or low < 1 or deepest >= ordered.values.shape[-1]:  # no such rank, or not kept
            return QuantileInterval(missing, missing, coverage)
        return QuantileInterval(ordered.values[:, deepest], ordered.values[:, ordered.scenarios - high], actual)
    z = float(special.ndtri((1.0 + coverage) / 2.0))
    spread = z * distribution_error(ordered, share)
    lower, upper = missing.copy(), missing.copy()
    last = ordered.values.shape[-1] - 1
    for j in np.flatnonzero((level + spread < 1.0) & (level - spread > 0.0)):
        above = ordered.upper[j % ordered.upper.shape[0]] / ordered.unit
        upper[j] = ordered.values[j, min(int(np.count_nonzero(above <= 1.0 - level - spread[j])), last)]
        lower[j] = ordered.values[j, min(int(np.count_nonzero(above <= 1.0 - level + spread[j])), last)]
    return QuantileInterval(lower, upper, coverage)


def quantile_error(ordered: Ordered, share: Fraction) -> Array:
    """Return the standard error of the quantile with `share` above it, shape (c,); NaN where unknown.

    Half the width of its interval, over the normal quantile of what the interval covers.
    """
    interval = quantile_interval(ordered, share, ERROR_COVERAGE)
    return (interval.upper - interval.lower) / (2.0 * float(special.ndtri((1.0 + interval.coverage) / 2.0)))


def distribution_error(ordered: Ordered, share: Fraction) -> Array:
    """Return the standard error of the estimated P(L <= q) at the quantile q, shape (c,).

    That of an importance sample, sum p^2 (1{L <= q} - level)^2, with sums over clusters instead of
    scenarios where these are dependent.
    """
    level = float(1 - share)
    if ordered.probabilities is None and ordered.clusters is None:
        return np.full(ordered.values.shape[0], np.sqrt(level * (1.0 - level) / ordered.scenarios))
    q = ordered.at(ordered.position(share))
    inside = (ordered.values <= q[:, None]) - level
    terms = np.asarray(ordered.p * inside)
    if ordered.clusters is not None:
        terms = cluster_sums(terms, ordered.clusters)
    return np.sqrt(np.sum(terms * terms, axis=-1))


def cluster_sums(terms: Array, clusters: Indices) -> Array:
    """Return sums of `terms` (c, m) over each cluster, shape (c, number of clusters)."""
    count = int(clusters.max()) + 1
    rows = np.broadcast_to(clusters, terms.shape)
    return np.stack([np.bincount(row, term, count) for row, term in zip(rows, terms, strict=True)])


@dataclass(frozen=True, slots=True)
class Ties:
    """Runs of equal values in one ordered distribution: scenarios that share their weight.

    Attributes
    ----------
    starts : ndarray of shape (a,)
        First position of each atom.
    atom : ndarray of shape (m,)
        Number of the atom that each position belongs to.
    p : ndarray of shape (m,)
        Probability of each position.
    """

    starts: Indices
    atom: Indices
    p: Array

    @classmethod
    def of(cls, ordered: Ordered, *, tolerance: Array) -> "Ties":
        """Group neighbours of the single distribution in `ordered` that differ by at most their `tolerance` (m,)."""
        values = ordered.values[0]
        new = np.empty(values.size, dtype=bool)
        new[:1] = True
        np.greater(values[:-1] - values[1:], np.maximum(tolerance[:-1], tolerance[1:]), out=new[1:])
        starts = np.flatnonzero(new)
        p = np.broadcast_to(np.asarray(ordered.p, dtype=np.float64).reshape(-1), values.shape)
        return cls(starts, np.cumsum(new) - 1, p)

    @property
    def none(self) -> bool:
        """Whether every atom is a single scenario."""
        return self.starts.size == self.atom.size

    def sums(self, terms: Array) -> Array:
        """Return sums over each atom of `terms` (m, ...), shape (a, ...)."""
        return terms if self.none else np.add.reduceat(terms, self.starts, axis=0)

    def spread(self, per_atom: Array) -> Array:
        """Return values (a, ...) repeated for each member, shape (m, ...)."""
        return per_atom if self.none else per_atom[self.atom]

    def shared(self, weights: Array) -> Array:
        """Return `weights` (m,) with each atom's sum shared in proportion to probability."""
        if self.none:
            return weights
        mass = self.sums(self.p)
        total = self.sums(weights)
        per_mass = np.divide(total, mass, out=np.zeros_like(total), where=mass > 0.0)
        return self.p * self.spread(per_mass)

    def means(self, rows: Array) -> Array:
        """Return the mean of `rows` (m, c) given each atom, shape (a, c); 0 for an atom without probability."""
        if self.none:
            return rows
        mass = self.sums(self.p)[:, None]
        total = self.sums(self.p[:, None] * rows)
        return np.divide(total, mass, out=np.zeros_like(total), where=mass > 0.0)
