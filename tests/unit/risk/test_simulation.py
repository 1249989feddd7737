"""Plans and blocks; the shape of a simulation changes none of its numbers."""

import numpy as np
import pytest

from service.errors import InvalidValue
from service.executors import Work
from service.risk.components import FactorExposure, IdiosyncraticComponent, LinearComponent
from service.risk.components.portfolio import SubPortfolioTerms
from service.risk.copulas import GaussianCopula
from service.risk.correlation import EqualCorrelation
from service.risk.effort import Alone
from service.risk.factors import FactorModel
from service.risk.marginals import ExponentialMarginal, LognormalMarginal
from service.risk.simulation import Plan, simulated
from service.risk.streams import BLOCK, SCRAMBLINGS
from tests.unit.working import ORDERS

X = LognormalMarginal(family="lognormal", mu=0.0, sigma=0.5)
OWN = IdiosyncraticComponent(kind="idiosyncratic", marginal=ExponentialMarginal(family="exponential", mean=1.0))


def linear(name):
    return LinearComponent(kind="linear", exposures=[FactorExposure(factor=name, amount=2.0)])


def model(*more):
    copula = GaussianCopula(family="gaussian", correlation=EqualCorrelation(kind="equal", value=0.5))
    terms = [SubPortfolioTerms("a", (linear("x"),)), SubPortfolioTerms("b", (linear("y"), OWN)), *more]
    return FactorModel.of([("x", X), ("y", X)], copula, terms)


PLANS = {
    "random": Plan.random(model(), seed=7, scenarios=5 * BLOCK + 100),
    "sobol": Plan.quasi_random(model(), seed=7, scenarios=4 * BLOCK),
}


@pytest.mark.parametrize("plan", PLANS.values(), ids=PLANS)
@pytest.mark.parametrize("work", ORDERS.values(), ids=ORDERS)
def test_threads_and_order_change_no_bit(plan, work):
    np.testing.assert_array_equal(simulated(plan, work), simulated(plan, Alone()))


def test_a_longer_plan_begins_with_the_shorter():
    plan = PLANS["random"]
    longer = plan.of_size(7 * BLOCK)
    every = simulated(longer, Alone())
    np.testing.assert_array_equal(every[: 5 * BLOCK], simulated(plan, Alone())[: 5 * BLOCK])  # whole blocks
    continued = simulated(longer, Alone(), before=every[: 3 * BLOCK])
    np.testing.assert_array_equal(continued, every)
    assert simulated(longer, Alone(), before=every) is every


def test_another_sub_portfolio_changes_no_draw_of_the_others():
    more = Plan.random(model(SubPortfolioTerms("c", (OWN,))), seed=7, scenarios=BLOCK)
    np.testing.assert_array_equal(simulated(more, Alone())[:, :2], simulated(PLANS["random"].of_size(BLOCK), Alone()))


def test_sobol_points_come_in_eight_scramblings():
    plan = PLANS["sobol"]
    assert plan.scenarios == 4 * BLOCK
    assert plan.of_size(4 * BLOCK + 1).scenarios == 8 * BLOCK
    assert plan.of_size(1).scenarios == 2 * SCRAMBLINGS
    parts = simulated(plan, Alone())[:, 0].reshape(SCRAMBLINGS, -1)
    assert len({part.tobytes() for part in parts}) == SCRAMBLINGS
    # in each scrambling one point falls into each of as many cells as there are points
    cells = np.argsort(np.argsort(parts, axis=1), axis=1)
    assert all(np.array_equal(np.sort(row), np.arange(row.size)) for row in cells)
    spread, mean = parts.mean(axis=1).std(), 2.0 * np.exp(0.125)
    assert spread < 0.1 * parts.std() / np.sqrt(parts.shape[1])
    assert parts.mean() == pytest.approx(mean, rel=1e-3)


@pytest.mark.parametrize("plan", PLANS.values(), ids=PLANS)
def test_factors_of_chosen_scenarios_are_those_of_the_losses(plan):
    chosen = np.array([3, 17, BLOCK, 2 * BLOCK + 5, plan.scenarios - 1])
    draws = plan.factors(chosen)
    np.testing.assert_allclose(2.0 * draws.values[:, 0], simulated(plan, Alone())[chosen, 0], rtol=1e-12)
    np.testing.assert_allclose(np.log(draws.values), 0.5 * draws.normal_scores, atol=1e-9)


def test_dimensions_beyond_the_sequence_are_refused():
    ids = [f"f{number}" for number in range(21_202)]
    independent = FactorModel.of(
        [(name, X) for name in ids],
        GaussianCopula(family="gaussian", correlation=EqualCorrelation(kind="equal", value=0.0)),
        [SubPortfolioTerms("a", (linear("f0"),))],
    )
    with pytest.raises(InvalidValue, match="at most 21201"):
        Plan.quasi_random(independent, seed=1, scenarios=100)


class Stop(Exception):
    pass


def test_a_checkpoint_that_raises_stops_within_a_block():
    asked = []

    def checkpoint(fraction=0.0, /):
        asked.append(fraction)
        if fraction >= 0.4:
            raise Stop

    plan = PLANS["random"].of_size(100 * BLOCK)
    with pytest.raises(Stop):
        simulated(plan, Work(1, checkpoint))
    assert max(asked) == pytest.approx(0.4)
    assert len([fraction for fraction in asked if fraction > 0.0]) <= 41
