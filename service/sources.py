"""From the `losses` of a request, of whatever kind, to scenarios and what is known of where they come from."""

from collections.abc import Sequence
from dataclasses import asdict, dataclass
from typing import Any

import numpy as np
from scipy import special

from service import limits
from service.errors import InvalidValue, NotFound, pointing
from service.executors import Work
from service.kept import Store
from service.payloads import Sheet
from service.provenance import document_digest, losses_digest
from service.resolve import loss_table
from service.risk.components.portfolio import SubPortfolioTerms
from service.risk.factors import FactorModel
from service.risk.history import HistoryLosses as Changes
from service.risk.history import HorizonScaling, history_losses
from service.risk.loss_table import LossTable, SubPortfolio
from service.risk.quantiles import Array, Indices
from service.risk.simulation import LEAST_POINTS, Plan, most_points, sobol_points
from service.schemas.losses import (
    BookLosses,
    FactorLosses,
    FactorSubPortfolio,
    HistoryLosses,
    HistorySubPortfolio,
    Losses,
    ScenarioLosses,
    SimulationPlan,
)
from service.settings import Settings

GIVEN = "given scenarios, exact weighted order statistics"
RANDOM = "simulated scenarios, random draws"
SOBOL = "simulated scenarios, Sobol points in 8 scramblings"
OBSERVED = "observed changes of the factors as scenarios"


NO_SUB_PORTFOLIOS = frozenset(
    [
        "date",
        "id",
        "index",
        "no",
        "number",
        "period",
        "prob",
        "probability",
        "scenario",
        "scenario_id",
        "sum",
        "total",
        "weight",
        "weights",
        "year",
    ]
)
"""Names that a table of scenarios usually gives to labels, weights and sums."""

Note = tuple[str, str, str | None]
"""Code, detail and pointer into the request."""


@dataclass(frozen=True, slots=True)
class FactorMean:
    """The mean of a factor given the tail, in its unit and as a normal score."""

    id: str
    mean: float
    normal_score: float


@dataclass(frozen=True, slots=True, eq=False)
class Source:
    """Where losses come from.

    Attributes
    ----------
    digest : str
        Of the losses.
    method : str
        How the figures come about.
    sub_portfolios : tuple of SubPortfolio
    table : LossTable or None
        The scenarios, where they are there already.
    plan : Plan or None
        The simulation that makes them.
    changes : Changes or None
        The observed changes that they were made of.
    factor_ids : tuple of str
        Of these changes.
    notes : tuple of (str, str, str or None)
        Code, detail and pointer into the request.
    held : Store
        Where what is made of the losses may be kept between requests.
    """

    digest: str
    method: str
    sub_portfolios: tuple[SubPortfolio, ...]
    table: LossTable | None = None
    plan: Plan | None = None
    changes: Changes | None = None
    factor_ids: tuple[str, ...] = ()
    notes: tuple[Note, ...] = ()
    held: Store[Any] = Store(0)  # noqa: RUF009  # one that keeps nothing

    @property
    def seed(self) -> int | None:
        """Seed of the simulation."""
        return None if self.plan is None else self.plan.seed

    def factor_means(self, scenarios: Indices, weights: Array) -> list[FactorMean]:
        """Return the mean of each factor over scenarios (m,) with weights that sum to 1; none for given scenarios."""
        order = np.argsort(scenarios)
        numbers, w = scenarios[order], weights[order]
        if self.plan is not None:
            draws = self.plan.factors(numbers)
            ids, values, scores = self.plan.model.factors.ids, draws.values, draws.normal_scores
        elif self.changes is not None:
            every = self.changes.values
            ranks = np.argsort(np.argsort(every, axis=0, kind="stable"), axis=0) + 1.0
            ids, values = self.factor_ids, every[numbers]
            scores = np.asarray(special.ndtri(ranks / (every.shape[0] + 1.0)))[numbers]
        else:
            return []
        return [
            FactorMean(name, mean, score)
            for name, mean, score in zip(ids, (w @ values).tolist(), (w @ scores).tolist(), strict=True)
        ]


Sent = Array | Sheet | None
"""A table as it was sent: bare, with a header, or none."""


def source_of(losses: Losses, table: Sent, *, part: str | None, work: Work, settings: Settings) -> Source:
    """Return the source of a request's losses; a factor model is checked and planned, not yet simulated.

    Parameters
    ----------
    losses : Losses
    table : ndarray, Sheet or None
        As it was sent.
    part : str or None
        Where a table with a header stands.
    work : Work
    settings : Settings

    Raises
    ------
    CallerError
        Where it does not fit together; pointers are into the request.
    """
    if isinstance(losses, ScenarioLosses):
        if table is None:
            raise InvalidValue.at("/losses", "there is no table")
        made = loss_table(losses, table, part=part, settings=settings)
        ids = [one.id for one in made.sub_portfolios]
        digest = losses_digest(ids, made.losses, made.probabilities, work)
        notes = _doubtful(ids) if losses.sub_portfolios is None else ()
        return Source(digest, GIVEN, made.sub_portfolios, table=made, notes=notes)
    if isinstance(losses, BookLosses):
        raise NotFound.at("/losses/name", f"there is no book {losses.name!r} here")
    with pointing("/losses"):
        limits.check("max_sub_portfolios", len(losses.sub_portfolios), settings, "/sub_portfolios")
        if isinstance(losses, FactorLosses):
            return _simulated(losses, settings)
        return _observed(losses, table, work, settings)


