"""Family Cover: steps of a contract, each a non-decreasing or linear map of the running amount.

A cover is a list of steps. On a sub-portfolio they map its loss in a scenario; as `claim_cover` of a
compound they map each claim, and a layer there may also have terms on the year's sum of what it pays.
"""

import math
from collections.abc import Sequence
from dataclasses import dataclass as plain
from dataclasses import field, replace
from typing import Annotated, Literal

import numpy as np
from numpy.typing import NDArray
from pydantic import Field
from pydantic.dataclasses import dataclass
from typing_extensions import TypeAliasType

from service.errors import Fault, InvalidValue
from service.risk.words import STRICT

Array = NDArray[np.float64]

ATTACHMENT = "Amount, in currency, above which the layer pays."
LIMIT = "Most, in currency, that falls into the layer (before `share`); unlimited if absent."
SHARE = "Part of the layer that is written or ceded, above 0 and at most 1."

MISFIT = "cover_does_not_fit"
EVERYWHERE = (-math.inf, math.inf)


@plain(frozen=True, slots=True)
class Tails:
    """How far out an amount can go: which of its moments exist.

    Attributes
    ----------
    upper_index, lower_index : float
        E[(X+)^k], or E[(X-)^k], is finite for every k below it; infinity for a thin or no tail.
    upper_exponential, lower_exponential : float
        E[exp(t X)], or E[exp(-t X)], is finite for every t in (0, this), in 1/currency.

    upper_sharp, lower_sharp : bool
        Whether that expectation is known to be infinite for every t beyond; else it is finite so far at least.

    Notes
    -----
    Sums and products of dependent amounts are judged by Hölder's inequality, which no dependence
    exceeds: a moment said to exist does; one said not to may exist under a mild dependence.
    """

    upper_index: float = math.inf
    lower_index: float = math.inf
    upper_exponential: float = math.inf
    lower_exponential: float = math.inf
    upper_sharp: bool = field(default=True, compare=False)
    lower_sharp: bool = field(default=True, compare=False)

    def times(self, factor: float) -> "Tails":
        """Return the tails of `factor` times the amount; a negative factor turns them round."""
        if factor == 0.0:
            return Tails()
        size = abs(factor)
        upper, lower = self.upper_exponential / size, self.lower_exponential / size
        if factor > 0.0:
            return Tails(self.upper_index, self.lower_index, upper, lower, self.upper_sharp, self.lower_sharp)
        return Tails(self.lower_index, self.upper_index, lower, upper, self.lower_sharp, self.upper_sharp)

    def plus(self, other: "Tails", *, independent: bool = False) -> "Tails":
        """Return the tails of the sum: the heavier index; the harmonic sum of rates, or the least if independent."""
        upper, lower = (
            _rate_of_sum(rates, sharp, thin=(self.thin, other.thin), independent=independent)
            for rates, sharp in (
                ((self.upper_exponential, other.upper_exponential), (self.upper_sharp, other.upper_sharp)),
                ((self.lower_exponential, other.lower_exponential), (self.lower_sharp, other.lower_sharp)),
            )
        )
        return Tails(
            min(self.upper_index, other.upper_index),
            min(self.lower_index, other.lower_index),
            upper[0],
            lower[0],
            upper[1],
            lower[1],
        )

    @property
    def thin(self) -> bool:
        """Whether all exponential moments exist."""
        return math.isinf(min(self.upper_exponential, self.lower_exponential))

    def bounded_above(self) -> "Tails":
        """Return the tails once nothing goes beyond some amount."""
        return replace(self, upper_index=math.inf, upper_exponential=math.inf, upper_sharp=True)

    def bounded_below(self) -> "Tails":
        """Return the tails once nothing falls below some amount."""
        return replace(self, lower_index=math.inf, lower_exponential=math.inf, lower_sharp=True)


def _rate_of_sum(
    rates: tuple[float, float], sharp: tuple[bool, bool], *, thin: tuple[bool, bool], independent: bool
) -> tuple[float, bool]:
    """Return the rate of a sum, and whether it is sharp: not where dependent amounts may make up for each other.

    A thin amount takes nothing from the other, by Hölder's inequality.
    """
    if independent:
        least = min(rates)
        return least, any(known for rate, known in zip(rates, sharp, strict=True) if rate == least)
    rate = harmonic(*rates)
    return rate, math.isinf(rate) or (thin[0] and sharp[1]) or (thin[1] and sharp[0])


