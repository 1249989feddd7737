"""Tables from scores to values, and how the table of a marginal is put together."""

import math
from collections.abc import Callable
from dataclasses import dataclass, replace
from functools import lru_cache

import numpy as np
from scipy import special

from service.risk.score_tables.cells import CUBIC, NEGLIGIBLE, QUINTIC, Cells, Target, fitted
from service.risk.score_tables.description import Affine, Array, Piece, Tabulated
from service.risk.scores import Law, NormalScores, StudentScores

Exact = Callable[[Array], Array]

CACHED = 256  # tables kept; each takes at most 200 kB ...
MOST_CACHED_ATOMS = 4096  # ... because large empirical laws, quickly made, are not kept
CHUNK = 8192  # scores at a time, so that the scratch stays in the cache
TOLERANCE = 1e-10  # see `ScoreTable.of`
FIRST_SHARE, SECOND_SHARE = 0.3, 0.5  # of the tolerance, in the two stages in which a table is made
ROUNDING = 16.0 * float(np.finfo(np.float64).eps)  # relative error that no table can avoid
WIDE = 100.0  # ratio of the largest to the smallest value from which on logarithms are fitted first
FARTHEST_SCORE = 8.4  # normal scores beyond have a probability of 5e-17
FARTHEST_LOGIT = 38.0
FARTHEST_STUDENT = 1e-9  # probability beyond which t scores are left to the exact function
STUDENT_RADIUS = 8.0  # t score half of the way to infinity, over the square root of the degrees of freedom
HEAVY_DF, HEAVY_RADIUS = 2.5, 64.0  # up to these degrees of freedom it is this, for its tails reach so far
STUDENT_REACH = 1.0 - 1e-4  # the way to infinity is tabulated at most so far
FARTHEST_MARK = 1.0 - 1e-9
FARTHEST = 1e100  # size of a score
SMALLEST = float(np.finfo(np.float64).tiny)
ROUND = 2.0**52  # a number from 0 to 2^52 added to it leaves the nearest integer in the last bits
ROUND_BITS = int(np.array(ROUND).view(np.int64))
SAMPLE = 257  # values from which the range of a law is told
CELLS_PER_STEP, FEWEST_STEP_CELLS, MOST_STEP_CELLS = 8, 64, 1 << 15


class Scratch:
    """Arrays that one thread may use again and again instead of fresh ones."""

    __slots__ = ("cell", "flag", "other", "part", "position", "value")

    def __init__(self) -> None:
        self.position, self.value, self.part = np.empty(CHUNK), np.empty(CHUNK), np.empty(CHUNK)
        self.cell, self.other = np.empty(CHUNK, dtype=np.int64), np.empty(CHUNK, dtype=np.int64)
        self.flag = np.empty(CHUNK, dtype=np.bool_)


class ScoreTable:
    """The values of one marginal at scores of one law."""

    __slots__ = ()

    @staticmethod
    def of(marginal: Tabulated, law: Law) -> "ScoreTable":
        """Return the table, made at the first call; any thread may use it.

        Notes
        -----
        The error of a value is at most 1e-10 times its distance from the median plus the width of the
        middle half of the law, and at most 1e-10 times the value where values are positive throughout.
        """
        atoms = sum(piece.atoms.values.size for piece in marginal.pieces if piece.atoms is not None)
        return _cached(marginal, law) if atoms <= MOST_CACHED_ATOMS else _made(marginal, law)

    def values(self, scores: Array, *, out: Array | None = None, scratch: Scratch | None = None) -> Array:
        """Return the values at scores, which must be finite.

        Parameters
        ----------
        scores : ndarray
            Of any shape.
        out : ndarray of the same shape, optional
            Written into and returned; it may be `scores`.
        scratch : Scratch, optional
            Of this thread.
        """
        out = np.empty(scores.shape) if out is None else out
        scratch = scratch or Scratch()
        if scores.ndim == 1:
            for start in range(0, scores.size, CHUNK):
                self._fill(scores[start : start + CHUNK], out[start : start + CHUNK], scratch)
        elif scores.flags.c_contiguous and out.flags.c_contiguous:
            self.values(scores.reshape(-1), out=out.reshape(-1), scratch=scratch)
        elif scores.flags.f_contiguous and out.flags.f_contiguous:
            self.values(scores.T, out=out.T, scratch=scratch)
        else:
            for one, place in zip(scores, out, strict=True):
                self.values(one, out=place, scratch=scratch)
        return out

    def _fill(self, scores: Array, out: Array, scratch: Scratch) -> None:
        """Write the values at no more than `CHUNK` scores (n,) into `out` (n,), which may be `scores`."""
        raise NotImplementedError


