"""What every allocation must do, whatever the rule, the measure and the losses."""

import math
from itertools import permutations

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from service.errors import NotDefined
from service.risk.allocation import RULES
from service.risk.shapley import shapley_values
from tests.properties.tables import (
    ADDITIVE,
    COHERENT,
    DISTORTIONS,
    MEASURES,
    QUANTILES,
    VARYING,
    bounded,
    ids,
    of_kind,
    often,
    scale,
    tables,
    weighted_tables,
)
from tests.unit.risk.arithmetic import alone, contributions, es, framed, loss_table, measure, split, total, value, var

every_measure = pytest.mark.parametrize("one", MEASURES, ids=ids)
every_rule = pytest.mark.parametrize("rule", RULES)
SMOOTHINGS = ("auto", "none")


def given_by(rule, one, losses, p=None, **more):
    """Return what a rule gives; None where it refuses, which it may."""
    try:
        return split(rule, one, losses, p, **more).figures
    except NotDefined:
        return None


def stable(found, losses):
    """Whether a rule's contributions are not blown up by a denominator near 0 (whatever it was)."""
    return found is not None and np.max(np.abs(found.values)) < 1e3 * scale(losses)


@every_measure
@pytest.mark.parametrize("rule", ADDITIVE)
@bounded
@given(weighted_tables(VARYING, columns=4), st.sampled_from(SMOOTHINGS))
def test_contributions_add_up(rule, one, table, smoothing):
    losses, p = table
    found = given_by(rule, one, losses, p, smoothing=smoothing)
    if found is not None:
        figure = value(one, losses, p)
        size = np.abs(found.values).sum() + abs(figure) + 1e-3 * scale(losses)  # where all contributions nearly vanish
        assert found.values.sum() == pytest.approx(figure, rel=0.0, abs=1e-12 * size)


@every_measure
@bounded
@given(weighted_tables(VARYING, columns=4), st.randoms(use_true_random=False), st.sampled_from(SMOOTHINGS))
def test_the_order_of_scenarios_and_columns_does_not_matter(one, table, random, smoothing):
    losses, p = table
    n, d = losses.shape
    rows, columns = (np.array(random.sample(range(count), count)) for count in (n, d))
    turned, weights = losses[rows][:, columns], None if p is None else p[rows]
    for rule in RULES:
        found, other = (given_by(rule, one, x, w, smoothing=smoothing) for x, w in ((losses, p), (turned, weights)))
        if stable(found, losses):
            near = pytest.approx(found.values[columns], rel=1e-9, abs=3e-12 * scale(losses))
            assert other.values == near, rule


@every_rule
@often
@given(weighted_tables(VARYING, columns=4), st.sampled_from(MEASURES))
def test_repeating_every_scenario_changes_no_contribution(rule, table, one):
    losses, p = table
    again = np.tile(losses, (2, 1))
    weights = None if p is None else np.tile(p, 2) / 2.0
    found = given_by(rule, one, losses, p, smoothing="none")
    if stable(found, losses):
        other = given_by(rule, one, again, weights, smoothing="none")
        assert other.values == pytest.approx(found.values, rel=1e-9, abs=3e-12 * scale(losses))


@every_rule
@often
@given(weighted_tables(VARYING, columns=4), st.sampled_from([one for one in MEASURES if one.kind != "entropic"]))
def test_contributions_grow_with_the_size_of_the_book(rule, table, one):
    losses, p = table
    found = given_by(rule, one, losses, p)
    if stable(found, losses):
        other = given_by(rule, one, 8.0 * losses, p)  # a power of 2: rounding is the same
        assert other.values == pytest.approx(8.0 * found.values, rel=1e-12, abs=1e-13 * scale(losses))


@every_rule
@often
@given(weighted_tables(VARYING, columns=4), st.sampled_from([one for one in MEASURES if one.above == "mean"]))
def test_above_mean_takes_the_mean_from_the_euler_contributions(rule, table, one):
    losses, p = table
    whole = measure(one.kind, **one.parameters)
    means = np.average(losses, axis=0, weights=p)
    found, other = given_by(rule, one, losses, p), given_by(rule, whole, losses, p)
    if rule in ("euler", "with_without", "covariance", "shapley") and stable(found, losses):
        # all but the proportional rule are linear in the measure, and the mean is its own contribution
        assert found.values == pytest.approx(other.values - means, rel=1e-9, abs=1e-11 * scale(losses))


ATTRIBUTES = [{"line": "hull", "all": "1"}, {"all": "1"}, {"line": "hull", "all": "1"}, {"line": "cargo", "all": "1"}]


