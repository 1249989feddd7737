"""Standard errors and intervals, all built from influence values: one number per scenario.

The influence value of a scenario is the derivative of a figure with respect to the weight of that
scenario (Hampel, J. American Statistical Association 69, 1974, 383-393). The variance of an estimate
from n draws is the mean square of the centred influence values over n; with importance weights p it
is sum p^2 IF^2. Figures, contributions, groups and differences follow by the chain rule.
"""

from collections.abc import Sequence
from dataclasses import dataclass, replace
from typing import Self

import numpy as np
from numpy.typing import NDArray
from scipy import special

from service.risk.quantiles import Array, Indices, Ordered, cluster_sums

Marks = NDArray[np.bool_]

LEAST_TAIL = 10.0  # effective tail scenarios below which no error is given
FULL_TAIL = 100.0  # effective tail scenarios below which an error is given with a note
LEAST_CARRIERS = 5.0  # effective carriers of a measure of the whole distribution below which no error is given
FULL_CARRIERS = 15.0  # effective carriers below which an error is given with a note; both calibrated by simulation
LEAST_FREEDOM = 4.0  # degrees of freedom of an interval
USUAL_LEAN = 2.0 / 3.0  # of the skewness
SIDES = np.array([[-1.0], [1.0]])  # the lower and the upper end of an interval
SLIGHT_LEAN = 1e-8  # lean times quantile below which an interval is symmetric to binary64


@dataclass(frozen=True, slots=True)
class Influence:
    """Influence values of c figures.

    Attributes
    ----------
    values : ndarray of shape (c, m)
        One per kept scenario; they need not be centred.
    rest : ndarray of shape (c,)
        The common value of the scenarios that were not kept.
    """

    values: Array
    rest: Array


@dataclass(frozen=True, slots=True)
class Bounds:
    """Errors and intervals of c figures that hold amid equal losses.

    Attributes
    ----------
    errors, lower, upper : ndarray of shape (c,)
    """

    errors: Array
    lower: Array
    upper: Array


@dataclass(frozen=True, slots=True)
class Estimates:
    """Figures with their errors; NaN stands for what cannot be estimated.

    Attributes
    ----------
    values, standard_errors, lower, upper : ndarray of shape (c,)
    tail_scenarios : ndarray of shape (c,)
        Effective number of scenarios that carry each figure.
    method : str
        How the intervals were made.
    remarks : frozenset of str
        Codes of what the caller ought to know.
    bounded : ndarray of bool of shape (c,) or None
        Which figures have the widest interval that order statistics allow instead; None for none.
    """

    values: Array
    standard_errors: Array
    lower: Array
    upper: Array
    tail_scenarios: Array
    method: str
    remarks: frozenset[str] = frozenset()
    bounded: Marks | None = None

    @classmethod
    def exact(cls, values: Array) -> Self:
        """Return figures of a whole population, which have no error."""
        unknown = np.full(values.shape, np.nan)
        return cls(values, unknown, unknown, unknown, unknown, "none")

    @classmethod
    def joined(cls, parts: Sequence[Self]) -> Self:
        """Return the figures of several parts in one, in order."""
        if len(parts) == 1:
            return parts[0]
        return cls(
            np.concatenate([part.values for part in parts]),
            np.concatenate([part.standard_errors for part in parts]),
            np.concatenate([part.lower for part in parts]),
            np.concatenate([part.upper for part in parts]),
            np.concatenate([part.tail_scenarios for part in parts]),
            parts[0].method,
            frozenset().union(*(part.remarks for part in parts)),
            np.concatenate([part.is_bounded for part in parts]),
        )

    @property
    def is_bounded(self) -> Marks:
        """Which figures have the widest interval that order statistics allow, shape (c,)."""
        return np.zeros(self.values.shape, dtype=bool) if self.bounded is None else self.bounded

    def within(self, bounds: "Bounds", tied: Marks) -> Self:
        """Return the same figures where those that `tied` (c,) marks have errors and intervals from `bounds`."""
        if not tied.any():
            return self
        errors, lower, upper = (
            np.where(tied, theirs, ours)
            for theirs, ours in (
                (bounds.errors, self.standard_errors),
                (bounds.lower, self.lower),
                (bounds.upper, self.upper),
            )
        )
        changed = replace(self, standard_errors=errors, lower=lower, upper=upper, bounded=self.is_bounded | tied)
        return changed.remarked("tied_quantile")

    def remarked(self, *codes: str) -> Self:
        """Return the same figures with further remarks."""
        return replace(self, remarks=self.remarks | set(codes))


