"""A loss table made ready for any number of measures: totals, groups, order, tails; each made once."""

from collections.abc import Iterator, Sequence
from dataclasses import dataclass, field

import numpy as np

from service.risk.effort import Effort
from service.risk.fold import fold
from service.risk.loss_table import Group, LossTable, check_magnitude, group_losses
from service.risk.measures import RiskMeasure
from service.risk.quantiles import Array, Indices, Ordered
from service.risk.ranking import MOST_PARTIAL, Ranking, ranked, worst
from service.risk.uncertainty import Sampling

CHUNK_BYTES = 1 << 25  # of sorted columns held at a time
KEPT_BYTES = 1 << 28  # of the tail's rows held between measures


@dataclass(slots=True)
class Frame:
    """A loss table, its groups as further columns, and what several measures need of them.

    Attributes
    ----------
    table : LossTable
        n scenarios, d sub-portfolios.
    groups : sequence of Group
        Their G summed losses stand beside the d columns.
    effort : Effort
    columns : tuple of two ndarrays, of shapes (n, d) and (n, G)
    totals : ndarray of shape (n,)
    expected : ndarray of shape (d + G,)
        Mean loss of each column.
    """

    table: LossTable
    groups: Sequence[Group]
    effort: Effort
    columns: tuple[Array, Array]
    totals: Array
    expected: Array
    _tails: Array | None
    _ranking: Ranking
    _rows: list[Array] = field(default_factory=list)
    _whole: Ranking | None = None

    @classmethod
    def of(
        cls,
        table: LossTable,
        groups: Sequence[Group],
        measures: Sequence[RiskMeasure],
        effort: Effort,
        *,
        stand_alone: bool,
    ) -> "Frame":
        """Read the table once, as far as `measures` need it.

        Raises
        ------
        NotDefined
            Where losses add up to more than can be squared.
        """
        partial = [depth for measure in measures if (depth := cls._depth(table, measure, contributions=True)) < 1.0]
        alone = [depth for measure in measures if (depth := cls._depth(table, measure, contributions=False)) < 1.0]
        tail = None
        if stand_alone and alone:
            tail = min(table.scenarios, int(np.ceil(max(alone) * table.scenarios)) + 1)
        sums = group_losses(table.losses, groups)
        folded = fold(table.losses, effort, probabilities=table.probabilities, tail=tail)
        check_magnitude(folded.totals)
        tails, expected = folded.tails, folded.sums
        if groups:
            beside = fold(sums, effort, probabilities=table.probabilities, tail=tail)
            expected = np.concatenate([expected, beside.sums])
            if tails is not None and beside.tails is not None:
                tails = np.concatenate([tails, beside.tails])
        if table.probabilities is None:
            expected = expected / table.scenarios
        ranking = ranked(folded.totals, table, depth=max(partial) if partial else 1.0)
        return cls(table, groups, effort, (table.losses, sums), folded.totals, expected, tails, ranking)

    @staticmethod
    def _depth(table: LossTable, measure: RiskMeasure, *, contributions: bool) -> float:
        """Return how deep `measure` looks; 1 where everything has to be ordered."""
        if not table.plain:
            return 1.0
        depth = measure.depth(table.scenarios, contributions=contributions)
        return depth if depth < MOST_PARTIAL else 1.0

    @property
    def scenarios(self) -> int:
        """Number n of scenarios."""
        return self.table.scenarios

    @property
    def sampling(self) -> Sampling:
        """How the scenarios, in their own order, were drawn."""
        p, clusters = self.table.probabilities, self.table.clusters
        return Sampling(
            self.scenarios, None if p is None else p[None, :], None if clusters is None else clusters[None, :]
        )

    def depth(self, measure: RiskMeasure) -> float:
        """Return the share of worst scenarios that `measure`, its error and its contributions look at."""
        return self._depth(self.table, measure, contributions=True)

    def ranking(self, measure: RiskMeasure) -> Ranking:
        """Return the scenarios in the order of their total, as deep as `measure` looks."""
        depth = self.depth(measure)
        if depth < 1.0:
            if self._ranking.order.size <= depth * self.scenarios:
                self._ranking, self._rows = ranked(self.totals, self.table, depth=depth), []
            return self._ranking.cut(depth)
        if self._whole is None:
            self._whole = self._ranking
            if not self._ranking.ordered.complete:
                self._whole = ranked(self.totals, self.table, depth=1.0)
        return self._whole

    def rows(self, ranking: Ranking) -> Iterator[Array]:
        """Yield the losses of all columns in the order of `ranking`, in chunks of shape (m, c)."""
        held = self._ranking.order.size
        keep = 8 * held * self.expected.size <= KEPT_BYTES
        if keep and ranking.order.size <= held and not ranking.ordered.complete:
            if not self._rows:
                self._rows = list(self._chunks(self._ranking.order))
            for rows in self._rows:
                self.effort.checkpoint()
                yield rows[: ranking.order.size]
        else:
            yield from self._chunks(ranking.order)

    def chunks(self) -> Iterator[Array]:
        """Yield the losses of all columns in scenario order, in chunks of shape (n, c)."""
        width = max(1, CHUNK_BYTES // (8 * self.scenarios))
        for table in self.columns:
            for start in range(0, table.shape[1], width):
                self.effort.checkpoint()
                yield table[:, start : start + width]

    def _chunks(self, order: Indices) -> Iterator[Array]:
        width = max(1, CHUNK_BYTES // (8 * order.size))
        for table in self.columns:
            if table.shape[1] and width >= table.shape[1]:
                self.effort.checkpoint()
                yield table.take(order, axis=0)
                continue
            for start in range(0, table.shape[1], width):
                self.effort.checkpoint()
                yield table[:, start : start + width][order]

    def alone(self, measure: RiskMeasure) -> Iterator[Ordered]:
        """Yield the columns as ordered distributions, as deep as `measure` looks, a few at a time."""
        if self._tails is not None and self._depth(self.table, measure, contributions=False) < 1.0:
            depth = measure.depth(self.scenarios, contributions=False)
            kept = min(self._tails.shape[1], int(np.ceil(depth * self.scenarios)) + 1)
            width = max(1, CHUNK_BYTES // (32 * kept))
            for start in range(0, self._tails.shape[0], width):
                self.effort.checkpoint()
                yield self._ordered(self._tails[start : start + width, :kept], None)
            return
        width = max(1, CHUNK_BYTES // (8 * self.scenarios))
        for table in self.columns:
            for start in range(0, table.shape[1], width):
                self.effort.checkpoint()
                yield self._sorted(table[:, start : start + width].T)

    def _ordered(self, values: Array, orders: Indices | None) -> Ordered:
        """Return ordered distributions (c, m) whose positions hold the scenarios `orders` (c, m)."""
        p, clusters = self.table.probabilities, self.table.clusters
        return Ordered.of(
            values,
            scenarios=self.scenarios,
            probabilities=None if p is None or orders is None else p[orders],
            sampled=self.table.sampled,
            clusters=None if clusters is None or orders is None else clusters[orders],
        )

    def _sorted(self, columns: Array) -> Ordered:
        """Return `columns` (c, n) as complete ordered distributions."""
        if self.table.plain:
            values = np.negative(columns, order="C")
            self.effort.map(lambda row: row.sort(), list(values))
            return self._ordered(np.negative(values, out=values), None)
        orders = np.stack(self.effort.map(lambda row: np.argsort(-row, kind="stable"), list(columns)))
        return self._ordered(np.take_along_axis(columns, orders, axis=1), orders)

    def one(self, values: Array, measure: RiskMeasure) -> tuple[Ordered, Indices]:
        """Return any loss (n,) as a single ordered distribution and the scenario number of each position."""
        order = worst(values, self._depth(self.table, measure, contributions=False))
        return self._ordered(values[order][None, :], order[None, :]), order