def harmonic(first: float, second: float) -> float:
    """Return 1/(1/first + 1/second), of numbers in [0, infinity]."""
    if min(first, second) == 0.0:
        return 0.0
    return 1.0 / (1.0 / first + 1.0 / second) if math.isfinite(first) or math.isfinite(second) else math.inf


@dataclass(frozen=True, kw_only=True, config=STRICT)
class CoverStep:
    """The contract: a map of the running amounts x (n,), in the currency of the request, and what it does to tails."""

    def mapped(self, amounts: Array, *, out: Array | None = None) -> Array:
        """Return the amounts after this step, shape (n,), written into `out` if given (it may be `amounts`)."""
        raise NotImplementedError

    def tails(self, tails: Tails) -> Tails:
        """Return the tails of the amount that leaves this step given those of the one that enters."""
        raise NotImplementedError

    def preimage(self, amounts: Array) -> Array:
        """Return the largest amounts that this step maps to at most `amounts`, shape (n,); infinite for all or none."""
        raise NotImplementedError

    def misfit(self, reach: tuple[float, float]) -> str | None:  # noqa: ARG002  # members that bound use it
        """Return why this step has nothing to do for amounts within `reach`; None where it fits."""
        return None

    def reach(self, reach: tuple[float, float]) -> tuple[float, float]:
        """Return the lowest and highest amount that can leave, given those that can enter."""
        ends = self.mapped(np.array(reach))
        return float(ends[0]), float(ends[1])


@dataclass(frozen=True, kw_only=True, config=STRICT)
class _LayerTerms(CoverStep):
    """What the writer's and the buyer's view of a layer share."""

    attachment: Annotated[float, Field(ge=0.0, description=ATTACHMENT)]
    limit: Annotated[Annotated[float, Field(gt=0.0)] | None, Field(description=LIMIT)] = None
    share: Annotated[float, Field(gt=0.0, le=1.0, description=SHARE)] = 1.0

    def paid(self, amounts: Array, *, out: Array | None = None) -> Array:
        """Return share min(max(x - attachment, 0), limit)."""
        paid = np.subtract(amounts, self.attachment, out=out)
        np.maximum(paid, 0.0, out=paid)
        if self.limit is not None:
            np.minimum(paid, self.limit, out=paid)
        if self.share != 1.0:
            paid *= self.share
        return paid

    def misfit(self, reach: tuple[float, float]) -> str | None:
        if reach[1] <= self.attachment:
            return (
                f"the steps before leave at most {reach[1]:.15g}, so nothing reaches "
                f"the attachment {self.attachment:.15g}"
            )
        return None


@dataclass(frozen=True, kw_only=True, config=STRICT)
class LayerCover(_LayerTerms):
    """Keeps what falls into the layer: the writer's view, share min(max(x - attachment, 0), limit)."""

    kind: Literal["layer"]
    """Tag of this cover step."""
    annual_deductible: Annotated[float, Field(ge=0.0)] | None = None
    """In `claim_cover` alone: amount, in currency, that the year's sum of what the layer pays must first exceed."""
    annual_limit: Annotated[float, Field(gt=0.0)] | None = None
    """In `claim_cover` alone: most, in currency, of the year's sum above `annual_deductible`; unlimited if absent."""

    @property
    def annual(self) -> bool:
        """Whether it has terms on the year's sum."""
        return bool(self.annual_deductible) or self.annual_limit is not None

    def mapped(self, amounts: Array, *, out: Array | None = None) -> Array:
        return self.paid(amounts, out=out)

    def preimage(self, amounts: Array) -> Array:
        reached = np.where(amounts < 0.0, -np.inf, self.attachment + amounts / self.share)
        if self.limit is None:
            return reached
        return np.where(amounts >= self.share * self.limit, np.inf, reached)

    def tails(self, tails: Tails) -> Tails:
        bounded = tails.bounded_below()
        return bounded.times(self.share) if self.limit is None else bounded.bounded_above()

    def of_year(self, sums: Array, *, out: Array | None = None) -> Array:
        """Return min(max(sum - annual_deductible, 0), annual_limit) of the year's sums (n,)."""
        paid = np.subtract(sums, self.annual_deductible or 0.0, out=out)
        np.maximum(paid, 0.0, out=paid)
        return paid if self.annual_limit is None else np.minimum(paid, self.annual_limit, out=paid)