def _doubtful(ids: Sequence[str]) -> tuple[Note, ...]:
    """Return a note on columns, named by a header alone, that are hardly sub-portfolios."""
    found = [one for one in ids if one.casefold().replace(" ", "_") in NO_SUB_PORTFOLIOS]
    if not found:
        return ()
    names = ", ".join(map(repr, found))
    detail = (
        f"taken as sub-portfolios, as every column of numbers: {names}; name a column of labels by "
        "scenario_id_column, one of weights by probability_column, and any other by ignore_columns"
    )
    return (("column_taken", detail, None),)


def _described(columns: Sequence[FactorSubPortfolio] | Sequence[HistorySubPortfolio]) -> tuple[SubPortfolio, ...]:
    return tuple(SubPortfolio(one.id, one.attributes, one.expected_profit) for one in columns)


def _terms(columns: Sequence[FactorSubPortfolio] | Sequence[HistorySubPortfolio]) -> list[SubPortfolioTerms]:
    return [SubPortfolioTerms(one.id, tuple(one.components), one.sign, tuple(one.cover)) for one in columns]


def _simulated(losses: FactorLosses, settings: Settings) -> Source:
    """Return a factor model with its plan; pointers are into `losses`."""
    model = FactorModel.of(
        [(one.id, one.marginal) for one in losses.factors], losses.dependence, _terms(losses.sub_portfolios)
    )
    plan = _plan(model, losses.simulation, settings)
    notes = [(code, detail, f"/losses{pointer}") for code, detail, pointer in model.notes]
    asked = losses.simulation
    if asked.stop_when is None and plan.scenarios != asked.scenarios:
        detail = f"{plan.scenarios:,} points were taken, eight times a power of two"
        notes.append(("sobol_points", detail, "/losses/simulation/scenarios"))
    return Source(
        _spec_digest(losses),
        SOBOL if plan.sobol else RANDOM,
        _described(losses.sub_portfolios),
        plan=plan,
        notes=tuple(notes),
    )


def _plan(model: FactorModel, asked: SimulationPlan, settings: Settings) -> Plan:
    """Return the plan of the scenarios asked for; under `stop_when` of the most, of which fewer may be simulated."""
    stop, sobol = asked.stop_when, asked.method == "sobol"
    scenarios = asked.scenarios if stop is None else stop.max_scenarios
    taken = sobol_points(scenarios) if sobol and stop is None else scenarios
    limits.check("max_scenarios", taken, settings, "/simulation/scenarios")
    with pointing("/simulation"):
        if not sobol:
            return Plan.random(model, seed=asked.seed, scenarios=scenarios)
        if stop is not None and scenarios < LEAST_POINTS:
            detail = f"there are at least {LEAST_POINTS} Sobol points, so no fewer can be the most"
            raise InvalidValue.at("/stop_when/max_scenarios", detail, code="out_of_range")
        if stop is not None:
            scenarios = most_points(scenarios)
        return Plan.quasi_random(model, seed=asked.seed, scenarios=scenarios)


def _observed(losses: HistoryLosses, sent: Sent, work: Work, settings: Settings) -> Source:
    """Return observed changes as scenarios; pointers are into `losses`."""
    changes = _changes(losses, sent)
    limits.check("max_cells", changes.size, settings, "")
    limits.check("max_cells", len(changes) * len(losses.sub_portfolios), settings, "/sub_portfolios")
    scaling = losses.horizon_scaling
    made = history_losses(
        losses.factors,
        changes,
        _terms(losses.sub_portfolios),
        decay=losses.decay,
        scaling=None if scaling is None else HorizonScaling(scaling.periods, scaling.method),
    )
    columns = _described(losses.sub_portfolios)
    table = LossTable(
        made.losses + 0.0,
        made.probabilities,
        sampled=True,
        sub_portfolios=columns,
        scenario_ids=made.labels,
        clusters=made.clusters,
    )
    digest = document_digest(
        {"spec": _spec_digest(losses), "changes": losses_digest(losses.factors, changes, None, work)}
    )
    factor_ids = tuple(losses.factors)
    notes = tuple((code, detail, "/losses/horizon_scaling") for code, detail in made.notes)
    return Source(digest, OBSERVED, columns, table=table, changes=made, factor_ids=factor_ids, notes=notes)


def _changes(losses: HistoryLosses, sent: Sent) -> Array:
    """Return the changes (n, k) in the order of the factors."""
    if isinstance(sent, Sheet):
        names = list(sent.names)
        if sorted(names) != sorted(losses.factors):
            detail = f"the table has the columns {', '.join(names[:20])}, not the factors"
            raise InvalidValue.at("/factors", detail, code="unknown_column")
        return np.ascontiguousarray(sent.values[:, [names.index(name) for name in losses.factors]])
    if sent is not None:
        return sent
    rows = losses.changes or []
    odd = next((number for number, row in enumerate(rows) if len(row) != len(losses.factors)), None)
    if odd is not None:
        detail = f"row {odd} has {len(rows[odd])} changes for {len(losses.factors)} factors"
        raise InvalidValue.at(f"/changes/{odd}", detail, code="wrong_count")
    return np.array(rows, dtype=np.float64) + 0.0


def _spec_digest(losses: FactorLosses | HistoryLosses) -> str:
    """Return the digest of what makes the losses: all but the labels, and the table where there is one."""
    document = asdict(losses)
    for name in ("currency", "valuation_date", "horizon", "changes", "packed", "part"):
        document.pop(name, None)
    for one in document["sub_portfolios"]:
        del one["attributes"], one["expected_profit"]
    return document_digest(document)
