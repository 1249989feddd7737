"""What a copula is: something that is checked against the factors and then gives scores, block by block."""

from collections.abc import Sequence
from typing import Annotated, Protocol

import numpy as np
from numpy.typing import NDArray
from pydantic import Field
from pydantic.dataclasses import dataclass

from service.errors import Fault
from service.risk.correlation import Repair
from service.risk.correlation.contract import refuse
from service.risk.scores import Law, Scores
from service.risk.streams import Draw
from service.risk.words import STRICT
from service.suggestions import suggestion

Array = NDArray[np.float64]
Indices = NDArray[np.intp]

NAMED = 5  # factors that a fault lists before it counts the rest

FactorIds = Annotated[list[Annotated[str, Field(min_length=1, max_length=200)]], Field(min_length=1)]


class Sampler(Protocol):
    """A copula bound to k factors, holding what does not change from block to block."""

    @property
    def laws(self) -> tuple[Law, ...]:
        """The law of each factor's scores."""

    @property
    def dimensions(self) -> int:
        """How many numbers a scenario takes from a draw; `Draw.generator` is not counted."""

    @property
    def repair(self) -> Repair | None:
        """What was done to the correlations that were given, if anything."""

    def correlations(self, factors: Indices) -> Array | None:
        """Return the correlation matrix of the normal scores of some factors, by their numbers.

        None where more than a correlation ties them.
        """

    def scores(self, draw: Draw) -> Scores:
        """Return the scores of a block, in an array of the draw."""


@dataclass(frozen=True, kw_only=True, config=STRICT)
class CopulaFamily:
    """The contract of all copulas; faults point into the copula, e.g. ``/correlation/values/2/1``."""

    def check(self, factor_ids: Sequence[str]) -> None:
        """Raise InvalidValue for what does not fit the factors, as far as that is seen without much work."""

    def prepared(self, factor_ids: Sequence[str]) -> Sampler:
        """Return the copula bound to these factors.

        Raises
        ------
        InvalidValue
            As `check`, and for a correlation matrix that is not positive semi-definite.
        """
        raise NotImplementedError


def grouped(factor_ids: Sequence[str], groups: Sequence[Sequence[str]]) -> list[Indices]:
    """Return the numbers of the factors of each group.

    Raises
    ------
    InvalidValue
        If a name is no factor, or a factor is in no group or in two; with pointers from ``/groups`` on.
    """
    numbers = {name: number for number, name in enumerate(factor_ids)}
    faults: list[Fault] = []
    seen: dict[str, int] = {}
    for g, names in enumerate(groups):
        for j, name in enumerate(names):
            pointer = f"/groups/{g}/factors/{j}"
            if name not in numbers:
                detail = f"there is no factor '{name}'{suggestion(name, factor_ids)}"
                faults.append(Fault(detail=detail, code="unknown_factor", pointer=pointer))
            elif name in seen:
                where = "twice in this group" if seen[name] == g else f"in group {seen[name]} already (from 0)"
                faults.append(Fault(detail=f"the factor '{name}' is {where}", code="not_allowed", pointer=pointer))
            else:
                seen[name] = g
    missing = [name for name in factor_ids if name not in seen]
    if missing and not faults:
        more = f" and {len(missing) - NAMED} more" if len(missing) > NAMED else ""
        names = ", ".join(f"'{name}'" for name in missing[:NAMED]) + more
        faults.append(
            Fault(detail=f"every factor is in one group; in none: {names}", code="missing", pointer="/groups")
        )
    refuse(faults)
    return [np.array([numbers[name] for name in names], dtype=np.intp) for names in groups]
