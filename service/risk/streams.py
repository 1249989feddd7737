"""Random and Sobol draws by owner and block: the same numbers whoever computes them, and in whatever order.

Scenarios come in blocks. What a block draws depends on the seed, the owner of the draw and the number of the
block alone, so the number of threads, processes and machines changes nothing, and neither does another owner.
"""

from dataclasses import dataclass
from functools import lru_cache
from hashlib import sha256
from importlib import resources
from typing import Protocol

import numpy as np
from numpy.random import Generator, Philox
from numpy.typing import NDArray
from scipy import special

from service.errors import InvalidValue

Array = NDArray[np.float64]
Bits = NDArray[np.uint64]

BLOCK = 4096  # scenarios of one draw
SCRAMBLINGS = 8  # independent scramblings from whose spread the error of a Sobol figure is taken
MAX_DIMENSIONS = 21201  # dimensions for which there are direction numbers
MAX_EXPONENT = 32  # a scrambling has at most 2^32 points
DIGITS = 52  # binary digits of a Sobol coordinate; with half a unit added each is a binary64 number in (0, 1)
SMALLEST = 2.0**-54  # stands for a uniform that would be 0, once in 2^53 draws
ROWS = 32  # dimensions turned from digits to numbers at a time: about 1 MB


def stream(seed: int, owner: str, block: int) -> Generator:
    """Return the generator of one owner's draws in one block.

    Parameters
    ----------
    seed : int
        From 0 to 2^53 - 1.
    owner : str
        A stable text, e.g. ``factors`` or ``sub_portfolio/hull/2``; hashed into the key of the generator.
    block : int
        Number of the block, 0 or more; the highest word of the generator's counter, so that the blocks of one
        owner are 2^192 draws apart.

    References
    ----------
    J. K. Salmon et al., Parallel random numbers: as easy as 1, 2, 3, SC'11, doi:10.1145/2063384.2063405.
    """
    key = np.frombuffer(sha256(f"{seed} {owner}".encode()).digest()[:16], dtype="<u8")
    return Generator(Philox(key=key, counter=[0, 0, 0, block]))


class Scratch:
    """Arrays that one thread fills anew for each block; fresh ones would cost as much as what fills them.

    Two draws made one after the other ask for the same shapes in the same order and so get the same arrays:
    what a draw returned is overwritten by the next draw made with the same scratch.
    """

    __slots__ = ("_arrays", "_next")

    def __init__(self) -> None:
        self._arrays: list[Array] = []
        self._next = 0

    def rewind(self) -> None:
        """Give away the arrays from the first one again."""
        self._next = 0

    def empty(self, rows: int, columns: int) -> Array:
        """Return an array of shape (rows, columns) in C order with anything in it."""
        size = rows * columns
        if self._next == len(self._arrays):
            self._arrays.append(np.empty(size))
        elif self._arrays[self._next].size < size:
            self._arrays[self._next] = np.empty(size)
        array = self._arrays[self._next]
        self._next += 1
        return array[:size].reshape(rows, columns)


class Draw(Protocol):
    """What a copula draws from: n scenarios of as many numbers each as it asks for.

    All arrays have a row per number and a column per scenario, shape (rows, n), are C-contiguous and may be
    overwritten by whoever asked for them.
    """

    @property
    def scenarios(self) -> int:
        """Number n of scenarios."""

    @property
    def generator(self) -> Generator:
        """For draws whose number per scenario is not fixed, as rejection needs them: random for every method."""

    def normals(self, rows: int) -> Array:
        """Return independent standard normals."""

    def exponentials(self, rows: int) -> Array:
        """Return independent exponentials of mean 1, above 0."""

    def uniforms(self, rows: int) -> Array:
        """Return independent uniforms, above 0 and below 1."""

    def empty(self, rows: int) -> Array:
        """Return an array of shape (rows, n) with anything in it, from the scratch."""


