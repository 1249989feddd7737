"""What a risk measure is: weights on the positions of an ordered distribution, and an influence value for each.

One idea carries the arithmetic: a measure of a distribution is a weight per scenario, the figure is
weights @ losses, and because the weights of the total do not change when a sub-portfolio is looked at
alone, its Euler contribution is the same weights @ its losses.
"""

from dataclasses import dataclass as plain
from typing import Annotated, ClassVar, Literal

import numpy as np
from pydantic import Field
from pydantic.dataclasses import dataclass

from service.risk.measures.local_line import LocalLine
from service.risk.quantiles import Array, Ordered, QuantileInterval, Ties
from service.risk.uncertainty import Influence, Marks, Spread
from service.risk.words import STRICT, Text

LABEL = "Name of this measure in the answer; by default the kind and its parameters. Unique in a request."
ABOVE = "`zero`: the figure itself; `mean`: its excess over the expected loss."

Smoothing = Literal["auto", "none"]


@plain(frozen=True, slots=True, kw_only=True)
class Needs:
    """What the tails of a loss must allow: moments of every order up to the index exist, or exponential ones.

    Attributes
    ----------
    upper_index, lower_index : float
        The figure exists if the tail indices are above these; 0 for always.
    error_index : float
        Its standard error exists if both indices are above this.
    exponential : float
        The figure exists if E exp(t L) is finite for t up to this, its error for twice as much; 0 for always.
    """

    upper_index: float = 0.0
    lower_index: float = 0.0
    error_index: float = 0.0
    exponential: float = 0.0


@plain(frozen=True, slots=True)
class ContributionWeights:
    """Scenario weights of the total for its Euler contributions.

    Attributes
    ----------
    values : ndarray of shape (m,)
        One per position, equal totals sharing theirs in proportion to probability.
    window : tuple of (float, float, int) or None
        Lowest and highest total, and number of scenarios, over which a quantile's were smoothed.
    lines : tuple of LocalLine
        At the quantiles that the errors of the contributions refer to.
    place : Influence or None
        Of the quantile at which the contributions are read, if they are read at one.
    """

    values: Array
    window: tuple[float, float, int] | None = None
    lines: tuple[LocalLine, ...] = ()
    place: Influence | None = None


