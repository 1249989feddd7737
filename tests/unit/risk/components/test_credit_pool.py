"""Component credit_pool."""

import math

import numpy as np
import pytest
from scipy import special

from service.errors import InvalidValue
from service.risk.components import (
    CreditObligor,
    CreditPoolComponent,
    FactorLoading,
    FactorSet,
    conditional_probability,
)
from service.risk.components.credit_pool import DENSE, MANY
from service.risk.copulas import ComonotonicCopula
from service.risk.covers import Tails
from service.risk.marginals import NormalMarginal
from tests.unit.risk.blocks import FALSE_ALARM, GivenBlock, assert_mean, losses, normal_factors

FACTORS = normal_factors("a", "b", correlation=((1.0, 0.5), (0.5, 1.0)))
SCENARIOS = 20_000


def obligor(pd=0.02, exposure=10.0, lgd=0.5, count=1, **weights):
    return CreditObligor(
        count=count,
        exposure=exposure,
        default_probability=pd,
        loss_given_default=lgd,
        loadings=[FactorLoading(factor=name, weight=weight) for name, weight in weights.items()],
    )


def pool(*obligors):
    return CreditPoolComponent(kind="credit_pool", obligors=list(obligors))


def various(number, seed=3):
    random = np.random.Generator(np.random.Philox(seed))
    for pd, exposure, weight in random.uniform([0.005, 1.0, 0.2], [0.3, 9.0, 0.7], (number, 3)):
        yield obligor(float(pd), float(exposure), a=float(weight))


@pytest.mark.parametrize("score", [-3.0, -1.0, 0.0, 2.0])
@pytest.mark.parametrize("number", [1, DENSE, 4 * DENSE, 300])
def test_conditional_mean_and_variance_of_different_obligors(number, score):
    """Given the factor defaults are independent: the mean is Σ e p(z) and the variance Σ e² p(z) (1 - p(z))."""
    obligors = list(various(number))
    found = losses(pool(*obligors), FACTORS, GivenBlock(np.full((2, SCENARIOS), score)))
    weights = np.array([one.loadings[0].weight for one in obligors])
    start = special.ndtri([one.default_probability for one in obligors])
    chance = special.ndtr((start - weights * score) / np.sqrt(1.0 - weights**2))
    amounts = np.array([one.exposure * one.loss_given_default for one in obligors])
    mean, variance = amounts @ chance, amounts**2 @ (chance * (1.0 - chance))
    assert_mean(found, mean)
    assert_mean((found - mean) ** 2, variance)


def test_default_probabilities_are_met_over_the_factors():
    random = np.random.Generator(np.random.Philox(5))
    first = random.standard_normal(200_000)
    second = 0.5 * first + math.sqrt(0.75) * random.standard_normal(200_000)
    component = pool(obligor(0.03, 1.0, 1.0, a=0.4, b=0.3), obligor(0.01, 2.0, 0.5, b=-0.6), obligor(0.2, 3.0, 1.0))
    found = losses(component, FACTORS, GivenBlock(np.vstack([first, second])))
    assert component.mean(FACTORS) == pytest.approx(0.03 + 0.01 + 0.6)
    assert_mean(found, 0.64)


def test_a_low_factor_means_default_unless_the_weight_is_negative():
    low = GivenBlock(np.full((2, SCENARIOS), -2.0))
    assert losses(pool(obligor(a=0.5)), FACTORS, low).mean() > 5.0 * 0.02
    assert losses(pool(obligor(a=-0.5)), FACTORS, low).mean() < 5.0 * 0.02


def test_many_obligors_of_a_kind_are_one_binomial_number():
    block = GivenBlock(np.full((2, SCENARIOS), -1.0))
    found = losses(pool(obligor(0.05, 1.0, 1.0, 4000, a=0.6), obligor(0.05, 1.0, 1.0, 1000, a=0.6)), FACTORS, block)
    chance = conditional_probability(
        special.ndtri(np.array([0.05])), np.array([[0.6]]), np.array([0.8]), np.array([[-1.0]])
    )[0, 0]
    expected = GivenBlock(block.factors).generator.binomial([5000], np.full((SCENARIOS, 1), chance))[:, 0]
    np.testing.assert_array_equal(found, expected)


def test_an_obligor_defaults_once():
    """As many equal obligors as make a bucket, all but certain to default or nearly so."""
    obligors = [obligor(0.2 + 1e-9 * number, 1.0, 1.0, a=0.1) for number in range(3 * DENSE)]
    found = losses(pool(*obligors), FACTORS, GivenBlock(np.full((2, SCENARIOS), 0.0)))
    assert found.max() <= 3 * DENSE
    np.testing.assert_array_equal(found, np.rint(found))


def test_an_index_without_a_part_of_its_own():
    scores = np.linspace(-3.0, 3.0, 61)
    found = losses(pool(obligor(0.1, 1.0, 1.0, a=1.0)), FACTORS, GivenBlock(np.vstack([scores, scores])))
    np.testing.assert_array_equal(found, (scores < special.ndtri(0.1)).astype(float))


def test_pools_without_factors_are_independent():
    component = pool(obligor(0.1, count=MANY + 1))
    assert component.independent
    assert component.tails(FACTORS) == Tails()
    assert_mean(losses(component, FACTORS, GivenBlock(np.zeros((2, SCENARIOS)))), 0.1 * 5.0 * (MANY + 1))


def test_thinned_defaults_of_two_obligors_are_independent_given_the_factor():
    obligors = [obligor(0.04 + 1e-6 * number, float(number < 2), 1.0, a=0.3) for number in range(40)]
    found = losses(pool(*obligors), FACTORS, GivenBlock(np.full((2, 200_000), -1.0)))
    chance = special.ndtr((special.ndtri(0.04) + 0.3) / math.sqrt(0.91))
    both = np.mean(found == 2.0)
    assert abs(both - chance**2) < FALSE_ALARM * math.sqrt(chance**2 / 200_000)


@pytest.mark.parametrize(
    ("obligors", "pointer", "words"),
    [
        ([obligor(), obligor(a=0.2, c=0.1)], "/obligors/1/loadings/1/factor", "no factor 'c'"),
        ([obligor(a=1.1)], "/obligors/0/loadings", "more than all of it"),
        ([obligor(a=0.7, b=0.7)], "/obligors/0/loadings", r"explain 1\.47"),
    ],
)
def test_what_does_not_fit_is_refused(obligors, pointer, words):
    with pytest.raises(InvalidValue, match=words) as caught:
        pool(*obligors).check(FACTORS)
    assert [fault.pointer for fault in caught.value.faults] == [pointer]


def test_several_loadings_need_a_normal_index():
    laws = tuple(NormalMarginal(family="normal", mean=0.0, standard_deviation=1.0) for _ in "ab")
    copula = ComonotonicCopula(family="comonotonic")
    factors = FactorSet(("a", "b"), laws, copula, copula.prepared(("a", "b")))
    pool(obligor(a=0.5)).check(factors)
    with pytest.raises(InvalidValue, match="gaussian or independent copula") as caught:
        pool(obligor(a=0.5), obligor(a=0.5, b=0.1)).check(factors)
    assert [fault.pointer for fault in caught.value.faults] == ["/obligors/1/loadings"]
