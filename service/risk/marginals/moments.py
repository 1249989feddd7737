"""Partial moments of a law by quadrature of its quantile function.

With v = exp(-y) the mean over a tail becomes an integral of exp(-y) Q(exp(-y)) over y, smooth down to the
farthest tail. It is summed by Gauss-Legendre rules on panels that start narrow and double.
"""

import math
from collections.abc import Callable
from typing import Protocol

import numpy as np
from numpy.typing import NDArray

from service.risk.score_tables import Piece

Array = NDArray[np.float64]
Flags = NDArray[np.bool_]

NODES, WEIGHTS = np.polynomial.legendre.leggauss(32)
NARROWEST = 2.0**-10  # first panel, in units of ln(probability)
FARTHEST = 650.0  # ln of the smallest probability looked at; beyond it a heavy tail is a power to rounding
HALF = math.log(2.0)


class Tailed(Protocol):
    """As much of a marginal as is needed here."""

    def quantile(self, lower: Array, upper: Array) -> Array:
        """Return the values at probabilities `lower` with complements `upper`."""

    def below(self, values: Array) -> Array:
        """Return P(X <= x)."""

    def beyond(self, values: Array) -> Array:
        """Return P(X > x)."""

    @property
    def pieces(self) -> tuple[Piece, ...]:
        """Where the quantile function is smooth, and where it is a step function."""

    @property
    def upper_tail_index(self) -> float:
        """Order up to which the moments of the upper tail exist."""

    @property
    def lower_tail_index(self) -> float:
        """Order up to which the moments of the lower tail exist."""


def excess_moments(law: Tailed, limit: float) -> tuple[float, float]:
    """Return E (X - limit)+ and E ((X - limit)+)² of a law in one piece; infinity where they do not exist."""
    atoms = law.pieces[0].atoms
    if atoms is not None:
        return _sums(atoms.masses, np.maximum(atoms.values - limit, 0.0))
    at = np.array([limit])
    lower, upper = float(law.below(at)[0]), float(law.beyond(at)[0])

    def above(y: Array) -> Array:
        return np.maximum(law.quantile(-np.expm1(-y), np.exp(-y)) - limit, 0.0)

    def under(y: Array) -> Array:
        return np.maximum(law.quantile(np.exp(-y), -np.expm1(-y)) - limit, 0.0)

    return _both_sides(above, under, (upper, lower), law.upper_tail_index)


def deficit_moments(law: Tailed, limit: float) -> tuple[float, float]:
    """Return E (limit - X)+ and E ((limit - X)+)² of a law in one piece; infinity where they do not exist."""
    atoms = law.pieces[0].atoms
    if atoms is not None:
        return _sums(atoms.masses, np.maximum(limit - atoms.values, 0.0))
    at = np.array([limit])
    lower, upper = float(law.below(at)[0]), float(law.beyond(at)[0])

    def under(y: Array) -> Array:
        return np.maximum(limit - law.quantile(np.exp(-y), -np.expm1(-y)), 0.0)

    def above(y: Array) -> Array:
        return np.maximum(limit - law.quantile(-np.expm1(-y), np.exp(-y)), 0.0)

    return _both_sides(under, above, (lower, upper), law.lower_tail_index)


def limited_mean(law: Tailed, limit: float) -> float:
    """Return E min(X, limit) of a continuous law with a lower tail of index above 1, without use of its mean."""
    median = _median(law)
    if limit <= median:
        return limit - deficit_moments(law, limit)[0]
    return median - deficit_moments(law, median)[0] + layer_mean(law, median, limit)


