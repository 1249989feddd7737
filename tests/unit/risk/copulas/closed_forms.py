"""Kendall's tau and C(u, v) of pairs, from textbook formulas; and samples to hold against them."""

from functools import lru_cache

import numpy as np
from scipy import integrate, special

from service.risk.streams import RandomDraw, Scratch, stream

FALSE_ALARM = 4.0  # standard errors; a correct figure is beyond with probability 6e-5
KS_LIMIT = 2.282  # of sqrt(n) times the Kolmogorov-Smirnov distance, at the same false alarm rate
SCENARIOS = 1 << 20


@lru_cache(maxsize=1)
def scratch():
    return Scratch()


def sample(copula, ids, *, columns=None, scenarios=SCENARIOS, seed=1):
    """Return P(S <= score) and P(S > score), each (k, n), for the columns of the factors wanted."""
    sampler = copula.prepared(ids)
    columns = range(len(ids)) if columns is None else columns
    lower, upper = (np.empty((len(columns), scenarios)) for _ in range(2))
    for block in range(scenarios // 4096):
        scores = sampler.scores(RandomDraw(stream(seed, "factors", block), scratch=scratch()))
        part = slice(4096 * block, 4096 * (block + 1))
        for row, column in enumerate(columns):
            law, values = scores.laws[column], scores.values[:, column]
            lower[row, part], upper[row, part] = law.lower(values), law.upper(values)
    return lower, upper


def kolmogorov(uniforms):
    """Return sqrt(n) times the largest distance between the empirical and the uniform distribution function."""
    ordered = np.sort(uniforms)
    n = ordered.size
    steps = np.arange(n + 1) / n
    return np.sqrt(n) * max(np.max(steps[1:] - ordered), np.max(ordered - steps[:-1]))


def assert_share(hits, expected):
    """Hold the share of `hits` (n,) against a probability."""
    variance = max(expected * (1.0 - expected), 0.0)  # a closed form of 0 or 1 may be off by rounding
    assert abs(hits.mean() - expected) <= FALSE_ALARM * np.sqrt(variance / hits.size) + 1e-15


def assert_tau(x, y, expected):
    """Hold the mean sign of concordance of disjoint, so independent, pairs of scenarios against Kendall's tau."""
    concordant = (x[::2] > x[1::2]) == (y[::2] > y[1::2])
    assert_share(concordant, (1.0 + expected) / 2.0)


def assert_mean(draws, expected):
    assert abs(draws.mean() - expected) <= FALSE_ALARM * draws.std() / np.sqrt(draws.size) + 1e-15


# tau


def tau_clayton(theta):
    return theta / (theta + 2.0)


def tau_gumbel(theta):
    return 1.0 - 1.0 / theta


def tau_joe(theta):
    k = np.arange(1.0, 2e6)
    return 1.0 - 4.0 * np.sum(1.0 / (k * (theta * k + 2.0) * (theta * (k - 1.0) + 2.0)))


def tau_frank(theta):
    size = abs(theta)
    debye = integrate.quad(lambda t: t / np.expm1(t) if t else 1.0, 0.0, size)[0] / size
    return np.sign(theta) * (1.0 - 4.0 / size * (1.0 - debye))


def tau_elliptical(rho):
    return 2.0 / np.pi * np.arcsin(rho)


TAU = {"clayton": tau_clayton, "gumbel": tau_gumbel, "joe": tau_joe, "frank": tau_frank}


# C(u, v)


def clayton(u, v, theta):
    return (u**-theta + v**-theta - 1.0) ** (-1.0 / theta)


def gumbel(u, v, theta):
    return np.exp(-(((-np.log(u)) ** theta + (-np.log(v)) ** theta) ** (1.0 / theta)))


def joe(u, v, theta):
    a, b = (1.0 - u) ** theta, (1.0 - v) ** theta
    return 1.0 - (a + b - a * b) ** (1.0 / theta)


def frank(u, v, theta):
    rest = np.exp(-theta * u) * np.expm1(-theta * (1.0 - u)) + np.exp(-theta * v) * np.expm1(-theta * u)
    return -np.log(rest / np.expm1(-theta)) / theta


ARCHIMEDEAN = {"clayton": clayton, "gumbel": gumbel, "joe": joe, "frank": frank}


def gaussian(u, v, rho):
    """Return the integral of Phi((b - rho x) / sqrt(1 - rho^2)) over the normal law up to the quantile of u."""
    b = special.ndtri(v)
    own = np.sqrt(1.0 - rho**2)
    return integral(lambda p: special.ndtr((b - rho * special.ndtri(p)) / own), u)


def student(u, v, df, rho):
    """Return the integral of the conditional law, Student t of df + 1, over the law up to the quantile of u."""
    b = special.stdtrit(df, v)

    def conditional(p):
        x = special.stdtrit(df, p)
        return special.stdtr(df + 1.0, (b - rho * x) / np.sqrt((1.0 - rho**2) * (df + x**2) / (df + 1.0)))

    return integral(conditional, u)


def integral(function, u):
    """Return the integral from 0 to u by Gauss-Legendre on panels that halve towards both ends."""
    halves = 0.5 ** np.arange(1, 50)
    edges = np.unique(np.concatenate([[0.0, u], u * halves, u * (1.0 - halves[:40])]))
    nodes, weights = special.roots_legendre(16)
    width = np.diff(edges)
    points = edges[:-1, None] + width[:, None] * (1.0 + nodes) / 2.0
    return float(np.sum(function(points) * weights * width[:, None] / 2.0))
