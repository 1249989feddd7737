"""Influence values against numerical derivatives, and how they add up.

The influence value of a scenario is the derivative of a figure in the weight of that scenario: with
p(e) = (1 - e) p + e on scenario k, d/de at e = 0. Figures and contributions as functions of p are taken from the
service itself; only the derivative is numerical, by symmetric steps. Influence values need not be centred, so both
sides are centred first. Quantiles and the place of an expectile have no derivative on a table: their influence
values are estimates with a density, and are tried where that part vanishes, or by their sums alone.
"""

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from service.risk.measures import full_influence, full_values
from service.risk.ranking import ranked
from service.risk.uncertainty import Influence
from tests.properties.tables import MEASURES, QUANTILES, bounded, ids, of_kind, scale, weighted_tables
from tests.unit.risk.arithmetic import es, loss_table, measure, ordered, split, total, value

STEP = 1e-6


def _centred(values, p):
    return values - (values @ p)[..., None]


def _influence(one, losses, p):
    of, order = ordered(losses, p)
    found = np.empty(losses.size)
    found[order] = full_influence(one, of).values[0]
    return found


def _derivatives(figure, p):
    """Return d figure/de for each scenario, by steps that keep all probabilities positive."""
    found = []
    for k in range(p.size):
        unit = np.zeros(p.size)
        unit[k] = 1.0
        h = STEP * p[k]
        up, down = (figure(p + step * (unit - p)) for step in (h, -h))
        found.append((up - down) / (2.0 * h))
    return np.array(found).T


smooth = [one for one in MEASURES if one.kind not in QUANTILES]


@pytest.mark.parametrize("one", smooth, ids=ids)
@bounded
@given(weighted_tables(["normal", "heavy", "ties"], zeros=False, least=3, most=25, columns=1), st.booleans())
def test_figures(one, table, weighted):
    losses, p = table[0][:, 0], table[1]
    p = np.full(losses.size, 1.0 / losses.size) if p is None else p
    if np.ptp(losses) == 0.0 or _at_a_kink(one, losses, p):
        return

    def figure(weights):
        return full_values(one, ordered(losses, weights)[0])[0]

    found = _centred(_influence(one, losses, p), p)
    expected = _centred(_derivatives(figure, p), p)
    # steps of 1e-6 p: rounding 1e-16/(1e-6 p), curvature 1e-12
    assert found == pytest.approx(expected, abs=2e-9 / p.min() * scale(losses[:, None]))


def _at_a_kink(one, losses, p):
    """Whether a tail ends between two atoms, where one derivative from above and one from below exist."""
    levels = [number for name, number in one.parameters.items() if name.endswith("level") and one.of_tail]
    order = np.argsort(losses)
    edges = np.cumsum(p[order])[np.flatnonzero(np.append(np.diff(losses[order]) > 0.0, True))]
    return any(np.min(np.abs(edges - level)) < 1e-4 for level in levels if 0.0 < level < 1.0)


of_contributions = [one for one in smooth if one.kind not in ("expectile", "expected_shortfall", "range_value_at_risk")]


def _contribution_influence(one, losses, p, smoothing="none"):
    ranking = ranked(losses.sum(axis=1), loss_table(losses, p), depth=1.0)
    weights = one.contribution_weights(ranking.ordered, ranking.ties, smoothing)
    rows = losses[ranking.order]
    influence = one.contribution_influence(ranking.ordered, ranking.ties, rows, weights)
    if one.above == "mean":
        influence = Influence(influence.values - rows.T, influence.rest)
    found = np.empty(losses.T.shape)
    found[:, ranking.order] = influence.values
    return found


def _contributions(one, losses):
    return lambda weights: split("euler", one, losses, weights, smoothing="none", sampled=False).figures.values


