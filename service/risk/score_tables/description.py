"""What a table must know of a quantile function: where it is smooth, where it steps, where it is a simple map."""

from dataclasses import dataclass
from typing import Protocol

import numpy as np
from numpy.typing import NDArray

from service.risk.scores import Law

Array = NDArray[np.float64]


@dataclass(frozen=True, slots=True, eq=False)
class Atoms:
    """A discrete law, or a part of one, by its distinct values.

    Attributes
    ----------
    values : ndarray of shape (m,)
        Ascending.
    masses : ndarray of shape (m,)
        Probability of each.
    lower, upper : ndarray of shape (m,)
        P(X <= value) and P(X > value), each summed from its own side.
    """

    values: Array
    masses: Array
    lower: Array
    upper: Array

    def quantile(self, lower: Array, upper: Array) -> Array:
        """Return the smallest value x with P(X <= x) >= `lower` = 1 - `upper`, exactly in both tails."""
        from_below = np.searchsorted(self.lower, lower, side="left")
        from_above = self.values.size - np.searchsorted(self.upper[::-1], upper, side="right")
        place = np.where(lower <= upper, from_below, from_above)
        return self.values[np.minimum(place, self.values.size - 1)]

    def part(self, chosen: slice) -> "Atoms":
        """Return some of the atoms with the probabilities that they have here."""
        return Atoms(self.values[chosen], self.masses[chosen], self.lower[chosen], self.upper[chosen])


@dataclass(frozen=True, slots=True)
class Piece:
    """A stretch of a quantile function, from the end of the one before up to a probability.

    Attributes
    ----------
    lower, upper : float
        The probability at which it ends, and 1 minus it.
    atoms : Atoms or None
        Where it is a step function; None where it is smooth.
    """

    lower: float
    upper: float
    atoms: Atoms | None = None


WHOLE = (Piece(1.0, 0.0),)
"""A quantile function that is smooth throughout."""


@dataclass(frozen=True, slots=True)
class Affine:
    """On scores of this law the values are location + scale × score, or the exponential of that."""

    law: Law
    location: float
    scale: float
    exponential: bool = False


class Tabulated(Protocol):
    """As much of a marginal as a table needs; equal ones must compare equal and have the same hash."""

    def quantile(self, lower: Array, upper: Array) -> Array:
        """Return the values at probabilities `lower` with complements `upper`."""

    def __hash__(self) -> int:
        """Return the same for equal laws."""

    @property
    def support(self) -> tuple[float, float]:
        """The lowest and the highest value."""

    @property
    def affine(self) -> Affine | None:
        """The law of scores of which the values are a simple map, if there is one."""

    @property
    def pieces(self) -> tuple[Piece, ...]:
        """Where the quantile function is smooth, in ascending order."""
