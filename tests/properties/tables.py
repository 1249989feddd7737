"""Loss tables and measures that the properties are tried on."""

import numpy as np
from hypothesis import settings
from hypothesis import strategies as st

from service.risk.allocation import RULES
from service.risk.measures import TYPICAL
from tests.unit.risk.arithmetic import es, measure, var

EXAMPLES = 5  # of each property and each of thirty measures: the same ones in every run
bounded = settings(derandomize=True, max_examples=EXAMPLES, deadline=None, database=None)
often = settings(bounded, max_examples=6 * EXAMPLES)
"""For properties that draw the measure too."""

MILD = (  # measures that look at more than the worst scenario of a small table
    var(0.5),
    var(0.75),
    es(0.5),
    es(0.8),
    es(0.75, above="mean"),
    measure("range_value_at_risk", lower_level=0.25, upper_level=0.75),
    measure("range_value_at_risk", lower_level=0.0, upper_level=0.9),
    measure("expectile", level=0.75),
    measure("expectile", level=0.3),
    measure("expectile", level=0.8, above="mean"),
    measure("wang", shift=2.0),
    measure("wang", shift=0.25, above="mean"),
    measure("proportional_hazard", exponent=0.5),
    measure("dual_power", exponent=1.5),
    measure("exponential_distortion", aversion=1.0),
    measure("entropic", aversion=2.0),
    measure("entropic", aversion=0.1, above="mean"),
    measure("return_level", return_period=10.0, scenarios_per_period=0.5),
    measure("standard_deviation"),
)
MEASURES = (*TYPICAL, *MILD)
QUANTILES = ("value_at_risk", "return_level")
DISTORTIONS = (
    *QUANTILES,
    "expected_shortfall",
    "range_value_at_risk",
    "wang",
    "proportional_hazard",
    "dual_power",
    "exponential_distortion",
)
COHERENT = (
    "expected_shortfall",
    "wang",
    "proportional_hazard",
    "dual_power",
    "exponential_distortion",
)  # and expectiles from level 1/2 on
ADDITIVE = tuple(rule for rule in RULES if rule != "with_without")


def of_kind(*kinds):
    return [one for one in MEASURES if one.kind in kinds]


def ids(one):
    return one.name.replace(" ", "-") if hasattr(one, "name") else str(one)


def _ties(rng, n, d):
    return rng.integers(-2, 4, size=(n, d)) * 1.0


def _mostly_zero(rng, n, d):
    return np.where(rng.random((n, d)) < 0.97, 0.0, rng.lognormal(size=(n, d)))


def _cancelling(rng, n, d):
    """Columns of a million that cancel to totals of a few, all multiples of 1/8: no sum of them is rounded."""
    losses = np.round(rng.normal(size=(n, d)) * 8e6) / 8.0
    losses[:, -1] = rng.integers(-20, 20, size=n) / 8.0 - losses[:, :-1].sum(axis=1)
    return losses


def _decimals(rng, n, d):
    """Few distinct totals, made of different summands: 0.1 + 0.5 and 0.2 + 0.4."""
    tenths = rng.integers(0, 4, size=(n, d))
    tenths[:, -1] = rng.integers(4, 8, size=n) - tenths[:, :-1].sum(axis=1)
    return tenths / 10.0


def _comonotone(rng, n, d):
    factor = np.sort(rng.normal(size=n))
    return np.exp(factor[:, None] * rng.uniform(0.1, 2.0, size=d))[rng.permutation(n)]


MAKERS = {
    "normal": lambda rng, n, d: rng.normal(size=(n, d)),
    "heavy": lambda rng, n, d: rng.pareto(1.5, size=(n, d)),
    "ties": _ties,
    "zeros": _mostly_zero,
    "cancelling": _cancelling,
    "decimals": _decimals,
    "comonotone": _comonotone,
    "constant": lambda rng, n, d: np.full((n, d), 0.1) + rng.normal() * np.ones(d),
}
VARYING = tuple(name for name in MAKERS if name not in ("constant", "zeros"))
CONTINUOUS = ("normal", "heavy")


@st.composite
def tables(draw, kinds=tuple(MAKERS), *, least=1, most=60, columns=5):
    """Draw a table of losses of shape (n, d)."""
    kind = draw(st.sampled_from(kinds))
    n, d = draw(st.integers(least, most)), draw(st.integers(1, columns))
    rng = np.random.default_rng(draw(st.integers(0, 2**32 - 1)))
    return MAKERS[kind](rng, n, max(d, 2) if kind in ("cancelling", "decimals") else d)


@st.composite
def weighted_tables(draw, kinds=tuple(MAKERS), *, zeros=True, **sizes):
    """Draw a table and probabilities: None, or unequal ones of which some may be 0."""
    losses = draw(tables(kinds, **sizes))
    n = losses.shape[0]
    if draw(st.booleans()):
        return losses, None
    rng = np.random.default_rng(draw(st.integers(0, 2**32 - 1)))
    p = rng.integers(0 if zeros else 1, 9, size=n) * 1.0
    if draw(st.booleans()):
        p *= rng.random(n)
    p[rng.integers(n)] += 1.0
    return losses, p / p.sum()


def scale(losses):
    """Return the size that rounding errors are measured against."""
    return float(np.max(np.abs(losses).sum(axis=1), initial=0.0)) + 1e-300
