"""From the `losses` of a request to a LossTable."""

from collections.abc import Sequence
from dataclasses import replace
from math import fsum

import numpy as np
from numpy.typing import NDArray

from service import limits
from service.errors import Fault, InvalidValue
from service.payloads import Sheet
from service.risk.loss_table import LossTable, SubPortfolio
from service.risk.words import unsafe
from service.schemas.losses import ScenarioLosses
from service.settings import Settings

PROBABILITY_SLACK = 1e-9  # by which given probabilities may miss 1

Array = NDArray[np.float64]


def loss_table(losses: ScenarioLosses, table: Array | Sheet, *, part: str | None, settings: Settings) -> LossTable:
    """Return the loss table of a request.

    Parameters
    ----------
    losses : ScenarioLosses
    table : ndarray of shape (rows, columns) or Sheet
        The numbers as they were sent.
    part : str or None
        Where a table with a header stands.
    settings : Settings

    Raises
    ------
    InvalidValue
        Where ids, sizes or probabilities do not fit the table; pointers are into the whole request.
    LimitExceeded
        For too many sub-portfolios.
    """
    if isinstance(table, Sheet):
        columns, values, probabilities, scenario_ids = _from_sheet(losses, table, part or "table")
    else:
        columns, values, probabilities, scenario_ids = _from_rows(losses, table)
    limits.check("max_sub_portfolios", len(columns), settings, "/losses")
    if losses.sign == "profit":
        values = 0.0 - values
    return LossTable(values, probabilities, losses.scenarios_are == "sample", columns, scenario_ids)


Resolved = tuple[tuple[SubPortfolio, ...], Array, Array | None, tuple[str, ...] | None]


def _from_rows(losses: ScenarioLosses, table: Array) -> Resolved:
    """Resolve a bare table, whose columns the request names."""
    turned = losses.layout == "by_sub_portfolio"
    values = np.ascontiguousarray(table.T) if turned else table
    columns = tuple(SubPortfolio(one.id, one.attributes, one.expected_profit) for one in losses.sub_portfolios or ())
    if len(columns) != values.shape[1]:
        word = "rows" if turned else "columns"
        detail = f"{len(columns)} sub-portfolios are named, but the table has {values.shape[1]} {word}"
        if len(columns) == values.shape[0]:
            row, other = ("sub-portfolio", "by_scenario") if turned else ("scenario", "by_sub_portfolio")
            detail += f"; a row is a {row} unless layout is '{other}'"
        raise InvalidValue.at("/losses/sub_portfolios", detail, code="wrong_count")
    _refuse_repeated([one.id for one in columns], "/losses/sub_portfolios", "/id")
    probabilities = None
    if losses.probabilities is not None:
        given = np.array(losses.probabilities)
        _refuse_other_count(given.size, values.shape[0], "/losses/probabilities", "probabilities")
        probabilities = _normalised(given, Fault(detail="", code="probabilities", pointer="/losses/probabilities"))
    return columns, values, probabilities, _scenario_ids(losses, values.shape[0])


def _from_sheet(losses: ScenarioLosses, sheet: Sheet, part: str) -> Resolved:
    """Resolve a table whose header names its columns; `sub_portfolios` may add what a header cannot say."""
    names, values = list(sheet.names), sheet.values
    scenarios = values.shape[0]
    probabilities = None
    if losses.probability_column is not None:
        if losses.probabilities is not None:
            detail = "probabilities and probability_column both give the probabilities"
            raise InvalidValue.at("/losses/probabilities", detail)
        if losses.probability_column not in names:
            detail = f"the table has no column {losses.probability_column!r}"
            raise _misplaced("/losses/probability_column", "probability_column", detail, part)
        place = names.index(losses.probability_column)
        column = values[:, place]
        fault = Fault(detail="", code="probabilities", part=part, column=names.pop(place))
        if column.min() < 0.0:
            fault = Fault(
                detail="", code="out_of_range", part=part, column=fault.column, row=int(np.argmin(column)) + 1
            )
        probabilities = _normalised(column, fault)
        values = np.delete(values, place, axis=1)
    elif losses.probabilities is not None:
        given = np.array(losses.probabilities)
        _refuse_other_count(given.size, scenarios, "/losses/probabilities", "probabilities")
        probabilities = _normalised(given, Fault(detail="", code="probabilities", pointer="/losses/probabilities"))
    if not names:
        detail = "the table has no column of losses"
        raise InvalidValue.of(Fault(detail=detail, code="wrong_count", part=part))
    ids = _scenario_ids(losses, scenarios)
    if losses.scenario_id_column is not None:
        if ids is not None:
            detail = "scenario_ids and scenario_id_column both label the scenarios"
            raise InvalidValue.at("/losses/scenario_ids", detail)
        ids = tuple(sheet.texts[losses.scenario_id_column])
        _check_labels(ids, part, losses.scenario_id_column)
    for name in names:
        _check_text(name, Fault(detail="", code="unsafe_text", part=part, column=name))
    return _described(losses, names), values, probabilities, ids


