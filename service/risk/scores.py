"""Scores: what a copula hands to the marginals, and the laws that say how to read them.

A score is a number per scenario and factor whose law is known and continuous. It is kept on a scale on which
neither tail runs out of digits, so a marginal is best tabulated over the score itself; `lower` and `upper` give
the probabilities on both sides where they are needed, each from its own formula and never as 1 minus the other.
"""

from dataclasses import dataclass
from typing import Protocol

import numpy as np
from numpy.typing import NDArray
from scipy import special

Array = NDArray[np.float64]

FARTHEST_LOGIT = 700.0  # both probabilities of a logit within +-700 are normal binary64 numbers


class ScoreLaw(Protocol):
    """The law of the scores of one factor: increasing, so that a high score is a high factor."""

    def lower(self, scores: Array) -> Array:
        """Return P(S <= score), accurate relative to itself; same shape as `scores`."""

    def upper(self, scores: Array) -> Array:
        """Return P(S > score), accurate relative to itself; same shape as `scores`."""

    def normal(self, scores: Array) -> Array:
        """Return the normal scores Phi^-1(P(S <= score)), accurate in both tails; same shape as `scores`."""


@dataclass(frozen=True, slots=True)
class NormalScores:
    """Standard normal scores."""

    def lower(self, scores: Array) -> Array:
        """Return Phi(score)."""
        return np.asarray(special.ndtr(scores))

    def upper(self, scores: Array) -> Array:
        """Return Phi(-score)."""
        return np.asarray(special.ndtr(-scores))

    def normal(self, scores: Array) -> Array:
        """Return the scores."""
        return scores


@dataclass(frozen=True, slots=True)
class StudentScores:
    """Student t scores.

    Attributes
    ----------
    df : float
        Degrees of freedom.
    """

    df: float

    def lower(self, scores: Array) -> Array:
        """Return P(T <= score)."""
        return np.asarray(special.stdtr(self.df, scores))

    def upper(self, scores: Array) -> Array:
        """Return P(T > score) as P(T <= -score)."""
        return np.asarray(special.stdtr(self.df, -scores))

    def normal(self, scores: Array) -> Array:
        """Return the normal score of the nearer tail, with the sign of the score."""
        return np.asarray(np.copysign(special.ndtri(special.stdtr(self.df, -np.abs(scores))), scores))


@dataclass(frozen=True, slots=True)
class UniformScores:
    """Uniforms u on (0, 1), kept as their logits ln(u / (1 - u)), which lie within +-700.

    The logit has full relative accuracy of both u and 1 - u in one number, and is smooth in both tails.
    """

    def lower(self, scores: Array) -> Array:
        """Return u = 1 / (1 + exp(-score))."""
        return np.asarray(special.expit(scores))

    def upper(self, scores: Array) -> Array:
        """Return 1 - u = 1 / (1 + exp(score))."""
        return np.asarray(special.expit(-scores))

    def normal(self, scores: Array) -> Array:
        """Return the normal score of the nearer tail, with the sign of the score."""
        return np.asarray(np.copysign(special.ndtri(special.expit(-np.abs(scores))), scores))


Law = NormalScores | StudentScores | UniformScores
"""Any law that a copula gives to the scores of a factor."""


@dataclass(frozen=True, slots=True)
class Scores:
    """Scores of n scenarios and k factors.

    Attributes
    ----------
    values : ndarray of shape (n, k)
        In Fortran order: the scores of one factor lie side by side.
    laws : tuple of Law
        One per factor.
    """

    values: Array
    laws: tuple[Law, ...]


def normal_scores(scores: Scores) -> Array:
    """Return the normal scores of all factors, shape (n, k)."""
    columns = [law.normal(scores.values[:, j]) for j, law in enumerate(scores.laws)]
    return np.column_stack(columns) if columns else np.empty_like(scores.values)
