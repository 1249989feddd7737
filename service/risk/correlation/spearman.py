"""From Spearman's rho to the correlation of a Student t copula.

A Student t pair is a normal one divided by the root of a common gamma variable G. Given the mixing variables of
three independent copies, the concordance that defines Spearman's rho is that of a normal pair whose correlation is
the copula's, times a shrinkage C, so that

    rho_S = (6 / pi) E[arcsin(correlation C)],   C^2 = X Y,  X = G2 / (G1 + G2),  Y = G3 / (G1 + G3)

with G1, G2 and G3 gamma variables of shape df/2: A. Heinen and A. Valdesogo, Spearman rank correlation of the bivariate
Student t and scale mixtures of normal distributions, J. of Multivariate Analysis 179 (2020) 104650. Here X and
B = G3 / (G1 + G2 + G3) are used, which are independent beta variables: Y = B / (B + (1 - X)(1 - B)).
"""

from functools import lru_cache

import numpy as np
from numpy.typing import NDArray
from scipy import special

Array = NDArray[np.float64]

SPACING = 0.5  # of the trapezoidal rule on logits, in units of their spread and at most this
NEGLIGIBLE = 1e-14  # relative density at which the rule ends
NODES = 256  # of the table between correlation 0 and 1
PIECE = 1 << 20  # numbers at a time


def student_correlations(rhos: Array, df: float) -> Array:
    """Return the correlations of the Student t copula with these Spearman rhos.

    Parameters
    ----------
    rhos : ndarray
        Between -1 and 1.
    df : float
        Degrees of freedom.

    Returns
    -------
    ndarray
        Of the same shape, to about 1e-9.
    """
    correlations, known, slopes = _table(df)
    sizes = np.abs(rhos)
    place = np.clip(np.searchsorted(known, sizes, side="right") - 1, 0, known.size - 2)
    width = known[place + 1] - known[place]
    t = (sizes - known[place]) / width
    rise = correlations[place + 1] - correlations[place]
    start, end = width / slopes[place], width / slopes[place + 1]
    cubic = start + t * (3.0 * rise - 2.0 * start - end + t * (start + end - 2.0 * rise))  # Hermite
    found = np.where(sizes == 1.0, 1.0, np.minimum(correlations[place] + t * cubic, 1.0))
    return np.asarray(np.copysign(found, rhos))


def spearman_rhos(correlations: Array, df: float) -> tuple[Array, Array]:
    """Return Spearman's rho of Student t pairs (m,), and its derivatives with respect to the correlation."""
    shrinkages, deficits, weights = _shrinkages(df)
    rhos, slopes = np.empty_like(correlations), np.empty_like(correlations)
    at_once = max(1, PIECE // shrinkages.size)
    for first in range(0, correlations.size, at_once):
        of = correlations[first : first + at_once, None]
        sines = of * shrinkages
        cosines = np.sqrt((1.0 - of) * (1.0 + of) + of**2 * deficits)
        rhos[first : first + at_once] = np.arctan2(sines, cosines) @ weights
        slopes[first : first + at_once] = (shrinkages / cosines) @ weights
    return 6.0 / np.pi * rhos, 6.0 / np.pi * slopes


@lru_cache(maxsize=32)
def _table(df: float) -> tuple[Array, Array, Array]:
    """Return correlations from 0 to 1, closer together near 1, with their Spearman rhos and the slopes."""
    correlations = np.sin(np.linspace(0.0, np.pi / 2, NODES + 1))
    return correlations, *spearman_rhos(correlations, df)


def _shrinkages(df: float) -> tuple[Array, Array, Array]:
    """Return nodes C of the law of the shrinkage, 1 - C^2 and weights, each of shape (m,).

    The trapezoidal rule on the logits of X and B, whose densities are analytic and fall off exponentially on both
    sides, converges exponentially.
    """
    x, x_weights = _logit_rule(df / 2.0, df / 2.0)
    b, b_weights = _logit_rule(df / 2.0, df)
    x = x[:, None]
    of_y = special.expit(-x) * np.exp(-b)  # 1/Y - 1 = (1 - X)(1 - B) / B
    excess = np.exp(-x) * (1.0 + of_y) + of_y  # 1/C^2 - 1
    weights = x_weights[:, None] * b_weights
    kept = weights > NEGLIGIBLE * weights.max()
    excess, weights = excess[kept], weights[kept]
    return 1.0 / np.sqrt(1.0 + excess), excess / (1.0 + excess), weights / weights.sum()


def _logit_rule(p: float, q: float) -> tuple[Array, Array]:
    """Return nodes and weights of the trapezoidal rule for the logit of a beta(p, q) variable."""

    def log_density(y: Array) -> Array:
        return np.asarray(-p * np.logaddexp(0.0, -y) - q * np.logaddexp(0.0, y))

    mode = np.log(p / q)
    spread = np.sqrt(1.0 / p + 1.0 / q)
    step = SPACING * min(1.0, spread)
    # beyond the mode the log density falls at least like a parabola, then like a line of slope p or q
    drop = -np.log(NEGLIGIBLE)
    reach = 10.0 * spread + 1.5 * drop * spread**2
    y = mode + step * np.arange(-np.ceil(reach / step), np.ceil(reach / step) + 1.0)
    logs = log_density(y) - log_density(np.array(mode))
    kept = logs > -drop
    weights = np.exp(logs[kept])
    return y[kept], weights / weights.sum()
