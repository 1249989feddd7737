"""Laws of several losses whose figures are known exactly: what intervals are held against."""

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy import integrate, special

Array = NDArray[np.float64]

MAX_ERROR = 1e-10  # of the integrals, relative


@dataclass(frozen=True, slots=True)
class Truth:
    """The figures of a law at one level; those of the total are the sums of the contributions.

    Attributes
    ----------
    value_at_risk, expected_shortfall : ndarray of shape (d,)
        Euler contributions.
    mean, sd : float
        Of the total.
    """

    value_at_risk: Array
    expected_shortfall: Array
    mean: float
    sd: float


@dataclass(frozen=True, slots=True)
class Law:
    """A law of d losses.

    Attributes
    ----------
    name : str
    draw : callable
        From a generator and a number n to losses of shape (n, d).
    truth : callable
        From a level to the figures.
    discrete : bool
        Whether a quantile is an atom, so that its interval covers more than it says.
    """

    name: str
    draw: Callable[[np.random.Generator, int], Array]
    truth: Callable[[float], Truth]
    discrete: bool = False


MEANS = np.array([1.0, 2.0, 0.5])
COVARIANCE = np.array([[1.0, 0.4, 0.0], [0.4, 2.0, -0.3], [0.0, -0.3, 0.5]])
ROOT = np.linalg.cholesky(COVARIANCE)
SCALE = float(np.sqrt(COVARIANCE.sum()))
FREEDOM = 5.0


def _normals(rng: np.random.Generator, scenarios: int) -> Array:
    return MEANS + rng.standard_normal((scenarios, 3)) @ ROOT.T


def _elliptical(quantile: float, shortfall: float, sd: float) -> Truth:
    """Return the figures of an elliptical law from those of its standard member: contributions go with covariance."""
    parts = COVARIANCE.sum(axis=1) / SCALE
    return Truth(MEANS + quantile * parts, MEANS + shortfall * parts, float(MEANS.sum()), sd * SCALE)


def _normal_truth(level: float) -> Truth:
    quantile = float(special.ndtri(level))
    return _elliptical(quantile, _density(quantile) / (1.0 - level), 1.0)


def _density(x: float) -> float:
    return float(np.exp(-x * x / 2.0) / np.sqrt(2.0 * np.pi))


def _students(rng: np.random.Generator, scenarios: int) -> Array:
    mixing = np.sqrt(FREEDOM / rng.chisquare(FREEDOM, (scenarios, 1)))
    return MEANS + mixing * (rng.standard_normal((scenarios, 3)) @ ROOT.T)


def _student_truth(level: float) -> Truth:
    t = float(special.stdtrit(FREEDOM, level))
    constant = special.gamma((FREEDOM + 1.0) / 2.0) / (np.sqrt(FREEDOM * np.pi) * special.gamma(FREEDOM / 2.0))
    density = constant * (1.0 + t * t / FREEDOM) ** (-(FREEDOM + 1.0) / 2.0)
    shortfall = density * (FREEDOM + t * t) / (FREEDOM - 1.0) / (1.0 - level)
    return _elliptical(t, float(shortfall), np.sqrt(FREEDOM / (FREEDOM - 2.0)))


SIGMAS = (0.8, 0.5)
CORRELATION = 0.3


def _lognormals(rng: np.random.Generator, scenarios: int) -> Array:
    first, other = rng.standard_normal((2, scenarios))
    second = CORRELATION * first + np.sqrt(1.0 - CORRELATION**2) * other
    return np.column_stack([np.exp(SIGMAS[0] * first), np.exp(SIGMAS[1] * second)])