@every_measure
@bounded
@given(weighted_tables(VARYING, columns=4))
def test_groups_are_sums_of_their_members(one, table):
    losses, p = table
    d = losses.shape[1]
    book = loss_table(losses, p, attributes=ATTRIBUTES[:d])
    groups = framed(one, book, group_by=["line", "all"] if d else []).groups
    single = alone(one, book, group_by=["line", "all"]).values
    for j, group in enumerate(groups):
        summed = losses[:, group.members].sum(axis=1)
        assert single[d + j] == pytest.approx(value(one, summed, p), rel=0.0, abs=3e-12 * scale(losses))
    assert single[-1] == pytest.approx(value(one, losses, p), rel=0.0, abs=3e-12 * scale(losses))
    for rule in RULES:
        found = given_by(rule, one, book, group_by=["line", "all"])
        if not stable(found, losses):
            continue
        near = {"rel": 0.0, "abs": 1e-11 * max(scale(losses), np.abs(found.values).sum())}
        for j, group in enumerate(groups):
            expected = found.values[group.members].sum()
            if rule == "with_without":  # a group is removed as one
                rest = np.delete(losses, group.members, axis=1).sum(axis=1)
                expected = value(one, losses, p) - value(one, rest, p)
            assert found.values[d + j] == pytest.approx(expected, **near), (rule, group.name)


@pytest.mark.parametrize("one", [one for one in of_kind(*DISTORTIONS) if one.above == "zero"], ids=ids)
@bounded
@given(weighted_tables(["normal", "ties", "heavy"], columns=1), st.integers(0, 2**32 - 1))
def test_comonotone_losses_contribute_what_they_cost_alone(one, table, seed):
    losses, p = table
    rng = np.random.default_rng(seed)
    other = np.interp(losses[:, 0], np.sort(rng.normal(size=4)), np.sort(rng.normal(size=4)))
    both = np.stack([losses[:, 0], other], axis=1)
    expected = alone(one, both, p).values
    near = pytest.approx(expected, rel=0.0, abs=5e-12 * scale(both))
    assert contributions("euler", one, both, p, smoothing="none") == near
    assert contributions("shapley", one, both, p) == near


@pytest.mark.parametrize("one", of_kind(*COHERENT, "standard_deviation"), ids=ids)
@bounded
@given(weighted_tables(VARYING))
def test_no_part_contributes_more_than_it_costs_alone(one, table):
    """Coherent measures: the Euler allocation is in the core (Tasche 1999), seen from each part."""
    losses, p = table
    found = given_by("euler", one, losses, p)
    if found is not None:
        assert (found.values <= alone(one, losses, p).values + 1e-11 * scale(losses)).all()


@pytest.mark.parametrize("one", of_kind("standard_deviation"), ids=ids)
@bounded
@given(weighted_tables(VARYING))
def test_standard_deviation_is_split_by_covariance_with_the_total(one, table):
    losses, p = table
    totals = losses.sum(axis=1)
    weights = np.full(totals.size, 1.0 / totals.size) if p is None else p
    centred = totals - weights @ totals
    sd = math.sqrt(weights @ centred**2)
    if sd > 1e-6 * scale(losses):
        expected = one.multiple * (weights * centred) @ losses / sd
        assert contributions("euler", one, losses, p) == pytest.approx(expected, rel=1e-9, abs=1e-10 * scale(losses))


@pytest.mark.parametrize("one", [one for one in MEASURES if one.kind not in (*QUANTILES, "entropic")], ids=ids)
@bounded
@given(weighted_tables(["normal"], least=8, columns=3))
def test_euler_contributions_are_derivatives_in_size(one, table):
    """(rho(L + h L_i) - rho(L - h L_i)) / 2h tends to the contribution.

    Piecewise linear measures have that quotient exactly until totals change places, h below half the least gap; for
    the standard deviation and the expectile it is off by h^2 times a third derivative.
    """
    losses, p = table
    totals = losses.sum(axis=1)
    gap = np.min(np.diff(np.sort(totals)))
    h = 2.0**-17
    if gap < 4.0 * h * np.max(np.abs(losses)):
        return
    found = given_by("euler", one, losses, p)
    if found is None:
        return
    for i in range(losses.shape[1]):
        up, down = (value(one, totals + sign * h * losses[:, i], p) for sign in (1.0, -1.0))
        assert found.values[i] == pytest.approx((up - down) / (2.0 * h), abs=1e-8 * scale(losses))


