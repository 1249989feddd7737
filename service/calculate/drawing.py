"""An answer together with what its pictures show."""

from collections.abc import Sequence
from dataclasses import dataclass

from service.representations.charts import Mark, marks_of, places
from service.risk.distribution import Distribution, distribution_of
from service.risk.frame import Frame
from service.risk.measures import Measure
from service.schemas.results import AllocationsAnswer, MeasuresAnswer


@dataclass(frozen=True, slots=True, eq=False)
class Drawing:
    """An answer, the distribution of the total loss, and the figures marked in it."""

    answer: MeasuresAnswer | AllocationsAnswer
    measures: Sequence[Measure]
    distribution: Distribution
    marks: Sequence[Mark]


def drawing_of(answer: MeasuresAnswer | AllocationsAnswer, measures: Sequence[Measure], frame: Frame) -> Drawing:
    """Return what the pictures of an answer on `frame` show."""
    results = answer.measures if isinstance(answer, MeasuresAnswer) else answer.allocations
    marks = marks_of(measures, results, answer.expected_loss)
    distribution = distribution_of(frame.totals, frame.table.probabilities, shown=places(marks))
    return Drawing(answer, measures, distribution, marks)
