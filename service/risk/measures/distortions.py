"""Distortion measures: a concave function g of the survival probability re-weights the scenarios.

The figure is sum x_k [g(P(L >= x_k)) - g(P(L > x_k))] (Wang, ASTIN Bulletin 26(1), 1996, 71-92; Choquet
integral, losses may be negative).
"""

from math import inf
from typing import Annotated, Literal

import numpy as np
from pydantic import Field
from pydantic.dataclasses import dataclass
from scipy import special

from service.risk.measures.contract import ContributionWeights, LocatedMeasure, Needs
from service.risk.quantiles import Array, Ordered, Ties, decimal
from service.risk.uncertainty import Influence
from service.risk.words import STRICT

LEAST_FACTOR = 0.1  # of the carriers of a proportional hazard; calibrated by simulation
MILD = 1e-8  # aversion below which the exponential distortion is its own series to 1e-16
FARTHEST_SCORE = 40.0  # normal scores beyond +-38 have probability 0 in binary64


@dataclass(frozen=True, kw_only=True, config=STRICT)
class _Distortion(LocatedMeasure):
    """Members bring g and its derivative on (0, 1]."""

    @property
    def needs(self) -> Needs:
        return Needs(upper_index=1.0, lower_index=1.0, error_index=2.0)

    def distorted(self, survival: Array) -> Array:
        """Return g(survival)."""
        raise NotImplementedError

    def slope(self, survival: Array) -> Array:
        """Return g'(survival), for survival in (0, 1]."""
        raise NotImplementedError

    def weights(self, ordered: Ordered) -> Array:
        raised = self.distorted(np.minimum(ordered.upper / ordered.unit, 1.0))
        raised[..., -1] = 1.0
        return np.diff(raised, axis=-1, prepend=0.0)

    def influence(self, ordered: Ordered, values: Array) -> Influence:  # noqa: ARG002  # as the contract
        """Return the integral of g'(P(L > y)) dy up to the loss: a Hadamard derivative of -int x dg.

        On sorted losses it is a running sum, from the least loss up, of g' at each survival probability times
        the step to the next loss (Jones and Zitikis, North American Actuarial J. 7(4), 2003, 44-54).
        """
        steps = np.diff(ordered.values, axis=-1)
        np.negative(steps, out=steps)
        heights = self._slopes(ordered)[..., :-1] * steps
        result = np.zeros_like(ordered.values)
        result[:, :-1] = np.cumsum(heights[:, ::-1], axis=-1)[:, ::-1]
        return Influence(result, np.zeros(result.shape[0]))

    def contribution_influence(
        self,
        ordered: Ordered,
        ties: Ties,
        rows: Array,
        weights: ContributionWeights,
    ) -> Influence:
        """Return the derivative of sum_j w_j E[X_i given atom j] with respect to each scenario's weight.

        For a scenario in atom J, with m_j = E[X_i given atom j], s_j = P(L >= x_j) and w_J its weight over its
        probability: w_J X_i + sum over lower atoms of m_j (g'(s_j) - g'(s_(j+1))) + m_J (g'(s_J) - w_J).
        """
        ends = np.append(ties.starts[1:], ties.atom.size) - 1
        slopes = self._slopes(ordered)[0][ends]  # per atom, worst first
        means = ties.means(rows)
        changes = np.diff(slopes, prepend=slopes[0])  # g'(s_j) - g'(s of the next worse atom)
        steps = changes[:, None] * means
        below = np.zeros_like(steps)
        below[:-1] = np.cumsum(steps[::-1], axis=0)[::-1][1:]
        mass = ties.sums(ties.p)
        density = np.divide(ties.sums(weights.values), mass, out=np.zeros_like(mass), where=mass > 0.0)
        own = means * (slopes - density)[:, None]
        values = ties.spread(density)[:, None] * rows + ties.spread(below + own)
        return Influence(values.T, np.zeros(rows.shape[1]))

    def _slopes(self, ordered: Ordered) -> Array:
        """Return g' at the survival probability of each position; 0 where nothing has been passed yet."""
        survival = np.minimum(ordered.upper / ordered.unit, 1.0)
        positive = survival > 0.0
        return np.where(positive, self.slope(np.where(positive, survival, 1.0)), 0.0)


