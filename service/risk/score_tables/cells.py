"""Piecewise polynomials on equal cells, fitted to a function and checked against it between their nodes."""

import math
from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

Array = NDArray[np.float64]
Function = Callable[[Array], Array]

CUBIC, QUINTIC = 3, 5
FEWEST_CELLS, MOST_CELLS = 48, 4096
TRIES = 6  # numbers of cells looked at
GROWTH = (1.25, 8.0)  # least and most from one number of cells to the next
MARGIN = 1.1  # more cells than the error would need by its order
NEGLIGIBLE = 1e-7  # probability of cells that may fail the check, which are then left out of the table
SLACK = 1e-12  # relative error of a number of cells
NO_LOGARITHM = -1e4  # stands for ln 0: its exponential is 0


@dataclass(frozen=True, slots=True)
class Target:
    """What is fitted.

    Attributes
    ----------
    function : callable
        From marks to values, both of shape (n,); NaN where it is not to be tabulated.
    allowed : callable
        From values to the errors that they may have.
    probability : callable
        From ascending marks (n,) to the probabilities between them, shape (n - 1,).
    start, stop : float
        The range of marks.
    anchor : float or None
        A mark that must lie on the edge of a cell, because the function bends there.
    """

    function: Function
    allowed: Function
    probability: Function
    start: float
    stop: float
    anchor: float | None = None


@dataclass(frozen=True, slots=True)
class Cells:
    """A fitted function.

    Attributes
    ----------
    start, width : float
        Lower end of the first cell, and the width of each, in marks.
    coefficients : ndarray of shape (degree + 1, count + 2)
        For each cell of powers of the place in it, from -1/2 to 1/2. The first and the last cell, which stand for
        all marks outside, and cells that failed the check hold NaN.
    exponential : bool
        Whether the polynomial is the logarithm of the value.
    """

    start: float
    width: float
    coefficients: Array
    exponential: bool

    @property
    def count(self) -> int:
        """Number of cells that are not for all marks outside."""
        return self.coefficients.shape[1] - 2

    def at(self, marks: Array) -> Array:
        """Return the values at marks (n,), NaN where there are none; for making tables, not for using them."""
        position = (marks - self.start) / self.width
        inside = (position > -SLACK * self.count) & (position < (1.0 + SLACK) * self.count)
        cell = np.clip(np.floor(position), 0.0, self.count - 1.0)
        place = position - cell - 0.5
        chosen = self.coefficients[:, np.where(inside, cell + 1.0, 0.0).astype(np.intp)]
        values = chosen[-1].copy()
        for row in chosen[-2::-1]:
            values = values * place + row
        return np.exp(values) if self.exponential else values


def fitted(target: Target, degree: int, *, exponential: bool) -> tuple[Cells, float]:
    """Return the fit with the fewest cells that will do, and the probability of cells that failed nevertheless.

    Parameters
    ----------
    target : Target
    degree : int
        Of the polynomials: `CUBIC` or `QUINTIC`.
    exponential : bool
        Whether to fit the logarithms of values, all of which are then positive or 0.
    """
    count = FEWEST_CELLS
    for attempt in range(1, TRIES + 1):
        with np.errstate(all="ignore"):
            cells, ratios, probability = _fit(target, degree, count, exponential=exponential)
        worst = _worst(ratios, probability)
        if worst <= 1.0 or attempt == TRIES or count == MOST_CELLS:
            break
        growth = MARGIN * worst ** (1.0 / (degree + 1)) if math.isfinite(worst) else GROWTH[1]
        count = min(math.ceil(count * min(max(growth, GROWTH[0]), GROWTH[1])), MOST_CELLS)
    failed = ~(ratios <= 1.0)
    cells.coefficients[:, 1:-1][:, failed] = np.nan
    return cells, float(probability[failed].sum())


def _worst(ratios: Array, probability: Array) -> float:
    """Return the largest error over the allowed one, but for cells that are negligible together or have no values."""
    known = ~np.isnan(ratios)
    ratios, probability = ratios[known], probability[known]
    order = np.argsort(-ratios, kind="stable")
    beyond = np.cumsum(probability[order]) > NEGLIGIBLE
    return float(ratios[order][beyond][0]) if beyond.any() else 0.0


def _fit(target: Target, degree: int, count: int, *, exponential: bool) -> tuple[Cells, Array, Array]:
    """Return the fit with `count` cells, its error over the allowed one by cell, and the probability of each."""
    start, width, count = _divided(target, count)
    nodes, tests = _places(degree)
    lower = start + width * np.arange(float(count))
    inner = target.function((lower[:, None] + width * (nodes[:-1] + 0.5)).ravel()).reshape(count, degree)
    last = target.function(np.array([start + width * count]))
    values = np.column_stack([inner, np.append(inner[1:, 0], last)])
    if exponential:
        values = np.where(values == 0.0, NO_LOGARITHM, np.log(values))
    # einsum and not matmul: the sums must not depend on the number of threads
    coefficients = np.einsum("ij,kj->ik", values, np.linalg.inv(np.vander(nodes, increasing=True)))
    found = np.einsum("ij,kj->ik", coefficients, np.vander(tests, degree + 1, increasing=True))
    exact = target.function((lower[:, None] + width * (tests + 0.5)).ravel()).reshape(found.shape)
    error = np.abs((np.exp(found) if exponential else found) - exact)
    ratios = np.where(error == 0.0, 0.0, error / target.allowed(exact)).max(axis=1)  # NaN stays NaN
    table = np.full((degree + 1, count + 2), np.nan)
    table[:, 1:-1] = coefficients.T
    edges = start + width * np.arange(count + 1.0)
    return Cells(start, width, table, exponential), ratios, target.probability(edges)


def _divided(target: Target, count: int) -> tuple[float, float, int]:
    """Return start, width and number of about `count` cells, the anchor being an edge if it lies inside.

    Then an end of the range is one too: the nearer one, unless that would make the cells too narrow.
    """
    width = (target.stop - target.start) / count
    if target.anchor is None or not target.start < target.anchor < target.stop:
        return target.start, width, count
    ends = sorted((target.anchor - target.start, target.stop - target.anchor))
    distance = ends[0] if ends[0] >= width else ends[1]
    width = distance / math.ceil(distance / width)
    before = math.ceil((target.anchor - target.start) / width * (1.0 - SLACK))
    after = math.ceil((target.stop - target.anchor) / width * (1.0 - SLACK))
    return target.anchor - before * width, width, before + after


def _places(degree: int) -> tuple[Array, Array]:
    """Return where in a cell, from -1/2 to 1/2, a polynomial is fitted (both ends included) and where it is checked."""
    nodes = -0.5 * np.cos(np.linspace(0.0, np.pi, degree + 1))
    return nodes, 0.5 * (nodes[:-1] + nodes[1:])
