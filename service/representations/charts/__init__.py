"""The pictures of an answer: one file each, and the table by which a caller names them."""

from collections.abc import Sequence
from typing import Literal

from service.errors import Fault, InvalidValue
from service.representations.charts.canvas import NARROW, WIDTH, Look, dark_style
from service.representations.charts.contributions import contributions_chart
from service.representations.charts.distribution import distribution_chart, enlarged
from service.representations.charts.exceedance import exceedance_chart
from service.representations.charts.marks import Mark, mark, marks_of, places
from service.representations.shapes import AllocationsAnswer, Distribution, MeasuresAnswer

__all__ = [
    "CHARTS",
    "NARROW",
    "WIDTH",
    "Chart",
    "Look",
    "Mark",
    "contributions_chart",
    "dark_style",
    "distribution_chart",
    "draw",
    "enlarged",
    "exceedance_chart",
    "mark",
    "marks_of",
    "places",
]

Chart = Literal["distribution", "exceedance", "contributions"]
CHARTS: tuple[Chart, ...] = ("distribution", "exceedance", "contributions")


def draw(
    chart: Chart,
    answer: MeasuresAnswer | AllocationsAnswer,
    distribution: Distribution,
    marks: Sequence[Mark],
    look: Look | None = None,
) -> str:
    """Return the picture of an answer that a caller named.

    Raises
    ------
    InvalidValue
        For contributions where there are none, or those of several measures or rules.
    """
    if chart == "distribution":
        return distribution_chart(distribution, marks, answer.labels, look)
    if chart == "exceedance":
        return exceedance_chart(distribution, marks, answer.labels, look)
    allocations = getattr(answer, "allocations", None)
    if allocations is None:
        raise InvalidValue.of(
            Fault(
                detail="contributions are drawn of allocations, not of measures",
                code=InvalidValue.code,
                parameter="chart",
            )
        )
    if len(allocations) != 1:
        detail = f"contributions are drawn of one measure and one rule, not of {len(allocations)} results"
        raise InvalidValue.of(Fault(detail=detail, code=InvalidValue.code, parameter="chart"))
    return contributions_chart(allocations[0], answer.labels, look)