@dataclass(frozen=True, kw_only=True, config=STRICT)
class Wang(_Distortion):
    """Distortion g(s) = Phi(Phi^-1(s) + shift): Wang, J. of Risk and Insurance 67 (2000) 15-36."""

    kind: Literal["wang"]
    """Tag of this measure."""
    shift: Annotated[float, Field(ge=0.0)]
    """Shift of the normal score, 0 or more; 0 gives the mean."""

    @property
    def parameters(self) -> dict[str, float]:
        return {"shift": self.shift}

    def distorted(self, survival: Array) -> Array:
        return np.asarray(special.ndtr(special.ndtri(survival) + self.shift))

    def slope(self, survival: Array) -> Array:
        score = np.clip(special.ndtri(survival), -FARTHEST_SCORE, FARTHEST_SCORE)
        return np.asarray(np.exp(-self.shift * (score + self.shift / 2.0)))


@dataclass(frozen=True, kw_only=True, config=STRICT)
class ProportionalHazard(_Distortion):
    """Distortion g(s) = s^exponent: Wang, Insurance: Mathematics and Economics 17 (1995) 43-54."""

    kind: Literal["proportional_hazard"]
    """Tag of this measure."""
    exponent: Annotated[float, Field(gt=0.0, le=1.0)]
    """Exponent of the survival probability, above 0 up to 1; 1 gives the mean."""

    @property
    def parameters(self) -> dict[str, float]:
        return {"exponent": self.exponent}

    @property
    def carrier_factor(self) -> float:
        """Its error exists only for a tail index above 2/(2 exponent - 1): the sample says less than it seems."""
        return max(2.0 * self.exponent - 1.0, LEAST_FACTOR)

    @property
    def needs(self) -> Needs:
        """The integral of P(L > x)^exponent is finite for a tail index above 1/exponent."""
        exponent = float(decimal(self.exponent))
        error = 2.0 / (2.0 * exponent - 1.0) if exponent > 0.5 else inf  # noqa: PLR2004  # from there on infinite
        return Needs(upper_index=1.0 / exponent, lower_index=1.0, error_index=error)

    def distorted(self, survival: Array) -> Array:
        return np.asarray(survival**self.exponent)

    def slope(self, survival: Array) -> Array:
        return np.asarray(self.exponent * survival ** (self.exponent - 1.0))


@dataclass(frozen=True, kw_only=True, config=STRICT)
class DualPower(_Distortion):
    """Distortion g(s) = 1 - (1 - s)^exponent: the expected largest of `exponent` independent losses."""

    kind: Literal["dual_power"]
    """Tag of this measure."""
    exponent: Annotated[float, Field(ge=1.0)]
    """Exponent, 1 or more; 1 gives the mean."""

    @property
    def parameters(self) -> dict[str, float]:
        return {"exponent": self.exponent}

    def distorted(self, survival: Array) -> Array:
        with np.errstate(divide="ignore"):  # log(1 - 1) = -inf, and expm1 of it is -1, as it should be
            return np.asarray(-np.expm1(self.exponent * np.log1p(-survival)))

    def slope(self, survival: Array) -> Array:
        return np.asarray(self.exponent * (1.0 - survival) ** (self.exponent - 1.0))


@dataclass(frozen=True, kw_only=True, config=STRICT)
class ExponentialDistortion(_Distortion):
    """Distortion g(s) = (1 - exp(-aversion s)) / (1 - exp(-aversion)), the exponential spectral measure.

    Cotter and Dowd, J. Banking & Finance 30 (2006) 3469-3485, equation 5.
    """

    kind: Literal["exponential_distortion"]
    """Tag of this measure."""
    aversion: Annotated[float, Field(gt=0.0)]
    """Risk aversion, above 0, without unit."""

    @property
    def parameters(self) -> dict[str, float]:
        return {"aversion": self.aversion}

    def distorted(self, survival: Array) -> Array:
        if self.aversion < MILD:
            return np.asarray(survival * (1.0 + self.aversion * (1.0 - survival) / 2.0))
        return np.asarray(np.expm1(-self.aversion * survival) / np.expm1(-self.aversion))

    def slope(self, survival: Array) -> Array:
        if self.aversion < MILD:
            return np.asarray(1.0 + self.aversion * (0.5 - survival))
        return np.asarray(-self.aversion * np.exp(-self.aversion * survival) / np.expm1(-self.aversion))
