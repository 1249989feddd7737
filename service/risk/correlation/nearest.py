"""The nearest correlation matrix to a symmetric one that is none."""

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

Array = NDArray[np.float64]

MOST_STEPS = 100  # Newton converges quadratically: ten or so are needed
MOST_INNER = 200  # conjugate gradient steps for one Newton step
TOLERANCE = 1e-10  # how far the diagonal may be off 1 when the iteration ends; the rest is scaled away
DECREASE = 1e-4  # part of the promised decrease that a step must bring (Armijo)
HALVINGS = 30
ACCURACY = 0.1  # of the conjugate gradient solution, relative to the gradient


@dataclass(frozen=True, slots=True)
class Repair:
    """What was done to a matrix that is not positive semi-definite.

    Attributes
    ----------
    smallest_eigenvalue : float
        Of the matrix that was given.
    distance : float
        Frobenius norm of the difference: the root of the sum of the squared changes of all entries.
    largest_change : float
        Of any entry.
    """

    smallest_eigenvalue: float
    distance: float
    largest_change: float

    code = "correlation_repaired"

    @property
    def detail(self) -> str:
        """The repair in words."""
        return (
            f"the matrix has the eigenvalue {self.smallest_eigenvalue:.6g}; the nearest correlation matrix is used "
            f"instead, at a distance of {self.distance:.6g} (Frobenius norm; no entry moved by more than "
            f"{self.largest_change:.6g})"
        )


@dataclass(frozen=True, slots=True)
class _Spectrum:
    """Eigenvalues and eigenvectors of matrix + Diag(shift), and what follows from them."""

    values: Array
    vectors: Array
    dual: float
    """Half the sum of the squared positive eigenvalues minus the sum of the shift: to be made least."""
    gradient: Array
    """Diagonal of the positive part, less 1."""

    @classmethod
    def of(cls, matrix: Array, shift: Array) -> "_Spectrum":
        shifted = matrix.copy()
        shifted[np.diag_indices_from(shifted)] += shift
        values, vectors = np.linalg.eigh(shifted)
        kept = np.maximum(values, 0.0)
        dual = 0.5 * float(kept @ kept) - float(shift.sum())
        return cls(values, vectors, dual, (vectors**2) @ kept - 1.0)

    def curvature(self, direction: Array) -> Array:
        """Return the generalised Hessian times `direction`, by way of the fewer eigenvectors.

        Entries of the weights are (max(a, 0) - max(b, 0)) / (a - b) for eigenvalues a and b: 1 among positive ones,
        0 among the others.
        """
        positive = self.values > 0.0
        few_are_positive = 2 * np.count_nonzero(positive) <= self.values.size
        chosen = positive if few_are_positive else ~positive
        few, many = self.vectors[:, chosen], self.vectors[:, ~chosen]
        mixed = np.abs(self.values[chosen])[:, None]
        mixed = mixed / (mixed + np.abs(self.values[~chosen]))
        rotated = few.T * direction
        within = (rotated @ few) @ few.T
        across = (mixed * (rotated @ many)) @ many.T
        product = np.einsum("ij,ji->i", few, within + 2.0 * across)
        return np.asarray(product if few_are_positive else direction - product)

    def nearest(self) -> Array:
        """Return the positive part, scaled to a unit diagonal."""
        part = self.vectors * np.sqrt(np.maximum(self.values, 0.0))
        part /= np.sqrt(np.sum(part**2, axis=1))[:, None]
        return np.asarray(part @ part.T)


def nearest_correlation(matrix: Array) -> Array:
    """Return the correlation matrix nearest to a symmetric `matrix` in the Frobenius norm.

    Parameters
    ----------
    matrix : ndarray of shape (k, k)
        Symmetric.

    Returns
    -------
    ndarray of shape (k, k)
        Positive semi-definite up to rounding, with unit diagonal.

    Notes
    -----
    Newton's method on the dual problem (Qi and Sun, SIAM J. Matrix Analysis and Applications 28, 2006, 360-385)
    with conjugate gradients for its steps. The problem itself is that of Higham, IMA J. Numerical Analysis 22 (2002)
    329-343, whose alternating projections converge to the same matrix, but linearly.
    """
    shift = 1.0 - np.diag(matrix)
    at = _Spectrum.of(matrix, shift)
    for _ in range(MOST_STEPS):
        if np.max(np.abs(at.gradient)) <= TOLERANCE:
            break
        step = _newton_step(at)
        promised = DECREASE * float(at.gradient @ step)
        length = 1.0
        for _ in range(HALVINGS):
            tried = _Spectrum.of(matrix, shift + length * step)
            if tried.dual <= at.dual + length * promised + TOLERANCE * abs(at.dual) * np.finfo(float).eps:
                break
            length /= 2.0
        if np.max(np.abs(tried.gradient)) >= np.max(np.abs(at.gradient)) and tried.dual >= at.dual:
            break  # rounding: nothing is gained any more
        shift = shift + length * step
        at = tried
    return at.nearest()


def _newton_step(at: _Spectrum) -> Array:
    """Return an approximate solution of curvature(step) = -gradient by conjugate gradients."""
    residual = -at.gradient
    step = np.zeros_like(residual)
    direction = residual.copy()
    size = float(residual @ residual)
    goal = size * min(ACCURACY, np.sqrt(size)) ** 2
    tiny = 1e-10  # keeps the curvature positive where the generalised Hessian is singular
    for _ in range(MOST_INNER):
        if size <= goal:
            break
        curved = at.curvature(direction) + tiny * direction
        length = size / float(direction @ curved)
        step += length * direction
        residual = residual - length * curved
        before, size = size, float(residual @ residual)
        direction = residual + (size / before) * direction
    return step
