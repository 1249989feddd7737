"""Marginals with finitely many values: empirical and point."""

import math
from functools import cached_property
from typing import Annotated, Literal

import numpy as np
from pydantic import Field
from pydantic.dataclasses import dataclass

from service.risk.marginals.contract import LARGEST, Amount, MarginalLaw, refusal
from service.risk.marginals.moments import Array
from service.risk.quantiles import compensated_cumsum
from service.risk.score_tables import Atoms, Piece
from service.risk.words import STRICT

MOST_VALUES = 1_000_000
SLACK = 1e-9  # the probabilities given may sum to 1 within this


@dataclass(frozen=True, kw_only=True, config=STRICT)
class DiscreteMarginal(MarginalLaw):
    """Members bring their atoms; the quantile function is a step function, exactly."""

    @property
    def atoms(self) -> Atoms:
        """The distinct values and the probabilities at or below and beyond each."""
        raise NotImplementedError

    def quantile(self, lower: Array, upper: Array) -> Array:
        return self.atoms.quantile(np.asarray(lower, dtype=np.float64), np.asarray(upper, dtype=np.float64))

    def below(self, values: Array) -> Array:
        atoms = self.atoms
        place = np.searchsorted(atoms.values, np.asarray(values, dtype=np.float64), side="right")
        return np.where(place > 0, atoms.lower[place - 1], 0.0)

    def beyond(self, values: Array) -> Array:
        atoms = self.atoms
        place = np.searchsorted(atoms.values, np.asarray(values, dtype=np.float64), side="right")
        return np.where(place > 0, atoms.upper[place - 1], 1.0)

    @property
    def support(self) -> tuple[float, float]:
        values = self.atoms.values
        return (float(values[0]), float(values[-1]))

    @property
    def mean(self) -> float:
        return self._centre[0]

    @property
    def variance(self) -> float:
        return self._centre[1]

    @cached_property
    def _centre(self) -> tuple[float, float]:
        atoms = self.atoms
        start = float(atoms.quantile(np.array([0.5]), np.array([0.5]))[0])
        first = math.fsum(atoms.masses * (atoms.values - start))
        distances = atoms.values - (start + first)
        return start + first, math.fsum(atoms.masses * distances * distances)

    def _limited_mean(self, limit: float) -> float:
        atoms = self.atoms
        return float(np.sum(atoms.masses * np.minimum(atoms.values, limit)))

    def layer_mean(self, start: float, stop: float) -> float:
        return float(np.sum(self.atoms.masses * np.clip(self.atoms.values - start, 0.0, stop - start)))

    @property
    def pieces(self) -> tuple[Piece, ...]:
        return (Piece(1.0, 0.0, self.atoms),)


@dataclass(frozen=True, kw_only=True, config=STRICT)
class EmpiricalMarginal(DiscreteMarginal):
    """Observed values with their probabilities."""

    family: Literal["empirical"]
    """Tag of this law."""
    values: Annotated[list[float], Field(min_length=1, max_length=MOST_VALUES)]
    """The values, in any order, in the unit of the factor."""
    probabilities: Annotated[list[Annotated[float, Field(ge=0.0)]], Field(max_length=MOST_VALUES)] | None = None
    """Probability of each value, without unit, summing to 1 within 1e-9; equal if absent."""

    def _check(self) -> None:
        if max(map(abs, self.values)) > LARGEST:
            raise refusal("values are at most {most} in size", most=LARGEST)
        if self.probabilities is None:
            return
        if len(self.probabilities) != len(self.values):
            detail = "each value has a probability, but there are {probabilities} probabilities of {values} values"
            raise refusal(detail, probabilities=str(len(self.probabilities)), values=str(len(self.values)))
        total = math.fsum(self.probabilities)
        if abs(total - 1.0) > SLACK:
            raise refusal("the probabilities sum to 1, not to {total}", total=f"{total:.12g}")

    @cached_property
    def atoms(self) -> Atoms:
        values, places = np.unique(np.array(self.values, dtype=np.float64), return_inverse=True)
        if self.probabilities is None:
            counts = np.bincount(places, minlength=values.size).astype(np.float64)
            total = float(len(self.values))
            below = np.cumsum(counts)  # counts are exact
            return Atoms(values, counts / total, below / total, (total - below) / total)
        given = np.array(self.probabilities, dtype=np.float64)
        order = np.argsort(places, kind="stable")
        starts = np.flatnonzero(np.diff(places[order], prepend=-1))
        masses = np.add.reduceat(given[order], starts) / math.fsum(self.probabilities)
        values, masses = values[masses > 0.0], masses[masses > 0.0]
        lower = np.minimum(compensated_cumsum(masses), 1.0)
        upper = np.minimum(compensated_cumsum(masses[::-1])[::-1], 1.0)
        lower[-1] = 1.0
        return Atoms(values, masses, lower, np.append(upper[1:], 0.0))

    def __hash__(self) -> int:
        """Return the hash of the atoms: the fields are lists."""
        return self._hash

    @cached_property
    def _hash(self) -> int:
        return hash((self.atoms.values.tobytes(), self.atoms.masses.tobytes()))


@dataclass(frozen=True, kw_only=True, config=STRICT)
class PointMarginal(DiscreteMarginal):
    """A single value."""

    family: Literal["point"]
    """Tag of this law."""
    value: Amount
    """The value, in the unit of the factor."""

    @cached_property
    def atoms(self) -> Atoms:
        one = np.ones(1)
        return Atoms(np.array([self.value]), one, one, np.zeros(1))
