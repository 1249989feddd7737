"""What pictures and pages need of an answer: its shape alone, since the answers themselves stand above."""

from collections.abc import Mapping, Sequence
from typing import Protocol

from service.representations.table import Table

# A frozen dataclass has such a shape if its fields have these names: the properties say that nothing is written.


class Interval(Protocol):
    """Both ends of an interval, its coverage, and how it was made."""

    @property
    def lower(self) -> float: ...
    @property
    def upper(self) -> float: ...
    @property
    def coverage(self) -> float: ...
    @property
    def method(self) -> str: ...


class Figure(Protocol):
    """A figure and how sure it is."""

    @property
    def value(self) -> float: ...
    @property
    def interval(self) -> Interval | None: ...


class Part(Protocol):
    """What a sub-portfolio or a group contributes."""

    @property
    def contribution(self) -> Figure: ...
    @property
    def share(self) -> float | None: ...
    @property
    def stand_alone(self) -> Figure | None: ...
    @property
    def diversification_benefit(self) -> float | None: ...
    @property
    def expected_loss(self) -> float: ...
    @property
    def expected_profit(self) -> float | None: ...
    @property
    def return_on_capital(self) -> float | None: ...
    @property
    def allocated_capital(self) -> float | None: ...


class SubPortfolioPart(Part, Protocol):
    """A part with the id of its sub-portfolio."""

    @property
    def id(self) -> str: ...


class GroupPart(Part, Protocol):
    """A part with the attribute and name of its group."""

    @property
    def attribute(self) -> str: ...
    @property
    def group(self) -> str | None: ...


class Window(Protocol):
    """The scenarios over which contributions to a quantile were smoothed."""

    @property
    def lower(self) -> float: ...
    @property
    def upper(self) -> float: ...
    @property
    def scenarios(self) -> int: ...


class Measured(Protocol):
    """A result that has the measure of the whole."""

    @property
    def measure(self) -> str: ...
    @property
    def total(self) -> Figure: ...


class Allocation(Measured, Protocol):
    """One measure, split by one rule."""

    @property
    def rule(self) -> str: ...
    @property
    def sub_portfolios(self) -> Sequence[SubPortfolioPart]: ...
    @property
    def groups(self) -> Sequence[GroupPart]: ...
    @property
    def capital(self) -> float | None: ...
    @property
    def return_on_capital(self) -> float | None: ...
    @property
    def window(self) -> Window | None: ...
    @property
    def residual(self) -> float | None: ...


class PartLoss(Protocol):
    """The loss of a sub-portfolio in a scenario."""

    @property
    def id(self) -> str: ...
    @property
    def value(self) -> float: ...


class WorstScenario(Protocol):
    """One of the worst scenarios."""

    @property
    def number(self) -> int: ...
    @property
    def scenario_id(self) -> str | None: ...
    @property
    def probability(self) -> float: ...
    @property
    def total(self) -> float: ...
    @property
    def losses(self) -> Sequence[PartLoss]: ...


class FactorMean(Protocol):
    """A factor's mean in the tail."""

    @property
    def id(self) -> str: ...
    @property
    def mean(self) -> float: ...
    @property
    def normal_score(self) -> float: ...


class Tail(Protocol):
    """The worst scenarios of the total."""

    @property
    def level(self) -> float: ...
    @property
    def scenarios(self) -> Sequence[WorstScenario]: ...
    @property
    def factors(self) -> Sequence[FactorMean]: ...


class Labels(Protocol):
    """Labels of a request."""

    @property
    def currency(self) -> str | None: ...
    @property
    def valuation_date(self) -> str | None: ...
    @property
    def horizon(self) -> str | None: ...
    @property
    def reference(self) -> str | None: ...


class Note(Protocol):
    """A note on an answer."""

    @property
    def detail(self) -> str: ...


class Provenance(Protocol):
    """Where the figures come from."""

    @property
    def service_version(self) -> str: ...
    @property
    def request_digest(self) -> str: ...
    @property
    def losses_digest(self) -> str: ...
    @property
    def method(self) -> str: ...
    @property
    def seed(self) -> int | None: ...


class Answer(Protocol):
    """What all answers share."""

    @property
    def expected_loss(self) -> Figure: ...
    @property
    def scenarios(self) -> int: ...
    @property
    def tail(self) -> Tail | None: ...
    @property
    def labels(self) -> Labels: ...
    @property
    def notes(self) -> Sequence[Note]: ...
    @property
    def provenance(self) -> Provenance: ...
    def table(self) -> Table: ...


class MeasuresAnswer(Answer, Protocol):
    """Measures of the whole."""

    @property
    def measures(self) -> Sequence[Measured]: ...


class AllocationsAnswer(Answer, Protocol):
    """Measures split among the parts."""

    @property
    def allocations(self) -> Sequence[Allocation]: ...


class Measure(Protocol):
    """A measure as it was asked for."""

    @property
    def name(self) -> str: ...
    @property
    def kind(self) -> str: ...
    @property
    def above(self) -> str: ...
    @property
    def parameters(self) -> Mapping[str, float]: ...


class Histogram(Protocol):
    """Probabilities of adjoining bins."""

    @property
    def edges(self) -> Sequence[float]: ...
    @property
    def masses(self) -> Sequence[float]: ...


class Distribution(Protocol):
    """What the pictures show of the total loss; `service.risk.distribution` says it in full."""

    @property
    def scenarios(self) -> int: ...
    @property
    def weighted(self) -> bool: ...
    @property
    def lowest(self) -> float: ...
    @property
    def highest(self) -> float: ...
    @property
    def mean(self) -> float: ...
    @property
    def body(self) -> Histogram: ...
    @property
    def tail(self) -> Histogram: ...
    @property
    def below(self) -> float: ...
    @property
    def above(self) -> float: ...
    @property
    def beyond(self) -> float: ...
    @property
    def body_range(self) -> tuple[float, float]: ...
    @property
    def tail_range(self) -> tuple[float, float]: ...
    @property
    def tail_from(self) -> float: ...
    @property
    def tail_probability(self) -> float: ...
    @property
    def atoms(self) -> Sequence[tuple[float, float]]: ...
    @property
    def losses(self) -> Sequence[float]: ...
    @property
    def exceeding(self) -> Sequence[float]: ...
