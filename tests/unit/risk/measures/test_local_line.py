"""The line through the neighbours of a quantile."""

import numpy as np
import pytest

from service.risk.measures.local_line import local_line
from service.risk.quantiles import Ties
from tests.unit.risk.arithmetic import ordered

RNG = np.random.default_rng(9)


def _line(values, position, half_width, p=None):
    of, order = ordered(values, p)
    ties = Ties.of(of, tolerance=np.zeros(len(values)))
    return local_line(of, ties, position, half_width), of, order


@pytest.mark.parametrize("position", [0, 3, 20, 99, 198, 199])
@pytest.mark.parametrize("half_width", [1.0, 1.5, 11.0, 60.0, 500.0])
@pytest.mark.parametrize("kind", ["normal", "heavy", "ties"])
def test_weights_sum_to_one_and_their_mean_is_the_quantile(position, half_width, kind):
    values = {
        "normal": RNG.normal(size=200),
        "heavy": RNG.pareto(0.5, size=200),
        "ties": RNG.integers(0, 9, size=200) * 1.0,
    }[kind]
    line, of, _ = _line(values, position, half_width)
    q = of.values[0, position]
    assert line.weights.sum() == pytest.approx(1.0, abs=1e-12)
    assert line.weights @ of.values[0] == pytest.approx(q, rel=1e-12, abs=1e-12)
    assert line.slopes(of.values.T) == pytest.approx([1.0]) or np.ptp(of.values[0][line.kernel > 0.0]) == 0.0
    assert line.window[0] <= q <= line.window[1]
    assert line.window[2] == np.count_nonzero(line.kernel)


def test_a_straight_line_is_read_off_exactly():
    line, of, _ = _line(RNG.normal(size=300), 40, 25.0)
    columns = np.stack([3.0 * of.values[0] - 1.0, np.full(300, 2.0)], axis=1)
    q = of.values[0, 40]
    assert line.weights @ columns == pytest.approx([3.0 * q - 1.0, 2.0])
    assert line.slopes(columns) == pytest.approx([3.0, 0.0], abs=1e-12)


def test_the_kernel_is_a_parabola_in_rank():
    line, _, _ = _line(np.arange(100.0), 50, 10.0)
    expected = np.maximum(1.0 - ((np.arange(100) - 50) / 10.0) ** 2, 0.0) / 100.0
    assert line.kernel == pytest.approx(expected)
    assert line.window == (40.0, 58.0, 19)  # losses descend: position 41 is 58, position 59 is 40


def test_it_is_weighted_least_squares():
    values, column = RNG.normal(size=120), RNG.normal(size=120)
    line, of, order = _line(values, 30, 22.0)
    design = np.stack([np.ones(120), of.values[0] - of.values[0, 30]], axis=1)
    root = np.sqrt(line.kernel)
    fitted, *_ = np.linalg.lstsq(design * root[:, None], column[order] * root, rcond=None)
    assert line.weights @ column[order] == pytest.approx(fitted[0])
    assert line.slopes(column[order][:, None]) == pytest.approx([fitted[1]])


def test_tied_scenarios_share_their_weight_by_probability():
    values = np.repeat(np.arange(30.0), 4)
    p = RNG.random(120)
    p /= p.sum()
    line, _, order = _line(values, 37, 0.2, p)
    atoms = (np.arange(120) // 4)[:, None] == np.arange(30)
    per_mass = line.weights / p[order]
    for members in atoms.T:
        assert np.ptp(per_mass[members]) == pytest.approx(0.0, abs=1e-12)
    assert line.at_centre == 4
    assert np.flatnonzero(line.centre).tolist() == [36, 37, 38, 39]


def test_scenarios_without_probability_are_not_at_the_centre():
    values, p = np.array([2.0, 2.0, 2.0, 1.0, 0.0]), np.array([0.0, 0.2, 0.2, 0.3, 0.3])
    line, _, _ = _line(values, 1, 0.1, p)
    assert line.at_centre == 2
    assert line.weights == pytest.approx([0.0, 0.5, 0.5, 0.0, 0.0])


def test_all_losses_alike():
    line, _, _ = _line(np.full(50, 0.1), 10, 5.0)
    assert line.weights == pytest.approx(np.full(50, 0.02))
    assert line.slopes(RNG.normal(size=(50, 2))).tolist() == [0.0, 0.0]
