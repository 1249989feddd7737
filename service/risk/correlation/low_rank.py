"""Correlations that need no matrix: loadings on a few common normals, and one value for all pairs."""

from typing import Annotated, Literal

import numpy as np
from pydantic import Field
from pydantic.dataclasses import dataclass

from service.errors import Fault, InvalidValue
from service.risk.correlation.contract import MOST_FAULTS, SLACK, CorrelationForm, Mixing, refuse
from service.risk.correlation.roots import FactorRoot, NegativeEqualRoot, Root
from service.risk.words import STRICT


@dataclass(frozen=True, kw_only=True, config=STRICT)
class LoadingsCorrelation(CorrelationForm):
    """Loadings L on common normals: the correlations are those of LL′, with a diagonal of 1."""

    kind: Literal["loadings"]
    """Tag of this form."""
    values: Annotated[list[Annotated[list[float], Field(min_length=1)]], Field(min_length=1)]
    """A row per factor and a column per common normal, without unit; the squares of a row sum to at most 1."""

    def check(self, factors: int) -> None:
        if len(self.values) != factors:
            detail = f"there are {len(self.values)} rows of loadings for {factors} factors"
            raise InvalidValue.at("/values", detail, code="wrong_count")
        width = len(self.values[0])
        faults = [
            Fault(
                detail=f"the row has {len(row)} loadings and the first row {width}",
                code="wrong_count",
                pointer=f"/values/{i}",
            )
            for i, row in enumerate(self.values)
            if len(row) != width
        ]
        refuse(faults[:MOST_FAULTS])
        squares = np.sum(np.square(np.array(self.values)), axis=1)
        refuse(
            [
                Fault(
                    detail=f"the squares of the row sum to {squares[i]:.6g}, more than 1",
                    code="out_of_range",
                    pointer=f"/values/{i}",
                )
                for i in np.flatnonzero(squares > 1.0 + SLACK)[:MOST_FAULTS]
            ]
        )

    def root(self, factors: int, mixing: Mixing) -> Root:  # noqa: ARG002  # as the contract
        self.check(factors)
        loadings = np.array(self.values)
        squares = np.sum(loadings**2, axis=1)
        loadings /= np.sqrt(np.maximum(squares, 1.0))[:, None]
        return FactorRoot(loadings, np.sqrt(np.maximum(1.0 - squares, 0.0)))


@dataclass(frozen=True, kw_only=True, config=STRICT)
class EqualCorrelation(CorrelationForm):
    """The same correlation for every pair of factors."""

    kind: Literal["equal"]
    """Tag of this form."""
    value: Annotated[float, Field(gt=-1.0, le=1.0)]
    """The correlation, without unit; above −1/(n − 1) for n factors."""

    def check(self, factors: int) -> None:
        if factors > 1 and self.value * (factors - 1) <= -1.0:
            least = -1.0 / (factors - 1)
            detail = f"{self.value!r} is not above {least:.6g}: {factors} factors cannot all be that opposed"
            raise InvalidValue.at("/value", detail, code="out_of_range")

    def root(self, factors: int, mixing: Mixing) -> Root:  # noqa: ARG002  # as the contract
        self.check(factors)
        if self.value < 0.0:
            return NegativeEqualRoot(self.value, factors)
        loadings = np.full((factors, 1), np.sqrt(self.value))
        return FactorRoot(loadings, np.full(factors, np.sqrt(1.0 - self.value)))