class _ConstantTable(ScoreTable):
    """One value."""

    __slots__ = ("_value",)

    def __init__(self, value: float) -> None:
        self._value = value

    def _fill(self, scores: Array, out: Array, scratch: Scratch) -> None:  # noqa: ARG002  # as all tables
        out.fill(self._value)


class _AffineTable(ScoreTable):
    """A line, or its exponential."""

    __slots__ = ("_affine",)

    def __init__(self, affine: Affine) -> None:
        self._affine = affine

    def _fill(self, scores: Array, out: Array, scratch: Scratch) -> None:  # noqa: ARG002  # as all tables
        np.multiply(scores, self._affine.scale, out=out)
        np.add(out, self._affine.location, out=out)
        if self._affine.exponential:
            np.exp(out, out=out)


@dataclass(frozen=True, slots=True)
class _Axis:
    """What is divided into cells: the score s itself or, for a law with heavy tails, s/(radius + |s|).

    Attributes
    ----------
    radius : float
        0 for the score itself.
    reach : float
        Marks beyond it on either side are not tabulated.
    """

    radius: float
    reach: float

    @classmethod
    def of(cls, law: Law) -> "_Axis":
        """Return the axis for scores of this law."""
        if isinstance(law, StudentScores):
            radius = STUDENT_RADIUS * math.sqrt(law.df) if law.df > HEAVY_DF else HEAVY_RADIUS
            farthest = abs(float(special.stdtrit(law.df, FARTHEST_STUDENT)))
            return cls(radius, min(1.0 - radius / (radius + farthest), STUDENT_REACH))
        return cls(0.0, FARTHEST_SCORE if isinstance(law, NormalScores) else FARTHEST_LOGIT)

    def marks(self, scores: Array, out: Array) -> Array:
        """Return the marks of scores, if need be in `out`, another array."""
        if self.radius == 0.0:
            return scores
        np.abs(scores, out=out)
        np.add(out, self.radius, out=out)
        return np.divide(scores, out, out=out)

    def scores(self, marks: Array) -> Array:
        """Return the scores of marks."""
        if self.radius == 0.0:
            return marks
        marks = np.clip(marks, -FARTHEST_MARK, FARTHEST_MARK)
        return self.radius * marks / (1.0 - np.abs(marks))


@dataclass(frozen=True, slots=True)
class _Grid:
    """Equal cells on an axis, numbered from 1; 0 and the last number stand for what is outside."""

    axis: _Axis
    start: float
    width: float

    def locate(self, scores: Array, scratch: Scratch) -> tuple[Array, "np.ndarray[tuple[int], np.dtype[np.int64]]"]:
        """Return the places in their cells, from -1/2 to 1/2, and the numbers of the cells, of scores (n,).

        Both are in the scratch. Numbers outside are those of no cell and must be clipped. They do not
        decrease with the score, bit by bit.
        """
        count = scores.size
        position, nearest, cell = scratch.position[:count], scratch.value[:count], scratch.cell[:count]
        np.multiply(self.axis.marks(scores, position), 1.0 / self.width, out=position)
        np.add(position, 0.5 - self.start / self.width, out=position)
        np.add(position, ROUND, out=nearest)
        np.subtract(nearest.view(np.int64), ROUND_BITS, out=cell)
        np.subtract(nearest, ROUND, out=nearest)
        np.subtract(position, nearest, out=position)
        return position, cell


