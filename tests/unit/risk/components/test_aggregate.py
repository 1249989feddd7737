"""Laws of sums of claims on grids."""

import math

import numpy as np
import pytest
from scipy import special

from service.errors import NotDefined
from service.risk.components import BinomialFrequency, NegativeBinomialFrequency, PoissonFrequency
from service.risk.components.aggregate import STATED, ClaimSizes, aggregate_law, lattice_cell, sum_masses


def exponential(mean):
    return ClaimSizes(lambda y: np.exp(-np.maximum(y, 0.0) / mean), lambda p: -mean * math.log(p))


def lomax(shape):
    return ClaimSizes(lambda y: (1.0 + np.maximum(y, 0.0)) ** -shape, lambda p: p ** (-1.0 / shape) - 1.0)


def geometric(mean):
    return NegativeBinomialFrequency(family="negative_binomial", mean=mean, variance=mean * (1.0 + mean))


def test_geometric_sums_of_exponentials_are_exponential():
    """P(S > x) = b/(1+b) exp(-x/(θ(1+b))), e.g. Klugman, Panjer and Willmot, Loss Models, example 9.9."""
    b, theta = 3.0, 100.0
    law = aggregate_law(geometric(b), exponential(theta))
    p = np.array([0.3, 0.5, 0.9, 0.99, 0.999, 1 - 1e-6, 1 - 1e-9])
    expected = theta * (1.0 + b) * np.log(b / (1.0 + b) / (1.0 - p))
    np.testing.assert_allclose(law.quantile(p), expected, rtol=2e-5)
    np.testing.assert_array_equal(law.quantile(np.array([0.0, 0.1, 0.2499])), 0.0)


@pytest.mark.parametrize(
    ("frequency", "sizes"),
    [
        (geometric(3.0), exponential(100.0)),
        (PoissonFrequency(family="poisson", mean=5.0), lomax(2.5)),
        (PoissonFrequency(family="poisson", mean=5.0), lomax(0.8)),
        (BinomialFrequency(family="binomial", trials=10, probability=0.2), lomax(1.5)),
    ],
)
def test_bounds_enclose_the_quantile_and_are_narrow(frequency, sizes):
    law = aggregate_law(frequency, sizes)
    assert tuple(bound.probability for bound in law.bounds) == STATED
    for bound in law.bounds:
        assert bound.lower <= bound.value <= bound.upper
    assert next(one for one in law.bounds if one.probability == 0.995).upper < math.inf
    assert law.relative_width < 0.02
    assert np.all(np.diff(law.probabilities) >= 0.0)
    assert np.all(np.diff(law.amounts) >= 0.0)
    known = [bound for bound in law.bounds if bound.upper < math.inf]
    worst = max((bound.upper - bound.lower) / bound.value for bound in known if bound.value > 0.0)
    assert f"up to level {known[-1].probability:g} is off by more than {100.0 * worst:.2g} % (" in law.statement


def test_bounds_hold_the_closed_form():
    law = aggregate_law(geometric(3.0), exponential(100.0))
    for bound in law.bounds:
        exact = 400.0 * math.log(0.75 / (1.0 - bound.probability))
        assert bound.lower <= exact <= bound.upper


def test_heavy_tails_take_wider_grids():
    """P(S > x) ~ E[N] P(Y > x) for subexponential claims (Embrechts, Klüppelberg and Mikosch, theorem 1.3.9)."""
    law = aggregate_law(PoissonFrequency(family="poisson", mean=2.0), lomax(0.8))
    assert law.grids > 3
    beyond = 1e-9
    asymptotic = (beyond / 2.0) ** (-1.0 / 0.8) - 1.0
    assert law.quantile(np.array([1.0 - beyond]))[0] == pytest.approx(asymptotic, rel=1e-3)


def test_many_claims():
    """Poisson(2000) exponentials: the distribution function is a mixture of gamma ones."""
    law = aggregate_law(PoissonFrequency(family="poisson", mean=2000.0), exponential(1.0))
    p = np.array([0.01, 0.5, 0.995])
    k = np.arange(1500, 2600)[:, None]
    weights = np.exp(k * math.log(2000.0) - 2000.0 - special.gammaln(k + 1.0))
    found = (weights * special.gammainc(k, law.quantile(p))).sum(axis=0)
    np.testing.assert_allclose(found, p, atol=1e-4)


def test_a_tail_beyond_all_grids_is_refused():
    with pytest.raises(NotDefined, match="too heavy for a driver"):
        aggregate_law(PoissonFrequency(family="poisson", mean=1.0), lomax(0.15))


def test_claims_that_are_always_zero():
    law = aggregate_law(geometric(1.0), ClaimSizes(np.zeros_like, lambda _: 0.0))
    np.testing.assert_array_equal(law.quantile(np.array([0.0, 0.5, 1.0])), 0.0)
    assert law.statement.startswith("are computed exactly, on ")


def test_a_lattice_law_is_exact():
    def beyond(y):
        return np.where(y < 0.5, 1.0, np.where(y < 1.5, 0.25, 0.0))

    sizes = ClaimSizes(beyond, lambda _: 1.5, np.array([0.5, 1.5]), 1.5)
    law = aggregate_law(BinomialFrequency(family="binomial", trials=2, probability=0.5), sizes)
    assert law.stepped
    assert law.relative_width == 0.0
    np.testing.assert_allclose(law.amounts, [0.0, 0.5, 1.0, 1.5, 2.0, 2.5, 3.0])
    masses = [0.25, 0.375, 0.140625, 0.125, 0.09375, 0.0, 0.015625]
    np.testing.assert_allclose(np.diff(law.probabilities, prepend=0.0), masses, atol=1e-13)
    np.testing.assert_array_equal(law.quantile(np.array([0.0, 0.25, 0.26, 0.99, 1.0])), [0.0, 0.0, 0.5, 3.0, 3.0])


@pytest.mark.parametrize(
    ("atoms", "cell"),
    [([0.3, 0.9, 0.0], 0.3), ([2.0, 3.0], 1.0), ([0.1, 1e7], None), ([0.0], None), ([math.pi, 1.0], None)],
)
def test_the_cell_of_a_lattice(atoms, cell):
    assert lattice_cell(np.array(atoms)) == (pytest.approx(cell) if cell else None)


def test_masses_of_a_sum_without_wrapping():
    """Two claims of 3 on a grid of 4 cells make 6, which must not come back as 2."""
    frequency = BinomialFrequency(family="binomial", trials=2, probability=1.0)
    np.testing.assert_allclose(sum_masses(frequency, np.array([0.0, 0.5, 0.0, 0.5])), [0, 0, 0.25, 0], atol=2e-8)
