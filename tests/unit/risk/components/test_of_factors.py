"""Components that are functions of the factors alone."""

import math

import numpy as np
import pytest

from service.errors import InvalidValue, NotDefined
from service.risk.components import (
    ConstantComponent,
    DeltaGammaComponent,
    FactorExposure,
    FactorPair,
    FactorSet,
    LinearComponent,
    RevaluationGridComponent,
)
from service.risk.copulas import IndependentCopula
from service.risk.covers import Tails
from service.risk.marginals import ExponentialMarginal, LomaxMarginal, UniformMarginal
from tests.unit.risk.blocks import GivenBlock, losses, normal_factors

NAMES = ("a", "b", "c")
FACTORS = normal_factors(*NAMES, mean=1.0, standard_deviation=2.0)
DRAWN = np.random.Generator(np.random.Philox(7)).standard_normal((3, 50))


def linear(**amounts):
    exposures = [FactorExposure(factor=name, amount=amount) for name, amount in amounts.items()]
    return LinearComponent(kind="linear", exposures=exposures)


def quadratic(gamma, **delta):
    return DeltaGammaComponent(
        kind="delta_gamma",
        delta=[FactorExposure(factor=name, amount=amount) for name, amount in delta.items()],
        gamma=[FactorPair(first=first, second=second, amount=amount) for first, second, amount in gamma],
    )


def grid(beyond, points=(-1.0, 0.0, 2.0), values=(30.0, 0.0, -10.0)):
    return RevaluationGridComponent(
        kind="revaluation_grid", factor="b", points=list(points), losses=list(values), beyond=beyond
    )


def set_of(**laws):
    return FactorSet(tuple(laws), tuple(laws.values()), IndependentCopula(family="independent"))


HEAVY = LomaxMarginal(family="lomax", shape=2.5, scale=1.0)
HEAVIER = LomaxMarginal(family="lomax", shape=1.5, scale=1.0)
LIGHT = ExponentialMarginal(family="exponential", mean=4.0)
BOUNDED = UniformMarginal(family="uniform", lower=-2.0, upper=1.0)


def test_constant():
    component = ConstantComponent(kind="constant", amount=-3.5)
    np.testing.assert_array_equal(losses(component, FACTORS, GivenBlock(DRAWN)), np.full(50, -3.5))
    assert component.mean(FACTORS) == -3.5
    assert component.tails(FACTORS) == Tails()


def test_linear_adds_exposures_to_the_same_factor():
    component = LinearComponent(
        kind="linear",
        exposures=[
            FactorExposure(factor="c", amount=2.0),
            FactorExposure(factor="a", amount=-1.0),
            FactorExposure(factor="c", amount=0.5),
        ],
    )
    expected = 2.5 * DRAWN[2] - DRAWN[0]
    np.testing.assert_allclose(losses(component, FACTORS, GivenBlock(DRAWN)), expected, rtol=1e-14)
    assert component.used == ("c", "a")
    assert component.mean(FACTORS) == pytest.approx(1.5)


@pytest.mark.parametrize("pairs", [2, 60])
def test_delta_gamma_is_the_quadratic_form(pairs):
    """Few pairs are added one by one, many as a matrix; the reference is δ′x + ½x′Γx with Γ symmetric."""
    random = np.random.Generator(np.random.Philox(3))
    gamma = [(*random.choice(NAMES, 2), float(random.normal())) for _ in range(pairs)]
    gamma = [(str(first), str(second), amount) for first, second, amount in gamma]
    matrix = np.zeros((3, 3))
    for first, second, amount in gamma:
        i, j = NAMES.index(first), NAMES.index(second)
        matrix[i, j] += amount
        if i != j:
            matrix[j, i] += amount
    component = quadratic(gamma, a=1.5, c=-2.0)
    expected = 1.5 * DRAWN[0] - 2.0 * DRAWN[2] + 0.5 * np.einsum("in,ij,jn->n", DRAWN, matrix, DRAWN)
    np.testing.assert_allclose(losses(component, FACTORS, GivenBlock(DRAWN)), expected, rtol=1e-12, atol=1e-12)


def test_delta_gamma_from_numeric_derivatives_is_close_to_the_position_itself():
    """Second-order Taylor series of exp(0.1 a - 0.2 b) for small moves: what is left is of third order."""

    def position(a, b):
        return np.exp(0.1 * a - 0.2 * b)

    step = 1e-4
    first_a = (position(step, 0) - position(-step, 0)) / (2 * step)
    first_b = (position(0, step) - position(0, -step)) / (2 * step)
    second_a = (position(step, 0) - 2 + position(-step, 0)) / step**2
    second_b = (position(0, step) - 2 + position(0, -step)) / step**2
    cross = (position(step, step) - position(step, -step) - position(-step, step) + position(-step, -step)) / (
        4 * step**2
    )
    component = quadratic(
        [("a", "a", second_a), ("b", "b", second_b), ("b", "a", cross)], a=float(first_a), b=float(first_b)
    )
    moves = 0.1 * DRAWN
    found = 1.0 + losses(component, FACTORS, GivenBlock(moves))
    np.testing.assert_allclose(found, position(moves[0], moves[1]), rtol=0.0, atol=1e-4)