def layer_mean(law: Tailed, start: float, stop: float) -> float:
    """Return E min((X - start)+, stop - start) of a continuous law, whose mean need not exist."""
    median, total = _median(law), 0.0
    if stop > median:  # integral of (Q - low) exp(-y) to where Q is `stop`, the rest of the probability hits in full
        low = max(start, median)
        tails = law.beyond(np.array([low, stop]))
        y, weights = _panels(*_logarithms(tails))
        inside = np.clip(law.quantile(-np.expm1(-y), np.exp(-y)) - low, 0.0, stop - low)
        total += float(np.sum(weights * inside * np.exp(-y))) + (stop - low) * float(tails[1])
    if start < median:  # what is not hit, likewise from the other side
        high = min(stop, median)
        tails = law.below(np.array([high, start]))
        y, weights = _panels(*_logarithms(tails))
        inside = np.clip(high - law.quantile(np.exp(-y), -np.expm1(-y)), 0.0, high - start)
        total += (high - start) * (1.0 - float(tails[1])) - float(np.sum(weights * inside * np.exp(-y)))
    return total


def _median(law: Tailed) -> float:
    return float(law.quantile(np.array([0.5]), np.array([0.5]))[0])


def _logarithms(tails: Array) -> tuple[float, float]:
    """Return -ln of two probabilities, at most `FARTHEST`."""
    first, second = np.minimum(-np.log(np.maximum(tails, math.exp(-FARTHEST))), FARTHEST).tolist()
    return first, second


def _sums(masses: Array, amounts: Array) -> tuple[float, float]:
    return float(np.sum(masses * amounts)), float(np.sum(masses * amounts * amounts))


def _both_sides(
    near: Callable[[Array], Array], far: Callable[[Array], Array], masses: tuple[float, float], index: float
) -> tuple[float, float]:
    """Return the first two moments of a part of a law.

    Parameters
    ----------
    near, far : callable
        The excess where the probability of the tail of this part, or of the other side, is exp(-y).
    masses : tuple of (float, float)
        Probability of this part and of the rest.
    index : float
        Of the tail of this part.
    """
    mass, rest = masses
    if mass <= 0.0:
        return 0.0, 0.0
    first, second = _tail(near, max(-math.log(mass), HALF), index)
    if mass > 0.5 and rest > 0.0:  # noqa: PLR2004  # the median
        y, weights = _panels(HALF, min(-math.log(rest), FARTHEST))
        excess, weights = far(y), weights * np.exp(-y)
        more = float(np.sum(weights * excess)), float(np.sum(weights * excess * excess))
        first, second = first + more[0], second + more[1]
    elif mass > 0.5:  # noqa: PLR2004
        more = _tail(far, HALF, math.inf)
        first, second = first + more[0], second + more[1]
    return first, second


def _tail(excess: Callable[[Array], Array], start: float, index: float) -> tuple[float, float]:
    """Return the first two moments over the probabilities below exp(-start)."""
    if start >= FARTHEST:
        return 0.0, 0.0
    y, weights = _panels(start, FARTHEST)
    halved = excess(y) * np.exp(-0.5 * y)  # half of exp(-y) each, lest the square overflow
    last = float(excess(np.array([FARTHEST]))[0])
    sums = (float(np.sum(weights * halved * np.exp(-0.5 * y))), float(np.sum(weights * halved * halved)))
    moments = []
    for order, moment in enumerate(sums, start=1):
        if index <= order:
            moments.append(math.inf)
        elif math.isfinite(index) and last > 0.0:  # from here on the tail is a power
            rest = math.exp(order * math.log(last) - FARTHEST) / (1.0 - order / index)
            moments.append(moment + rest)
        else:
            moments.append(moment)
    return moments[0], moments[1]


def _panels(start: float, stop: float) -> tuple[Array, Array]:
    """Return nodes and weights on [start, stop], panels doubling in width from the start on."""
    if stop <= start:
        return np.empty(0), np.empty(0)
    doublings = max(math.ceil(math.log2((stop - start) / NARROWEST)), 1)
    edges = np.concatenate([[start], start + NARROWEST * 2.0 ** np.arange(doublings), [stop]])
    edges = np.minimum(edges, stop)
    low, width = edges[:-1, None], np.diff(edges)[:, None]
    return (low + width * (0.5 + 0.5 * NODES)).ravel(), (0.5 * width * WEIGHTS).ravel()
