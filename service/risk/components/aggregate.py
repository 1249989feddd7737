"""The law of a sum of claims, by FFT on stated grids with exponential tilting.

The sizes of the claims are put on a lattice and the generating function of their number is applied to
the discrete Fourier transform of their masses. Multiplying the masses by exp(-θj) beforehand, and the
result by exp(θj), shrinks what wraps around the end of the grid by exp(-θm) (Grübel and Hermesmeier,
Computation of compound distributions I: aliasing errors and exponential tilting, ASTIN Bulletin 29(2),
1999, 197-214).

Three lattice laws are used for claims of any law: rounded down and rounded up, whose sums lie below and
above the true one in every scenario, so that their quantiles bound the true ones without any assumption;
and one in between that keeps the mean of each claim, for the quantiles themselves (local moment matching:
Gerber, On the numerical evaluation of the distribution of aggregate claims and its stop-loss premiums,
Insurance: Mathematics and Economics 1, 1982, 13-18). A law that stands on a lattice itself is exact.

A heavy tail does not fit one grid: grids of ever wider cells follow each other, each used from where the
one before it ends, until less than `FARTHEST` of the probability is beyond.
"""

import math
from collections.abc import Callable, Sequence
from dataclasses import KW_ONLY, dataclass, replace
from fractions import Fraction
from functools import reduce

import numpy as np

from service.errors import NotDefined
from service.risk.components.contract import Array
from service.risk.components.frequencies import FrequencyLaw

SIZES = (1 << 14, 1 << 16, 1 << 18)  # cells of a grid, tried in turn
LATTICE_SIZES = (1 << 10, 1 << 12, 1 << 14, 1 << 16, 1 << 18, 1 << 20)
WIDTH = 2e-3  # relative width of the bounds at `JUDGED` below which a grid is fine enough
JUDGED = 0.995
STATED = (0.5, 0.9, 0.99, 0.995, 0.999, 0.9999)  # probabilities at which bounds are reported
TILT = 18.0  # θm: wrapped mass is divided by 7e7, rounding errors are multiplied by no more than exp(9) where used
USED = 2  # a grid is used up to its length over this
WIDER = 8.0  # cells of a grid over those of the grid before
MOST_GRIDS = 60
FARTHEST = 1e-12  # probability beyond the last grid point
SPREADS = 6.0  # standard deviations of the number of claims that the first grid reaches
RELATIVE = 4096  # nodes of the quantile table for each factor e of the amount
SLACK = 1e-12  # relative: an atom this near to a lattice point is on it
DIGITS = 12  # significant digits to which atoms are read when a lattice is looked for


@dataclass(frozen=True, slots=True)
class ClaimSizes:
    """The law of one claim Y >= 0 after its cover.

    Attributes
    ----------
    beyond : callable
        P(Y > y) for an array of y.
    quantile_above : callable
        The amount that a claim passes with a given probability.
    atoms : ndarray of shape (k,) or None
        All values it can take, where they are finitely many.
    most : float
        The largest claim there can be.
    """

    beyond: Callable[[Array], Array]
    quantile_above: Callable[[float], float]
    atoms: Array | None = None
    most: float = math.inf


@dataclass(frozen=True, slots=True)
class QuantileBound:
    """A quantile of the sum and what it lies between for certain, in currency."""

    probability: float
    lower: float
    value: float
    upper: float


@dataclass(frozen=True, slots=True, eq=False)
class AggregateLaw:
    """The law of a sum of claims, ready to be read at uniforms.

    Attributes
    ----------
    probabilities, amounts : ndarray of shape (k,)
        Nodes of the distribution function, both not decreasing, amounts in currency.
    stepped : bool
        Whether the law stands on the nodes; else it is linear between them.
    cell : float
        Width of a cell of the first grid, in currency.
    cells : int
        Cells of a grid.
    grids : int
    bounds : tuple of QuantileBound
        At the probabilities `STATED`.
    """

    probabilities: Array
    amounts: Array
    _: KW_ONLY
    stepped: bool
    cell: float
    cells: int
    grids: int = 1
    bounds: tuple[QuantileBound, ...] = ()

    def quantile(self, uniforms: Array) -> Array:
        """Return inf{x : F(x) >= u} for each u, shape (n,); beyond 1 - `FARTHEST` the last node."""
        if self.stepped:
            places = np.searchsorted(self.probabilities, uniforms - SLACK)
            return self.amounts[np.minimum(places, self.amounts.size - 1)]
        return np.interp(uniforms, self.probabilities, self.amounts)

    @property
    def relative_width(self) -> float:
        """Largest width of the stated bounds relative to the quantile between them."""
        return max((_width(bound) for bound in self.bounds), default=0.0)

    @property
    def statement(self) -> str:
        """How the quantiles of the sum are computed and how exact they are, to be read behind its name."""
        if self.stepped:
            return f"are computed exactly, on {self.cells:,} multiples of {self.cell:.6g}"
        known = [bound for bound in self.bounds if math.isfinite(bound.upper)]
        worst = max(map(_width, known))
        return (
            f"are computed on a grid: no quantile up to level {known[-1].probability:g} is off by more than "
            f"{100.0 * worst:.2g} % (grids: {self.grids}, cells of each: {self.cells:,}, first width: {self.cell:.6g})"
        )


