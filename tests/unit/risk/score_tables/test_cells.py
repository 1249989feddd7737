"""Piecewise polynomials with a checked error."""

import numpy as np
import pytest

from service.risk.score_tables.cells import CUBIC, MOST_CELLS, QUINTIC, Target, fitted


def target(function, *, allowed=1e-10, start=-1.0, stop=3.0, anchor=None):
    return Target(
        function=function,
        allowed=lambda values: np.full(values.shape, allowed),
        probability=lambda edges: np.diff(edges) / (stop - start),
        start=start,
        stop=stop,
        anchor=anchor,
    )


def waves(marks):
    return np.sin(6.0 * marks)


@pytest.mark.parametrize("degree", [CUBIC, QUINTIC])
@pytest.mark.parametrize("allowed", [1e-9, 1e-11])
def test_the_error_is_checked(degree, allowed):
    cells, missing = fitted(target(waves, allowed=allowed), degree, exponential=False)
    marks = np.random.Generator(np.random.PCG64(1)).uniform(-1.0, 3.0, 20_000)
    assert missing == 0.0
    assert np.max(np.abs(cells.at(marks) - waves(marks))) <= 1.01 * allowed  # checked at most, not all, places
    again, _ = fitted(target(waves, allowed=allowed / 1000.0), degree, exponential=False)
    assert again.count > cells.count


def test_logarithms_are_fitted_where_values_span_many_sizes():
    cells, missing = fitted(
        Target(
            function=lambda marks: np.exp(40.0 * marks),
            allowed=lambda values: 1e-12 * values,
            probability=np.diff,
            start=-8.0,
            stop=8.0,
        ),
        QUINTIC,
        exponential=True,
    )
    assert missing == 0.0
    assert cells.count < 100
    assert cells.at(np.array([-5.0]))[0] == pytest.approx(np.exp(-200.0), rel=1e-12)


def test_zeros_have_no_logarithm_but_a_value():
    cells, missing = fitted(target(np.zeros_like), QUINTIC, exponential=True)
    assert missing == 0.0
    assert np.all(cells.at(np.linspace(-0.9, 2.9, 50)) == 0.0)


def test_a_jump_is_left_out():
    cells, missing = fitted(target(lambda marks: np.where(marks < 1.2345, 0.0, 1.0)), CUBIC, exponential=False)
    assert cells.count == MOST_CELLS
    assert missing == pytest.approx(1.0 / MOST_CELLS)
    marks = np.linspace(-0.99, 2.99, 100_001)
    found = cells.at(marks)
    bad = np.isnan(found)
    assert 0 < np.count_nonzero(bad) <= 30
    assert np.all(np.abs(marks[bad] - 1.2345) <= 4.0 / MOST_CELLS)
    assert np.allclose(found[~bad], marks[~bad] > 1.2345, atol=1e-10)


@pytest.mark.parametrize("anchor", [-0.3, 1e-9 - 1.0, 0.0, 2.999999, 1.0])
def test_a_bend_on_an_edge_does_no_harm(anchor):
    cells, missing = fitted(target(lambda marks: np.abs(marks - anchor), anchor=anchor), CUBIC, exponential=False)
    assert cells.count < 200
    assert missing <= 1e-7
    inner = np.linspace(-0.99, 2.99, 10_001)
    assert np.allclose(cells.at(inner), np.abs(inner - anchor), atol=1e-10)


def test_nothing_is_known_outside():
    cells, _ = fitted(target(np.sin), CUBIC, exponential=False)
    assert np.all(np.isnan(cells.at(np.array([-1e9, -1.001, 3.001, 1e9]))))


def test_what_the_function_does_not_know_is_left_out():
    cells, missing = fitted(target(lambda marks: np.where(marks > 2.0, np.nan, marks)), CUBIC, exponential=False)
    assert missing == pytest.approx(0.25, abs=0.03)
    assert np.isnan(cells.at(np.array([2.5]))[0])
    assert cells.at(np.array([1.5]))[0] == pytest.approx(1.5)
