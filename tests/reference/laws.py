"""Known laws as loss tables: weighted scenarios whose figures are integrals, exact far below the tolerances.

A table here is a population: nodes of a Gauss-Legendre rule in t = -ln(survival probability), with their
weights as probabilities. With 16 nodes on panels of length 2 the rule is exact to binary64 for the smooth
integrands met here, out to survival probabilities of 1e-174. A tail mean is then a sum over nodes.

At each level of interest a scenario of probability `CELL` stands exactly on the quantile, at the upper end of
its own cell of mass, so that the lower quantile is the law's own and its conditional means can be read
without smoothing. The cell's mean is replaced by its end, which moves a tail mean by CELL^2/(2 f(q)) < 1e-16.
"""

import csv
from pathlib import Path

import numpy as np
from scipy import special

DATA = Path(__file__).parent / "data"
CELL = 1e-9
PANEL = 2.0  # length in t
NODES, SHARES = special.roots_legendre(16)
DEEPEST = 400.0  # exp(-400) = 1e-174; losses stay below the square root of the largest binary64 number


def rows(name):
    """Return the rows of one of the files in `data`."""
    with (DATA / f"{name}.csv").open(newline="") as file:
        return list(csv.DictReader(file))


def names(row, *columns):
    """Return a test id of a row."""
    return "-".join(row[column] for column in columns)


def gauss(edges):
    """Return nodes and weights of a Gauss-Legendre rule on each panel between `edges`."""
    low, high = np.asarray(edges[:-1]), np.asarray(edges[1:])
    nodes = low[:, None] + (high - low)[:, None] * (1.0 + NODES) / 2.0
    return nodes.reshape(-1), ((high - low)[:, None] * SHARES / 2.0).reshape(-1)


def panels(start, stop, length=PANEL):
    """Return edges from `start` to `stop`, at most `length` apart."""
    return np.linspace(start, stop, int(np.ceil((stop - start) / length)) + 1)


def upper_nodes(levels, *, deepest=DEEPEST):
    """Return t = -ln(survival) and probability of nodes on the survival range below the first level's.

    The worst 1 - level of mass of each level is a whole number of panels; `CELL` of mass at each quantile is a
    node on it. What lies below the first level has no nodes: its mass is 1 minus the sum.
    """
    t, p = [], []
    stops = [*[1.0 - level for level in levels[1:]], None]
    for level, stop in zip(levels, stops, strict=True):
        start = round(1.0 - level, 12)
        t.append([-np.log(start)])
        p.append([CELL])
        end = deepest if stop is None else -np.log(round(stop, 12) + CELL)
        nodes, weights = gauss(panels(-np.log(start), end))
        t.append(nodes)
        p.append(weights * np.exp(-nodes))
    return np.concatenate(t), np.concatenate(p)


def score_nodes(levels=()):
    """Return normal scores and probabilities of nodes over the whole line, with cells at `levels` above 1/2."""
    t, p = upper_nodes([0.5, *levels])
    lower, weights = gauss(panels(np.log(2.0), DEEPEST))
    z = np.concatenate([-special.ndtri_exp(-t[1:]), special.ndtri_exp(-lower)])  # t[0] is a cell at the median
    return z, np.concatenate([p[1:], weights * np.exp(-lower)])
