"""Laws of the common variable of an Archimedean copula, and of the variables nested in it, as logarithms.

Logarithms, because at strong dependence such a variable spans hundreds of powers of ten.
"""

from collections.abc import Callable
from functools import lru_cache

import numpy as np
from numpy.random import Generator
from numpy.typing import NDArray
from scipy import special

from service.risk.streams import SMALLEST

Array = NDArray[np.float64]
Indices = NDArray[np.intp]

HALF_LIFE = np.log(2.0)  # exp(-t) is a half
SPLIT = 700.0  # exp(-700) and exp(700) are normal binary64 numbers
WHOLE = 36.0  # logarithm from which every binary64 number is whole
LISTED = 4096  # values of a Sibuya variable that are looked up; beyond them its tail is a power to 1e-8
MOST_PARTS = 6  # times up to this are cut into parts of at most 1, for which a simple rejection is cheaper
HALF_NORMAL = np.sqrt(np.pi / 2.0)  # integral of exp(-x^2 / 2) from 0 on


def log_one_less_exp(log_t: Array) -> Array:
    """Return ln(1 - exp(-t)) from ln t, accurate for t near 0 and for large t."""
    t = np.exp(np.clip(log_t, -SPLIT, SPLIT))
    small = np.log(-np.expm1(-t)) + np.minimum(log_t + SPLIT, 0.0)
    return np.where(t < HALF_LIFE, small, np.log1p(-np.exp(-np.maximum(t, HALF_LIFE))))


def log_whole(log_far: Array, shift: float) -> Array:
    """Return the logarithm of the first whole number above exp(log_far) - shift."""
    whole = np.floor(np.exp(np.minimum(log_far, WHOLE)) - shift) + 1.0
    return np.where(log_far < WHOLE, np.log(whole), log_far)


def log_positive_stable(alpha: float, uniforms: Array, exponentials: Array) -> Array:
    """Return logarithms of positive stable variables, whose Laplace transform is exp(-t^alpha).

    Parameters
    ----------
    alpha : float
        Above 0 and below 1.
    uniforms, exponentials : ndarray of shape (n,)

    References
    ----------
    M. Kanter, Stable densities under change of scale and total variation inequalities, Annals of Probability 3 (1975)
    697-707, corollary 4.1.
    """
    angle = np.pi * uniforms
    sine = np.sin(np.pi * np.minimum(uniforms, 1.0 - uniforms))
    logs = (1.0 - alpha) * (np.log(np.sin((1.0 - alpha) * angle)) - np.log(exponentials))
    logs += alpha * np.log(np.sin(alpha * angle)) - np.log(sine)
    return np.asarray(logs / alpha)


def stable_draws(count: int, generator: Generator) -> tuple[Array, Array]:
    """Return uniforms and exponentials for `log_positive_stable`, each of shape (count,)."""
    uniforms = np.maximum(generator.random(count), SMALLEST)
    return uniforms, np.maximum(generator.standard_exponential(count), SMALLEST)


def log_sibuya(alpha: float, uniforms: Array) -> Array:
    """Return logarithms of Sibuya variables, whose Laplace transform is 1 - (1 - exp(-t))^alpha.

    V exceeds k with probability Gamma(k + 1 - alpha) / (Gamma(1 - alpha) k!) and is found from the uniform by that:
    in a table up to 4096, and beyond by Gamma(k + 1 - alpha) / k! = (k + (1 - alpha)/2)^-alpha (1 + O(k^-2)).

    Parameters
    ----------
    alpha : float
        Above 0 and below 1.
    uniforms : ndarray of shape (n,)

    References
    ----------
    M. Hofert, Efficiently sampling nested Archimedean copulas, Computational Statistics & Data Analysis 55 (2011)
    57-70.
    """
    exceeding, logs = _sibuya_table(alpha)
    result = logs.take(exceeding.size - np.searchsorted(exceeding, uniforms, side="right"))
    beyond = uniforms < exceeding[0]
    if beyond.any():
        far = -(np.log(uniforms[beyond]) + special.gammaln(1.0 - alpha)) / alpha
        result[beyond] = log_whole(far, (1.0 - alpha) / 2.0)
    return result