def _width(bound: QuantileBound) -> float:
    return (bound.upper - bound.lower) / bound.value if bound.value > 0.0 else 0.0


def aggregate_law(frequency: FrequencyLaw, sizes: ClaimSizes) -> AggregateLaw:
    """Return the law of the sum of `frequency` claims of `sizes`.

    Raises
    ------
    NotDefined
        If `MOST_GRIDS` grids do not hold the tail.
    """
    positive = float(sizes.beyond(np.zeros(1))[0])
    if positive <= 0.0:
        return AggregateLaw(np.ones(1), np.zeros(1), stepped=True, cell=0.0, cells=1)
    if sizes.atoms is not None:
        exact = _on_lattice(frequency, sizes, sizes.atoms)
        if exact is not None:
            return exact
    typical = sizes.quantile_above(0.1 * positive)
    mean = frequency.expected * positive
    spread = math.sqrt(frequency.spread * positive**2 + mean * (1.0 - positive))
    reach = typical * (mean + SPREADS * spread + SPREADS)
    if math.isfinite(frequency.most * sizes.most):
        reach = min(reach, frequency.most * sizes.most * (1.0 + 1.0 / SIZES[0]))
    for size in SIZES:
        law = _on_grids(frequency, sizes, USED * reach / size, size)
        judged = next(bound for bound in law.bounds if bound.probability == JUDGED)
        if _width(judged) <= WIDTH:
            break
    return law


def sum_masses(frequency: FrequencyLaw, masses: Array) -> Array:
    """Return the masses of the sum of `frequency` lattice claims with masses (m,), shape (m,).

    Claims beyond the grid may be missing from `masses`: they take no part in sums within it.
    """
    size = masses.size
    falling = np.exp((-TILT / size) * np.arange(size))
    transform = np.fft.rfft(masses * falling)
    # E[z^N] of claims with a defect: the transform less 1, where the defect counts as a claim that is never small
    sums = np.fft.irfft(frequency.generating(transform - 1.0), n=size)
    return np.asarray(sums / falling)


