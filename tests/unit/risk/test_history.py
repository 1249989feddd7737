"""Observed changes as scenarios."""

import numpy as np
import pytest

from service.errors import InvalidValue, NotDefined
from service.risk.components import (
    ConstantComponent,
    DeltaGammaComponent,
    FactorExposure,
    FactorPair,
    LinearComponent,
    RevaluationGridComponent,
)
from service.risk.components.portfolio import SubPortfolioTerms
from service.risk.covers import CapCover
from service.risk.history import HorizonScaling, decayed, history_losses

IDS = ("rates", "equity")
CHANGES = np.random.Generator(np.random.Philox(11)).standard_normal((60, 2))
BONDS = SubPortfolioTerms(
    "bonds",
    (
        LinearComponent(
            kind="linear",
            exposures=[FactorExposure(factor="rates", amount=4.0), FactorExposure(factor="equity", amount=-1.0)],
        ),
        ConstantComponent(kind="constant", amount=0.5),
    ),
)
OPTIONS = SubPortfolioTerms(
    "options",
    (
        DeltaGammaComponent(
            kind="delta_gamma",
            delta=[FactorExposure(factor="equity", amount=2.0)],
            gamma=[FactorPair(first="equity", second="equity", amount=-3.0)],
        ),
    ),
    sign="profit",
    cover=(CapCover(kind="cap", amount=4.0),),
)


def both(changes, **options):
    return history_losses(IDS, changes, [BONDS, OPTIONS], **options)


def plain(values):
    bonds = 4.0 * values[:, 0] - values[:, 1] + 0.5
    options = np.minimum(-(2.0 * values[:, 1] - 1.5 * values[:, 1] ** 2), 4.0)
    return np.column_stack([bonds, options])


def test_each_period_is_a_scenario():
    found = both(CHANGES)
    np.testing.assert_allclose(found.losses, plain(CHANGES), rtol=1e-13, atol=1e-13)
    assert found.losses.flags.c_contiguous
    assert found.probabilities is None
    assert found.clusters is None
    assert found.notes == ()
    assert found.labels == tuple(str(number) for number in range(60))


def test_overlapping_sums_and_their_blocks():
    found = both(CHANGES, scaling=HorizonScaling(5, "overlapping"))
    sums = np.array([CHANGES[start : start + 5].sum(axis=0) for start in range(56)])
    np.testing.assert_allclose(found.losses, plain(sums), rtol=1e-12, atol=1e-12)
    assert found.labels[0] == "0-4"
    assert found.labels[-1] == "55-59"
    assert found.block_length == 15
    np.testing.assert_array_equal(np.bincount(found.clusters), [19, 19, 18])
    assert np.all(np.diff(found.clusters) >= 0)
    assert [code for code, _ in found.notes] == ["overlapping_periods"]


def test_square_root_of_time():
    found = both(CHANGES, scaling=HorizonScaling(9, "square_root_of_time"))
    np.testing.assert_allclose(found.losses, plain(3.0 * CHANGES), rtol=1e-13, atol=1e-13)
    assert found.clusters is None
    assert [code for code, _ in found.notes] == ["square_root_of_time"]


@pytest.mark.parametrize("method", ["overlapping", "square_root_of_time"])
def test_a_horizon_of_one_period_changes_nothing(method):
    found = both(CHANGES, scaling=HorizonScaling(1, method))
    np.testing.assert_array_equal(found.losses, both(CHANGES).losses)
    assert found.notes == ()


def test_decay_is_the_ratio_to_the_next_more_recent_period():
    p = both(CHANGES, decay=0.97).probabilities
    assert p.sum() == pytest.approx(1.0, abs=1e-15)
    np.testing.assert_allclose(p[:-1] / p[1:], 0.97, rtol=1e-12)
    assert decayed(10, 1.0) is None


def test_more_scenarios_than_a_piece():
    changes = np.random.Generator(np.random.Philox(2)).standard_normal((9000, 2))
    np.testing.assert_allclose(both(changes).losses, plain(changes), rtol=1e-12, atol=1e-12)


def test_a_grid_that_refuses_points_at_itself():
    grid = RevaluationGridComponent(
        kind="revaluation_grid", factor="equity", points=[-0.1, 0.1], losses=[1.0, 2.0], beyond="refuse"
    )
    with pytest.raises(NotDefined, match="factor 'equity'") as caught:
        history_losses(IDS, CHANGES, [BONDS, SubPortfolioTerms("grid", (grid,))])
    assert caught.value.faults[0].pointer == "/sub_portfolios/1/components/0/points"


@pytest.mark.parametrize(
    ("ids", "changes", "scaling", "pointer"),
    [
        (("a", "a"), CHANGES, None, "/factors/1"),
        (("a", "b", "c"), CHANGES, None, "/changes"),
        (("a", "b"), CHANGES[:1], None, "/changes"),
        (("a", "b"), CHANGES, HorizonScaling(60, "overlapping"), "/horizon_scaling/periods"),
    ],
)
def test_what_does_not_fit_is_refused(ids, changes, scaling, pointer):
    with pytest.raises(InvalidValue) as caught:
        history_losses(ids, changes, [], scaling=scaling)
    assert [fault.pointer for fault in caught.value.faults] == [pointer]


def test_faults_of_all_sub_portfolios_are_listed():
    wrong = SubPortfolioTerms(
        "bonds", (LinearComponent(kind="linear", exposures=[FactorExposure(factor="rate", amount=1.0)]),)
    )
    with pytest.raises(InvalidValue, match="2 values") as caught:
        history_losses(IDS, CHANGES, [BONDS, wrong])
    found = [(fault.pointer, fault.detail) for fault in caught.value.faults]
    assert found == [
        ("/sub_portfolios/1/id", "the id 'bonds' is taken"),
        ("/sub_portfolios/1/components/0/exposures/0/factor", "there is no factor 'rate'; did you mean 'rates'?"),
    ]
