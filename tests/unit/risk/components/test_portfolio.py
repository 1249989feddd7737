"""Exponential moments of sums under normal dependence: the largest Q(Cu)/|u|² over all directions u."""

import numpy as np
import pytest
from scipy import optimize

from service.risk.components.contract import Growth, growth_along
from service.risk.components.portfolio import _Form, _largest
from service.risk.covers import Tails

RNG = np.random.default_rng(20)


def correlation(k, rank):
    rows = RNG.standard_normal((k, rank))
    rows /= np.linalg.norm(rows, axis=1, keepdims=True)
    return rows, rows @ rows.T


def searched(form, rows):
    """Return the largest Q(Cu)/|u|², at least 0, by ascent from the best of many directions."""

    def down(u):
        z = rows @ u
        squares = form.rising @ np.maximum(z, 0.0) ** 2 + form.falling @ np.minimum(z, 0.0) ** 2
        return -(squares + z @ form.products @ z) / (u @ u)

    starts = sorted(RNG.standard_normal((200, rows.shape[1])), key=down)[:8]
    return -min(optimize.minimize(down, start, options={"gtol": 1e-10}).fun for start in starts)


@pytest.mark.parametrize("case", range(30))
def test_the_largest_growth_is_what_a_search_finds(case):
    """Ascent by BFGS (Nocedal and Wright, Numerical Optimization, 2006, chapter 6) knows no orthants."""
    k = 2 + case % 4
    rows, matrix = correlation(k, 1 + case % k)
    rising, falling = RNG.choice([0.0, 1.0, -1.0], k) * RNG.uniform(0.5, 2.0, k), RNG.choice([0.0, 0.7, -0.7], k)
    rising[0] = 1.0
    products = RNG.standard_normal((k, k)) if case % 3 == 0 else np.zeros((k, k))
    products += products.T
    np.fill_diagonal(products, 0.0)
    form = _Form(rising, falling, products)
    largest, sharp = _largest(form, matrix)
    assert sharp or largest < 0.1
    assert largest == pytest.approx(max(searched(form, rows), 0.0), rel=1e-6, abs=1e-7)


@pytest.mark.parametrize("k", [2, 3, 5, 8])
def test_equal_eigenvalues_are_told_apart(k):
    """With equal correlations below 0 each exponential is largest alone: the rest are on the other side of 0."""
    matrix = np.full((k, k), -0.9 / (k - 1))
    np.fill_diagonal(matrix, 1.0)
    largest, sharp = _largest(_Form(np.ones(k), np.zeros(k), np.zeros((k, k))), matrix)
    assert (largest, sharp) == (pytest.approx(1.0, rel=1e-7), True)


@pytest.mark.parametrize("size", [1e-300, 1e307])
def test_the_unit_of_the_loss_does_not_matter(size):
    form = _Form(np.full(2, size), np.zeros(2), np.zeros((2, 2)))
    for value, expected in ((0.5, 1.5), (-0.5, 1.0)):
        largest, _ = _largest(form, np.array([[1.0, value], [value, 1.0]]))
        assert largest / size == pytest.approx(expected)


def test_beyond_a_few_factors_the_bound_is_a_bound():
    k = 9
    matrix = np.full((k, k), -0.1)
    np.fill_diagonal(matrix, 1.0)
    assert _largest(_Form(np.ones(k), np.zeros(k), np.zeros((k, k))), matrix) == (pytest.approx(1.1), False)
    # all eigenvectors of the largest eigenvalue in one orthant: nothing has to be split
    assert _largest(_Form(np.ones(k), np.zeros(k), np.zeros((k, k))), np.abs(matrix)) == (pytest.approx(1.8), True)


def test_growth_along_a_factor():
    """X with E exp(tX) for t < 2 and E exp(-tX) for t < 4 is z²/4 far up and -z²/8 far down."""
    tails = Tails(upper_exponential=2.0, lower_exponential=4.0)
    assert growth_along("x", tails, 1.0, 1.0) == Growth({"x": 0.5}, {"x": -0.25})
    assert growth_along("x", tails, -3.0, -3.0) == Growth({"x": -1.5}, {"x": 0.75})
    assert growth_along("x", Tails(), 1.0, 1.0) == Growth({"x": 0.0}, {"x": 0.0})
    # a gain without bound counts as none
    assert growth_along("x", Tails(lower_exponential=0.0), 1.0, 1.0) == Growth({"x": 0.0}, {"x": 0.0}, sharp=False)


def test_covers_let_no_gain_through():
    growth = Growth({"x": 2.0, "y": -1.0}, {"x": -3.0}, {("x", "y"): -0.5})
    assert growth.covered(2.0) == Growth({"x": 1.25, "y": 0.25}, {"x": 0.25, "y": 0.25}, {}, sharp=False)
    assert Growth({"x": 2.0}).covered(0.5) == Growth({"x": 4.0})
