"""Quantiles, tail means and Euler contributions of discrete laws, by exact enumeration.

Source: enumeration in exact fractions (mark: own). The definitions are those of Acerbi and Tasche (2002) for the
tail mean with an atom at the quantile, and of Tasche (1999/2000) for contributions (mark: memory). Several levels
fall exactly on the edge of an atom, where 0.95 in binary stands on the wrong side of it.
"""

import math
from fractions import Fraction
from itertools import groupby, product

import numpy as np
import pytest

from tests.reference.laws import rows
from tests.unit.risk.arithmetic import contributions, es, value, var


def _independent(exposures, defaults):
    """Return losses and exact probabilities of obligors that default independently."""
    states = list(product((0, 1), repeat=len(exposures)))
    losses = [[e * s for e, s in zip(exposures, state, strict=True)] for state in states]
    p = [math.prod(d if s else 1 - d for d, s in zip(defaults, state, strict=True)) for state in states]
    return losses, p


PERCENT = Fraction(1, 100)
TABLES = {
    "two_obligors_indep_e100pd0.05_e50pd0.10": _independent((100, 50), (5 * PERCENT, 10 * PERCENT)),
    "two_obligors_joint_pd_0.02_e100pd0.05_e50pd0.10": (
        [[0, 0], [100, 0], [0, 50], [100, 50]],
        [87 * PERCENT, 3 * PERCENT, 8 * PERCENT, 2 * PERCENT],
    ),
    "two_bonds_indep_e100pd0.04_each": _independent((100, 100), (4 * PERCENT, 4 * PERCENT)),
    "bernoulli5_e10,20,30,40,50_pd.10,.08,.06,.04,.02": _independent(
        (10, 20, 30, 40, 50), [n * PERCENT for n in (10, 8, 6, 4, 2)]
    ),
}
CASES = [
    pytest.param(case, float(level), list(found), id=f"{case.split('_e1')[0]}-{level}")
    for (case, level), found in groupby(rows("b_euler_discrete_exact"), lambda row: (row["case"], row["level"]))
]


def _expanded(losses, p):
    """Return the same law as equally probable scenarios, shuffled."""
    common = math.lcm(*(one.denominator for one in p))
    table = np.repeat(np.array(losses, dtype=float), [int(one * common) for one in p], axis=0)
    return np.random.default_rng(7).permutation(table)


@pytest.mark.parametrize("form", ["probabilities", "expanded"])
@pytest.mark.parametrize("sampled", [False, True], ids=["population", "sample"])
@pytest.mark.parametrize(("case", "level", "expected"), CASES)
def test_obligors(case, level, expected, form, sampled):
    losses, p = TABLES[case]
    assert sum(p) == 1
    weights = [float(one) for one in p]
    if form == "expanded" and not case.startswith("bernoulli5"):  # which would be fifteen million scenarios
        losses, weights = _expanded(losses, p), None
    first = expected[0]
    assert value(var(level), losses, weights, sampled=sampled) == float(first["var_lower"])
    shortfall = float(Fraction(first["es_exact"]))
    assert value(es(level), losses, weights, sampled=sampled) == pytest.approx(shortfall, rel=1e-14)
    found = contributions("euler", es(level), losses, weights, sampled=sampled)
    wanted = [float(Fraction(row["es_contribution_exact"])) for row in expected]
    assert found == pytest.approx(wanted, abs=1e-14 * shortfall)
    found = contributions("euler", var(level), losses, weights, sampled=sampled, smoothing="none")
    wanted = [float(Fraction(row["E_Xi_given_S_eq_var"])) for row in expected]
    assert found == pytest.approx(wanted, abs=1e-14 * shortfall)


def test_a_naive_tail_mean_is_not_what_is_answered():
    """The mean of the losses at or above the quantile, 2000/29, is not the tail mean 77.5 (mark: own)."""
    losses, p = TABLES["two_obligors_indep_e100pd0.05_e50pd0.10"]
    row = rows("b_euler_discrete_exact")[0]
    assert row["tail_mean_S_ge_var"] == "2000/29"
    assert value(es(0.9), losses, [float(one) for one in p]) == pytest.approx(77.5, rel=1e-14)