@dataclass(frozen=True, slots=True)
class Spread:
    """How the influence values of c figures spread over the scenarios.

    With v the centred influence values times their probability:

    Attributes
    ----------
    errors : ndarray of shape (c,)
        Standard errors, sqrt(sum v^2).
    skewness : ndarray of shape (c,)
        Of the estimates: sum v^3 / (sum v^2)^1.5.
    effective : ndarray of shape (c,)
        Effective number of scenarios that carry the error: (sum v^2)^2 / sum v^4, which is n over the kurtosis
        (Kish, Survey Sampling, 1965, section 11.7, with squared influence values as weights).
    correlation : ndarray of shape (c,) or None
        With the estimate of another figure, if one was given.
    """

    errors: Array
    skewness: Array
    effective: Array
    correlation: Array | None = None

    @classmethod
    def joined(cls, parts: Sequence[Self]) -> Self:
        """Return the spread of the figures of several parts in one, in order."""
        if len(parts) == 1:
            return parts[0]
        correlations = [one.correlation for one in parts if one.correlation is not None]
        return cls(
            np.concatenate([one.errors for one in parts]),
            np.concatenate([one.skewness for one in parts]),
            np.concatenate([one.effective for one in parts]),
            np.concatenate(correlations) if correlations else None,
        )


@dataclass(frozen=True, slots=True)
class Sampling:
    """How the scenarios behind influence values were drawn.

    Attributes
    ----------
    scenarios : int
        Number n of draws.
    p : ndarray of shape (c, m), (1, m) or None
        Probabilities of the kept scenarios; None for 1/n each.
    clusters : ndarray of int of shape (c, m), (1, m) or None
        Cluster of each, where they are dependent within clusters; all scenarios are kept then.
    """

    scenarios: int
    p: Array | None = None
    clusters: Indices | None = None

    @classmethod
    def of(cls, ordered: Ordered) -> Self:
        """Return how the scenarios of `ordered` were drawn."""
        return cls(ordered.scenarios, ordered.probabilities, ordered.clusters)


def spread(influence: Influence, sampling: Sampling, *, beside: Influence | None = None) -> Spread:
    """Return the spread of the influence values of c figures.

    Parameters
    ----------
    influence : Influence
        Of c figures over m kept scenarios.
    sampling : Sampling
        Of these scenarios.
    beside : Influence, optional
        Of one more figure over the same scenarios, to correlate with.
    """
    v, rest, left_out = _standardised(influence, sampling)
    errors = np.sqrt(np.vecdot(v, v) + left_out * rest * rest)
    scale = np.where(errors > 0.0, errors, 1.0)
    v /= scale[:, None]
    rest = rest / scale
    correlation = None
    if beside is not None:
        other, other_rest, _ = _standardised(beside, sampling)
        other_error = np.sqrt(np.vecdot(other, other) + left_out * other_rest * other_rest)[0]
        together = v @ other[0] + left_out * rest * other_rest
        correlation = together / other_error if other_error > 0.0 else np.zeros_like(errors)
    squares = np.square(v)
    skewness = np.vecdot(squares, v) + left_out * rest**3
    fourth = np.vecdot(squares, squares) + left_out * rest**4
    effective = np.divide(1.0, fourth, out=np.full(errors.shape, float(sampling.scenarios)), where=fourth > 0.0)
    return Spread(errors, skewness, effective, correlation)


