"""From the bytes of a request to its model and its table, whatever form they came in."""

from collections.abc import Iterator, Mapping, Sequence
from contextlib import contextmanager
from dataclasses import dataclass, field, replace
from typing import Any

import numpy as np
from numpy.typing import NDArray
from pydantic import TypeAdapter, ValidationError

from service import payloads, query
from service.errors import CallerError, Fault, InvalidValue, UnsupportedMediaType, pointing
from service.payloads import Sheet
from service.schemas.losses import BookLosses, FactorLosses, HistoryLosses, Losses, PackedTable, ScenarioLosses
from service.schemas.requests import AllocationsRequest, ComparisonsRequest, IncrementsRequest, MeasuresRequest
from service.settings import Settings
from service.sources import Source
from service.validation import refusal

JSON = "application/json"
MULTIPART = "multipart/form-data"
BODY_PART = "body"
TABLE_PART = "table"

Request = MeasuresRequest | AllocationsRequest | IncrementsRequest | ComparisonsRequest

MODELS: Mapping[str, type[Request]] = {
    "measures": MeasuresRequest,
    "allocations": AllocationsRequest,
    "increments": IncrementsRequest,
    "comparisons": ComparisonsRequest,
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
    table : ndarray of shape (rows, columns), Sheet or None
        The numbers as they were sent: bare, or with a header; None where the losses have no table apart.
    part : str or None
        Where a table with a header stands: `body` or `table`.
    candidates : mapping of int to memoryview
        For increments: the text of the values of each candidate that gives them, by its number.
    tables : mapping of str to ndarray
        For a request with two sources: the bare table of each, by its name.
    sources : mapping of str to Source
        What is resolved already, being a book: by `losses`, `before` or `after`.
    by_query : bool
        Whether the request was made of query parameters alone.
    """

    calculation: str
    request: Request
    table: NDArray[np.float64] | Sheet | None
    part: str | None = None
    candidates: Mapping[int, memoryview] = field(default_factory=dict)
    tables: Mapping[str, NDArray[np.float64]] = field(default_factory=dict)
    sources: Mapping[str, Source] = field(default_factory=dict)
    by_query: bool = False

    @property
    def pointed(self) -> bool:
        """Whether the caller sent a document that can be pointed into."""
        return self.part != BODY_PART and not self.by_query

    @property
    def losses(self) -> tuple[Losses, ...]:
        """The losses asked about: of one source, or of the two that are compared."""
        if isinstance(self.request, ComparisonsRequest):
            return self.request.before, self.request.after
        return (self.request.losses,)

    @property
    def columns(self) -> int:
        """Columns of the widest table of scenarios that was sent; 0 without any."""
        named = [len(one.sub_portfolios or ()) for one in self.losses if isinstance(one, ScenarioLosses)]
        sheet = self.table.values.shape[1] if isinstance(self.table, Sheet) else 0
        return max([sheet, *named])

    @property
    def scenarios(self) -> int | None:
        """Scenarios to go through, at most; of two sources, those of the one after. None for a book not looked up."""
        which = "after" if isinstance(self.request, ComparisonsRequest) else "losses"
        losses: Losses = getattr(self.request, which)
        table, source = self.tables.get(which, self.table), self.sources.get(which)
        if isinstance(losses, FactorLosses):
            plan = losses.simulation
            return plan.scenarios if plan.stop_when is None else plan.stop_when.max_scenarios
        if source is not None and source.table is not None:
            return source.table.scenarios
        if isinstance(table, Sheet):
            return table.values.shape[0]
        if table is not None:
            turned = isinstance(losses, ScenarioLosses) and losses.layout == "by_sub_portfolio"
            return table.shape[1 if turned else 0]
        return len(losses.changes) if isinstance(losses, HistoryLosses) and losses.changes is not None else None


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
    if media_type in (JSON, MULTIPART):
        query.refuse_unknown(parameters, query.WITHOUT_MEANING)
    if media_type == JSON:
        return _json_body(calculation, body, settings)
    if media_type == MULTIPART:
        parts = payloads.split_multipart(body, content_type)
        return read_parts(calculation, parts.request, parts.table, parts.table_media_type, settings)
    others = ", ".join((MULTIPART, *payloads.TABLE_READERS))
    detail = (
        f"the media type of the body is {media_type or 'missing'}: send the header Content-Type: {JSON} "
        f"or, where the body is that, {others}"
    )
    raise UnsupportedMediaType(detail, faults=[Fault(detail=detail, code="media_type", header="Content-Type")])


def _json_body(calculation: str, body: bytes, settings: Settings) -> Intake:
    envelope = payloads.split_envelope(body, max_bytes=settings.max_envelope_bytes)
    request = _validated(calculation, envelope.document, envelope.text)
    if isinstance(request, ComparisonsRequest):
        books = {"before": request.before, "after": request.after}
        tables = {name: _table(losses, name, envelope, settings) for name, losses in books.items()}
        return Intake(calculation, request, None, tables={name: one for name, one in tables.items() if one is not None})
    table = _table(request.losses, "losses", envelope, settings)
    return Intake(calculation, request, table, candidates=_candidates(envelope))


def _candidates(envelope: payloads.Envelope) -> Mapping[int, memoryview]:
    """Return the texts of the values of candidates, by their numbers; each is decoded, and refused, alone."""
    apart = ((pointer.split("/"), text) for pointer, text in envelope.apart.items())
    return {int(steps[2]): text for steps, text in apart if steps[1] == "candidates"}


def _table(losses: Losses, name: str, envelope: payloads.Envelope, settings: Settings) -> NDArray[np.float64] | None:
    """Return the table that stands in the JSON itself, in its member `name`; None where there is none to be decoded."""
    if isinstance(losses, FactorLosses | BookLosses):
        return None
    if losses.part is not None:
        alone = "but the body is JSON alone" if name == "losses" else "but a comparison is JSON alone"
        detail = f"part says that the table is another part of a multipart request, {alone}"
        raise InvalidValue.at(f"/{name}/part", detail)
    if losses.packed is not None:
        with pointing(f"/{name}/packed"):
            return _unpacked(losses.packed, envelope.apart[f"/{name}/packed/data"], settings)
    if isinstance(losses, HistoryLosses):
        return None
    with pointing(f"/{name}/values"):
        return payloads.rows_from_json(envelope.apart.get(f"/{name}/values", b""), max_cells=settings.max_cells)


def _unpacked(packed: PackedTable, data: memoryview, settings: Settings) -> NDArray[np.float64]:
    return payloads.unpack(
        data, dtype=packed.dtype, rows=packed.rows, columns=packed.columns, max_cells=settings.max_cells
    )


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
    if isinstance(model, ComparisonsRequest):
        raise UnsupportedMediaType("a comparison is asked in JSON alone")
    if isinstance(model.losses, FactorLosses | BookLosses) or model.losses.part is None:
        detail = 'a request of two parts says "part": "table" where its losses are, and holds no other table'
        raise InvalidValue.at("/losses", detail)
    sheet = _sheet(model.losses, table, media_type, TABLE_PART, settings)
    return Intake(calculation, model, sheet, TABLE_PART, candidates=_candidates(envelope))


def _table_body(
    calculation: str, body: bytes, media_type: str, parameters: Sequence[tuple[str, str]], settings: Settings
) -> Intake:
    if calculation not in query.CALCULATIONS:
        detail = f"{calculation} are asked in JSON; the table may stand in the second part of a multipart body"
        raise UnsupportedMediaType(detail, faults=[Fault(detail=detail, code="media_type", header="Content-Type")])
    document = query.table_request(parameters, calculation)
    try:
        request = _validated(calculation, document, payloads.json_text(document))
    except InvalidValue as error:
        error.faults = tuple(
            replace(fault, pointer=None, parameter=query.parameter_at(fault.pointer or "")) for fault in error.faults
        )
        raise
    if isinstance(request, ComparisonsRequest) or isinstance(request.losses, FactorLosses | BookLosses):
        raise TypeError("a table body is a table of scenarios")
    return Intake(calculation, request, _sheet(request.losses, body, media_type, BODY_PART, settings), BODY_PART)


def read_query(calculation: str, document: dict[str, Any]) -> Intake:
    """Read a request on a book that was made of query parameters.

    Raises
    ------
    InvalidValue
        Naming the parameters.
    """
    with in_parameters():
        return Intake(calculation, _validated(calculation, document, payloads.json_text(document)), None, by_query=True)


@contextmanager
def in_parameters() -> Iterator[None]:
    """Name the query parameter that made what a fault points at, or nothing where none did."""
    try:
        yield
    except CallerError as error:
        error.faults = tuple(_parameter_of(fault) for fault in error.faults)
        raise


def _parameter_of(fault: Fault) -> Fault:
    if fault.pointer is None:
        return fault
    inside_book = fault.pointer.startswith("/losses")
    return replace(fault, pointer=None, parameter=None if inside_book else query.parameter_at(fault.pointer))


def _sheet(
    losses: ScenarioLosses | HistoryLosses, data: bytes | memoryview, media_type: str, part: str, settings: Settings
) -> Sheet:
    """Return the table with a header that `data` holds."""
    reader = payloads.TABLE_READERS[media_type]
    given = losses if isinstance(losses, ScenarioLosses) else None
    texts = [given.scenario_id_column] if given is not None and given.scenario_id_column is not None else []
    ignored = given.ignore_columns or () if given is not None else ()
    try:
        return reader(data, text_columns=texts, ignore=ignored, max_cells=settings.max_cells)
    except InvalidValue as error:
        error.faults = tuple(replace(fault, part=part) for fault in error.faults)
        raise


def _validated(calculation: str, document: dict[str, Any], text: bytes) -> Request:
    """Return the model of a document; `null` in an optional field means absent."""
    if b"null" in text:
        text = payloads.json_text(_without_nulls(document))
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