POISSON = [
    pytest.param(float(level), list(found), id=level)
    for level, found in groupby(rows("b_euler_poisson"), lambda row: row["level"])
]


@pytest.mark.parametrize(("level", "expected"), POISSON)
def test_poisson_counts(level, expected):
    """Losses c_i N_i, c = (1, 2, 5), N_i independent Poisson with means 3, 1.5 and .4.

    Source: E[X_i | S = s] = c_i mean_i P(S = s - c_i)/P(S = s) (mark: own). Counts end where 1e-17 of their mass
    is left; so many scenarios round the sums of their probabilities by about 1e-14.
    """
    costs, means, most = (1, 2, 5), (3.0, 1.5, 0.4), (30, 22, 15)
    mass = [
        [math.exp(-mean + n * math.log(mean) - math.lgamma(n + 1.0)) for n in range(top)]
        for mean, top in zip(means, most, strict=True)
    ]
    counts = np.array(list(product(*(range(top) for top in most))), dtype=float)
    p = np.array([math.prod(one) for one in product(*mass)])
    losses, p = counts * costs, p / p.sum()
    figure, shortfall = float(expected[0]["var"]), float(expected[0]["es"])
    assert value(var(level), losses, p, sampled=False) == figure
    assert value(es(level), losses, p, sampled=False) == pytest.approx(shortfall, rel=2e-13)
    found = contributions("euler", es(level), losses, p, sampled=False)
    assert found == pytest.approx([float(row["es_contribution"]) for row in expected], rel=2e-12)
    found = contributions("euler", var(level), losses, p, sampled=False, smoothing="none")
    assert found == pytest.approx([float(row["E_Xi_given_S_eq_var"]) for row in expected], rel=2e-13)


SAMPLES = {
    "1..10": np.arange(1.0, 11.0),
    "quadratic10": np.array([1.0, 2.0, 4.0, 7.0, 11.0, 16.0, 22.0, 29.0, 37.0, 46.0]),
    "with_ties_0x6,5x2,20,100": np.array([0.0] * 6 + [5.0, 5.0, 20.0, 100.0]),
    "1..250": np.arange(1.0, 251.0),
}


@pytest.mark.parametrize("row", rows("n_es_discrete"), ids=lambda row: f"{row['sample'][:9]}-{row['level']}")
def test_tail_mean_of_a_sample(row):
    """Source: (x_(k+2) + ... + x_(n) + (k + 1 - n level) x_(k+1)) / (n (1 - level)), k = floor(n level), in exact
    fractions (formula: Acerbi and Tasche 2002, mark: memory; figures: own).
    """
    sample, level = SAMPLES[row["sample"]][::-1].copy(), float(row["level"])
    assert value(var(level), sample) == float(row["var_lower"])
    assert value(es(level), sample) == pytest.approx(float(Fraction(row["es_exact"])), rel=4e-16)


@pytest.mark.parametrize(
    "row", [row for row in rows("n_quantile_types") if row["hyndman_fan_type"] == "1"], ids=lambda row: row["p"]
)
def test_the_quantile_is_hyndman_and_fans_first_type(row):
    """Source: the definition in the documentation of two statistical packages (mark: seen); figures exact (own)."""
    assert value(var(float(row["p"])), SAMPLES["quadratic10"]) == float(Fraction(row["value_exact"]))


@pytest.mark.parametrize("seed", range(20))
def test_the_quantile_is_numpys_inverted_cdf(seed):
    """Source: numpy, at levels that are no multiples of 1/n, where its binary level cannot be on the wrong side."""
    rng = np.random.default_rng(seed)
    n = int(rng.choice([7, 53, 211, 997, 4999]))  # primes: no level with three decimals is k/n
    sample = rng.choice(
        [rng.normal(size=n), rng.integers(0, 9, size=n) * 1.0, np.where(rng.random(n) < 0.97, 0.0, 1e6)]
    )
    levels = np.array([0.001, 0.05, 0.333, 0.5, 0.75, 0.9, 0.95, 0.975, 0.99, 0.995, 0.999])
    expected = np.quantile(sample, levels, method="inverted_cdf")
    assert [value(var(level), sample) for level in levels.tolist()] == expected.tolist()