@dataclass(frozen=True, kw_only=True, config=STRICT)
class CedeLayerCover(_LayerTerms):
    """Keeps the rest of a layer: the buyer's view, x less share min(max(x - attachment, 0), limit)."""

    kind: Literal["cede_layer"]
    """Tag of this cover step."""

    def mapped(self, amounts: Array, *, out: Array | None = None) -> Array:
        if self.share == 1.0 and self.limit is None:
            return np.minimum(amounts, self.attachment, out=out)
        return np.subtract(amounts, self.paid(amounts), out=out)

    def preimage(self, amounts: Array) -> Array:
        excess = amounts - self.attachment
        limit, kept = math.inf if self.limit is None else self.limit, 1.0 - self.share
        with np.errstate(divide="ignore", invalid="ignore"):
            within = excess / kept if kept > 0.0 else np.full_like(excess, np.inf)
        above = np.where(within < limit, within, excess + self.share * limit)
        return np.where(excess < 0.0, amounts, self.attachment + above)

    def tails(self, tails: Tails) -> Tails:
        if self.limit is not None:
            return tails
        if self.share == 1.0:
            return tails.bounded_above()
        return replace(tails.times(1.0 - self.share), lower_exponential=tails.lower_exponential)

    def reach(self, reach: tuple[float, float]) -> tuple[float, float]:
        if math.isinf(reach[1]):  # infinity less infinity
            high = self.attachment if self.limit is None and self.share == 1.0 else math.inf
            low = reach[0] if math.isinf(reach[0]) else float(self.mapped(np.array(reach[:1]))[0])
            return low, high
        return super().reach(reach)


@dataclass(frozen=True, kw_only=True, config=STRICT)
class QuotaShareCover(CoverStep):
    """Keeps a part of everything: retained x."""

    kind: Literal["quota_share"]
    """Tag of this cover step."""
    retained: Annotated[float, Field(gt=0.0, le=1.0)]
    """Part that is kept, above 0 and at most 1."""

    def mapped(self, amounts: Array, *, out: Array | None = None) -> Array:
        return np.multiply(amounts, self.retained, out=out)

    def preimage(self, amounts: Array) -> Array:
        return np.asarray(amounts / self.retained)

    def tails(self, tails: Tails) -> Tails:
        return tails.times(self.retained)


@dataclass(frozen=True, kw_only=True, config=STRICT)
class CapCover(CoverStep):
    """Keeps what is below an amount: min(x, amount)."""

    kind: Literal["cap"]
    """Tag of this cover step."""
    amount: float
    """The most that is left, in currency."""

    def mapped(self, amounts: Array, *, out: Array | None = None) -> Array:
        return np.minimum(amounts, self.amount, out=out)

    def preimage(self, amounts: Array) -> Array:
        return np.where(amounts >= self.amount, np.inf, amounts)

    def tails(self, tails: Tails) -> Tails:
        return tails.bounded_above()

    def misfit(self, reach: tuple[float, float]) -> str | None:
        if self.amount < reach[0]:
            return f"the steps before leave at least {reach[0]:.15g}, above the cap {self.amount:.15g}"
        return None


@dataclass(frozen=True, kw_only=True, config=STRICT)
class FloorCover(CoverStep):
    """Raises what is below an amount to it: max(x, amount)."""

    kind: Literal["floor"]
    """Tag of this cover step."""
    amount: float
    """The least that is left, in currency."""

    def mapped(self, amounts: Array, *, out: Array | None = None) -> Array:
        return np.maximum(amounts, self.amount, out=out)

    def preimage(self, amounts: Array) -> Array:
        return np.where(amounts < self.amount, -np.inf, amounts)

    def tails(self, tails: Tails) -> Tails:
        return tails.bounded_below()

    def misfit(self, reach: tuple[float, float]) -> str | None:
        if self.amount > reach[1]:
            return f"the steps before leave at most {reach[1]:.15g}, below the floor {self.amount:.15g}"
        return None


Cover = TypeAliasType(
    "Cover",
    Annotated[
        LayerCover | CedeLayerCover | QuotaShareCover | CapCover | FloorCover,
        Field(discriminator="kind", description="Any step of a cover, told apart by `kind`."),
    ],
)

TYPICAL: tuple[CoverStep, ...] = (
    LayerCover(kind="layer", attachment=100.0, limit=400.0, share=0.5),
    CedeLayerCover(kind="cede_layer", attachment=100.0, limit=400.0),
    QuotaShareCover(kind="quota_share", retained=0.7),
    CapCover(kind="cap", amount=500.0),
    FloorCover(kind="floor", amount=0.0),
)
"""One realistic instance of each."""