def _lognormal_truth(level: float) -> Truth:
    """Return the figures of two correlated lognormals by integrals along the first score.

    Given that score the second loss is lognormal, so P(S > s), the density of S and both partial means are
    integrals of elementary functions.
    """
    free = np.sqrt(1.0 - CORRELATION**2)
    end = 9.0  # normal scores; beyond is less than 1e-18

    def along(function: Callable[[float, float, float], float], s: float) -> float:
        def integrand(z: float) -> float:
            first = np.exp(SIGMAS[0] * z)
            left = s - first
            score = (np.log(left) / SIGMAS[1] - CORRELATION * z) / free if left > 0.0 else -np.inf
            return _density(z) * function(z, first, score)

        top = min(end, np.log(s) / SIGMAS[0])
        parts = [(-end, 0.0), (0.0, top), (top, end)]
        pieces = [integrate.quad(integrand, *part, epsabs=0.0, epsrel=MAX_ERROR, limit=500)[0] for part in parts]
        return float(sum(pieces))

    def beyond(s: float) -> float:
        return along(lambda _z, _first, score: special.ndtr(-score), s)

    low, high = 0.1, 100.0
    for _ in range(100):
        middle = (low + high) / 2.0
        low, high = (middle, high) if beyond(middle) > 1.0 - level else (low, middle)
    q = (low + high) / 2.0

    def density_at(_z: float, first: float, score: float) -> float:
        return 0.0 if first >= q else _density(score) / (free * SIGMAS[1] * (q - first))

    mass = along(density_at, q)
    first_at = along(lambda z, first, score: first * density_at(z, first, score), q) / mass
    first_beyond = along(lambda _z, first, score: first * special.ndtr(-score), q)
    shift = float(free * SIGMAS[1])

    def second_beyond(z: float, _first: float, score: float) -> float:
        return float(np.exp(SIGMAS[1] * CORRELATION * z + shift**2 / 2.0) * special.ndtr(shift - score))

    shortfall = np.array([first_beyond, along(second_beyond, q)]) / (1.0 - level)
    sigmas = np.array(SIGMAS)
    moments = np.exp(sigmas**2 / 2.0)
    crossed = np.exp(np.outer(sigmas, sigmas) * np.array([[1.0, CORRELATION], [CORRELATION, 1.0]])) - 1.0
    variance = float(moments @ crossed @ moments)
    return Truth(np.array([first_at, q - first_at]), shortfall, float(moments.sum()), np.sqrt(variance))


STEPS = np.array([0.3, 0.6, 0.9])


def _comonotone(rng: np.random.Generator, scenarios: int) -> Array:
    return np.exp(STEPS * rng.standard_normal((scenarios, 1)))


def _comonotone_truth(level: float) -> Truth:
    z = float(special.ndtri(level))
    means = np.exp(STEPS**2 / 2.0)
    beyond = means * special.ndtr(STEPS - z) / (1.0 - level)
    variance = means @ (np.exp(np.outer(STEPS, STEPS)) - 1.0) @ means
    return Truth(np.exp(STEPS * z), beyond, float(means.sum()), float(np.sqrt(variance)))


SHAPES = np.array([0.1, 0.4, 1.5])


def _gammas(rng: np.random.Generator, scenarios: int) -> Array:
    return rng.gamma(SHAPES, size=(scenarios, SHAPES.size))


def _gamma_truth(level: float) -> Truth:
    """Return the figures of independent gammas of one scale: given their sum, parts are as the shapes."""
    shape = float(SHAPES.sum())
    q = float(special.gammaincinv(shape, level))
    beyond = shape * special.gammaincc(shape + 1.0, q) / (1.0 - level)
    return Truth(SHAPES / shape * q, SHAPES / shape * beyond, shape, np.sqrt(shape))


RATES = np.array([2.0, 5.0, 8.0])
CLAIMS = np.array([0.0, 0.6, 0.3, 0.0, 0.0, 0.1])  # probability of a claim of 0, 1, 2, ...
MOST = 400  # beyond which the sum has no mass that counts


def _counts(rng: np.random.Generator, scenarios: int) -> Array:
    """Return sums of claims of whole size; counts of each size are Poisson."""
    sizes = np.flatnonzero(CLAIMS)
    counts = rng.poisson(np.multiply.outer(RATES, CLAIMS[sizes]), (scenarios, RATES.size, sizes.size))
    return np.ascontiguousarray((counts @ sizes).astype(float))


def _count_truth(level: float) -> Truth:
    """Return the figures of compound Poisson sums of one claim law: given the sum, parts are as the rates.

    The law of the sum is Panjer's recursion (ASTIN Bulletin 12, 1981, 22-26).
    """
    rate = float(RATES.sum())
    mass = np.zeros(MOST)
    mass[0] = np.exp(-rate)
    steps = np.arange(CLAIMS.size)
    for s in range(1, MOST):
        reach = steps[1 : s + 1]
        mass[s] = rate / s * np.sum(reach * CLAIMS[reach] * mass[s - reach])
    values = np.arange(MOST)
    below = np.cumsum(mass)
    q = int(np.argmax(below >= level))
    beyond = (values[q + 1 :] @ mass[q + 1 :] + q * (below[q] - level)) / (1.0 - level)
    sd = float(np.sqrt(rate * (steps**2 @ CLAIMS)))
    return Truth(RATES / rate * q, RATES / rate * beyond, rate * float(steps @ CLAIMS), sd)


LAWS = (
    Law("normal", _normals, _normal_truth),
    Law("lognormal", _lognormals, _lognormal_truth),
    Law("t5", _students, _student_truth),
    Law("tied", _counts, _count_truth, discrete=True),
    Law("comonotone", _comonotone, _comonotone_truth),
    Law("skewed", _gammas, _gamma_truth),
)
"""Normal; two lognormals; Student's t with 5 degrees of freedom; compound counts; lognormals of one score;
independent gammas of shapes 0.1 to 1.5."""
