"""Standard deviation, expectile and entropic at their ends."""

import numpy as np
import pytest

from service.errors import NotDefined
from tests.unit.risk.arithmetic import contributions, measure, split, total, value

LOSSES = np.random.default_rng(15).normal(size=(300, 3))
TOTALS = LOSSES.sum(axis=1)


@pytest.mark.parametrize("size", [1.0, 1e-150, 1e149])
def test_standard_deviations_of_any_size(size):
    one = measure("standard_deviation", multiple=2.0)
    assert value(one, size * LOSSES) == pytest.approx(2.0 * size * TOTALS.std(), rel=1e-12)


def test_the_standard_deviation_of_a_distant_loss_keeps_its_digits():
    moved = np.round(TOTALS * 1024.0) / 1024.0
    assert value(measure("standard_deviation"), moved + 2.0**30) == pytest.approx(moved.std(), rel=1e-12)


@pytest.mark.parametrize("constant", [0.0, 0.1, -1e9])
def test_no_variation(constant):
    one = measure("standard_deviation")
    losses = np.full((37, 3), constant)
    assert value(one, losses) == 0.0
    with pytest.raises(NotDefined, match="does not vary"):
        contributions("euler", one, losses)


def test_expectiles():
    assert value(measure("expectile", level=0.5), TOTALS) == pytest.approx(TOTALS.mean(), rel=1e-12)
    assert value(measure("expectile", level=1e-12), TOTALS) == pytest.approx(TOTALS.min(), rel=1e-9)
    assert value(measure("expectile", level=1.0 - 1e-12), TOTALS) == pytest.approx(TOTALS.max(), rel=1e-9)
    up, down = (value(measure("expectile", level=level), sign * TOTALS) for level, sign in ((0.8, 1.0), (0.2, -1.0)))
    assert up == pytest.approx(-down, rel=1e-12)
    assert value(measure("expectile", level=0.9), np.full(20, 0.1)) == pytest.approx(0.1, rel=1e-15)


@pytest.mark.parametrize("scale", [1.0, 0.1, 1.0 / 3.0])
def test_an_atom_at_the_expectile_takes_the_mean_of_both_weights(scale):
    """Totals -1 twice, 0 twice and 1: 2/3 of the excess and 1/3 of the shortfall of 0 balance, 2/3 x 1/4 = 1/3 x 1/2.

    The two scenarios at 0 count with the mean of both weights, whatever rounding made of their totals.
    """
    losses = np.array([[-1.0, 0.0], [-0.5, -0.5], [0.0, 0.0], [4.0, -4.0], [0.25, 0.75]]) * scale
    p = np.array([0.25, 0.25, 0.125, 0.125, 0.25])
    one = measure("expectile", level=2.0 / 3.0)
    assert value(one, losses, p) == pytest.approx(0.0, abs=1e-15)
    above, at, below = 2.0 / 3.0, 0.5, 1.0 / 3.0
    weights = np.array([below, below, at, at, above]) * p
    expected = weights @ losses / weights.sum()
    assert contributions("euler", one, losses, p) == pytest.approx(expected, abs=1e-14)


def test_contributions_at_an_expectile_on_an_atom_do_not_depend_on_rounding():
    rng = np.random.default_rng(0)
    tenths = rng.integers(0, 4, size=(2000, 4))
    tenths[:, -1] = rng.integers(4, 8, size=2000) - tenths[:, :-1].sum(axis=1)
    for level in (0.75, 0.8, 0.9):
        one = measure("expectile", level=level)
        exact = contributions("euler", one, tenths * 1.0)
        assert contributions("euler", one, tenths / 10.0) == pytest.approx(exact / 10.0, rel=1e-10)


def test_entropic_between_mean_and_maximum():
    figures = [value(measure("entropic", aversion=a), TOTALS) for a in (1e-9, 0.1, 1.0, 100.0, 1e9)]
    assert figures == sorted(figures)
    assert figures[0] == pytest.approx(TOTALS.mean(), abs=1e-8)
    assert figures[-1] == pytest.approx(TOTALS.max(), abs=1e-8)


