"""Bins, atoms and curve hold all probability, at the right losses."""

import numpy as np
import pytest

from service.risk.distribution import MOST_ATOMS, MOST_POINTS, WORST_POINTS, distribution_of


def drawn(seed=7):
    return np.random.default_rng(seed)


CASES = {
    "normal": drawn().normal(5.0, 2.0, 5000),
    "heavy": 1e6 * drawn().pareto(1.1, 20_000),
    "gains": -1e-7 * drawn().gamma(2.0, 1.0, 3000),
    "many at zero": np.where(drawn().random(5000) < 0.7, 0.0, drawn().lognormal(8.0, 2.0, 5000)),
    "counts": 3.0 * drawn().poisson(200, 5000),
    "few values": drawn().integers(0, 4, 1000) * 1.0,
    "one value": np.full(10, 7.0),
    "one scenario": np.array([3.0]),
    "last digits": 1e15 + drawn().integers(0, 3, 1000),
}


@pytest.mark.parametrize("name", CASES)
@pytest.mark.parametrize("weighted", [False, True])
def test_every_probability_is_somewhere(name, weighted):
    totals = CASES[name]
    weights = drawn(1).dirichlet(np.ones(totals.size)) if weighted else None
    found = distribution_of(totals, weights)
    atoms = sum(mass for _, mass in found.atoms)
    assert sum(found.body.masses) + found.below + found.above + atoms == pytest.approx(1.0, abs=1e-12)
    tail_atoms = sum(mass for loss, mass in found.atoms if loss >= found.tail_from)
    assert sum(found.tail.masses) + found.beyond + tail_atoms == pytest.approx(found.tail_probability, abs=1e-12)
    assert found.mean == pytest.approx(np.average(totals, weights=weights), rel=1e-12)
    assert (found.lowest, found.highest) == (totals.min(), totals.max())
    assert len(found.losses) == len(found.exceeding) <= MOST_POINTS
    assert found == distribution_of(totals, weights)


@pytest.mark.parametrize("name", CASES)
def test_the_curve_is_the_share_of_scenarios_beyond(name):
    totals = CASES[name]
    found = distribution_of(totals)
    assert found.losses[0] == totals.min()
    assert found.losses[-1] == totals.max()
    assert found.exceeding[-1] == 0.0
    for loss, chance in zip(found.losses, found.exceeding, strict=True):
        assert chance == np.count_nonzero(totals > loss) / totals.size


def test_weights_count_and_scenarios_without_probability_do_not_exist():
    found = distribution_of(np.array([5.0, 1.0, 3.0, 99.0]), np.array([0.2, 0.5, 0.3, 0.0]))
    assert found.losses == (1.0, 3.0, 5.0)
    assert found.exceeding == pytest.approx((0.5, 0.2, 0.0), abs=1e-15)
    assert found.highest == 5.0
    assert found.atoms == ((1.0, 0.5), (3.0, 0.3), (5.0, 0.2))
    assert found.weighted


def test_the_worst_points_are_never_thinned():
    totals = CASES["heavy"]
    found = distribution_of(totals)
    assert found.losses[-WORST_POINTS:] == tuple(np.sort(totals)[-WORST_POINTS:])
    chances = np.log(found.exceeding[:-WORST_POINTS])
    assert np.max(-np.diff(chances)) < 0.1  # evenly along the logarithm


def test_the_tail_has_bins_of_its_own():
    found = distribution_of(CASES["heavy"])
    assert found.tail.edges[0] == found.tail_from
    assert found.tail_probability == pytest.approx(0.05, abs=0.001)
    assert np.diff(found.body.edges)[0] < np.diff(found.tail.edges)[0] / 10
    assert found.body_range[1] < found.tail_range[1] / 10


def test_what_is_shown_lies_within():
    found = distribution_of(CASES["normal"], shown=[-40.0, 60.0])
    assert found.body_range[0] <= -40.0
    assert found.tail_range[1] >= 60.0


def test_few_distinct_losses_are_listed_and_a_heavy_one_is_taken_out_of_the_bins():
    few = distribution_of(CASES["few values"])
    assert [loss for loss, _ in few.atoms] == [0.0, 1.0, 2.0, 3.0]
    assert len(few.atoms) <= MOST_ATOMS
    assert few.body.masses == ()
    zero = distribution_of(CASES["many at zero"])
    ((loss, mass),) = zero.atoms
    assert loss == 0.0
    assert mass == np.mean(CASES["many at zero"] == 0.0)
    assert zero.body.masses[0] < 0.2


def test_bins_of_a_lattice_hold_equally_many_of_its_points():
    found = distribution_of(CASES["counts"])
    steps = np.diff(found.body.edges) / 3.0
    np.testing.assert_allclose(steps, np.rint(steps), rtol=0.0, atol=1e-9)
    assert all(abs(edge / 3.0 % 1.0 - 0.5) < 1e-9 for edge in found.body.edges)


def test_losses_that_are_zero_have_no_sign():
    found = distribution_of(np.array([-0.0, 1.0]))
    assert not np.signbit(found.losses[0])
    assert not np.signbit(found.lowest)