@dataclass(frozen=True, kw_only=True, config=STRICT)
class RiskMeasure:
    """The contract, and what all measures share.

    A member brings `weights` and `influence` for c ordered distributions at once (values of shape
    (c, m), worst first) and `contribution_influence` for its Euler contributions. Figures are
    translation-equivariant; all losses are in the currency of the request and so is every figure
    but for the parameters that say otherwise.
    """

    of_tail: ClassVar[bool] = False
    """Whether it looks at the scenarios beyond a quantile alone."""

    @property
    def needs(self) -> Needs:
        """What the tails of a loss must allow for the figure, and for its error, to exist."""
        return Needs(upper_index=1.0, error_index=2.0)

    @property
    def tail_share(self) -> float | None:
        """Share of the mass beyond the quantile that it looks at; None for a measure of the whole distribution."""
        return None

    @property
    def carrier_factor(self) -> float:
        """What the effective number of carriers is multiplied by before an error is trusted."""
        return 1.0

    above: ClassVar[Literal["zero", "mean"]] = "zero"
    """`zero`: the figure itself; `mean`: its excess over the expected loss (see `LocatedMeasure`)."""

    label: Annotated[Text | None, Field(description=LABEL)] = None

    @property
    def parameters(self) -> dict[str, float]:
        """The numbers that define this measure, by name, in the order of the fields."""
        raise NotImplementedError

    @property
    def name(self) -> str:
        """The label, or the kind and its parameters."""
        if self.label is not None:
            return self.label
        kind: str = self.kind  # type: ignore[attr-defined]  # every member has its tag
        words = [kind, *(f"{number:.15g}" for number in self.parameters.values())]
        return " ".join(words) + (" above mean" if self.above == "mean" else "")

    def depth(self, scenarios: int, *, contributions: bool) -> float:  # noqa: ARG002  # members use them
        """Return the share of worst scenarios that figure and error (and contributions) look at."""
        return 1.0

    def weights(self, ordered: Ordered) -> Array:
        """Return position weights, shape (1, m) or (c, m), whose sum over values is the figure."""
        raise NotImplementedError

    def values(self, ordered: Ordered) -> Array:
        """Return the figures, shape (c,), without regard to `above`."""
        return np.vecdot(self.weights(ordered), ordered.values)

    def influence(self, ordered: Ordered, values: Array) -> Influence:
        """Return influence values of the figures `values` (c,), without regard to `above`."""
        raise NotImplementedError

    def tail_of(self, ordered: Ordered) -> Array | None:  # noqa: ARG002  # measures of a tail use it
        """Return the effective number of scenarios in the tail, shape (c,); None for no measure of a tail."""
        return None

    def lean(self, ordered: Ordered, values: Array, of: Spread) -> Array | None:  # noqa: ARG002  # members use them
        """Return how far intervals of the figures lean, shape (c,); None for as far as their skewness asks."""
        return None

    def interval(self, ordered: Ordered, coverage: float) -> QuantileInterval | None:  # noqa: ARG002  # quantiles use them
        """Return the intervals of a measure that has its own kind, for c distributions; None for the usual ones."""
        return None

    def errors(self, ordered: Ordered) -> Array | None:  # noqa: ARG002  # quantiles use it
        """Return standard errors that do not come from the influence values, shape (c,); None for the usual ones."""
        return None

    def on_atom(self, ordered: Ordered) -> Marks:
        """Return which figures are one of many equal losses, so that influence values tell nothing, shape (c,)."""
        return np.zeros(ordered.values.shape[0], dtype=bool)

    def contribution_weights(self, ordered: Ordered, ties: Ties, smoothing: Smoothing) -> ContributionWeights:  # noqa: ARG002
        """Return the scenario weights of the single distribution in `ordered` for its contributions."""
        return ContributionWeights(ties.shared(self.weights(ordered)[0]))

    def contribution_influence(
        self, ordered: Ordered, ties: Ties, rows: Array, weights: ContributionWeights
    ) -> Influence:
        """Return influence values of the Euler contributions of c columns.

        Parameters
        ----------
        ordered : Ordered
            The total, a single distribution with m kept positions.
        ties : Ties
            Of the total.
        rows : ndarray of shape (m, c)
            The columns' losses in the order of the total.
        weights : ContributionWeights
            As returned by `contribution_weights`.
        """
        raise NotImplementedError


@dataclass(frozen=True, kw_only=True, config=STRICT)
class LocatedMeasure(RiskMeasure):
    """A measure that moves with the losses, so that its excess over the expected loss is a choice."""

    above: Annotated[Literal["zero", "mean"], Field(description=ABOVE)] = "zero"  # type: ignore[misc]  # a field here


def full_values(measure: RiskMeasure, ordered: Ordered) -> Array:
    """Return the figures with regard to `above`, shape (c,)."""
    values = measure.values(ordered)
    return values - means(ordered) if measure.above == "mean" else values


def full_influence(measure: RiskMeasure, ordered: Ordered, values: Array | None = None) -> Influence:
    """Return influence values of the figures with regard to `above`; `values` without regard to it, if known."""
    influence = measure.influence(ordered, measure.values(ordered) if values is None else values)
    if measure.above == "mean":
        return Influence(influence.values - ordered.values, influence.rest)
    return influence


def means(ordered: Ordered) -> Array:
    """Return the expected losses of complete distributions, shape (c,)."""
    if ordered.probabilities is None:
        return np.asarray(ordered.values.mean(axis=-1))
    return np.einsum("ij,ij->i", ordered.values, ordered.probabilities)
