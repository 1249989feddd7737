"""A loss table made ready for any number of measures: totals, groups, order, tails; each made once."""

from collections.abc import Iterator, Sequence
from dataclasses import dataclass, field, replace
from typing import Any

import numpy as np

from service.errors import NotDefined
from service.risk.effort import Effort
from service.risk.fold import fold
from service.risk.loss_table import Group, LossTable, Scenarios, check_magnitude, group_losses
from service.risk.measures import RiskMeasure
from service.risk.quantiles import Array, Indices, Ordered
from service.risk.ranking import MOST_PARTIAL, Ranking, ranked, worst
from service.risk.uncertainty import Sampling

CHUNK_BYTES = 1 << 25  # of sorted columns held at a time
RANKED_BYTES = 56  # of each scenario in a ranking
KEPT_BYTES = 1 << 28  # of the tail's rows held between measures
PIECE_BYTES = 1 << 20  # of columns worked on at a time: they and what is made of them stay in the cache
LEAST_COLUMNS = 16  # of a piece: what is made of the total alone is made once for each piece
TURNED_BYTES = 1 << 18  # of rows turned into columns at a time


def depth_of(measure: RiskMeasure, scenarios: int, *, contributions: bool) -> float:
    """Return how deep a measure looks into equally probable scenarios; 1 where everything has to be ordered."""
    depth = measure.depth(scenarios, contributions=contributions)
    return depth if depth < MOST_PARTIAL else 1.0


def deepest(measures: Sequence[RiskMeasure], scenarios: int, *, contributions: bool) -> float:
    """Return how deep the deepest of the measures looks that need not order everything; 1 if there is none."""
    depths = [depth_of(measure, scenarios, contributions=contributions) for measure in measures]
    return max((depth for depth in depths if depth < 1.0), default=1.0)


def column_tail(measures: Sequence[RiskMeasure], scenarios: int) -> int | None:
    """Return how many of the largest losses of each column the measures need; None if all or none."""
    depth = deepest(measures, scenarios, contributions=False)
    return min(scenarios, int(np.ceil(depth * scenarios)) + 1) if depth < 1.0 else None