def covered(steps: Sequence[CoverStep], amounts: Array, *, out: Array | None = None) -> Array:
    """Return the amounts (n,) after all steps, written into `out` if given (it may be `amounts`)."""
    result = amounts
    for step in steps:
        result = step.mapped(result, out=out)
    if out is not None and not steps and out is not amounts:
        np.copyto(out, amounts)
        return out
    return result


def preimage(steps: Sequence[CoverStep], amounts: Array) -> Array:
    """Return the largest amounts (n,) that all steps map to at most `amounts`: for the law of what leaves them."""
    for step in reversed(steps):
        amounts = step.preimage(amounts)
    return amounts


def tails_after(steps: Sequence[CoverStep], tails: Tails) -> Tails:
    """Return the tails of the amount that leaves the last step."""
    for step in steps:
        tails = step.tails(tails)
    return tails


def check_cover(steps: Sequence[CoverStep], *, of_claims: bool = False, least: float = -math.inf) -> None:
    """Refuse steps that do not fit together.

    Parameters
    ----------
    steps : sequence of CoverStep
    of_claims : bool
        Whether they stand in `claim_cover`, where a layer may have terms on the year's sum.
    least : float
        The least amount that can enter, in currency.

    Raises
    ------
    InvalidValue
        With a pointer relative to the list of steps.
    """
    faults: list[Fault] = []
    reach, of_year = (least, math.inf), False
    for number, step in enumerate(steps):
        faults += [_misfit(f"/{number}{field}", detail) for field, detail in _annual_faults(step, of_claims, of_year)]
        detail = step.misfit(reach)
        if detail is not None:
            faults.append(_misfit(f"/{number}", detail))
            break
        reach = step.reach(reach)
        of_year = of_year or (isinstance(step, LayerCover) and step.annual)
    if faults:
        raise InvalidValue(faults[0].detail, faults=faults)


def _misfit(pointer: str, detail: str) -> Fault:
    return Fault(detail=detail, code=MISFIT, pointer=pointer)


def _annual_faults(step: CoverStep, of_claims: bool, of_year: bool) -> list[tuple[str, str]]:  # noqa: FBT001  # private
    """Return field and words for terms on the year's sum that stand where they cannot."""
    faults = []
    if isinstance(step, LayerCover) and not of_claims:
        detail = "terms on the year's sum belong to a layer in claim_cover; here the amount is the year's already"
        faults += [
            (f"/{name}", detail) for name in ("annual_deductible", "annual_limit") if getattr(step, name) is not None
        ]
    if of_year and not isinstance(step, QuotaShareCover):
        detail = (
            "after a layer with annual_deductible or annual_limit only quota_share may follow in claim_cover: "
            "later steps belong to the sub-portfolio's cover"
        )
        faults.append(("", detail))
    return faults


@plain(frozen=True, slots=True)
class ClaimTerms:
    """A checked `claim_cover`, split into what maps each claim and what maps the year's sum.

    Attributes
    ----------
    of_claim : tuple of CoverStep
    of_year : LayerCover or None
        The layer, last in `of_claim` but for quota shares, that also has terms on the year's sum.
    shares : tuple of CoverStep
        Quota shares after it.
    """

    of_claim: tuple[CoverStep, ...]
    of_year: LayerCover | None
    shares: tuple[CoverStep, ...]

    @classmethod
    def of(cls, steps: Sequence[CoverStep]) -> "ClaimTerms":
        """Return the steps split behind the layer with annual terms."""
        for number, step in enumerate(steps):
            if isinstance(step, LayerCover) and step.annual:
                return cls(tuple(steps[: number + 1]), step, tuple(steps[number + 1 :]))
        return cls(tuple(steps), None, ())

    def year(self, sums: Array) -> Array:
        """Map the sums (n,) of what is paid on each claim by the terms of the year, in place."""
        if self.of_year is not None:
            self.of_year.of_year(sums, out=sums)
        return covered(self.shares, sums, out=sums)

    def year_tails(self, tails: Tails) -> Tails:
        """Return the tails of the year's amount given those of the sum of the claims."""
        if self.of_year is not None:
            tails = tails.bounded_below() if self.of_year.annual_limit is None else Tails()
        return tails_after(self.shares, tails)


__all__ = [
    "TYPICAL",
    "CapCover",
    "CedeLayerCover",
    "ClaimTerms",
    "Cover",
    "CoverStep",
    "FloorCover",
    "LayerCover",
    "QuotaShareCover",
    "Tails",
    "check_cover",
    "covered",
    "harmonic",
    "preimage",
    "tails_after",
]