@lru_cache(maxsize=64)
def _sibuya_table(alpha: float) -> tuple[Array, Array]:
    """Return P(V > k) for k from LISTED down to 1, and ln(1), ..., ln(LISTED + 1)."""
    k = np.arange(1.0, LISTED + 2.0)
    exceeding = np.cumprod(1.0 - alpha / k[:-1], dtype=np.float64)
    return exceeding[::-1].copy(), np.log(k)


def log_log_series(theta: float, uniforms: Array, exponentials: Array) -> Array:
    """Return logarithms of log-series variables: V = k with probability p^k / (k theta), p = 1 - exp(-theta).

    Given q = 1 - exp(-theta U) they are geometric: V - 1 is the whole part of an exponential over -ln q.

    References
    ----------
    A. W. Kemp, Efficient generation of logarithmically distributed pseudo-random variables, Applied Statistics 30
    (1981) 249-253.
    """
    x = theta * uniforms
    log_rate = np.log(-log_one_less_exp(np.log(np.minimum(x, WHOLE)))) - np.maximum(x - WHOLE, 0.0)
    far = np.log(exponentials) - log_rate
    return log_whole(far, 0.0)


def log_tilted_stable(alpha: float, log_times: Array, generator: Generator) -> Array:
    """Return logarithms of tilted stable variables, whose Laplace transforms are exp(-time ((1 + t)^alpha - 1)).

    Parameters
    ----------
    alpha : float
        Above 0 and below 1.
    log_times : ndarray of shape (n,)
        Logarithm of each variable's time.
    generator : Generator
        Some ten to fifty numbers are drawn for each variable, whatever its parameters.

    Notes
    -----
    Variables of short times are sums of thinned stable ones (Hofert 2011, as `log_sibuya`), others come from a
    rejection whose cost has a bound.

    References
    ----------
    L. Devroye, Random variate generation for exponentially and polynomially tilted stable distributions, ACM Trans.
    Modeling and Computer Simulation 19(4), 2009, article 18.
    """
    result = np.empty_like(log_times)
    short = log_times <= np.log(MOST_PARTS)
    counts = np.maximum(np.ceil(np.exp(log_times[short])), 1.0).astype(np.intp)
    parts = np.repeat(log_times[short] - np.log(counts), counts)
    result[short] = log_sums(_until_accepted(_thinned_trial, alpha, parts, generator), counts)
    result[~short] = _until_accepted(_enclosed_trial, alpha, log_times[~short], generator)
    return result


def log_sums(logs: Array, counts: Indices) -> Array:
    """Return logarithms of sums of consecutive exp(logs), `counts` (n,) of them each and at least 1."""
    if not counts.size:
        return np.empty(0)
    starts = np.cumsum(counts) - counts
    largest = np.maximum.reduceat(logs, starts)
    ratios = np.exp(np.maximum(logs - np.repeat(largest, counts), -SPLIT))
    return np.asarray(largest + np.log(np.add.reduceat(ratios, starts)))


def _until_accepted(
    trial: Callable[[float, Array, Generator], tuple[Indices, Array]],
    alpha: float,
    log_times: Array,
    generator: Generator,
) -> Array:
    """Repeat the trial for those variables that were not accepted yet."""
    result = np.empty_like(log_times)
    waiting = np.arange(log_times.size)
    while waiting.size:
        accepted, values = trial(alpha, log_times[waiting], generator)
        result[waiting[accepted]] = values
        waiting = np.delete(waiting, accepted)
    return result


def _thinned_trial(alpha: float, log_times: Array, generator: Generator) -> tuple[Indices, Array]:
    """Draw untilted variables and keep each with probability exp(-V): exp(-time) of them.

    Returns
    -------
    ndarray of shape (a,)
        Which are kept.
    ndarray of shape (a,)
        Their logarithms.
    """
    logs = log_times / alpha + log_positive_stable(alpha, *stable_draws(log_times.size, generator))
    kept = np.flatnonzero(generator.standard_exponential(logs.size) >= np.exp(np.minimum(logs, SPLIT)))
    return kept, logs[kept]


