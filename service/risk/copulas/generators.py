"""Generators of Archimedean copulas: the variable that all factors share, and from it to a factor's uniform.

Given the shared variable V, a factor's uniform is psi(E / V) with an exponential E of its own and psi the Laplace
transform of V: A. W. Marshall and I. Olkin, Families of multivariate distributions, J. of the American Statistical
Association 83 (1988) 834-841. Whatever may be large or small is kept as a logarithm, and the uniform as its logit,
which is found from ln u in the lower tail and from ln(1 - u) in the upper one, never from 1 - u.
"""

from dataclasses import dataclass
from typing import Literal, Protocol

import numpy as np
from numpy.typing import NDArray

from service.risk.copulas.frailties import SPLIT, log_log_series, log_one_less_exp, log_positive_stable, log_sibuya
from service.risk.copulas.mixing import LogGamma
from service.risk.scores import FARTHEST_LOGIT
from service.risk.streams import Draw

Array = NDArray[np.float64]

GeneratorName = Literal["clayton", "gumbel", "joe", "frank"]

LEAST = np.exp(-FARTHEST_LOGIT)
LOG_FARTHEST = np.log(FARTHEST_LOGIT)
FARTHEST_SHAPE = 1e300  # of a gamma variable, in place of one that would be infinite


class ArchimedeanGenerator(Protocol):
    """psi with the law of its V; psi and V have no unit."""

    @property
    def dimensions(self) -> int:
        """How many numbers V takes from a draw."""

    def log_shared(self, draw: Draw) -> Array:
        """Return ln V, shape (n,)."""

    def logits(self, log_t: Array) -> Array:
        """Return the logits of psi(t) from ln t; same shape."""


@dataclass(frozen=True, slots=True)
class Clayton:
    """psi(t) = (1 + t)^(-1/theta), theta > 0: V is gamma of shape 1/theta.

    V is drawn as a gamma variable of shape 1 + 1/theta times U^theta, which is the same law and has a smooth table for
    every theta (G. Marsaglia and W. W. Tsang, ACM Trans. Mathematical Software 26, 2000, 363-372).
    """

    theta: float
    dimensions: int = 2

    def log_shared(self, draw: Draw) -> Array:
        """Return ln V."""
        shape = min(1.0 / self.theta, FARTHEST_SHAPE)
        return LogGamma.of(1.0 + shape)(draw.normals(1)[0]) - draw.exponentials(1)[0] * self.theta

    def logits(self, log_t: Array) -> Array:
        """Return the logits from -ln u = ln(1 + t) / theta."""
        return from_lower(softplus(log_t) / self.theta)


@dataclass(frozen=True, slots=True)
class Gumbel:
    """psi(t) = exp(-t^(1/theta)), theta >= 1: V is positive stable of index 1/theta."""

    theta: float

    @property
    def dimensions(self) -> int:
        """How many numbers V takes from a draw."""
        return 0 if self.theta == 1.0 else 2

    def log_shared(self, draw: Draw) -> Array:
        """Return ln V."""
        if self.theta == 1.0:
            return np.zeros(draw.scenarios)
        return log_positive_stable(1.0 / self.theta, draw.uniforms(1)[0], draw.exponentials(1)[0])

    def logits(self, log_t: Array) -> Array:
        """Return the logits from -ln u = t^(1/theta)."""
        return from_lower(np.exp(np.minimum(log_t / self.theta, LOG_FARTHEST)))


@dataclass(frozen=True, slots=True)
class Joe:
    """psi(t) = 1 - (1 - exp(-t))^(1/theta), theta >= 1: V is Sibuya of index 1/theta."""

    theta: float

    @property
    def dimensions(self) -> int:
        """How many numbers V takes from a draw."""
        return 0 if self.theta == 1.0 else 1

    def log_shared(self, draw: Draw) -> Array:
        """Return ln V."""
        if self.theta == 1.0:
            return np.zeros(draw.scenarios)
        return log_sibuya(1.0 / self.theta, draw.uniforms(1)[0])

    def logits(self, log_t: Array) -> Array:
        """Return the logits from -ln(1 - u) = -ln(1 - exp(-t)) / theta."""
        return -from_lower(log_one_less_exp(log_t) / -self.theta)


@dataclass(frozen=True, slots=True)
class Frank:
    """psi(t) = -ln(1 - (1 - exp(-theta)) exp(-t)) / theta, theta > 0: V is log-series."""

    theta: float
    dimensions: int = 2

    def log_shared(self, draw: Draw) -> Array:
        """Return ln V."""
        return log_log_series(self.theta, draw.uniforms(1)[0], draw.exponentials(1)[0])

    def logits(self, log_t: Array) -> Array:
        """Return ln(theta u) - ln(theta (1 - u)).

        theta (1 - u) = ln(1 + (exp(theta) - 1)(1 - exp(-t))); theta u is the rest of theta where it is above 1,
        else -ln(1 - (1 - exp(-theta)) exp(-t)).
        """
        upper = softplus(log_one_less_exp(log_t) + log_expm1(self.theta))
        rest = self.theta - upper
        shrunk = np.exp(-np.exp(np.minimum(log_t, LOG_FARTHEST))) * np.expm1(-self.theta)
        lower = np.where(rest > 1.0, rest, -np.log1p(np.maximum(shrunk, -0.9)))
        return np.clip(np.log(lower) - np.log(np.maximum(upper, LEAST)), -FARTHEST_LOGIT, FARTHEST_LOGIT)


GENERATORS = {"clayton": Clayton, "gumbel": Gumbel, "joe": Joe, "frank": Frank}


def softplus(x: Array) -> Array:
    """Return ln(1 + exp(x)), accurate relative to itself."""
    return np.asarray(np.maximum(x, 0.0) + np.log1p(np.exp(np.maximum(-np.abs(x), -SPLIT))))


def log_expm1(x: float) -> float:
    """Return ln(exp(x) - 1) for x > 0 of any size."""
    return float(x + np.log(-np.expm1(-x)))


def from_lower(exponents: Array) -> Array:
    """Return the logits of u from -ln u: -ln(1/u - 1)."""
    return np.asarray(-np.log(np.expm1(np.clip(exponents, LEAST, FARTHEST_LOGIT))))