def _standardised(influence: Influence, sampling: Sampling) -> tuple[Array, Array, int]:
    """Return centred influence values times probability, the same of what was left out, and how much that is."""
    values, rest, scenarios = influence.values, influence.rest, sampling.scenarios
    left_out = scenarios - values.shape[-1]
    if sampling.p is None:
        centre = (values.sum(axis=-1) + left_out * rest) / scenarios
        v, rest = values - centre[:, None], (rest - centre) / scenarios
        v /= scenarios
    else:
        v, rest = sampling.p * (values - np.sum(sampling.p * values, axis=-1, keepdims=True)), np.zeros_like(rest)
    if sampling.clusters is not None:
        v = cluster_sums(v, sampling.clusters)
    return v, rest, left_out


def leaning_estimates(  # each is a property of the figures
    values: Array,
    of: Spread,
    lean: Array,
    *,
    coverage: float,
    tail_scenarios: Array,
    method: str = "skewness_adjusted",
) -> Estimates:
    """Return figures with intervals that lean to the side on which their estimates are skewed.

    The ends are value + se (exp(-+lean t) - 1)/lean, t the quantile of Student's law with twice the effective
    number of scenarios as degrees of freedom (at least `LEAST_FREEDOM`): Satterthwaite, Biometrics Bulletin 2
    (1946) 110-114; Box, Biometrika 40 (1953) 318-335. `lean` = `USUAL_LEAN` skewness matches the skewness term of
    Hall, J. Royal Statistical Society B 54 (1992) 221-228, to second order; lean = se/(value - q) is an interval
    that is symmetric for the logarithm of the excess over q. Coverage was calibrated by simulation.
    """
    freedom = np.maximum(LEAST_FREEDOM, 2.0 * of.effective)
    t = SIDES * special.stdtrit(freedom, (1.0 + coverage) / 2.0)
    bent = lean * t
    flat = ~(np.abs(bent) > SLIGHT_LEAN)
    with np.errstate(over="ignore"):  # an end beyond the largest number is found and taken away by `without_gaps`
        reach = np.where(flat, t, np.expm1(bent) / np.where(flat, 1.0, lean))
        lower, upper = values + of.errors * reach
    return Estimates(values, of.errors, lower, upper, tail_scenarios, method)


def usual_lean(of: Spread) -> Array:
    """Return the lean that the skewness of the estimates asks for, shape (c,)."""
    return USUAL_LEAN * of.skewness


def lean_of_parts(of: Spread, lean_of_total: float) -> Array:
    """Return the lean of parts of a total: that of the total as far as they move with it, shape (c,).

    The third cumulant of b total + symmetric noise goes with the cube of their correlation. Our own rule,
    calibrated by simulation: no published source.
    """
    if of.correlation is None:
        return np.zeros_like(of.errors)
    return np.clip(of.correlation, -1.0, 1.0) ** 3 * lean_of_total


def judged_by_tail(estimates: Estimates) -> Estimates:
    """Take the error from figures with too thin a tail, and remark on those with a thin one."""
    return _judged(estimates, estimates.tail_scenarios, LEAST_TAIL, FULL_TAIL, "thin_tail")


def judged_by_carriers(estimates: Estimates, factor: float) -> Estimates:
    """Do the same to measures of the whole distribution by the scenarios that carry their error, times `factor`."""
    return _judged(estimates, estimates.tail_scenarios * factor, LEAST_CARRIERS, FULL_CARRIERS, "few_scenarios")


def _judged(estimates: Estimates, counts: Array, least: float, full: float, code: str) -> Estimates:
    few = counts < full
    if not few.any():
        return estimates
    none = counts < least
    judged = estimates
    if none.any():
        errors, lower, upper = (
            np.where(none, np.nan, part) for part in (estimates.standard_errors, estimates.lower, estimates.upper)
        )
        judged = replace(estimates, standard_errors=errors, lower=lower, upper=upper).remarked("no_error")
    return judged.remarked(code) if (few & ~none).any() else judged
