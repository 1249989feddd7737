"""A loss table put straight through the arithmetic, without a request around it."""

import json

import numpy as np
from pydantic import TypeAdapter

from service.risk import figures
from service.risk.allocation import RULES, Case
from service.risk.effort import Alone
from service.risk.frame import Frame
from service.risk.loss_table import LossTable, SubPortfolio, groups_of
from service.risk.measures import Measure
from service.risk.quantiles import Ordered

MEASURE = TypeAdapter(Measure)


def measure(kind, **parameters):
    """Return a measure as a caller would name it."""
    return MEASURE.validate_json(json.dumps({"kind": kind, **parameters}))


def var(level, **more):
    return measure("value_at_risk", level=level, **more)


def es(level, **more):
    return measure("expected_shortfall", level=level, **more)


def loss_table(losses, p=None, *, sampled=True, attributes=None, **more):
    """Return a loss table (a single column if `losses` is flat); equal probabilities stay explicit."""
    values = np.array(losses, dtype=np.float64, order="C")
    values = values[:, None] if values.ndim == 1 else values
    p = None if p is None else np.array(p, dtype=np.float64)
    names = attributes or [{}] * values.shape[1]
    columns = tuple(SubPortfolio(f"s{j}", names[j]) for j in range(values.shape[1]))
    return LossTable(values, p, sampled, columns, **more)


def framed(one, losses, p=None, *, group_by=(), stand_alone=True, **more):
    """Return the frame of a table for one measure (or several)."""
    table = losses if isinstance(losses, LossTable) else loss_table(losses, p, **more)
    measures = one if isinstance(one, list) else [one]
    return Frame.of(table, groups_of(table.sub_portfolios, group_by), measures, Alone(), stand_alone=stand_alone)


def total(one, losses, p=None, *, coverage=0.95, **more):
    """Return the figure of the total with its error."""
    return figures.total(framed(one, losses, p, **more), one, coverage)


def value(one, losses, p=None, **more):
    """Return the figure of the total."""
    return float(total(one, losses, p, **more).values[0])


def alone(one, losses, p=None, *, coverage=0.95, **more):
    """Return the figures of the columns (and then of the groups) alone."""
    return figures.stand_alone(framed(one, losses, p, **more), one, coverage)


def split(rule, one, losses, p=None, *, smoothing="auto", coverage=0.95, seed=1, **more):
    """Return what a rule gives to the columns (and then the groups)."""
    frame = framed(one, losses, p, **more)
    return RULES[rule](Case(frame=frame, measure=one, coverage=coverage, smoothing=smoothing, seed=seed))


def contributions(rule, one, losses, p=None, **more):
    return split(rule, one, losses, p, **more).figures.values


def ordered(values, p=None, *, sampled=True):
    """Return one loss as a complete ordered distribution, worst first, and the order."""
    values = np.asarray(values, dtype=np.float64)
    order = np.argsort(-values, kind="stable")
    p = None if p is None else np.asarray(p, dtype=np.float64)[order][None, :]
    return Ordered.of(values[order][None, :], scenarios=values.size, probabilities=p, sampled=sampled), order
