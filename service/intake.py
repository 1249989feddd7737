"""From the bytes of a request to its model and its table, whatever form they came in."""

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, replace
from typing import Any

import numpy as np
import orjson
from numpy.typing import NDArray
from pydantic import TypeAdapter, ValidationError

from service import payloads, query
from service.errors import Fault, InvalidValue, UnsupportedMediaType, pointing
from service.payloads import Sheet
from service.schemas.losses import ScenarioLosses
from service.schemas.requests import AllocationsRequest, IncrementsRequest, MeasuresRequest
from service.settings import Settings
from service.validation import refusal

JSON = "application/json"
MULTIPART = "multipart/form-data"
BODY_PART = "body"
TABLE_PART = "table"

Request = MeasuresRequest | AllocationsRequest | IncrementsRequest

MODELS: Mapping[str, type[Request]] = {
    "measures": MeasuresRequest,
    "allocations": AllocationsRequest,
    "increments": IncrementsRequest,
}
"""The request model of each calculation, by the last word of its path."""
ADAPTERS: Mapping[str, TypeAdapter[Any]] = {name: TypeAdapter(model) for name, model in MODELS.items()}


@dataclass(frozen=True, slots=True)
class Intake:
    """A request, read but not yet resolved.

    Attributes
    ----------
    calculation : str
        `measures`, `allocations` or `increments`.
    request : MeasuresRequest or AllocationsRequest
    table : ndarray of shape (rows, columns) or Sheet
        The numbers as they were sent: bare, or with a header.
    part : str or None
        Where a table with a header stands: `body` or `table`.
    """

    calculation: str
    request: Request
    table: NDArray[np.float64] | Sheet
    part: str | None = None


def read(
    calculation: str,
    body: bytes,
    *,
    content_type: str,
    parameters: Sequence[tuple[str, str]],
    settings: Settings,
) -> Intake:
    """Read the body of a calculation.

    Parameters
    ----------
    calculation : str
        `measures`, `allocations` or `increments`.
    body : bytes
    content_type : str
        The header's value, with its parameters.
    parameters : sequence of (str, str)
        Of the query.
    settings : Settings

    Raises
    ------
    CallerError
        Whatever is wrong with it, pointing into the caller's document.
    """
    media_type = content_type.partition(";")[0].strip().lower()
    if media_type in payloads.TABLE_READERS:
        return _table_body(calculation, body, media_type, parameters, settings)
    query.refuse_unknown(parameters, query.WITHOUT_MEANING)
    if media_type == JSON:
        return _json_body(calculation, body, settings)
    if media_type == MULTIPART:
        parts = payloads.split_multipart(body, content_type)
        return read_parts(calculation, parts.request, parts.table, parts.table_media_type, settings)
    known = ", ".join((JSON, MULTIPART, *payloads.TABLE_READERS))
    detail = f"the media type of the body is {media_type or 'missing'}; known here: {known}"
    raise UnsupportedMediaType(detail, faults=[Fault(detail=detail, code="media_type", header="Content-Type")])


def _json_body(calculation: str, body: bytes, settings: Settings) -> Intake:
    envelope = payloads.split_envelope(body, max_bytes=settings.max_envelope_bytes)
    request = _validated(calculation, envelope.document, envelope.text)
    losses = request.losses
    if losses.part is not None:
        detail = "part says that the table is another part of a multipart request, but the body is JSON alone"
        raise InvalidValue.at("/losses/part", detail)
    if losses.packed is not None and envelope.packed is not None:
        packed = losses.packed
        with pointing("/losses/packed"):
            table = payloads.unpack(
                envelope.packed,
                dtype=packed.dtype,
                rows=packed.rows,
                columns=packed.columns,
                max_cells=settings.max_cells,
            )
    else:
        with pointing("/losses/values"):
            table = payloads.rows_from_json(envelope.table or b"", max_cells=settings.max_cells)
    return Intake(calculation, request, table)


def read_parts(
    calculation: str, request: bytes, table: bytes | memoryview, media_type: str, settings: Settings
) -> Intake:
    """Read a request whose table stands apart from it.

    Parameters
    ----------
    calculation : str
    request : bytes
        The JSON document, whose losses say `"part": "table"`.
    table : bytes
        The table with a header.
    media_type : str
        Of the table.
    settings : Settings

    Raises
    ------
    CallerError
        Whatever is wrong with it.
    """
    envelope = payloads.split_envelope(request, max_bytes=settings.max_envelope_bytes)
    model = _validated(calculation, envelope.document, envelope.text)
    if model.losses.part is None:
        detail = 'a request of two parts says "part": "table" where its losses are, and holds no other table'
        raise InvalidValue.at("/losses", detail)
    return Intake(calculation, model, _sheet(model.losses, table, media_type, TABLE_PART, settings), TABLE_PART)


def _table_body(
    calculation: str, body: bytes, media_type: str, parameters: Sequence[tuple[str, str]], settings: Settings
) -> Intake:
    if calculation not in query.CALCULATIONS:
        detail = f"{calculation} are asked in JSON; the table may stand in the second part of a multipart body"
        raise UnsupportedMediaType(detail, faults=[Fault(detail=detail, code="media_type", header="Content-Type")])
    document = query.table_request(parameters, calculation)
    try:
        request = _validated(calculation, document, orjson.dumps(document))
    except InvalidValue as error:
        error.faults = tuple(
            replace(fault, pointer=None, parameter=query.parameter_at(fault.pointer or "")) for fault in error.faults
        )
        raise
    return Intake(calculation, request, _sheet(request.losses, body, media_type, BODY_PART, settings), BODY_PART)


def _sheet(losses: ScenarioLosses, data: bytes | memoryview, media_type: str, part: str, settings: Settings) -> Sheet:
    """Return the table with a header that `data` holds."""
    reader = payloads.TABLE_READERS[media_type]
    texts = [] if losses.scenario_id_column is None else [losses.scenario_id_column]
    try:
        return reader(data, text_columns=texts, ignore=losses.ignore_columns or (), max_cells=settings.max_cells)
    except InvalidValue as error:
        error.faults = tuple(replace(fault, part=part) for fault in error.faults)
        raise


def _validated(calculation: str, document: dict[str, Any], text: bytes) -> Request:
    """Return the model of a document; `null` in an optional field means absent."""
    if b"null" in text:
        text = orjson.dumps(_without_nulls(document))
    try:
        request: Request = ADAPTERS[calculation].validate_json(text)
    except ValidationError as error:
        raise refusal(error, document, MODELS[calculation]) from None
    return request


def _without_nulls(node: Any) -> Any:
    """Return the document without the members that are null; a null in a list stays and is refused."""
    if isinstance(node, dict):
        return {name: _without_nulls(value) for name, value in node.items() if value is not None}
    return [_without_nulls(value) for value in node] if isinstance(node, list) else node