@often
@given(weighted_tables(["normal", "ties"], least=2, columns=3), st.sampled_from([0.05, 1.0, 20.0]))
def test_entropic_contributions_are_derivatives_along_the_diagonal(table, aversion):
    """The figure of t L grows in t by the sum of contributions of the enlarged book: Aumann and Shapley."""
    losses, p = table
    one = measure("entropic", aversion=aversion)
    found = contributions("euler", one, losses, p)
    points, shares = np.polynomial.legendre.leggauss(200)
    weights = np.full(len(losses), 1.0 / len(losses)) if p is None else p
    totals = losses.sum(axis=1)
    expected = np.zeros(losses.shape[1])
    for t, share in zip((1.0 + points) / 2.0, shares / 2.0, strict=True):
        gibbs = weights * np.exp(t * aversion * (totals - totals[weights > 0.0].max()))
        expected += share * (gibbs @ losses) / gibbs.sum()
    # 200 nodes resolve aversion times range up to about 200 to this accuracy
    assert found == pytest.approx(expected, abs=1e-9 * scale(losses))


MEASURES_OF_GAMES = [
    var(0.75),
    es(0.5),
    measure("wang", shift=1.0),
    measure("expectile", level=0.9),
    measure("entropic", aversion=0.3),
]


@pytest.mark.parametrize("one", MEASURES_OF_GAMES, ids=ids)
@bounded
@given(weighted_tables(columns=1, least=2), st.integers(0, 2**32 - 1))
def test_shapley_is_the_mean_increment_over_all_orders(one, table, seed):
    losses, p = table
    rng = np.random.default_rng(seed)
    losses = np.concatenate([losses[:, :1], rng.normal(size=(len(losses), 3))], axis=1)
    worth = {
        tuple(members): value(one, losses[:, members].sum(axis=1), p) if members else 0.0
        for members in (sorted(i for i in range(4) if subset >> i & 1) for subset in range(16))
    }
    expected = np.zeros(4)
    for order in permutations(range(4)):
        for place, i in enumerate(order):
            before = sorted(order[:place])
            expected[i] += (worth[tuple(sorted([*before, i]))] - worth[tuple(before)]) / 24.0
    assert contributions("shapley", one, losses, p) == pytest.approx(expected, abs=3e-12 * scale(losses))


def test_drawn_orders_come_near_all_orders():
    """Thirteen sub-portfolios: drawn orders against all 8,191 subsets, within 4 of the stated extra standard errors.

    Seeds are fixed; the false-alarm probability of a bound of 4 standard errors is 6e-5 for each of 13 values, 8e-4
    in all.
    """
    rng = np.random.default_rng(5)
    losses = rng.lognormal(size=(60, 13)) * rng.uniform(0.1, 3.0, size=13)
    one, d = es(0.8), 13
    frame = framed(one, losses)
    worst = 12  # scenarios: the tail mean of a subset is the mean of its 12 worst
    expected = np.zeros(d)
    for subset in range(1, 1 << d):
        inside = np.array([bool(subset >> i & 1) for i in range(d)])
        worth = np.sort(losses[:, inside].sum(axis=1))[-worst:].mean()
        size = int(inside.sum())
        joined = math.factorial(size - 1) * math.factorial(d - size) / math.factorial(d)
        missed = 0.0 if size == d else math.factorial(size) * math.factorial(d - size - 1) / math.factorial(d)
        expected += np.where(inside, joined, -missed) * worth
    found = split("shapley", one, losses)
    assert "sampled_shapley" in found.figures.remarks
    orders = shapley_values(frame, one, seed=1).orders
    extra = orders.std(axis=0, ddof=1) / math.sqrt(len(orders))
    assert found.figures.values == pytest.approx(orders.mean(axis=0), rel=1e-12)
    assert (np.abs(found.figures.values - expected) < 4.0 * extra).all()
    assert found.figures.values.sum() == pytest.approx(value(one, losses), rel=1e-12)
    assert (found.figures.standard_errors > extra).all()


def test_another_seed_draws_other_orders():
    losses = np.random.default_rng(5).lognormal(size=(20, 13))
    first, other = (contributions("shapley", es(0.75), losses, seed=seed) for seed in (1, 2))
    assert first.tolist() != other.tolist()
    assert first.sum() == pytest.approx(other.sum(), rel=1e-12)


@every_rule
@often
@given(tables(["normal", "ties"], least=20), st.sampled_from(MEASURES))
def test_a_population_has_no_errors(rule, losses, one):
    for found in (given_by(rule, one, losses, sampled=False), total(one, losses, sampled=False)):
        if found is not None:
            assert np.isfinite(found.values).all()
            for part in (found.standard_errors, found.lower, found.upper, found.tail_scenarios):
                assert np.isnan(part).all()
