"""The distribution of the total loss as few numbers as a picture needs: bins, atoms, the tail, the exceedance curve."""

from collections.abc import Sequence
from dataclasses import dataclass
from math import ceil, floor, log10

import numpy as np
from numpy.typing import NDArray

Array = NDArray[np.float64]

TAIL = 0.05  # probability of the worst losses, which get bins of their own
CUT = 0.002  # probability at an end that the body may leave out where it would stretch the picture
STRETCH = 1.5  # an end is left out if it lies more than this many times as far from the median as the rest
TAIL_STRETCH = 2.5  # the body reaches at most this many times as far above the median as to the tail
FAR = 0.001  # likewise of the far end of the tail
FAR_STRETCH = 3.0
FEWEST_BINS, MOST_BINS = 20, 48
MOST_ATOMS = 40  # so many distinct losses or fewer are shown one by one
HEAVY_ATOM = 0.02  # probability of a single loss from which on it is shown beside the bins ...
OUTSTANDING = 10.0  # ... if it has so many times the probability of the usual loss
MOST_HEAVY = 5
MOST_POINTS = 400  # of the exceedance curve
WORST_POINTS = 100  # of them, the worst distinct losses, which are never thinned
LATTICE_SIZE = 100_000  # distinct losses up to which a common spacing is looked for
LATTICE_SLACK = 1e-6  # of the spacing


@dataclass(frozen=True, slots=True, kw_only=True)
class Histogram:
    """Probabilities of adjoining bins, each holding its lower edge.

    Attributes
    ----------
    edges : tuple of float, length k + 1
        In currency; both may be empty where every loss is an atom.
    masses : tuple of float, length k
        Probability of each bin, atoms left out.
    """

    edges: tuple[float, ...]
    masses: tuple[float, ...]


@dataclass(frozen=True, slots=True, kw_only=True)
class Distribution:
    """What the pictures show of the total loss.

    Attributes
    ----------
    scenarios : int
    weighted : bool
        Whether the scenarios have probabilities of their own.
    lowest, highest, mean : float
        In currency.
    body : Histogram
        Nearly the whole; what lies outside is in `below` and `above`.
    tail : Histogram
        Losses from `tail_from` on, in narrower bins; what lies outside is in `beyond`.
    below, above, beyond : float
        Probability left out.
    body_range, tail_range : tuple of (float, float)
        Losses that the two pictures span.
    tail_from : float
        The loss from which on the tail is shown: the quantile at 1 - `TAIL`.
    tail_probability : float
        P(L >= tail_from).
    atoms : tuple of (float, float)
        Losses, ascending, that are shown one by one, and their probabilities.
    losses, exceeding : tuple of float
        The exceedance curve: ascending losses x and P(L > x), which is 0 at the largest.
    """

    scenarios: int
    weighted: bool
    lowest: float
    highest: float
    mean: float
    body: Histogram
    tail: Histogram
    below: float
    above: float
    beyond: float
    body_range: tuple[float, float]
    tail_range: tuple[float, float]
    tail_from: float
    tail_probability: float
    atoms: tuple[tuple[float, float], ...]
    losses: tuple[float, ...]
    exceeding: tuple[float, ...]


@dataclass(frozen=True, slots=True)
class _Distinct:
    """Distinct losses (m,), ascending, P(L = x) and P(L > x)."""

    losses: Array
    masses: Array
    exceeding: Array

    def quantile(self, upper: float) -> float:
        """Return the smallest loss x with P(L > x) <= upper."""
        return float(self.losses[int(np.searchsorted(-self.exceeding, -upper - 1e-12, side="left"))])


def distribution_of(totals: Array, probabilities: Array | None = None, *, shown: Sequence[float] = ()) -> Distribution:
    """Return what the pictures show of a total loss.

    Skewed and heavy tails would squash everything else on one scale, so the body leaves out what is rare
    and far, and the tail has bins of its own. Losses that repeat are not hidden in bins: few distinct
    losses are listed one by one, and so is a single loss of great probability, such as no loss at all.
    Bins have round edges, or are a multiple of the spacing where all losses have one in common.

    Parameters
    ----------
    totals : ndarray of shape (n,)
        Finite losses, in currency.
    probabilities : ndarray of shape (n,) or None
        Summing to 1; None when all are 1/n.
    shown : sequence of float
        Losses that must lie within the pictures, such as the figures marked.

    Returns
    -------
    Distribution
    """
    distinct = _distinct(totals, probabilities)
    tail_from = distinct.quantile(TAIL)
    at_tail = int(np.searchsorted(distinct.losses, tail_from))
    lowest, highest = float(distinct.losses[0]), float(distinct.losses[-1])
    mean = float(distinct.losses @ distinct.masses)
    single = _singled_out(distinct.masses)
    rest = np.where(single, 0.0, distinct.masses)
    median, low, high = (distinct.quantile(level) for level in (0.5, 1.0 - CUT, CUT))
    near = [one for one in shown if one < tail_from]
    low = lowest if median - lowest <= STRETCH * (median - low) else low
    high = highest if highest - median <= STRETCH * (high - median) else high
    high = min(high, median + TAIL_STRETCH * (tail_from - median)) if tail_from > median else high
    span = (min(low, mean, *near), max(high, mean, tail_from))
    far = tail_from + FAR_STRETCH * (distinct.quantile(FAR) - tail_from)
    tail_span = (tail_from, max(min(highest, far), *shown, tail_from))
    spacing = _spacing(distinct.losses)
    step = _step(span, spacing, totals.size)
    body = _histogram(distinct.losses, rest, span, step, _first(span, spacing, step, lowest))
    step = _step(tail_span, spacing, totals.size * TAIL)
    first = tail_from if spacing is None else tail_from - 0.5 * spacing
    tail = _histogram(distinct.losses[at_tail:], rest[at_tail:], tail_span, step, first)
    points = _thinned(distinct.exceeding)
    below = distinct.losses < body.edges[0] if body.edges else False
    above = distinct.losses >= body.edges[-1] if body.edges else False
    beyond = distinct.losses >= tail.edges[-1] if tail.edges else False
    return Distribution(
        scenarios=totals.size,
        weighted=probabilities is not None,
        lowest=lowest + 0.0,
        highest=highest + 0.0,
        mean=mean + 0.0,
        body=body,
        tail=tail,
        below=float(rest.sum(where=below)),
        above=float(rest.sum(where=above)),
        beyond=float(rest.sum(where=beyond)),
        body_range=_range(body, span),
        tail_range=_range(tail, tail_span),
        tail_from=tail_from + 0.0,
        tail_probability=float(distinct.exceeding[at_tail] + distinct.masses[at_tail]),
        atoms=tuple(zip((distinct.losses[single] + 0.0).tolist(), distinct.masses[single].tolist(), strict=True)),
        losses=tuple((distinct.losses[points] + 0.0).tolist()),
        exceeding=tuple(distinct.exceeding[points].tolist()),
    )