class _SmoothTable(ScoreTable):
    """Cells; where they have no value, the exact function; and nothing outside the support."""

    __slots__ = ("_coefficients", "_exact", "_exponential", "_grid", "_support")

    def __init__(self, cells: Cells, axis: _Axis, exact: Exact, support: tuple[float, float]) -> None:
        self._grid = _Grid(axis, cells.start, cells.width)
        self._coefficients = tuple(cells.coefficients[::-1])
        self._exponential = cells.exponential
        self._exact = exact
        self._support = support if support[0] not in (0.0, -math.inf) or support[1] != math.inf else None

    def _fill(self, scores: Array, out: Array, scratch: Scratch) -> None:
        place, cell = self._grid.locate(scores, scratch)
        value, part = scratch.value[: scores.size], scratch.part[: scores.size]
        self._coefficients[0].take(cell, out=value, mode="clip")
        missing = np.flatnonzero(np.isnan(value)) if math.isnan(value.min()) else None
        exact = None if missing is None else self._exact(scores[missing])
        for row in self._coefficients[1:-1]:
            np.multiply(value, place, out=value)
            row.take(cell, out=part, mode="clip")
            np.add(value, part, out=value)
        np.multiply(value, place, out=value)
        self._coefficients[-1].take(cell, out=part, mode="clip")
        np.add(value, part, out=out)
        if self._exponential:
            np.exp(out, out=out)
        if missing is not None:
            out[missing] = exact
        if self._support is not None:
            np.clip(out, *self._support, out=out)


class _StepTable(ScoreTable):
    """Values between breaks: the cell tells the first break that can matter, halving finds which does."""

    __slots__ = ("_breaks", "_first", "_grid", "_steps", "_values")

    def __init__(self, breaks: Array, values: Array, axis: _Axis) -> None:
        reach = np.clip(axis.marks(breaks, np.empty(breaks.size)), -axis.reach, axis.reach)
        cells = min(max(CELLS_PER_STEP * values.size, FEWEST_STEP_CELLS), MOST_STEP_CELLS)
        width = float(reach[-1] - reach[0]) / (cells - 2) or 1.0
        self._grid = _Grid(axis, float(reach[0]) - width, width)
        scratch = Scratch()
        starts = range(0, breaks.size, CHUNK)
        places = [self._grid.locate(breaks[start : start + CHUNK], scratch)[1].copy() for start in starts]
        inside = np.clip(np.concatenate(places), 0, cells + 1)
        held = np.bincount(inside, minlength=cells + 2)
        self._first = np.cumsum(held) - held
        most = int(held.max())
        self._steps = tuple(1 << power for power in reversed(range(most.bit_length())))
        self._breaks = np.append(breaks, math.inf)
        self._values = values

    def _fill(self, scores: Array, out: Array, scratch: Scratch) -> None:
        count = scores.size
        _, cell = self._grid.locate(scores, scratch)
        part, flag, other = scratch.part[:count], scratch.flag[:count], scratch.other[:count]
        place = scratch.value.view(np.int64)[:count]
        self._first.take(cell, out=place, mode="clip")
        for step in self._steps:
            np.add(place, step - 1, out=other)
            self._breaks.take(other, out=part, mode="clip")
            np.less(part, scores, out=flag)
            np.multiply(flag, step, out=other)
            np.add(place, other, out=place)
        self._values.take(place, out=part, mode="clip")
        np.copyto(out, part)


class _PieceTable(ScoreTable):
    """Tables side by side, each for the scores up to an end."""

    __slots__ = ("_ends", "_tables")

    def __init__(self, tables: list[ScoreTable], ends: list[float]) -> None:
        self._tables, self._ends = tables, ends

    def _fill(self, scores: Array, out: Array, scratch: Scratch) -> None:
        beyond = [np.flatnonzero(scores > end) for end in self._ends]
        later = [scores[chosen] for chosen in beyond]
        self._tables[0].values(np.minimum(scores, self._ends[0]), out=out, scratch=scratch)
        for table, chosen, own in zip(self._tables[1:], beyond, later, strict=True):
            out[chosen] = table.values(own, scratch=scratch)


@lru_cache(maxsize=CACHED)
def _cached(marginal: Tabulated, law: Law) -> ScoreTable:
    return _made(marginal, law)


