"""A request in one form, whatever it was sent in: defaults filled in, the losses by their digest."""

from collections.abc import Mapping, Sequence
from dataclasses import asdict
from typing import Any

from service.intake import Intake
from service.risk.measures import RiskMeasure
from service.schemas.losses import Losses, ScenarioLosses
from service.schemas.requests import (
    AllocationsRequest,
    ComparisonsRequest,
    IncrementsRequest,
    MeasuresRequest,
)
from service.sources import Source


def canonical_request(intake: Intake, source: Source) -> dict[str, Any]:
    """Return the canonical form of a request, for its digest.

    Parameters
    ----------
    intake : Intake
    source : Source
        What its losses were resolved to.
    """
    request = intake.request
    if isinstance(request, ComparisonsRequest):
        raise TypeError("a comparison has two sources")
    document: dict[str, Any] = {
        "calculation": intake.calculation,
        "losses": _losses(request.losses, source),
        "measures": _measures(request.measures),
        "interval_coverage": request.interval_coverage,
        "reference": request.reference,
    }
    if isinstance(request, IncrementsRequest):
        names = ("candidates", "base_digest", "hurdle_rate", "cost_of_capital", "capital_limit")
        return document | {name: getattr(request, name) for name in names}
    if isinstance(request, MeasuresRequest):
        asked = ("group_by", "include_stand_alone", "tail_detail")
        document |= {name: getattr(request, name) for name in asked}
    if isinstance(request, AllocationsRequest):
        capital_measure = [] if request.capital_measure is None else [request.capital_measure]
        document |= {
            "rules": request.rules,
            "capital": request.capital,
            "capital_measure": _measures(capital_measure),
            "smoothing": request.smoothing,
        }
    return document


def canonical_base(request: IncrementsRequest, source: Source) -> dict[str, Any]:
    """Return the canonical form of what all candidates of a request share."""
    losses = _losses(request.losses, source)
    shared = {name: losses[name] for name in ("digest", "sub_portfolios", "scenarios_are")}
    return {"losses": shared, "measures": _measures(request.measures), "coverage": request.interval_coverage}


def canonical_comparison(request: ComparisonsRequest, before: Source, after: Source) -> dict[str, Any]:
    """Return the canonical form of a comparison of two sources."""
    return {
        "calculation": "comparisons",
        "before": _losses(request.before, before),
        "after": _losses(request.after, after),
        "measures": _measures(request.measures),
        "same_scenarios": request.same_scenarios,
        "interval_coverage": request.interval_coverage,
        "reference": request.reference,
    }


def _losses(losses: Losses, source: Source) -> dict[str, Any]:
    return {
        "digest": source.digest,
        "sub_portfolios": [
            {"attributes": one.attributes, "expected_profit": one.expected_profit, "id": one.id}
            for one in source.sub_portfolios
        ],
        "scenarios_are": losses.scenarios_are if isinstance(losses, ScenarioLosses) else None,
        "scenario_ids": None if source.table is None else source.table.scenario_ids,
        "currency": losses.currency,
        "valuation_date": losses.valuation_date,
        "horizon": losses.horizon,
    }


def _measures(measures: Sequence[RiskMeasure]) -> list[Mapping[str, Any]]:
    return [asdict(measure) | {"label": measure.name} for measure in measures]