def _described(losses: ScenarioLosses, names: Sequence[str]) -> tuple[SubPortfolio, ...]:
    """Return the columns of the header with the attributes that the request adds."""
    if losses.sub_portfolios is None:
        return tuple(SubPortfolio(name, {}) for name in names)
    _refuse_repeated([one.id for one in losses.sub_portfolios], "/losses/sub_portfolios", "/id")
    described = {one.id: one for one in losses.sub_portfolios}
    for number, one in enumerate(losses.sub_portfolios):
        if one.id not in names:
            detail = f"the table has no column {one.id!r}"
            raise InvalidValue.at(f"/losses/sub_portfolios/{number}/id", detail, code="unknown_column")
    missing = next((name for name in names if name not in described), None)
    if missing is not None:
        detail = f"the table's column {missing!r} is not among sub_portfolios; name it there or in ignore_columns"
        raise InvalidValue.at("/losses/sub_portfolios", detail, code="unknown_column")
    return tuple(SubPortfolio(name, described[name].attributes, described[name].expected_profit) for name in names)


def _scenario_ids(losses: ScenarioLosses, scenarios: int) -> tuple[str, ...] | None:
    if losses.scenario_ids is None:
        return None
    _refuse_other_count(len(losses.scenario_ids), scenarios, "/losses/scenario_ids", "scenario_ids")
    _refuse_repeated(losses.scenario_ids, "/losses/scenario_ids", "")
    return tuple(losses.scenario_ids)


def _normalised(given: Array, fault: Fault) -> Array | None:
    """Return probabilities divided by their sum; None if all are equal, which is the default case."""
    total = fsum(given)
    least = float(given.min())
    if least < 0.0 or not abs(total - 1.0) <= PROBABILITY_SLACK:
        detail = (
            f"{least:.15g} is no probability" if least < 0.0 else f"the probabilities sum to {total:.15g}, not to 1"
        )
        raise InvalidValue.of(
            Fault(
                detail=detail,
                code=fault.code,
                pointer=fault.pointer,
                part=fault.part,
                column=fault.column,
                row=fault.row,
            )
        )
    return None if least == given.max() else given / total


def _refuse_other_count(count: int, scenarios: int, pointer: str, what: str) -> None:
    if count != scenarios:
        detail = f"{count} {what} are given, but the table has {scenarios} scenarios"
        raise InvalidValue.at(pointer, detail, code="wrong_count")


def _refuse_repeated(names: Sequence[str], pointer: str, member: str) -> None:
    seen: set[str] = set()
    for number, name in enumerate(names):
        if name in seen:
            raise InvalidValue.at(f"{pointer}/{number}{member}", f"{name!r} stands here twice", code="repeated")
        seen.add(name)


def _check_labels(ids: Sequence[str], part: str, column: str) -> None:
    """Refuse labels of scenarios that repeat or cannot be echoed."""
    seen: set[str] = set()
    for number, name in enumerate(ids):
        place = Fault(detail="", code="unsafe_text", part=part, row=number + 1, column=column)
        _check_text(name, place)
        if name in seen:
            detail = f"the scenario {name!r} stands here twice"
            raise InvalidValue.of(Fault(detail=detail, code="repeated", part=part, row=number + 1, column=column))
        seen.add(name)


def _check_text(value: str, place: Fault) -> None:
    why = unsafe(value)
    if why is not None:
        detail = f"{value[:40]!r}: {why}"
        if value.startswith(" "):
            detail += "; the space behind the comma is a part of it"
        raise InvalidValue.of(replace(place, detail=detail))


def _misplaced(pointer: str, parameter: str, detail: str, part: str) -> InvalidValue:
    """Return an error about an option that is a member of a document or a query parameter."""
    if part == "body":
        return InvalidValue(detail, faults=[Fault(detail=detail, code="unknown_column", parameter=parameter)])
    return InvalidValue(detail, faults=[Fault(detail=detail, code="unknown_column", pointer=pointer)])
