"""Simulation of a factor model: blocks that anybody may compute in any order, put together in theirs."""

from collections.abc import Callable
from dataclasses import dataclass
from threading import local

import numpy as np

from service.risk.components.portfolio import go_on
from service.risk.effort import Effort
from service.risk.factors import FACTORS, FactorDraws, FactorModel, ModelScratch
from service.risk.quantiles import Array, Indices
from service.risk.streams import BLOCK, SCRAMBLINGS, Draw, SobolSequence

LEAST_POINTS = 2 * SCRAMBLINGS
"""Least number of Sobol points."""


@dataclass(frozen=True, slots=True, eq=False)
class Plan:
    """Which scenarios of a model are simulated, and how.

    Attributes
    ----------
    model : FactorModel
    seed : int
    scenarios : int
        Number n of them; with Sobol points eight times a power of two.
    sobol : tuple of SobolSequence
        One per scrambling; empty for random draws.
    """

    model: FactorModel
    seed: int
    scenarios: int
    sobol: tuple[SobolSequence, ...] = ()

    @classmethod
    def random(cls, model: FactorModel, *, seed: int, scenarios: int) -> "Plan":
        """Return the plan of random draws."""
        return cls(model, seed, scenarios)

    @classmethod
    def quasi_random(cls, model: FactorModel, *, seed: int, scenarios: int) -> "Plan":
        """Return the plan of at least `scenarios` Sobol points in independent scramblings.

        Raises
        ------
        InvalidValue
            For more dimensions or points than the sequence has.
        """
        exponent = _exponent(scenarios)
        dimensions = max(1, model.sampler.dimensions)
        sequences = tuple(
            SobolSequence.of(seed, FACTORS, number, dimensions=dimensions, exponent=exponent)
            for number in range(SCRAMBLINGS)
        )
        return cls(model, seed, SCRAMBLINGS << exponent, sequences)

    def most(self, scenarios: int) -> int:
        """Return the largest number of scenarios, at most so many, that such a plan can have."""
        return most_points(scenarios) if self.sobol else scenarios

    def of_size(self, scenarios: int) -> "Plan":
        """Return the same plan with another number of scenarios."""
        make = Plan.quasi_random if self.sobol else Plan.random
        return make(self.model, seed=self.seed, scenarios=scenarios)

    @property
    def block_size(self) -> int:
        """Scenarios of a block."""
        return self.sobol[0].block_size if self.sobol else BLOCK

    @property
    def blocks(self) -> int:
        """Number of blocks."""
        return -(-self.scenarios // self.block_size)

    @property
    def columns(self) -> int:
        """Number d of sub-portfolios."""
        return len(self.model.portfolio.sub_portfolios)

    def part(self, number: int) -> slice:
        """Return the scenarios of a block."""
        start = number * self.block_size
        return slice(start, min(start + self.block_size, self.scenarios))

    def losses(
        self, number: int, scratch: ModelScratch, *, out: Array | None = None, pause: Callable[[], None] = go_on
    ) -> Array:
        """Return the losses of a block, shape (scenarios of the block, d); `pause` as for the model."""
        part = self.part(number)
        draw = self._draw(number, scratch) if self.sobol else None
        size = part.stop - part.start
        return self.model.block(number, self.seed, draw=draw, scenarios=size, scratch=scratch, out=out, pause=pause)

    def _draw(self, number: int, scratch: ModelScratch) -> Draw:
        scrambling, block = divmod(number, self.sobol[0].blocks)
        return self.sobol[scrambling].draw(block, scratch.draws)

    def factors(self, scenarios: Indices) -> FactorDraws:
        """Return the factors in some scenarios (m,), in order of their number.

        They are drawn again, block by block.
        """
        parts = []
        scratch = ModelScratch()
        for number in np.unique(scenarios // self.block_size).tolist():
            part = self.part(number)
            draw = (
                self._draw(number, scratch)
                if self.sobol
                else self.model.random_draw(number, self.seed, part.stop - part.start, scratch)
            )
            inside = scenarios[(scenarios >= part.start) & (scenarios < part.stop)] - part.start
            parts.append(self.model.factor_draws(draw, inside))
        return FactorDraws(
            np.concatenate([part.values for part in parts]), np.concatenate([part.normal_scores for part in parts])
        )


def sobol_points(scenarios: int) -> int:
    """Return how many Sobol points are taken for `scenarios`: the next eight times a power of two."""
    return SCRAMBLINGS << _exponent(scenarios)


def most_points(scenarios: int) -> int:
    """Return the largest number of Sobol points that is at most `scenarios`, which are `LEAST_POINTS` or more."""
    size = sobol_points(scenarios)
    return size if size <= scenarios else size // 2


def _exponent(scenarios: int) -> int:
    """Return the least exponent, at least 1, with which all scramblings have `scenarios` points together."""
    return max(1, (-(-scenarios // SCRAMBLINGS) - 1).bit_length())


class Workbench:
    """Scratch arrays of each thread that simulates."""

    def __init__(self) -> None:
        self._threads = local()

    @property
    def scratch(self) -> ModelScratch:
        """The arrays of this thread."""
        if not hasattr(self._threads, "scratch"):
            self._threads.scratch = ModelScratch()
        scratch: ModelScratch = self._threads.scratch
        return scratch


def simulated(plan: Plan, effort: Effort, *, before: Array | None = None) -> Array:
    """Return all losses of a plan in memory, shape (n, d), C order.

    Parameters
    ----------
    plan : Plan
    effort : Effort
    before : ndarray of shape (m, d), optional
        The first m scenarios, a whole number of blocks, as a shorter plan gave them.
    """
    if before is not None and before.shape[0] == plan.scenarios:
        return before
    losses = np.empty((plan.scenarios, plan.columns))
    first = 0
    if before is not None:
        losses[: before.shape[0]] = before
        first = before.shape[0] // plan.block_size
    bench = Workbench()

    def work(number: int) -> None:
        effort.checkpoint((number - first) / (plan.blocks - first))
        block = plan.losses(number, bench.scratch, out=losses[plan.part(number)], pause=effort.checkpoint)
        block += 0.0  # no negative zero

    effort.map(work, range(first, plan.blocks))
    return losses