class RandomDraw:
    """Draws of independent random numbers.

    Parameters
    ----------
    generator : Generator
        As returned by `stream`.
    scenarios : int
        Number n of scenarios.
    scratch : Scratch, optional
        Of the thread; without one all arrays are fresh.
    """

    __slots__ = ("_scratch", "generator", "scenarios")

    def __init__(self, generator: Generator, scenarios: int = BLOCK, scratch: Scratch | None = None) -> None:
        self.generator = generator
        self.scenarios = scenarios
        self._scratch = scratch or Scratch()
        self._scratch.rewind()

    def normals(self, rows: int) -> Array:
        """Return independent standard normals."""
        return self.generator.standard_normal(out=self.empty(rows))

    def exponentials(self, rows: int) -> Array:
        """Return independent exponentials of mean 1, above 0."""
        drawn = self.generator.standard_exponential(out=self.empty(rows))
        return np.maximum(drawn, SMALLEST, out=drawn)

    def uniforms(self, rows: int) -> Array:
        """Return independent uniforms, above 0 and below 1."""
        drawn = self.generator.random(out=self.empty(rows))
        return np.maximum(drawn, SMALLEST, out=drawn)

    def empty(self, rows: int) -> Array:
        """Return an array of shape (rows, n) with anything in it, from the scratch."""
        return self._scratch.empty(rows, self.scenarios)


@dataclass(frozen=True, slots=True)
class SobolSequence:
    """One scrambling of the first 2^exponent points of the Sobol sequence.

    Attributes
    ----------
    seed : int
    owner : str
    scrambling : int
        Number of the scrambling, 0 or more.
    exponent : int
    directions : ndarray of shape (dimensions, 32)
        Scrambled direction numbers.
    shift : ndarray of shape (dimensions,)
        Digital shift.

    Notes
    -----
    Direction numbers of Joe and Kuo (SIAM J. Scientific Computing 30, 2008, 2635-2654), scrambled by a random
    lower triangular matrix per dimension and a digital shift (Matousek, J. of Complexity 14, 1998, 527-556).
    Each point is uniform, and means over the points have the same variance as under nested uniform scrambling
    (Owen, ACM Trans. Modeling and Computer Simulation 13, 2003, 363-378). A longer sequence and one with more
    dimensions begin with the same numbers.

    In the natural order the points of a block differ from one another in the lowest digits of their number
    alone, so any block costs the same as any other.
    """

    seed: int
    owner: str
    scrambling: int
    exponent: int
    directions: Bits
    shift: Bits

    @classmethod
    def of(cls, seed: int, owner: str, scrambling: int, *, dimensions: int, exponent: int) -> "SobolSequence":
        """Return the scrambling of `owner` with this number.

        Raises
        ------
        InvalidValue
            If there are more dimensions or points than the sequence has; without a pointer.
        """
        if dimensions > MAX_DIMENSIONS:
            raise InvalidValue(
                f"Sobol points have at most {MAX_DIMENSIONS} dimensions, and {dimensions} are needed; "
                "the method random has no such limit"
            )
        if exponent > MAX_EXPONENT:
            raise InvalidValue(f"a scrambling of Sobol points has at most 2^{MAX_EXPONENT} of them")
        generator = stream(seed, f"{owner}/scrambling/{scrambling}", 0)
        drawn = generator.integers(0, 1 << DIGITS, size=(dimensions, MAX_EXPONENT + 1), dtype=np.uint64)
        directions = _scrambled(_direction_numbers(dimensions), drawn[:, :MAX_EXPONENT])
        return cls(seed, owner, scrambling, exponent, directions, drawn[:, MAX_EXPONENT])

    @property
    def block_size(self) -> int:
        """Number of points of a block."""
        return int(min(BLOCK, 1 << self.exponent))

    @property
    def blocks(self) -> int:
        """Number of blocks."""
        return (1 << self.exponent) // self.block_size

    def draw(self, block: int, scratch: Scratch | None = None) -> "SobolDraw":
        """Return the points of a block as a draw, dimension by dimension in the order in which they are asked for."""
        return SobolDraw(self, block, scratch)

    def points(self, block: int, first: int, out: Array) -> Array:
        """Fill `out` (rows, block_size) with the coordinates of the dimensions from `first` on, in (0, 1)."""
        for row in range(0, out.shape[0], ROWS):
            part = out[row : row + ROWS]
            digits = self._digits(block, slice(first + row, first + row + part.shape[0]))
            np.multiply(digits, 2.0**-DIGITS, out=part)
            part += 2.0 ** -(DIGITS + 1)
        return out

    def _digits(self, block: int, dimensions: slice) -> Bits:
        """Return the digits of the coordinates as whole numbers, shape (dimensions, block_size)."""
        directions = self.directions[dimensions]
        within = self.block_size.bit_length() - 1
        digits = np.empty((directions.shape[0], self.block_size), dtype=np.uint64)
        digits[:, 0] = self.shift[dimensions]
        for place in range(block.bit_length()):
            if block >> place & 1:
                digits[:, 0] ^= directions[:, within + place]
        for place in range(within):
            known = 1 << place
            np.bitwise_xor(digits[:, :known], directions[:, place, None], out=digits[:, known : 2 * known])
        return digits