@pytest.mark.parametrize("size", [1e-3, 1.0, 1e6, 1e12])
def test_entropic_contributions_add_up_far_beyond_overflow(size):
    one = measure("entropic", aversion=2.0)
    found = contributions("euler", one, size * LOSSES)
    assert found.sum() == pytest.approx(value(one, size * LOSSES), abs=1e-12 * np.abs(found).sum())


def test_entropic_of_a_loss_that_hardly_ever_happens():
    """With probability 1e-20 its exponential counts, its distance from 1 in binary64 does not."""
    losses, p = np.array([100.0, 0.0, -1.0]), np.array([1e-20, 0.5, 0.5])
    expected = np.log(1e-20 * np.exp(100.0) + 0.5 + 0.5 * np.exp(-1.0))
    assert value(measure("entropic", aversion=1.0), losses, p) == pytest.approx(expected, rel=1e-14)
    expected = np.log(1e-20 * np.exp(10.0) + 0.5 + 0.5 * np.exp(-0.1)) / 0.1
    assert value(measure("entropic", aversion=0.1), losses, p) == pytest.approx(expected, rel=1e-13)
    expected = 100.0 + np.log(1e-20) / 10.0
    assert value(measure("entropic", aversion=10.0), losses, p) == pytest.approx(expected, rel=1e-14)


@pytest.mark.parametrize("place", [0, 1, 299])
def test_entropic_without_probability(place):
    p = np.full(300, 1.0 / 299.0)
    losses = LOSSES.copy()
    losses[place] = (1e4, 0.0, 0.0) if place != 1 else (-1e4, 0.0, 0.0)
    p[place] = 0.0
    one = measure("entropic", aversion=1.0)
    rest = np.delete(losses, place, axis=0)
    assert value(one, losses, p) == pytest.approx(value(one, rest), rel=1e-12)
    found, expected = split("euler", one, losses, p).figures, split("euler", one, rest).figures
    assert found.values == pytest.approx(expected.values, rel=1e-11)
    assert found.standard_errors == pytest.approx(expected.standard_errors, rel=1e-9)


@pytest.mark.parametrize("aversion", [1e-300, 1e-310])
def test_entropic_with_hardly_any_aversion_is_the_mean(aversion):
    one = measure("entropic", aversion=aversion)
    assert value(one, TOTALS) == pytest.approx(TOTALS.mean(), abs=1e-9)
    assert contributions("euler", one, LOSSES) == pytest.approx(LOSSES.mean(axis=0), abs=1e-9)
    contributions("euler", measure("entropic", aversion=5e-324), LOSSES)  # the least binary64 number


def test_entropic_beyond_telling_apart():
    with pytest.raises(NotDefined, match="use a smaller aversion"):
        contributions("euler", measure("entropic", aversion=1e20), LOSSES)


@pytest.mark.parametrize(
    "one",
    [measure("standard_deviation"), measure("expectile", level=0.9), measure("entropic", aversion=1.0)],
    ids=lambda one: one.kind,
)
def test_errors_are_those_of_the_bootstrap(one):
    """Seeds fixed; 4 standard errors of an sd from 400 resamples are 14 %, false alarms 6e-5."""
    rng = np.random.default_rng(16)
    losses = rng.normal(size=(800, 2)) @ np.array([[1.0, 0.5], [0.0, 1.0]])
    figures, parts = [], []
    for _ in range(400):
        drawn = losses[rng.integers(0, 800, size=800)]
        figures.append(value(one, drawn, sampled=False))
        parts.append(contributions("euler", one, drawn, sampled=False))
    assert total(one, losses).standard_errors[0] == pytest.approx(np.std(figures), rel=0.14)
    found = split("euler", one, losses).figures.standard_errors
    assert found == pytest.approx(np.std(parts, axis=0), rel=0.14)
