"""LossTable: losses of sub-portfolios by scenario, their probabilities, and sums along attributes."""

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import Any, Protocol

import numpy as np

from service.errors import Fault, InvalidValue, NotDefined
from service.risk.quantiles import Array, Indices
from service.suggestions import suggestion

SEPARATOR = "/"  # between the attributes of a crossing
LARGEST_LOSS = 1e150  # the squares of larger losses overflow binary64


@dataclass(frozen=True, slots=True)
class SubPortfolio:
    """One column of a loss table.

    Attributes
    ----------
    id : str
    attributes : mapping of str to str
        What it belongs to, by the name of the attribute.
    expected_profit : float or None
        A gain, in currency, never derived from the losses.
    """

    id: str
    attributes: Mapping[str, str]
    expected_profit: float | None = None


@dataclass(frozen=True, slots=True)
class Group:
    """The sub-portfolios that share the value of an attribute (or the values of several, crossed).

    Attributes
    ----------
    attribute : str
        E.g. `line`, or `entity/line`.
    name : str or None
        E.g. `hull`, or `north/hull`; None for those without the attribute.
    members : ndarray of int
        Their columns.
    """

    attribute: str
    name: str | None
    members: Indices


class Scenarios(Protocol):
    """What figures need of the scenarios, whether their losses are held or not."""

    @property
    def losses(self) -> Any:
        """The losses (n, d): an array, or what gives any rows by `take`."""

    @property
    def probabilities(self) -> Array | None:
        """Of the scenarios; None when all are 1/n."""

    @property
    def clusters(self) -> Indices | None:
        """Of scenarios that are dependent within clusters."""

    @property
    def sampled(self) -> bool:
        """Whether the scenarios are draws."""

    @property
    def points(self) -> bool:
        """Whether the scenarios are quasi-random points."""

    @property
    def sub_portfolios(self) -> tuple[SubPortfolio, ...]:
        """One per column."""

    @property
    def scenario_ids(self) -> tuple[str, ...] | None:
        """Labels."""

    @property
    def plain(self) -> bool:
        """Whether the scenarios are equally probable and independent."""

    @property
    def scenarios(self) -> int:
        """Number n of scenarios."""

    def __len__(self) -> int:
        """Return the number d of sub-portfolios."""


@dataclass(frozen=True, slots=True)
class LossTable:
    """Losses of d sub-portfolios in n scenarios.

    Attributes
    ----------
    losses : ndarray of shape (n, d)
        C order, finite, positive is a loss.
    probabilities : ndarray of shape (n,) or None
        Summing to 1; None when all are 1/n.
    sampled : bool
        Whether the scenarios are draws; if not they are the whole distribution.
    sub_portfolios : tuple of SubPortfolio
    scenario_ids : tuple of str or None
    clusters : ndarray of int of shape (n,) or None
        Cluster of each scenario where they are dependent within clusters; None where all are independent.
    points : bool
        Whether the scenarios are quasi-random points: no draws, but not the whole distribution either.
    """

    losses: Array
    probabilities: Array | None
    sampled: bool
    sub_portfolios: tuple[SubPortfolio, ...]
    scenario_ids: tuple[str, ...] | None = None
    clusters: Indices | None = None
    points: bool = False

    @property
    def plain(self) -> bool:
        """Whether the scenarios are equally probable and independent, so that a tail of them can stand for all."""
        return self.probabilities is None and self.clusters is None

    @property
    def scenarios(self) -> int:
        """Number n of scenarios."""
        return self.losses.shape[0]

    def __len__(self) -> int:
        """Return the number d of sub-portfolios."""
        return self.losses.shape[1]


def groups_of(sub_portfolios: Sequence[SubPortfolio], attributes: Sequence[str]) -> tuple[Group, ...]:
    """Return the groups along each attribute or crossing, in the order asked and then of first appearance.

    Raises
    ------
    InvalidValue
        For an attribute that no sub-portfolio has, or a value that makes the name of a crossing ambiguous.
    """
    groups: list[Group] = []
    for number, attribute in enumerate(attributes):
        names = attribute.split(SEPARATOR)
        members: dict[str | None, list[int]] = {}
        for name in names:
            if not any(name in one.attributes for one in sub_portfolios):
                known = dict.fromkeys(other for one in sub_portfolios for other in one.attributes)
                detail = f"no sub-portfolio has the attribute {name!r}{suggestion(name, known)}"
                raise InvalidValue.of(Fault(detail=detail, code="unknown_attribute", pointer=f"/{number}"))
        for column, one in enumerate(sub_portfolios):
            values = [one.attributes.get(name) for name in names]
            members.setdefault(_crossed(values, number), []).append(column)
        groups += [Group(attribute, name, np.array(columns)) for name, columns in members.items()]
    return tuple(groups)


def _crossed(values: Sequence[str | None], number: int) -> str | None:
    """Return the group's name; None when a value is missing."""
    known = [value for value in values if value is not None]
    if len(known) < len(values):
        return None
    ambiguous = next((value for value in known if SEPARATOR in value), None) if len(known) > 1 else None
    if ambiguous is not None:
        detail = f"the value {ambiguous!r} holds a {SEPARATOR!r} and cannot be crossed with another attribute"
        raise InvalidValue.of(Fault(detail=detail, code="ambiguous_group", pointer=f"/{number}"))
    return SEPARATOR.join(known)


def group_losses(losses: Array, groups: Sequence[Group]) -> Array:
    """Return the summed losses of each group, shape (n, number of groups), C order."""
    sums = np.empty((losses.shape[0], len(groups)))
    for j, group in enumerate(groups):
        if group.members.size == losses.shape[1]:
            np.add.reduce(losses, axis=1, out=sums[:, j])
        else:
            np.add.reduce(losses[:, group.members], axis=1, out=sums[:, j])
    return sums


def check_magnitude(totals: Array) -> None:
    """Refuse totals whose squares would overflow.

    Raises
    ------
    NotDefined
        With the number of the first such scenario.
    """
    if totals.size and not np.max(np.abs(totals)) <= LARGEST_LOSS:
        worst = int(np.argmax(~(np.abs(totals) <= LARGEST_LOSS)))
        detail = f"the losses of scenario {worst} add up to more than {LARGEST_LOSS:g}, whose square overflows"
        raise NotDefined(detail, faults=[Fault(detail=detail, code="overflow", pointer=f"/{worst}")])
