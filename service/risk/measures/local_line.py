"""Local-linear regression of columns on the total at one of its values: E[L_i given L = q] and its slope.

Fan and Gijbels, Local Polynomial Modelling and Its Applications (1996), section 3.2, with an
Epanechnikov kernel in rank. The weights sum to 1 and their mean of L is q, so whatever is read off
the lines of the columns adds up to q without rescaling.
"""

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from service.risk.quantiles import Array, Ordered, Ties


@dataclass(frozen=True, slots=True)
class LocalLine:
    """A local regression on the total, made once and applied to any column.

    Attributes
    ----------
    weights : ndarray of shape (m,)
        weights @ column is the fitted value at q.
    kernel : ndarray of shape (m,)
        Kernel weights times probability, shared within atoms.
    excess : ndarray of shape (m,)
        L - q.
    centre : ndarray of bool of shape (m,)
        The scenarios at q.
    at_centre : int
        How many of them have a positive probability.
    window : tuple of (float, float, int)
        Lowest and highest total and the number of scenarios with a weight.
    steepness : ndarray of shape (m,)
        steepness @ column is the slope in the total; 0 for a single atom.
    inside : slice
        Positions outside of which weights and steepness are 0.
    """

    weights: Array
    kernel: Array
    excess: Array
    centre: NDArray[np.bool_]
    at_centre: int
    window: tuple[float, float, int]
    steepness: Array
    inside: slice

    def fitted(self, rows: Array) -> Array:
        """Return the fitted value at q of each column of `rows` (m, c), shape (c,)."""
        return np.asarray(self.weights[self.inside] @ rows[self.inside])

    def slopes(self, rows: Array) -> Array:
        """Return the slope of each column of `rows` (m, c) in the total, shape (c,)."""
        return np.asarray(self.steepness[self.inside] @ rows[self.inside])


def local_line(ordered: Ordered, ties: Ties, position: int, half_width: float) -> LocalLine:
    """Return the local line of the total at one of its positions.

    Parameters
    ----------
    ordered : Ordered
        The total, a single distribution.
    ties : Ties
        Of the total; an atom counts as lying at the middle of its mass, so that the order of tied
        scenarios does not matter.
    position : int
        Where q stands.
    half_width : float
        Of the kernel, in units of mass.
    """
    values = ordered.values[0]
    excess = values - values[position]
    mass = ties.sums(ties.p) * ordered.unit
    ends = ordered.upper[0] if ties.none else ordered.upper[0][np.append(ties.starts[1:], values.size) - 1]
    middles = ends - mass / 2.0
    atom = int(ties.atom[position])
    distance = np.abs(middles - middles[atom]) / half_width
    kernel = ties.spread(np.maximum(1.0 - distance * distance, 0.0)) * ties.p
    centre = ties.atom == atom
    if kernel.sum() <= 0.0:
        kernel = np.where(centre, ties.p, 0.0)
    positions = np.flatnonzero(kernel)
    first, last = int(positions[0]), int(positions[-1]) + 1
    inside = slice(first, last)
    weights, steepness = np.zeros_like(kernel), np.zeros_like(kernel)
    weights[inside] = _fitted_at_zero(kernel[inside], excess[inside])
    steepness[inside] = _steepness(kernel[inside], excess[inside])
    return LocalLine(
        weights=weights,
        kernel=kernel,
        excess=excess,
        centre=centre,
        at_centre=int(np.count_nonzero(ties.p[centre] > 0.0)),
        window=(float(values[last - 1]), float(values[first]), positions.size),
        steepness=steepness,
        inside=inside,
    )


def _steepness(kernel: Array, excess: Array) -> Array:
    """Return weights of the slope; 0 where all excesses are alike."""
    deviation = kernel * (excess - kernel @ excess / kernel.sum())
    spread = float(deviation @ excess)
    return np.asarray(deviation / spread) if spread > 0.0 else np.zeros_like(kernel)


def _fitted_at_zero(kernel: Array, excess: Array) -> Array:
    """Return weights of the fitted value at excess 0; the plain mean where all excesses are alike."""
    scale = float(np.max(np.abs(excess)))
    if scale == 0.0:
        return np.asarray(kernel / kernel.sum())
    x = excess / scale
    s0, s1, s2 = float(kernel.sum()), float(kernel @ x), float(kernel @ (x * x))
    return np.asarray(kernel * (s2 - s1 * x) / (s0 * s2 - s1 * s1))
