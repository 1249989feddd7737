"""Laws of the number of claims in a year."""

import math
from typing import Annotated, Literal, Self

import numpy as np
from numpy.random import Generator
from numpy.typing import NDArray
from pydantic import Field, model_validator
from pydantic.dataclasses import dataclass
from pydantic_core import PydanticCustomError
from typing_extensions import TypeAliasType

from service.risk.words import STRICT

Counts = NDArray[np.int64]
Spectrum = NDArray[np.complex128]

MOST_CLAIMS = 1e9  # expected claims in a scenario; more is a mistake, and overflows the counts


@dataclass(frozen=True, kw_only=True, config=STRICT)
class FrequencyLaw:
    """The contract: number N of claims, its draws and its generating function."""

    @property
    def expected(self) -> float:
        """Expected number of claims."""
        raise NotImplementedError

    @property
    def spread(self) -> float:
        """Variance of the number of claims."""
        raise NotImplementedError

    @property
    def most(self) -> float:
        """The largest number of claims there can be."""
        return math.inf

    @property
    def growth(self) -> float:
        """Up to which M the expectation E[M^N] exists."""
        return math.inf

    def drawn(self, generator: Generator, scenarios: int) -> Counts:
        """Return the number of claims of each scenario, shape (n,)."""
        raise NotImplementedError

    def generating(self, excess: Spectrum) -> Spectrum:
        """Return E[z^N] for z = 1 + `excess`, |z| at most 1."""
        raise NotImplementedError


@dataclass(frozen=True, kw_only=True, config=STRICT)
class PoissonFrequency(FrequencyLaw):
    """Poisson number of claims."""

    family: Literal["poisson"]
    """Tag of this law."""
    mean: Annotated[float, Field(gt=0.0, le=MOST_CLAIMS)]
    """Expected number of claims in a scenario."""

    @property
    def expected(self) -> float:
        return self.mean

    @property
    def spread(self) -> float:
        return self.mean

    def drawn(self, generator: Generator, scenarios: int) -> Counts:
        return generator.poisson(self.mean, scenarios)

    def generating(self, excess: Spectrum) -> Spectrum:
        """Return exp(mean (z - 1))."""
        return np.asarray(np.exp(self.mean * excess))


@dataclass(frozen=True, kw_only=True, config=STRICT)
class NegativeBinomialFrequency(FrequencyLaw):
    """Negative binomial number of claims: Poisson with a gamma mean."""

    family: Literal["negative_binomial"]
    """Tag of this law."""
    mean: Annotated[float, Field(gt=0.0, le=MOST_CLAIMS)]
    """Expected number of claims in a scenario."""
    variance: Annotated[float, Field(gt=0.0)]
    """Variance of the number of claims; above the mean."""

    @model_validator(mode="after")
    def _dispersed(self) -> Self:
        if not self.variance > self.mean:
            raise PydanticCustomError(
                "frequency",
                "the variance of a negative binomial is above its mean {mean}; use poisson where they are equal",
                {"mean": self.mean},
            )
        return self

    @property
    def expected(self) -> float:
        return self.mean

    @property
    def spread(self) -> float:
        return self.variance

    @property
    def _beta(self) -> float:
        return (self.variance - self.mean) / self.mean

    @property
    def growth(self) -> float:
        """Return 1 + 1/β: E[M^N] = (1 - β (M - 1))^(-mean/β), with β = variance/mean - 1."""
        return 1.0 + 1.0 / self._beta

    def drawn(self, generator: Generator, scenarios: int) -> Counts:
        return generator.negative_binomial(self.mean / self._beta, self.mean / self.variance, scenarios)

    def generating(self, excess: Spectrum) -> Spectrum:
        """Return (1 - β (z - 1))^(-mean/β)."""
        return np.asarray(np.exp((-self.mean / self._beta) * np.log1p(-self._beta * excess)))


@dataclass(frozen=True, kw_only=True, config=STRICT)
class BinomialFrequency(FrequencyLaw):
    """Binomial number of claims."""

    family: Literal["binomial"]
    """Tag of this law."""
    trials: Annotated[int, Field(ge=1, le=int(MOST_CLAIMS), json_schema_extra={"format": "int64"})]
    """Number of risks, each with at most one claim."""
    probability: Annotated[float, Field(gt=0.0, le=1.0)]
    """Probability of a claim of each risk, above 0 and at most 1."""

    @property
    def expected(self) -> float:
        return self.trials * self.probability

    @property
    def spread(self) -> float:
        return self.expected * (1.0 - self.probability)

    @property
    def most(self) -> float:
        return float(self.trials)

    def drawn(self, generator: Generator, scenarios: int) -> Counts:
        return generator.binomial(self.trials, self.probability, scenarios)

    def generating(self, excess: Spectrum) -> Spectrum:
        """Return (1 + probability (z - 1))^trials."""
        return np.asarray((1.0 + self.probability * excess) ** self.trials)


ClaimFrequency = TypeAliasType(
    "ClaimFrequency",
    Annotated[
        PoissonFrequency | NegativeBinomialFrequency | BinomialFrequency,
        Field(discriminator="family", description="Any law of the number of claims, told apart by `family`."),
    ],
)

TYPICAL_FREQUENCIES: tuple[FrequencyLaw, ...] = (
    PoissonFrequency(family="poisson", mean=3.0),
    NegativeBinomialFrequency(family="negative_binomial", mean=3.0, variance=5.0),
    BinomialFrequency(family="binomial", trials=50, probability=0.02),
)
"""One realistic instance of each."""