def test_means_of_squares():
    assert quadratic([("a", "a", 3.0)], b=2.0).mean(FACTORS) == pytest.approx(2.0 + 1.5 * (4.0 + 1.0))
    assert quadratic([("a", "b", 3.0)]).mean(FACTORS) is None


def test_the_grid_interpolates_and_goes_on_as_asked():
    at = np.array([-3.0, -1.0, -0.5, 0.0, 1.0, 2.0, 6.0])
    block = GivenBlock(np.vstack([at, at, at]))
    np.testing.assert_allclose(losses(grid("flat"), FACTORS, block), [30, 30, 15, 0, -5, -10, -10])
    np.testing.assert_allclose(losses(grid("linear"), FACTORS, block), [90, 30, 15, 0, -5, -10, -30])


def test_a_grid_that_refuses_names_factor_value_and_range():
    with pytest.raises(NotDefined, match=r"factor 'b' takes the value 6, .* from -1 to 2") as caught:
        losses(grid("refuse"), FACTORS, GivenBlock(np.array([[0.0], [6.0], [0.0]])))
    assert caught.value.faults[0].pointer == "/points"
    np.testing.assert_allclose(losses(grid("refuse"), FACTORS, GivenBlock(np.full((3, 4), 2.0))), -10.0)


@pytest.mark.parametrize(
    ("points", "values", "words"),
    [
        ((0.0, 1.0, 1.0), (1.0, 2.0, 3.0), "strictly increase, but 1.0 at position 2"),
        ((0.0, 1.0, 2.0), (1.0, 2.0), "3 points and 2 losses"),
    ],
)
def test_grids_that_are_none_are_refused(points, values, words):
    with pytest.raises(ValueError, match=words):
        grid("flat", points, values)


@pytest.mark.parametrize(
    ("component", "pointers"),
    [
        (linear(a=1.0, d=2.0), ["/exposures/1/factor"]),
        (
            quadratic([("a", "d", 1.0), ("e", "b", 1.0)], f=1.0),
            ["/delta/0/factor", "/gamma/0/second", "/gamma/1/first"],
        ),
        (grid("flat"), []),
    ],
)
def test_unknown_factors_are_pointed_at(component, pointers):
    if not pointers:
        component.check(FACTORS)
        return
    with pytest.raises(InvalidValue) as caught:
        component.check(FACTORS)
    assert [fault.pointer for fault in caught.value.faults] == pointers
    assert caught.value.faults[0].code == "unknown_factor"


def test_a_quadratic_of_nothing_is_refused():
    with pytest.raises(ValueError, match="at least one term"):
        quadratic([])


def test_tails_of_linear_components():
    factors = set_of(a=HEAVY, b=LIGHT, c=HEAVIER)
    assert linear(a=3.0).tails(factors) == Tails(upper_index=2.5, upper_exponential=0.0)
    assert linear(a=-3.0).tails(factors) == Tails(lower_index=2.5, lower_exponential=0.0)
    assert linear(a=1.0, c=-1.0).tails(factors) == Tails(2.5, 1.5, 0.0, 0.0)
    assert linear(b=0.5).tails(factors) == Tails(upper_exponential=0.5)
    both = set_of(a=LIGHT, b=LIGHT)
    assert linear(a=1.0, b=1.0).tails(both).upper_exponential == 0.25


def test_squares_halve_the_index_and_products_combine():
    factors = set_of(a=HEAVY, b=HEAVIER, c=BOUNDED)
    assert quadratic([("a", "a", 2.0)]).tails(factors) == Tails(upper_index=1.25, upper_exponential=0.0)
    assert quadratic([("a", "a", -2.0)]).tails(factors) == Tails(lower_index=1.25, lower_exponential=0.0)
    product = quadratic([("a", "b", 1.0)]).tails(factors)
    assert product.upper_index == pytest.approx(1.0 / (1.0 / 2.5 + 1.0 / 1.5))
    assert product.lower_index == math.inf  # neither is ever negative
    mixed = quadratic([("a", "c", 1.0)]).tails(factors)
    assert (mixed.upper_index, mixed.lower_index) == (2.5, 2.5)  # a uniform on (-2, 1) has either sign


def test_squares_of_normals_have_an_exponential_moment_up_to_a_point():
    """E[exp(t γ X²/2)] of X ~ N(0, σ²) is (1 - tγσ²)^(-1/2): finite for t < 1/(γσ²)."""
    assert quadratic([("a", "a", 3.0)]).tails(FACTORS).upper_exponential == pytest.approx(1.0 / (3.0 * 4.0))
    assert quadratic([("c", "c", 3.0)]).tails(set_of(c=BOUNDED)) == Tails()


def test_tails_of_grids():
    factors = set_of(b=HEAVY)
    assert grid("flat").tails(factors) == Tails()
    assert grid("linear").tails(factors) == Tails(lower_index=2.5, lower_exponential=0.0)
    assert grid("linear", values=(0.0, 0.0, 8.0)).tails(set_of(b=LIGHT)).upper_exponential == pytest.approx(0.0625)
