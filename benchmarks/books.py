"""Loss tables, and what is asked of them."""

from collections.abc import Callable, Mapping
from functools import lru_cache

import numpy as np
from numpy.typing import NDArray

from service.executors import Work
from service.risk import figures
from service.risk.allocation import Case, euler
from service.risk.frame import Frame
from service.risk.loss_table import LossTable, SubPortfolio
from service.risk.measures import ExpectedShortfall, RiskMeasure, ValueAtRisk

Array = NDArray[np.float64]

LEVELS = (0.95, 0.99, 0.995)
MEASURES: tuple[RiskMeasure, ...] = (
    *(ValueAtRisk(kind="value_at_risk", level=level) for level in LEVELS),
    *(ExpectedShortfall(kind="expected_shortfall", level=level) for level in LEVELS),
)
COVERAGE = 0.95
SEED = 1


@lru_cache(maxsize=1)
def normals(scenarios: int, count: int) -> Array:
    """Return normal losses with a factor in common, shape (scenarios, count)."""
    rng = np.random.default_rng(SEED)
    losses = rng.standard_normal((scenarios, count))
    losses += 0.5 * rng.standard_normal((scenarios, 1))
    return losses


def _zeros(share: float) -> Callable[[int, int], Array]:
    def made(scenarios: int, count: int) -> Array:
        rng = np.random.default_rng(SEED)
        losses = rng.lognormal(0.0, 1.0, (scenarios, count))
        losses[rng.random((scenarios, count)) < share] = 0.0
        return losses

    return made


def _integers(scenarios: int, count: int) -> Array:
    return np.round(np.random.default_rng(SEED).lognormal(0.0, 1.0, (scenarios, count)))


def _equal(scenarios: int, count: int) -> Array:
    return np.ones((scenarios, count))


TIED: Mapping[str, Callable[[int, int], Array]] = {
    "90 % zeros": _zeros(0.9),
    "97 % zeros": _zeros(0.97),
    "99.9 % zeros": _zeros(0.999),
    "integers": _integers,
    "all equal": _equal,
}
"""Tables in which many losses are the same number."""


def names(count: int) -> tuple[str, ...]:
    """Return names of sub-portfolios."""
    return tuple(f"unit{number}" for number in range(count))


def table_of(losses: Array) -> LossTable:
    """Return a table of draws."""
    columns = tuple(SubPortfolio(name, {}) for name in names(losses.shape[1]))
    return LossTable(losses, None, sampled=True, sub_portfolios=columns)


def arithmetic(
    table: LossTable, *, stand_alone: bool, threads: int = 2, measures: tuple[RiskMeasure, ...] = MEASURES
) -> None:
    """Compute `measures` of the total, their Euler contributions and the expected loss, all with errors.

    With `stand_alone` also the measures of each column.
    """
    frame = Frame.of(table, (), measures, Work(threads), stand_alone=stand_alone)
    for measure in measures:
        figures.total(frame, measure, COVERAGE)
        euler(Case(frame=frame, measure=measure, coverage=COVERAGE))
        if stand_alone:
            figures.stand_alone(frame, measure, COVERAGE)
    figures.expected_loss(frame, COVERAGE)