@pytest.mark.parametrize("one", of_contributions, ids=ids)
@bounded
@given(weighted_tables(["normal", "ties", "decimals"], zeros=False, least=4, most=15, columns=3))
def test_contributions(one, table):
    losses, p = table
    p = np.full(len(losses), 1.0 / len(losses)) if p is None else p
    if np.ptp(losses.sum(axis=1)) < 1e-6:
        return
    found = _centred(_contribution_influence(one, losses, p), p)
    expected = _centred(_derivatives(_contributions(one, losses), p), p)
    assert found == pytest.approx(expected, abs=2e-9 / p.min() * scale(losses))


@pytest.mark.parametrize("one", [es(0.5), es(0.8), *of_kind("range_value_at_risk")[1:2]], ids=ids)
@pytest.mark.parametrize("seed", range(5))
def test_contributions_to_a_tail_that_ends_inside_an_atom(one, seed):
    """With ten or more scenarios at the quantile, E[X_i given S = q] is their own mean, and the derivative exact."""
    rng = np.random.default_rng(seed)
    totals = rng.integers(0, 4, size=80) * 1.0
    losses = rng.integers(-8, 8, size=(80, 3)) / 8.0
    losses[:, 2] = totals - losses[:, :2].sum(axis=1)
    p = rng.uniform(0.5, 1.5, size=80)
    p /= p.sum()
    assert not _at_a_kink(one, totals, p)
    found = _centred(_contribution_influence(one, losses, p), p)
    expected = _centred(_derivatives(_contributions(one, losses), p), p)
    assert found == pytest.approx(expected, abs=1e-6)


@pytest.mark.parametrize("one", MEASURES, ids=ids)
@bounded
@given(weighted_tables(["normal", "heavy", "ties", "decimals"], least=40, most=200, columns=4))
def test_influence_values_of_contributions_add_up_to_that_of_the_total(one, table):
    losses, p = table
    totals = losses.sum(axis=1)
    if np.ptp(totals) < 1e-6:
        return
    if one.kind == "expectile" and _stands_on(one, totals, p):
        return  # two derivatives exist: the figure's error takes one, its contributions the mean of both
    weights = np.full(totals.size, 1.0 / totals.size) if p is None else p
    # without smoothing the few scenarios at a quantile have no residuals, and their neighbours' stand in for them
    summed = _centred(_contribution_influence(one, losses, p, "auto").sum(axis=0), weights)
    ranking = ranked(totals, loss_table(losses, p), depth=1.0)  # in which tied totals are equal
    whole = np.empty(totals.size)
    whole[ranking.order] = full_influence(one, ranking.ordered).values[0]
    whole = _centred(whole, weights)
    if not np.isfinite(whole).all():  # no interval of the quantile, hence no density at it
        assert one.kind in QUANTILES
        return
    if one.of_tail and not _exact_tail(one, totals):
        # the atom at the quantile is shared: each member bears the mean of what its positions bear
        summed, whole = (_by_atom(values, totals, weights) for values in (summed, whole))
    counted = weights > 0.0
    size = scale(losses) * max(1.0, np.max(np.abs(whole[counted])) / scale(losses))
    assert summed[counted] == pytest.approx(whole[counted], abs=1e-9 * size)


def _stands_on(one, totals, p):
    figure = value(measure(one.kind, **one.parameters), totals, p)
    return np.min(np.abs(totals - figure)) < 1e-9 * np.max(np.abs(totals))


def _exact_tail(one, totals):
    return np.unique(totals).size == totals.size


def _by_atom(values, totals, p):
    keys = np.unique(np.round(totals, 9), return_inverse=True)[1]
    mass = np.bincount(keys, p)
    mean = np.divide(np.bincount(keys, p * values), mass, out=np.zeros_like(mass), where=mass > 0.0)
    return mean[keys]


@pytest.mark.parametrize("one", [one for one in MEASURES if one.above == "zero"], ids=ids)
def test_a_single_column_has_the_error_of_the_total(one):
    losses = np.random.default_rng(3).lognormal(size=(4000, 1))
    whole = total(one, losses)
    part = split("euler", one, losses, smoothing="none" if one.kind not in QUANTILES else "auto").figures
    assert part.standard_errors == pytest.approx(whole.standard_errors, rel=0.02, nan_ok=True)