def _on_lattice(frequency: FrequencyLaw, sizes: ClaimSizes, atoms: Array) -> AggregateLaw | None:
    """Return the exact law of sums of claims that stand on multiples of one number; None if grids are too short."""
    cell = lattice_cell(atoms)
    if cell is None:
        return None
    for size in LATTICE_SIZES:
        if float(np.max(atoms)) / cell >= size:
            continue
        points = cell * np.arange(size, dtype=np.float64)
        beyond = sizes.beyond(points * (1.0 + SLACK))
        masses = -np.diff(beyond, prepend=1.0)
        cumulated = _cumulated(sum_masses(frequency, masses))
        if 1.0 - cumulated[size // USED] > FARTHEST and size // USED * cell < frequency.most * sizes.most:
            continue
        kept = min(int(np.searchsorted(cumulated, 1.0 - FARTHEST)) + 1, size)
        cumulated, points = cumulated[:kept], points[:kept]
        law = AggregateLaw(cumulated, points, stepped=True, cell=cell, cells=size)
        values = law.quantile(np.array(STATED))
        bounds = tuple(QuantileBound(p, float(x), float(x), float(x)) for p, x in zip(STATED, values, strict=True))
        return replace(law, bounds=bounds)
    return None


def lattice_cell(atoms: Array) -> float | None:
    """Return the largest number of which all atoms are multiples, reading 12 digits; None if they are too many."""
    if not np.any(atoms > 0.0):
        return None
    exact = [Fraction(f"{atom:.{DIGITS}g}") for atom in atoms.tolist() if atom > 0.0]
    common = reduce(_common_divisor, exact)
    return float(common) if max(exact) / common < LATTICE_SIZES[-1] else None


def _common_divisor(first: Fraction, second: Fraction) -> Fraction:
    denominator = math.lcm(first.denominator, second.denominator)
    return Fraction(math.gcd(int(first * denominator), int(second * denominator)), denominator)


@dataclass(frozen=True, slots=True, eq=False)
class _Grid:
    """Distribution functions of the sum on one grid: of claims in between and, if asked, rounded down and up."""

    cell: float
    central: Array
    lower: Array | None
    upper: Array | None

    @property
    def used(self) -> int:
        return self.central.size // USED

    @classmethod
    def of(cls, frequency: FrequencyLaw, sizes: ClaimSizes, cell: float, size: int, *, bounded: bool) -> "_Grid":
        points = cell * np.arange(size + 1, dtype=np.float64)
        reached = sizes.beyond(points * (1.0 - SLACK))  # P(Y >= jh)
        reached[0] = 1.0
        passed = sizes.beyond(points[:-1] * (1.0 + SLACK))  # P(Y > jh)
        middle = sizes.beyond(points[:-1] + 0.5 * cell)
        mean_beyond = (passed + 4.0 * middle + reached[1:]) / 6.0  # mean of P(Y > y) over a cell, by Simpson's rule
        central = _cumulated(sum_masses(frequency, -np.diff(mean_beyond, prepend=1.0)))
        if not bounded:
            return cls(cell, central, None, None)
        lower, upper = -np.diff(reached), -np.diff(passed, prepend=1.0)
        ends = [_cumulated(sum_masses(frequency, masses)) for masses in (lower, upper)]
        return cls(cell, central, *ends)


def _cumulated(masses: Array) -> Array:
    """Return the distribution function, kept within [0, 1] and from falling by rounding errors."""
    return np.asarray(np.clip(np.maximum.accumulate(np.cumsum(masses)), 0.0, 1.0))


def _on_grids(frequency: FrequencyLaw, sizes: ClaimSizes, cell: float, size: int) -> AggregateLaw:
    grids: list[_Grid] = []
    most, bounded = frequency.most * sizes.most, True
    for _ in range(MOST_GRIDS):
        grid = _Grid.of(frequency, sizes, cell, size, bounded=bounded)
        grids.append(grid)
        bounded = grid.upper is not None and bool(grid.upper[grid.used] < STATED[-1])
        if 1.0 - grid.central[grid.used] <= FARTHEST or grid.used * cell >= most:
            break
        cell *= WIDER
    else:
        detail = (
            f"the sum of claims passes {grids[-1].used * grids[-1].cell:.3g} with a probability of more than "
            f"{FARTHEST:g}: its tail is too heavy for a driver; limit the claims or leave the driver out"
        )
        raise NotDefined(detail)
    none = float(frequency.generating(np.array([-float(sizes.beyond(np.zeros(1))[0])], dtype=complex))[0].real)
    amounts, probabilities = [np.zeros(2)], [np.array([0.0, none])]
    reached = 0.0
    for grid in grids:
        places = _thinned(reached / grid.cell, grid.used)
        # the central law holds the mean of F over each cell: F at its middle, but for terms of second order
        amounts.append(np.asarray((places + 0.5) * grid.cell, dtype=np.float64))
        probabilities.append(grid.central[places])
        reached = grid.used * grid.cell
    joined = np.minimum(np.maximum.accumulate(np.concatenate(probabilities)), 1.0)
    nodes = np.concatenate(amounts)
    law = AggregateLaw(joined, nodes, stepped=False, cell=grids[0].cell, cells=size, grids=len(grids))
    bounds = tuple(_bound(law, grids, probability) for probability in STATED)
    return replace(law, bounds=bounds)


def _thinned(first: float, used: int) -> np.ndarray[tuple[int], np.dtype[np.intp]]:
    """Return lattice points from `first` to `used`: all of the first `RELATIVE`, then in geometric steps."""
    near = np.arange(min(RELATIVE, used) + 1)
    far = np.geomspace(RELATIVE, max(used, RELATIVE), 1 + math.ceil(RELATIVE * math.log(max(used / RELATIVE, 1.0))))
    places = np.unique(np.concatenate([near, np.rint(far).astype(np.intp)]))
    return places[(places >= first) & (places <= used)]


def _bound(law: AggregateLaw, grids: Sequence[_Grid], probability: float) -> QuantileBound:
    """Return the quantiles of the laws below and above, each from the first grid that reaches it."""
    value = float(law.quantile(np.array([probability]))[0])
    ends = []
    for name in ("lower", "upper"):
        functions = ((grid, getattr(grid, name)) for grid in grids if grid.upper is not None)
        places = ((grid, int(np.searchsorted(function, probability - SLACK))) for grid, function in functions)
        ends.append(next((place * grid.cell for grid, place in places if place <= grid.used), math.inf))
    return QuantileBound(probability, min(ends[0], value), value, max(ends[1], value))
