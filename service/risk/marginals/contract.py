"""What a marginal is: the law of one factor or loss, known by its quantile function and both of its tails."""

import math
from typing import TYPE_CHECKING, Annotated, Self

import numpy as np
from pydantic import AfterValidator, Field, ValidationInfo, model_validator
from pydantic.dataclasses import dataclass
from pydantic_core import PydanticCustomError

from service.risk.marginals import moments
from service.risk.marginals.moments import Array
from service.risk.score_tables import WHOLE, Affine, Piece
from service.risk.words import STRICT

LARGEST = 1e150  # size of an amount: its square is still a number
SMALLEST = 1e-150  # size of a scale: likewise
EXTREME_SHAPE = 1e12  # shapes lie between this and its reciprocal
RARE = 1e-20  # probability on either side up to which no value may pass `LARGEST`; simulation never gets there
FAR_LAYER = 0.01  # probability of reaching a layer below which the difference of two limited means loses digits
FARTHEST_NUMBER = float(np.finfo(np.float64).max)
OUT_OF_RANGE = "out_of_range"


def _amount(value: float, info: ValidationInfo) -> float:
    if abs(value) <= LARGEST:
        return value
    raise PydanticCustomError(
        OUT_OF_RANGE, "{name} is at most {most} in size", {"name": info.field_name, "most": f"{LARGEST:g}"}
    )


def _above_zero(value: float, info: ValidationInfo) -> None:
    if value <= 0.0:
        context = {"name": info.field_name, "value": f"{value:.6g}"}
        raise PydanticCustomError(OUT_OF_RANGE, "{name} is above 0, not {value}", context)


def between(value: float, info: ValidationInfo, least: float, most: float) -> float:
    """Return `value` if it lies between two positive bounds."""
    _above_zero(value, info)
    if least <= value <= most:
        return value
    context = {"name": info.field_name, "least": f"{least:g}", "most": f"{most:g}"}
    raise PydanticCustomError(OUT_OF_RANGE, "{name} lies between {least} and {most}", context)


def _scale(value: float, info: ValidationInfo) -> float:
    return between(value, info, SMALLEST, LARGEST)


def _shape(value: float, info: ValidationInfo) -> float:
    return between(value, info, 1.0 / EXTREME_SHAPE, EXTREME_SHAPE)


Amount = Annotated[float, AfterValidator(_amount), Field(json_schema_extra={"minimum": -LARGEST, "maximum": LARGEST})]
"""A number of either sign, on the scale of the factor or of its logarithm."""

Scale = Annotated[float, AfterValidator(_scale), Field(json_schema_extra={"exclusiveMinimum": 0.0, "maximum": LARGEST})]
"""A positive number, on the scale of the factor or of its logarithm."""

Shape = Annotated[
    float, AfterValidator(_shape), Field(json_schema_extra={"exclusiveMinimum": 0.0, "maximum": EXTREME_SHAPE})
]
"""A positive number without unit."""

SignedShape = Amount
"""A number of either sign without unit."""


