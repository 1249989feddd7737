"""Roots of a correlation matrix: from independent normals to correlated ones."""

from dataclasses import dataclass, field
from itertools import pairwise
from typing import Protocol

import numpy as np
from numpy.typing import NDArray

from service.risk.correlation.nearest import Repair

Array = NDArray[np.float64]
Indices = NDArray[np.intp]

STRIPES = 3  # a triangular matrix is multiplied in this many stripes, which leave out a third of its zeros
ROWS = 256  # rows to which the common part is added at a time


class NormalSource(Protocol):
    """What a root draws from: n scenarios of independent normals, see `service.risk.streams.Draw`."""

    def normals(self, rows: int) -> Array:
        """Return independent standard normals, shape (rows, n)."""

    def empty(self, rows: int) -> Array:
        """Return an array of shape (rows, n) with anything in it."""


class Root(Protocol):
    """A matrix A with A A' = R, for k factors."""

    @property
    def repair(self) -> Repair | None:
        """What was done to the matrix that was given, if anything."""

    @property
    def dimensions(self) -> int:
        """How many independent normals a scenario takes."""

    def normals(self, draw: NormalSource) -> Array:
        """Return correlated standard normals, shape (k, n), in an array of the draw."""

    def correlations(self, factors: Indices) -> Array:
        """Return the correlation matrix of some of the factors, shape (len(factors), len(factors))."""


@dataclass(frozen=True, slots=True)
class DenseRoot:
    """The root of a whole matrix.

    Attributes
    ----------
    values : ndarray of shape (k, r)
        r <= k. With r = k it is lower triangular, so that another factor at the end changes none before it.
    triangular : bool
    """

    values: Array
    triangular: bool
    repair: Repair | None = None
    stripes: tuple[tuple[int, int, Array], ...] = field(init=False, repr=False, compare=False)

    def __post_init__(self) -> None:
        """Cut the matrix into stripes: first row, last row, their columns that are not zero."""
        k, r = self.values.shape
        cuts = [k * i // STRIPES for i in range(STRIPES + 1)] if self.triangular and k > STRIPES else [0, k]
        stripes = []
        for first, last in pairwise(cuts):
            part = self.values[first:last, : last if self.triangular else r]
            stripes.append((first, last, np.ascontiguousarray(part)))
        object.__setattr__(self, "stripes", tuple(stripes))

    @property
    def dimensions(self) -> int:
        """How many independent normals a scenario takes."""
        return int(self.values.shape[1])

    def normals(self, draw: NormalSource) -> Array:
        """Return A times independent normals."""
        independent = draw.normals(self.dimensions)
        correlated = draw.empty(self.values.shape[0])
        for first, last, part in self.stripes:
            np.matmul(part, independent[: part.shape[1]], out=correlated[first:last])
        return correlated

    def correlations(self, factors: Indices) -> Array:
        """Return the products of the rows."""
        rows = self.values[factors]
        return np.asarray(rows @ rows.T)


@dataclass(frozen=True, slots=True)
class FactorRoot:
    """Common normals with loadings, and a normal of its own for each factor: never a k x k matrix.

    Attributes
    ----------
    loadings : ndarray of shape (k, r)
    own : ndarray of shape (k,)
        sqrt(1 - squared norm of the row).
    """

    loadings: Array
    own: Array
    repair: Repair | None = None

    @property
    def dimensions(self) -> int:
        """How many independent normals a scenario takes: the common ones first."""
        return int(self.loadings.shape[1] + self.loadings.shape[0])

    def normals(self, draw: NormalSource) -> Array:
        """Return loadings times the common normals plus own times the factor's."""
        common = draw.normals(self.loadings.shape[1])
        correlated = draw.normals(self.loadings.shape[0])
        correlated *= self.own[:, None]
        held = draw.empty(min(ROWS, self.own.size))
        for first in range(0, self.own.size, ROWS):
            rows = self.loadings[first : first + ROWS]
            correlated[first : first + ROWS] += np.matmul(rows, common, out=held[: rows.shape[0]])
        return correlated

    def correlations(self, factors: Indices) -> Array:
        """Return the products of the loadings with the unit diagonal put in."""
        rows = self.loadings[factors]
        matrix = rows @ rows.T
        np.fill_diagonal(matrix, 1.0)
        return np.asarray(np.where(factors[:, None] == factors, 1.0, matrix))


@dataclass(frozen=True, slots=True)
class NegativeEqualRoot:
    """The symmetric root of a matrix of equal correlations below 0: x = a (z - mean z) + b mean z.

    Attributes
    ----------
    value : float
        The correlation, in (-1/(factors - 1), 0).
    factors : int
    """

    value: float
    factors: int
    repair: Repair | None = None

    @property
    def dimensions(self) -> int:
        """How many independent normals a scenario takes."""
        return self.factors

    def normals(self, draw: NormalSource) -> Array:
        """Return independent normals drawn apart from their mean, whose own variance shrinks."""
        a = np.sqrt(1.0 - self.value)
        b = np.sqrt(1.0 + (self.factors - 1) * self.value)
        normals = draw.normals(self.factors)
        shift = normals.mean(axis=0)
        shift *= b - a
        normals *= a
        normals += shift
        return normals

    def correlations(self, factors: Indices) -> Array:
        """Return the value everywhere and the unit diagonal."""
        return np.where(factors[:, None] == factors, 1.0, self.value)