def _made(marginal: Tabulated, law: Law) -> ScoreTable:
    affine = marginal.affine
    if affine is not None and affine.law == law:
        return _AffineTable(affine)
    axis = _Axis.of(law)
    tables: list[ScoreTable] = []
    ends: list[float] = []
    start = Piece(0.0, 1.0)
    with np.errstate(all="ignore"):
        for piece in marginal.pieces:
            if piece.atoms is None:
                tables.append(_smooth(marginal, law, axis, start, piece))
            elif piece.atoms.values.size == 1:
                tables.append(_ConstantTable(float(piece.atoms.values[0])))
            else:
                breaks = _scores(law, piece.atoms.lower[:-1], piece.atoms.upper[:-1])
                tables.append(_StepTable(breaks, piece.atoms.values, axis))
            ends.append(float(_scores(law, np.array(piece.lower), np.array(piece.upper))))
            start = piece
    return tables[0] if len(tables) == 1 else _PieceTable(tables, ends[:-1])


def _smooth(marginal: Tabulated, law: Law, axis: _Axis, start: Piece, stop: Piece) -> ScoreTable:
    """Return the table of a piece from the end of `start` to the end of `stop`."""
    lower_range = max(float(np.nextafter(start.lower, 1.0)), SMALLEST), stop.lower
    upper_range = max(stop.upper, SMALLEST), float(np.nextafter(start.upper, 0.0))

    def exact(scores: Array) -> Array:
        return marginal.quantile(np.clip(law.lower(scores), *lower_range), np.clip(law.upper(scores), *upper_range))

    ends = _scores(law, np.array([start.lower, stop.lower]), np.array([start.upper, stop.upper]))
    begin, end = np.clip(axis.marks(ends, np.empty(2)), -axis.reach, axis.reach).tolist()
    target = Target(
        function=lambda marks: exact(axis.scores(marks)),
        allowed=_allowed(marginal, FIRST_SHARE * TOLERANCE),
        probability=lambda marks: _between(law, axis.scores(marks)),
        start=begin,
        stop=end,
        anchor=0.0 if axis.radius else None,
    )
    sample = target.function(np.linspace(begin, end, SAMPLE))
    exponential = bool(sample.min() >= 0.0 and sample.max() > WIDE * sample.min())
    cells, missing = fitted(target, QUINTIC, exponential=exponential)
    # The first fit needs few values of the function, but perhaps an exponential or many terms at each use;
    # from then on it stands for the function, and the cheapest fit to it is looked for.
    target = replace(target, function=cells.at, allowed=_allowed(marginal, SECOND_SHARE * TOLERANCE))
    for degree in (CUBIC, QUINTIC) if exponential else (CUBIC,):
        again, still_missing = fitted(target, degree, exponential=False)
        if still_missing <= missing + NEGLIGIBLE:
            cells = again
            break
    return _SmoothTable(cells, axis, exact, marginal.support)


def _allowed(marginal: Tabulated, share: float) -> Exact:
    """Return the function from values to the errors that they may have; see `ScoreTable.of`."""
    quarters = np.array([0.25, 0.5, 0.75])
    low, median, high = marginal.quantile(quarters, quarters[::-1].copy()).tolist()
    positive = marginal.support[0] >= 0.0

    def allowed(values: Array) -> Array:
        size = np.abs(values)
        unit = np.abs(values - median) + (high - low)
        return share * (np.minimum(unit, size) if positive else unit) + ROUNDING * size + SMALLEST

    return allowed


def _between(law: Law, scores: Array) -> Array:
    """Return the probabilities between ascending scores (n,), shape (n - 1,)."""
    lower, upper = law.lower(scores), law.upper(scores)
    return np.where(lower[1:] < 0.5, np.diff(lower), -np.diff(upper))  # noqa: PLR2004  # the median


def _scores(law: Law, lower: Array, upper: Array) -> Array:
    """Return the scores with probabilities `lower` below and `upper` beyond."""
    near = np.minimum(lower, upper)
    if isinstance(law, NormalScores):
        size = special.ndtri(near)
    elif isinstance(law, StudentScores):
        size = special.stdtrit(law.df, near)
    else:
        size = special.logit(near)
    return np.copysign(np.minimum(np.abs(size), FARTHEST), lower - upper)