def _enclosed_trial(alpha: float, log_times: Array, generator: Generator) -> tuple[Indices, Array]:
    """Make one trial of Devroye's double rejection for each variable, for times not small.

    The variable is alpha h X^-b, b = (1 - alpha) / alpha, h = time / zeta^2, zeta^2 = B(U) / B(0), with an angle U and,
    given it, an X whose density is proportional to exp(-h ((1 - alpha) X + alpha X^-b)), in units in which its mode
    is 1. First the angle is drawn below an enclosing function, then X.
    """
    times = np.exp(log_times)
    n = times.size
    gamma = times * alpha * (1.0 - alpha)
    root = np.sqrt(gamma)
    xi = ((2.0 + HALF_NORMAL) * np.sqrt(2.0) * root + 1.0) / np.pi
    psi = np.exp(-gamma * np.pi**2 / 8.0) * (2.0 + HALF_NORMAL) * root / np.sqrt(np.pi)
    peaked = gamma >= 1.0

    # a half normal or a uniform, or an arch that ends in pi
    first = xi * np.where(peaked, HALF_NORMAL / root, np.pi)
    from_first = generator.random(n) * (first + 2.0 * psi * np.sqrt(np.pi)) < first
    w = generator.random(n)
    u = np.where(peaked, np.abs(generator.standard_normal(n)) / root, np.pi * w)
    u = np.where(from_first, u, np.pi * (1.0 - w**2))
    level = generator.random(n)
    inside = np.flatnonzero((u > 0.0) & (u < np.pi))
    u, level, peaked = u[inside], level[inside], peaked[inside]
    times, gamma, root, xi, psi = times[inside], gamma[inside], root[inside], xi[inside], psi[inside]
    zeta = np.sqrt(_zolotarev(alpha, u))
    z = -1.0 / np.expm1(-np.log1p(alpha * zeta / root) / alpha)
    level *= np.pi * (xi * np.where(peaked, np.exp(-0.5 * gamma * u**2), 1.0) + psi / np.sqrt(np.pi - u))
    target = np.exp(times * (1.0 - zeta**-2.0)) * ((1.0 + HALF_NORMAL) * root / zeta + z)
    below = np.flatnonzero((level <= target) & (level > 0.0))

    h = times[below] / zeta[below] ** 2
    rest = np.log(target[below] / level[below])
    kept, log_x = _given_angle(alpha, h, alpha * zeta[below] / root[below], z[below], rest, generator)
    return inside[below[kept]], np.log(alpha * h[kept]) - log_x * ((1.0 - alpha) / alpha)


def _given_angle(
    alpha: float, h: Array, delta: Array, z: Array, rest: Array, generator: Generator
) -> tuple[Indices, Array]:
    """Draw X below a half normal up to 1, a constant up to 1 + delta and an exponential beyond.

    `rest` is the exponential that the first rejection left over. Returned are those accepted and their ln X.
    """
    tail = z / ((1.0 - alpha) * h)
    part = generator.random(h.size) * (delta * (1.0 + HALF_NORMAL) + tail)
    normal, exponential = np.abs(generator.standard_normal(h.size)), generator.standard_exponential(h.size)
    low, high = part < delta * HALF_NORMAL, part >= delta * (1.0 + HALF_NORMAL)
    x = np.where(low, 1.0 - delta * normal, 1.0 + delta * generator.random(h.size))
    x = np.where(high, 1.0 + delta + tail * exponential, x)
    log_x = np.log(np.maximum(x, np.exp(-SPLIT)))
    height = h * ((1.0 - alpha) * (x - 1.0) + alpha * np.expm1(np.minimum(log_x * ((alpha - 1.0) / alpha), SPLIT)))
    height -= np.where(low, 0.5 * normal**2, 0.0) + np.where(high, exponential, 0.0)
    kept = np.flatnonzero((x > 0.0) & (height <= rest))
    return kept, log_x[kept]


def _zolotarev(alpha: float, angle: Array) -> Array:
    """Return B(u) / B(0) of Zolotarev's integral: sinc(u) / (sinc(alpha u)^alpha sinc((1 - alpha) u)^(1 - alpha))."""
    u = angle / np.pi
    product = np.sinc(alpha * u) ** alpha * np.sinc((1.0 - alpha) * u) ** (1.0 - alpha)
    return np.asarray(np.sinc(u) / product)