class SobolDraw:
    """Draws whose uniforms are the coordinates of Sobol points, each asked for once; see `SobolSequence.draw`."""

    __slots__ = ("_block", "_next", "_scratch", "_sequence", "generator")

    def __init__(self, sequence: SobolSequence, block: int, scratch: Scratch | None = None) -> None:
        self._sequence = sequence
        self._block = block
        self._next = 0
        self._scratch = scratch or Scratch()
        self._scratch.rewind()
        beside = f"{sequence.owner}/scrambling/{sequence.scrambling}/beside"
        self.generator = stream(sequence.seed, beside, block)

    @property
    def scenarios(self) -> int:
        """Number n of scenarios."""
        return self._sequence.block_size

    def normals(self, rows: int) -> Array:
        """Return the normal quantiles of the next dimensions."""
        points = self.uniforms(rows)
        return np.asarray(special.ndtri(points, out=points))

    def exponentials(self, rows: int) -> Array:
        """Return the exponential quantiles of the next dimensions."""
        points = self.uniforms(rows)
        np.negative(points, out=points)
        np.log1p(points, out=points)
        return np.negative(points, out=points)

    def uniforms(self, rows: int) -> Array:
        """Return the coordinates of the next dimensions."""
        if self._next + rows > self._sequence.shift.size:
            raise IndexError(f"more than the {self._sequence.shift.size} dimensions declared were asked for")
        points = self._sequence.points(self._block, self._next, self.empty(rows))
        self._next += rows
        return points

    def empty(self, rows: int) -> Array:
        """Return an array of shape (rows, n) with anything in it, from the scratch."""
        return self._scratch.empty(rows, self.scenarios)


def _scrambled(directions: Bits, drawn: Bits) -> Bits:
    """Return the product of a random unit lower triangular matrix per dimension with its direction numbers.

    Column p of a matrix is a number whose digit p (from the highest) is 1, with random digits after it.
    """
    scrambled = np.zeros_like(directions)
    for p in range(MAX_EXPONENT):
        digit = np.uint64(DIGITS - 1 - p)
        one = np.uint64(1) << digit
        column = (drawn[:, p] & (one - np.uint64(1))) | one
        present = (directions[:, p:] >> digit) & np.uint64(1)  # a direction number j has the digits up to j alone
        scrambled[:, p:] ^= present * column[:, None]
    return scrambled


@lru_cache(maxsize=4)
def _direction_numbers(dimensions: int) -> Bits:
    """Return the direction numbers with their digits at the top of `DIGITS`, shape (dimensions, 32).

    Joe and Kuo's initial numbers and primitive polynomials are read from the file that SciPy carries, because
    importing ``scipy.stats`` for them would take two seconds. The recurrence is equation (2) of their paper.
    """
    file = resources.files("scipy") / "stats" / "_sobol_direction_numbers.npz"
    with file.open("rb") as opened, np.load(opened) as stored:
        initial = stored["vinit"][:dimensions].astype(np.uint64)
        polynomials = stored["poly"][:dimensions].astype(np.int64)
    numbers = np.zeros((dimensions, MAX_EXPONENT), dtype=np.uint64)
    degrees = np.array([int(polynomial).bit_length() - 1 for polynomial in polynomials])
    degrees[:1] = 0
    numbers[:1] = 1
    for degree in np.unique(degrees[1:]):
        of = degrees == degree
        m = np.zeros((np.count_nonzero(of), MAX_EXPONENT), dtype=np.uint64)
        m[:, :degree] = initial[of, :degree]
        for j in range(degree, MAX_EXPONENT):
            m[:, j] = m[:, j - degree]
            for i in range(1, degree + 1):
                present = (polynomials[of] >> (degree - i) & 1).astype(np.uint64)
                m[:, j] ^= (present * m[:, j - i]) << np.uint64(i)
        numbers[of] = m
    numbers <<= np.uint64(DIGITS - 1) - np.arange(MAX_EXPONENT, dtype=np.uint64)
    numbers.flags.writeable = False
    return numbers