@dataclass(frozen=True, kw_only=True, config=STRICT)
class MarginalLaw:
    """The contract, and what all marginals share.

    Values are in the unit of the factor: for a loss, the currency of the request. A member brings
    `_quantile`, `_below` and `_beyond` for the inside of its support, where they need not care about
    overflow or bad points, and the figures of the law; what cannot exist is infinite, never NaN:
    the mean where E|X| is infinite, the variance where E X² is.

    A law whose values pass 1e150 with a probability of 1e-20 or more, or whose existing mean or
    variance is beyond the range of binary64, is refused.
    """

    def quantile(self, lower: Array, upper: Array) -> Array:
        """Return inf{x : P(X <= x) >= u}.

        Parameters
        ----------
        lower : ndarray
            Probabilities u in [0, 1].
        upper : ndarray of the same shape
            1 - u. Each is believed where it is the smaller one, so that neither tail runs out of digits.

        Returns
        -------
        ndarray of the same shape
            At 0 and 1 the ends of the support; otherwise finite (values beyond the range of binary64 are
            its largest number).
        """
        lower, upper = np.asarray(lower, dtype=np.float64), np.asarray(upper, dtype=np.float64)
        low, high = self.support
        with np.errstate(all="ignore"):
            values = np.clip(self._quantile(lower, upper), -FARTHEST_NUMBER, FARTHEST_NUMBER)
        values = np.clip(values, low, high)
        return np.where(lower <= 0.0, low, np.where(upper <= 0.0, high, values))

    def below(self, values: Array) -> Array:
        """Return P(X <= x), accurate relative to itself, of the same shape."""
        values = np.asarray(values, dtype=np.float64)
        low, high = self.support
        with np.errstate(all="ignore"):
            inside = np.clip(self._below(values), 0.0, 1.0)
        return np.where(values <= low, 0.0, np.where(values >= high, 1.0, inside))

    def beyond(self, values: Array) -> Array:
        """Return P(X > x), accurate relative to itself, of the same shape."""
        values = np.asarray(values, dtype=np.float64)
        low, high = self.support
        with np.errstate(all="ignore"):
            inside = np.clip(self._beyond(values), 0.0, 1.0)
        return np.where(values <= low, 1.0, np.where(values >= high, 0.0, inside))

    def _quantile(self, lower: Array, upper: Array) -> Array:
        raise NotImplementedError

    def _below(self, values: Array) -> Array:
        raise NotImplementedError

    def _beyond(self, values: Array) -> Array:
        raise NotImplementedError

    @property
    def support(self) -> tuple[float, float]:
        """The lowest and the highest value."""
        raise NotImplementedError

    if TYPE_CHECKING:  # some members have a field of this name, which a property of their base would hide

        @property
        def mean(self) -> float:
            """E X; infinity where E|X| is infinite."""

    @property
    def variance(self) -> float:
        """E (X - E X)², in the square of the unit; infinity where E X² is infinite."""
        raise NotImplementedError

    @property
    def upper_tail_index(self) -> float:
        """E (X+)^k is finite for every k below it; infinity for a thin tail."""
        return math.inf

    @property
    def lower_tail_index(self) -> float:
        """E (X-)^k is finite for every k below it; infinity for a thin tail."""
        return math.inf

    @property
    def exponential_moment(self) -> float:
        """E exp(t X) is finite for every t in (0, this), in 1/unit; 0 for a heavy tail."""
        return math.inf

    @property
    def lower_exponential_moment(self) -> float:
        """E exp(-t X) is finite for every t in (0, this), in 1/unit; 0 for a heavy tail."""
        return math.inf

    def limited_mean(self, limit: float) -> float:
        """Return E min(X, limit), for a limit that may be infinite; minus infinity where E X- is infinite."""
        low, high = self.support
        if limit <= low:
            return float(limit)
        if limit >= high:
            return self.mean
        if self.lower_tail_index <= 1.0:
            return -math.inf
        with np.errstate(all="ignore"):
            return float(self._limited_mean(float(limit)))

    def _limited_mean(self, limit: float) -> float:
        return moments.limited_mean(self, limit)

    def layer_mean(self, start: float, stop: float) -> float:
        """Return E min((X - start)+, stop - start), what is paid by a layer between two finite amounts."""
        if self.lower_tail_index > 1.0 and float(self.beyond(np.array(start))) > FAR_LAYER:
            return self.limited_mean(stop) - self.limited_mean(start)
        return moments.layer_mean(self, start, stop)

    @property
    def affine(self) -> Affine | None:
        """The law of scores of which the values, or their logarithms, are an affine map; None if there is none."""
        return None

    @property
    def pieces(self) -> tuple[Piece, ...]:
        """Where the quantile function is smooth, and where it is a step function."""
        return WHOLE

    def _check(self) -> None:
        """Raise PydanticCustomError if the parameters do not go together."""

    @model_validator(mode="after")
    def _in_range(self) -> Self:
        self._check()
        ends = self.quantile(np.array([RARE, 1.0]), np.array([1.0, RARE]))
        if not np.all(np.abs(ends) <= LARGEST):
            context = {"most": f"{LARGEST:g}", "rare": f"{RARE:g}"}
            detail = "these parameters give values beyond {most} with probability {rare}: too large to compute with"
            raise PydanticCustomError(OUT_OF_RANGE, detail, context)
        index = min(self.upper_tail_index, self.lower_tail_index)
        for order, name in ((1, "mean"), (2, "variance")):
            if index > order and not math.isfinite(getattr(self, name)):
                detail = "these parameters give a {name} that is too large to compute with"
                raise PydanticCustomError(OUT_OF_RANGE, detail, {"name": name})
        return self


def refusal(detail: str, **context: str | float) -> PydanticCustomError:
    """Return the refusal of parameters that do not go together; `detail` may name the context in braces."""
    words = {
        name: value if isinstance(value, str) else f"{value:.6g}".replace("inf", "infinity")
        for name, value in context.items()
    }
    return PydanticCustomError("not_allowed", detail, words)
