"""Laws of the common variable of an Archimedean copula, and of the variables nested in it, as logarithms.

Logarithms, because at strong dependence such a variable spans hundreds of powers of ten.
"""

from functools import lru_cache

import numpy as np
from numpy.random import Generator
from numpy.typing import NDArray
from scipy import special

from service.risk.streams import SMALLEST

Array = NDArray[np.float64]

HALF_LIFE = np.log(2.0)  # exp(-t) is a half
SPLIT = 700.0  # exp(-700) and exp(700) are normal binary64 numbers
WHOLE = 36.0  # logarithm from which every binary64 number is whole
LISTED = 4096  # values of a Sibuya variable that are looked up; beyond them its tail is a power to 1e-8
TINY_TIME = -300.0  # logarithm of the time below which tilting changes nothing that can be seen


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
    57-70, section 3.3.
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
    return np.cumprod(1.0 - alpha / k[:-1])[::-1].copy(), np.log(k)


def log_log_series(theta: float, uniforms: Array, exponentials: Array) -> Array:
    """Return logarithms of log-series variables: V = k with probability p^k / (k theta), p = 1 - exp(-theta).

    Given q = 1 - exp(-theta U) they are geometric: V - 1 is the whole part of an exponential over -ln q.

    References
    ----------
    A. W. Kemp, Efficient generation of logarithmically distributed pseudo-random variables, Applied Statistics 30 (1981)
    249-253.
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
        Some ten numbers are drawn for each variable whatever its parameters: rejection, twice.

    References
    ----------
    L. Devroye, Random variate generation for exponentially and polynomially tilted stable distributions, ACM Trans.
    Modeling and Computer Simulation 19(4), 2009, article 18.
    """
    result = np.empty_like(log_times)
    tiny = log_times < TINY_TIME
    if tiny.any():
        uniforms, exponentials = stable_draws(int(np.count_nonzero(tiny)), generator)
        result[tiny] = log_times[tiny] / alpha + log_positive_stable(alpha, uniforms, exponentials)
    waiting = np.flatnonzero(~tiny)
    while waiting.size:
        accepted, values = _tilted_trial(alpha, np.exp(log_times[waiting]), generator)
        result[waiting[accepted]] = values[accepted]
        waiting = waiting[~accepted]
    return result


def _tilted_trial(alpha: float, times: Array, generator: Generator) -> tuple[NDArray[np.bool_], Array]:
    """Make one trial for each variable: whether it is accepted, and the logarithms.

    The names are those of the paper. With zeta^2 = B(U)/B(0) the density of X given the angle U is proportional to
    exp(-g(X)), g(X) = h ((1 - alpha) X + alpha X^-b), h = time / zeta^2, in units in which g is least at X = 1. It is
    enclosed by a half normal below 1, a constant up to 1 + delta and an exponential beyond. The variable is
    alpha h X^-b.
    """
    n = times.size
    half = np.sqrt(np.pi / 2.0)
    b = (1.0 - alpha) / alpha
    gamma = times * alpha * (1.0 - alpha)
    root = np.sqrt(gamma)
    xi = ((2.0 + half) * np.sqrt(2.0 * gamma) + 1.0) / np.pi
    psi = np.exp(-gamma * np.pi**2 / 8.0) * (2.0 + half) * np.sqrt(gamma / np.pi)
    peaked = gamma >= 1.0

    # the angle, from a mixture of a half normal (or a uniform) and an arch that ends in pi
    first = np.where(peaked, xi * half / np.maximum(root, 1e-300), xi * np.pi)
    of_first = generator.random(n) * (first + 2.0 * psi * np.sqrt(np.pi)) < first
    w = generator.random(n)
    inner = np.where(peaked, np.abs(generator.standard_normal(n)) / np.maximum(root, 1e-300), np.pi * w)
    u = np.where(of_first, inner, np.pi * (1.0 - w**2))
    inside = (u > 0.0) & (u < np.pi)
    u = np.where(inside, u, 1.0)
    zeta = np.sqrt(_zolotarev(alpha, u))
    z = -1.0 / np.expm1(-np.log1p(alpha * zeta / root) / alpha)
    enclosing = np.pi * (np.where(peaked, xi * np.exp(-0.5 * gamma * u**2), xi) + psi / np.sqrt(np.pi - u))
    target = np.exp(times * (1.0 - zeta**-2.0)) * ((1.0 + half) * root / zeta + z)
    level = generator.random(n) * enclosing
    inside &= level <= target
    rest = np.log(np.where(inside, target / np.maximum(level, 1e-300), 1.0))

    # X given the angle
    h = times / zeta**2
    delta = alpha * zeta / root
    tail = z / ((1.0 - alpha) * h)
    part = generator.random(n) * (delta * (1.0 + half) + tail)
    normal, exponential = np.abs(generator.standard_normal(n)), generator.standard_exponential(n)
    below, beyond = part < delta * half, part >= delta * (1.0 + half)
    x = np.where(below, 1.0 - delta * normal, 1.0 + delta * generator.random(n))
    x = np.where(beyond, 1.0 + delta + tail * exponential, x)
    inside &= x > 0.0
    log_x = np.log(np.where(inside, x, 1.0))
    with np.errstate(over="ignore"):  # an x so near 0 is refused
        height = h * ((1.0 - alpha) * (x - 1.0) + alpha * np.expm1(-b * log_x))
    height -= np.where(below, 0.5 * normal**2, 0.0) + np.where(beyond, exponential, 0.0)
    return inside & (height <= rest), np.log(alpha * h) - b * log_x


def _zolotarev(alpha: float, angle: Array) -> Array:
    """Return B(angle) / B(0) of Zolotarev's integral: sinc(u) / (sinc(alpha u)^alpha sinc((1 - alpha) u)^(1 - alpha))."""
    u = angle / np.pi
    product = np.sinc(alpha * u) ** alpha * np.sinc((1.0 - alpha) * u) ** (1.0 - alpha)
    return np.asarray(np.sinc(u) / product)