@dataclass(slots=True)
class Frame:
    """A loss table, its groups as further columns, and what several measures need of them.

    Attributes
    ----------
    table : Scenarios
        n scenarios, d sub-portfolios.
    groups : sequence of Group
        Their G summed losses stand beside the d columns.
    effort : Effort
    columns : tuple of two ndarrays, of shapes (n, d) and (n, G), or None
        None for a simulation that is not held: then only measures of a tail, and rules that need no more.
    totals : ndarray of shape (n,)
    expected : ndarray of shape (d + G,)
        Mean loss of each column.
    known : dict
        What was found out about the total, by measure.
    """

    table: Scenarios
    groups: Sequence[Group]
    effort: Effort
    columns: tuple[Array, Array] | None
    totals: Array
    expected: Array
    _tails: Array | None
    _ranking: Ranking
    _rows: list[Array] = field(default_factory=list)
    _cuts: dict[float, Ranking] = field(default_factory=dict)
    _whole: Ranking | None = None
    known: dict[RiskMeasure, Any] = field(default_factory=dict)

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
        tail = column_tail(measures, table.scenarios) if stand_alone and table.plain else None
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
        depth = deepest(measures, table.scenarios, contributions=True) if table.plain else 1.0
        ranking = ranked(folded.totals, table, depth=depth)
        return cls(table, groups, effort, (table.losses, sums), folded.totals, expected, tails, ranking)

    def again(self, effort: Effort) -> "Frame":
        """Return the same frame for other work; what is found out on one of them is not known to the other."""
        return replace(self, effort=effort, _rows=list(self._rows), _cuts=dict(self._cuts), known=dict(self.known))

    @property
    def size(self) -> int:
        """Bytes that it takes, about."""
        columns = self.columns or ()
        held = (*columns, *self._rows, self.totals, *(() if self._tails is None else (self._tails,)))
        orders = sum(one.order.size for one in (self._ranking, *self._cuts.values(), self._whole) if one is not None)
        return sum(one.nbytes for one in held) + RANKED_BYTES * orders

    def hold(self, columns: Array) -> None:
        """Keep the losses (d + G, m) of the deepest ranking, in its order."""
        self._rows = list(self._cut(columns))

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

    def depth(self, measure: RiskMeasure, *, contributions: bool = True) -> float:
        """Return the share of worst scenarios that `measure`, its error (and its contributions) look at."""
        return depth_of(measure, self.scenarios, contributions=contributions) if self.table.plain else 1.0

    def ranking(self, measure: RiskMeasure) -> Ranking:
        """Return the scenarios in the order of their total, as deep as `measure` looks."""
        depth = self.depth(measure)
        if depth < 1.0:
            if self._ranking.order.size <= depth * self.scenarios:
                self._ranking, self._rows = ranked(self.totals, self.table, depth=depth), []
            if depth not in self._cuts:
                self._cuts[depth] = self._ranking.cut(depth)
            return self._cuts[depth]
        if self._whole is None:
            self._whole = self._ranking
            if not self._ranking.ordered.complete:
                self._whole = ranked(self.totals, self.table, depth=1.0)
        return self._whole

    def rows(self, ranking: Ranking) -> Iterator[Array]:
        """Yield the losses of all columns in the order of `ranking`, in pieces of shape (m, c).

        The losses of one column lie one after the other.
        """
        held = self._ranking.order.size
        keep = 8 * held * self.expected.size <= KEPT_BYTES
        if (self._rows or keep) and ranking.order.size <= held:
            if not self._rows:
                self._rows = list(self._pieces(self._ranking.order))
            for rows in self._rows:
                self.effort.checkpoint()
                yield rows[: ranking.order.size]
        else:
            yield from self._pieces(ranking.order)

    def chunks(self) -> Iterator[Array]:
        """Yield the losses of all columns in scenario order, in chunks of shape (n, c)."""
        width = max(1, CHUNK_BYTES // (8 * self.scenarios))
        for table in self._held():
            for start in range(0, table.shape[1], width):
                self.effort.checkpoint()
                yield table[:, start : start + width]

    def _pieces(self, order: Indices) -> Iterator[Array]:
        """Yield the losses of all columns in the order of `order`, in pieces of shape (m, c)."""
        width = max(LEAST_COLUMNS, CHUNK_BYTES // (8 * order.size))
        for table in self._held():
            for start in range(0, table.shape[1], width):
                yield from self._cut(self._turned(table[:, start : start + width], order))

    def _cut(self, columns: Array) -> Iterator[Array]:
        """Yield `columns` (c, m) in pieces, each as rows."""
        width = max(LEAST_COLUMNS, PIECE_BYTES // (8 * columns.shape[1]))
        for start in range(0, len(columns), width):
            self.effort.checkpoint()
            yield columns[start : start + width].T

    def _turned(self, columns: Array, order: Indices) -> Array:
        """Return the rows `order` of `columns` (n, c) as an array of shape (c, m)."""
        turned = np.empty((columns.shape[1], order.size))
        height = max(1, TURNED_BYTES // (8 * max(1, columns.shape[1])))

        def turn(start: int) -> None:
            part = slice(start, start + height)
            turned[:, part] = columns[order[part]].T

        self.effort.map(turn, range(0, order.size, height))
        return turned

    def alone(self, measure: RiskMeasure) -> Iterator[Ordered]:
        """Yield the columns as ordered distributions, as deep as `measure` looks, a few at a time."""
        if self._tails is not None and self.depth(measure, contributions=False) < 1.0:
            depth = measure.depth(self.scenarios, contributions=False)
            kept = min(self._tails.shape[1], int(np.ceil(depth * self.scenarios)) + 1)
            width = max(LEAST_COLUMNS, PIECE_BYTES // (8 * kept))
            for start in range(0, self._tails.shape[0], width):
                self.effort.checkpoint()
                yield self._ordered(self._tails[start : start + width, :kept], None)
            return
        width = max(1, CHUNK_BYTES // (8 * self.scenarios))
        for table in self._held():
            for start in range(0, table.shape[1], width):
                self.effort.checkpoint()
                yield self._sorted(table[:, start : start + width].T)

    def _held(self) -> tuple[Array, Array]:
        """Return the columns.

        Raises
        ------
        NotDefined
            For a simulation that is not held.
        """
        if self.columns is None:
            raise NotDefined("this needs all simulated losses at hand, and they are too many to be held")
        return self.columns

    def _ordered(self, values: Array, orders: Indices | None) -> Ordered:
        """Return ordered distributions (c, m) whose positions hold the scenarios `orders` (c, m)."""
        p, clusters = self.table.probabilities, self.table.clusters
        return Ordered.of(
            values,
            scenarios=self.scenarios,
            probabilities=None if p is None or orders is None else p[orders],
            sampled=self.table.sampled,
            points=self.table.points,
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
        order = worst(values, self.depth(measure, contributions=False))
        return self._ordered(values[order][None, :], order[None, :]), order
