"""What the row of a total says beside its measure: sums over the parts."""

from collections.abc import Iterable, Sequence

from service.representations.shapes import Allocation, Part


def sum_alone(parts: Sequence[Part]) -> float | None:
    """Return the sum of the stand-alone figures; None where one is missing."""
    return _sum(None if one.stand_alone is None else one.stand_alone.value for one in parts)


def sum_profit(parts: Sequence[Part]) -> float | None:
    """Return the sum of the expected profits; None where one is missing."""
    return _sum(one.expected_profit for one in parts)


def share_of_all(result: Allocation) -> float | None:
    """Return 1 where the shares of the sub-portfolios add up to the total; else None."""
    shared = all(one.share is not None for one in result.sub_portfolios)
    return 1.0 if shared and result.residual is None else None


def _sum(values: Iterable[float | None]) -> float | None:
    total = 0.0
    for value in values:
        if value is None:
            return None
        total += value
    return total