def _distinct(totals: Array, probabilities: Array | None) -> _Distinct:
    """Return the distinct losses; those of probability zero do not exist."""
    if probabilities is None:
        losses, counts = np.unique(totals, return_counts=True)
        after = totals.size - np.cumsum(counts)
        return _Distinct(losses, counts / totals.size, after / totals.size)
    losses, inverse = np.unique(totals, return_inverse=True)
    masses = np.bincount(inverse, weights=probabilities, minlength=losses.size).astype(np.float64, copy=False)
    losses, masses = losses[masses > 0.0], masses[masses > 0.0]
    from_above = np.cumsum(masses[::-1])[::-1]  # summed from the worst on: the tail is not the rest of a difference
    return _Distinct(losses, masses, np.append(from_above[1:], 0.0))


def _singled_out(masses: Array) -> NDArray[np.bool_]:
    """Return which of the distinct losses are shown one by one."""
    if masses.size <= MOST_ATOMS:
        return np.ones(masses.size, dtype=bool)
    least = max(HEAVY_ATOM, OUTSTANDING * float(np.median(masses)))
    chosen = np.zeros(masses.size, dtype=bool)
    heaviest = np.argsort(-masses, kind="stable")[:MOST_HEAVY]
    chosen[heaviest[masses[heaviest] >= least]] = True
    return chosen


def _spacing(losses: Array) -> float | None:
    """Return the spacing of which all differences are multiples, if they are few enough to look."""
    if not 1 < losses.size <= LATTICE_SIZE:
        return None
    spacing = float(np.min(np.diff(losses)))
    steps = (losses - losses[0]) / spacing
    return spacing if np.all(np.abs(steps - np.rint(steps)) <= LATTICE_SLACK * np.maximum(steps, 1.0)) else None


def _histogram(losses: Array, masses: Array, span: tuple[float, float], step: float, first: float) -> Histogram:
    """Return bins of width `step` from `first` on over `span`; empty where there is nothing to put into bins."""
    if not masses.any() or not span[1] > span[0]:
        return Histogram(edges=(), masses=())
    count = floor((span[1] - first) / step) + 1  # a bin does not hold its upper edge
    edges = first + step * np.arange(count + 1)
    if not np.all(np.diff(edges) > 0.0):  # losses that differ only in their last digits
        edges = np.array(span)
    binned, _ = np.histogram(losses[losses < edges[-1]], bins=edges, weights=masses[losses < edges[-1]])
    return Histogram(edges=tuple((edges + 0.0).tolist()), masses=tuple(binned.tolist()))


def _step(span: tuple[float, float], spacing: float | None, scenarios: float) -> float:
    """Return the width of bins: more of them, and narrower ones, for more scenarios."""
    wanted = min(max(2.0 * max(scenarios, 1.0) ** (1.0 / 3.0), FEWEST_BINS), MOST_BINS)
    width = (span[1] - span[0]) / wanted
    if width <= 0.0:
        return 1.0
    return _round_up(width) if spacing is None else max(ceil(width / spacing), 1) * spacing


def _first(span: tuple[float, float], spacing: float | None, step: float, lowest: float) -> float:
    """Return the lowest edge: a multiple of the width, or halfway between two losses of a common spacing."""
    if spacing is None:
        return floor(span[0] / step) * step
    return lowest + spacing * (floor((span[0] - lowest) / spacing) - 0.5)


def _round_up(width: float) -> float:
    """Return the next of 1, 2, 5 times a power of ten."""
    power = 10.0 ** floor(log10(width))
    return next((digit * power for digit in (1.0, 2.0, 5.0) if digit * power >= width), 10.0 * power)


def _range(histogram: Histogram, span: tuple[float, float]) -> tuple[float, float]:
    """Return the losses that a picture of `histogram` spans."""
    if not histogram.edges:
        return span
    return (min(span[0], histogram.edges[0]) + 0.0, max(span[1], histogram.edges[-1]) + 0.0)


def _thinned(exceeding: Array) -> NDArray[np.intp]:
    """Return which points of the curve stand for all: evenly along log P(L > x), both ends and the worst kept."""
    count = exceeding.size
    if count <= MOST_POINTS:
        return np.arange(count)
    others = count - WORST_POINTS
    depth = -np.log(exceeding[:others])
    wanted = np.linspace(depth[0], depth[-1], MOST_POINTS - WORST_POINTS)
    kept = np.minimum(np.searchsorted(depth, wanted), others - 1)
    return np.unique(np.concatenate([[0], kept[1:], np.arange(others, count)]))
