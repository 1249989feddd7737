"""History: observed changes of the factors are the scenarios of the losses."""

from collections.abc import Sequence
from dataclasses import dataclass
from typing import Literal

import numpy as np
from numpy.random import Generator

from service.errors import Fault, InvalidValue
from service.risk.components.contract import Array, FactorSet, Indices
from service.risk.components.portfolio import BlockScratch, FactorRows, Portfolio, SubPortfolioTerms

BLOCK_PERIODS = 3  # an error of overlapping sums of h changes is taken from blocks of at least this many h
LEAST_SCENARIOS = 2
PIECE = 4096  # scenarios at a time


@dataclass(frozen=True, slots=True)
class HorizonScaling:
    """How changes of one period become changes over a longer horizon.

    Attributes
    ----------
    periods : int
        Number h of periods of the horizon.
    method : {"overlapping", "square_root_of_time"}
        Sums of h consecutive changes, or each change times the square root of h.
    """

    periods: int
    method: Literal["overlapping", "square_root_of_time"]


@dataclass(frozen=True, slots=True, eq=False)
class HistoryLosses:
    """Losses of d sub-portfolios in n scenarios made of observed changes.

    Attributes
    ----------
    losses : ndarray of shape (n, d)
        C order, oldest first, in currency.
    probabilities : ndarray of shape (n,) or None
        Summing to 1; None when all are 1/n.
    periods : ndarray of shape (n, 2)
        First and last period of each scenario, counted from 0, oldest first.
    values : ndarray of shape (n, k)
        Changes of the factors that each scenario stands for, in their units.
    block_length : int
        Scenarios in a row that depend on each other for the purpose of errors: 1, or 3h for overlapping sums of h.
    notes : tuple of (str, str)
        Code and words of what the caller may doubt.
    """

    losses: Array
    probabilities: Array | None
    periods: Indices
    values: Array
    block_length: int
    notes: tuple[tuple[str, str], ...]

    @property
    def clusters(self) -> Indices | None:
        """Number of the block of each scenario (n,), all of at least `block_length`; None where all are independent.

        Fewer than two blocks leave no error to estimate.
        """
        if self.block_length == 1:
            return None
        n = self.losses.shape[0]
        return np.arange(n) * max(n // self.block_length, 1) // n

    @property
    def labels(self) -> tuple[str, ...]:
        """Name of each scenario: its period, or the first and last of them, counted from 0."""
        return tuple(f"{first}" if first == last else f"{first}-{last}" for first, last in self.periods.tolist())


def history_losses(
    factor_ids: Sequence[str],
    changes: Array,
    sub_portfolios: Sequence[SubPortfolioTerms],
    *,
    decay: float | None = None,
    scaling: HorizonScaling | None = None,
) -> HistoryLosses:
    """Return the losses that the observed changes would bring.

    Parameters
    ----------
    factor_ids : sequence of str
    changes : ndarray of shape (n, k)
        Changes of the factors by period, oldest first, in their units.
    sub_portfolios : sequence of SubPortfolioTerms
        Of components that are functions of the factors alone.
    decay : float, optional
        Weight of a period relative to the next more recent one, in (0, 1].
    scaling : HorizonScaling, optional

    Raises
    ------
    InvalidValue
        With pointers relative to the source of losses.

    Notes
    -----
    Weights decay^age are those of Boudoukh, Richardson and Whitelaw (The best of both worlds, Risk 11(5), 1998,
    64-67). Overlapping sums depend on their neighbours up to h - 1 away, so their errors come from blocks.
    """
    _check(factor_ids, changes, scaling)
    portfolio = Portfolio.of(sub_portfolios, FactorSet(tuple(factor_ids)))
    values, periods, block_length, notes = _scaled(changes, scaling)
    losses = np.empty((values.shape[0], len(sub_portfolios)))
    scratch = BlockScratch()
    for start in range(0, values.shape[0], PIECE):
        part = slice(start, start + PIECE)
        rows = np.ascontiguousarray(values[part].T[portfolio.used])
        portfolio.losses(FactorRows(rows.shape[1], rows, portfolio.places), _none, scratch=scratch, out=losses[part])
    return HistoryLosses(losses, decayed(values.shape[0], decay), periods, values, block_length, notes)


def decayed(scenarios: int, decay: float | None) -> Array | None:
    """Return probabilities (n,) in the ratio `decay` from a scenario to the next more recent; None where equal."""
    if decay is None or decay == 1.0:
        return None
    weights = decay ** np.arange(scenarios - 1, -1, -1.0)
    return np.asarray(weights / weights.sum())


def _scaled(changes: Array, scaling: HorizonScaling | None) -> tuple[Array, Indices, int, tuple[tuple[str, str], ...]]:
    """Return values, first and last period of each scenario, block length and notes."""
    n = changes.shape[0]
    each = np.column_stack([np.arange(n), np.arange(n)])
    if scaling is None or scaling.periods == 1:
        return changes, each, 1, ()
    h = scaling.periods
    if scaling.method == "square_root_of_time":
        detail = (
            f"changes were multiplied by the square root of {h}: right for independent changes of one law without "
            "drift and losses linear in them, else an approximation"
        )
        return changes * np.sqrt(float(h)), each, 1, (("square_root_of_time", detail),)
    windows = np.lib.stride_tricks.sliding_window_view(changes, h, axis=0)
    sums = windows.sum(axis=-1)  # each by itself: a running sum would carry rounding errors along
    detail = (
        f"sums of {h} consecutive changes overlap, so errors come from blocks of {BLOCK_PERIODS * h} scenarios: "
        f"{n} periods hold about {n / h:.3g} independent ones"
    )
    starts = np.arange(sums.shape[0])
    periods = np.column_stack([starts, starts + h - 1])
    return sums, periods, BLOCK_PERIODS * h, (("overlapping_periods", detail),)


def _check(factor_ids: Sequence[str], changes: Array, scaling: HorizonScaling | None) -> None:
    if len(set(factor_ids)) < len(factor_ids):
        twice = next(number for number, name in enumerate(factor_ids) if name in factor_ids[:number])
        fault = Fault(detail=f"the id '{factor_ids[twice]}' is taken", code="not_unique", pointer=f"/factors/{twice}")
        raise InvalidValue.of(fault)
    n, k = changes.shape
    if k != len(factor_ids):
        detail = f"there are {len(factor_ids)} factors and {k} changes in each period"
        raise InvalidValue.of(Fault(detail=detail, code="wrong_count", pointer="/changes"))
    overlapping = scaling is not None and scaling.method == "overlapping"
    needed = LEAST_SCENARIOS + (scaling.periods - 1 if scaling is not None and overlapping else 0)
    if n < needed:
        detail = f"{n} periods are too few: at least {needed} are needed"
        pointer = "/horizon_scaling/periods" if overlapping else "/changes"
        raise InvalidValue.of(Fault(detail=detail, code="wrong_count", pointer=pointer))


def _none(owner: str) -> Generator:
    """Refuse a stream: observed changes are all there is."""
    raise LookupError(owner)
