"""Stated errors of simulated figures against their spread over seeds.

Each book is simulated under 200 seeds. The spread of a figure over them is known to 1/sqrt(2 · 199) = 5 % where the
figure is near normal, and the mean of the stated errors to less, so a right error leaves the band of 15 % in about
one of 300 cases. The seeds are fixed, and it is the same band for all.
"""

import math
from base64 import b64encode

import numpy as np
import pytest

from tests.asking import answered, compound, equal, es, factor_model, law, linear, var
from tests.unit.risk.blocks import FALSE_ALARM

SEEDS = 200
BAND = 0.15


def spreads(losses, *measures, seeds=SEEDS, **simulation):
    """Return spread over seeds and stated errors under each of all totals and contributions, by measure."""
    values, errors = [], []
    for seed in range(1, seeds + 1):
        plan = losses["simulation"] | simulation | {"seed": seed}
        request = {"losses": losses | {"simulation": plan}, "measures": list(measures), "include_stand_alone": False}
        answer = answered("allocations", request)
        figures = [[one.total, *(row.contribution for row in one.sub_portfolios)] for one in answer.allocations]
        values.append([[figure.value for figure in part] for part in figures])
        errors.append([[figure.standard_error for figure in part] for part in figures])
    return np.std(values, axis=0, ddof=1), np.array(errors)


ELLIPTICAL = factor_model(
    {name: law("student_t", df=8.0, location=0.0, scale=scale) for name, scale in (("a", 1.0), ("b", 2.0))},
    {"a": linear(a=1.0), "b": linear(b=1.0)},
    dependence=law("student_t", correlation=equal(0.3), df=8.0),
)
SKEWED = factor_model(
    {"a": law("gamma", shape=0.5, scale=2.0), "b": law("gamma", shape=1.5, scale=1.0)},
    {"a": linear(a=1.0), "b": linear(b=1.0)},
    dependence=law("survival_clayton", theta=1.0),
)
TIED = factor_model(
    {},
    {
        name: compound(law("poisson", mean=mean), law("empirical", values=[1.0, 5.0], probabilities=[0.8, 0.2]))
        for name, mean in (("a", 2.0), ("b", 0.5))
    },
)
COMONOTONE = factor_model(
    {"a": law("lognormal", mu=0.0, sigma=0.6), "b": law("exponential", mean=1.0)},
    {"a": linear(a=1.0), "b": linear(b=1.0)},
    dependence=law("comonotonic"),
)


@pytest.mark.parametrize("losses", [ELLIPTICAL, SKEWED, COMONOTONE], ids=["elliptical", "skewed", "comonotone"])
def test_errors_of_totals_and_contributions(losses):
    spread, stated = spreads(losses, es(0.95), var(0.95), scenarios=8192)
    np.testing.assert_allclose(stated.mean(axis=0), spread, rtol=BAND)


def test_errors_of_tied_totals_and_contributions():
    """The quantile is an atom so wide that it is the same under every seed, and hardly an interval leaves it."""
    spread, errors = spreads(TIED, es(0.95), var(0.95), scenarios=8192)
    stated = errors.mean(axis=0)
    np.testing.assert_allclose(stated[0], spread[0], rtol=BAND)
    assert spread[1, 0] == 0.0
    assert stated[1, 0] < 0.01
    np.testing.assert_allclose(stated[1, 1:], spread[1, 1:], rtol=BAND)


def test_errors_of_sobol_points():
    """From eight scramblings it is the square of an error that is right in the mean."""
    sobol = {"scenarios": 4096, "method": "sobol"}
    spread, stated = spreads(SKEWED, es(0.95), {"kind": "wang", "shift": 0.5}, var(0.95), **sobol)
    np.testing.assert_allclose(np.sqrt(np.mean(stated**2, axis=0)), spread, rtol=BAND)
    plain, _ = spreads(SKEWED, es(0.95), var(0.95), seeds=50, scenarios=4096)
    assert np.all(spread[[0, 2]] < 0.6 * plain)  # and they are smaller than those of random draws


DAYS = 2500
PERIODS = 5
TAIL_MEAN = 1.754983319324868  # expected shortfall 0.9 of a standard normal
SENSITIVITIES = {"a": {"components": [linear(x=1.0, y=0.5)]}, "b": {"components": [linear(y=2.0)]}}


def history(changes, **more):
    return {
        "kind": "history",
        "factors": ["x", "y"],
        "packed": {"data": b64encode(changes).decode(), "dtype": "float64", "rows": len(changes), "columns": 2},
        "sub_portfolios": [{"id": name, **one} for name, one in SENSITIVITIES.items()],
        **more,
    }


@pytest.mark.parametrize("method", ["square_root_of_time", "overlapping"])
def test_errors_of_observed_changes(method):
    """Independent changes: the errors of h-day figures are right also where the sums of h days overlap.

    Loss a is x + y/2 and b is 2y, so the total of a day has a standard deviation of sqrt(2² + 2.25²).
    """
    values, errors = [], []
    for seed in range(SEEDS):
        changes = np.random.Generator(np.random.Philox(seed)).standard_normal((DAYS, 2)) @ [[1.0, 0.4], [0.0, 0.9]]
        losses = history(changes, horizon_scaling={"periods": PERIODS, "method": method})
        answer = answered(
            "allocations", {"losses": losses, "measures": [es(0.9), var(0.9)], "include_stand_alone": False}
        )
        figures = [
            figure
            for one in answer.allocations
            for figure in (one.total, *(row.contribution for row in one.sub_portfolios))
        ]
        values.append([figure.value for figure in figures])
        errors.append([figure.standard_error for figure in figures])
    spread = np.std(values, axis=0, ddof=1)
    np.testing.assert_allclose(np.mean(errors, axis=0), spread, rtol=BAND)
    shortfall = math.sqrt(PERIODS * (2.0**2 + 2.25**2)) * TAIL_MEAN
    assert abs(np.mean(values, axis=0)[0] - shortfall) < FALSE_ALARM * spread[0] / math.sqrt(SEEDS) + shortfall / DAYS
