"""Answers and errors for a person at a terminal; only here and on the report page are numbers rounded."""

import sys
import textwrap
import time
from collections.abc import Callable, Iterator
from pathlib import Path
from typing import TextIO

import msgspec

from service.books import TABLES
from service.errors import Fault, TailraceError
from service.representations.table import Column, Table, text_table
from service.schemas.results import (
    AllocationResult,
    AllocationRow,
    AllocationsAnswer,
    ComparisonResult,
    ComparisonsAnswer,
    Figure,
    GroupRow,
    IncrementsAnswer,
    MeasureResult,
    MeasuresAnswer,
)

WIDTH = 100
OF_CANDIDATES = (
    "increment",
    "lower",
    "upper",
    "alone",
    "diversified",
    "expected profit",
    "return",
    "required profit",
    "meets hurdle",
    "within limit",
)
AT_RIGHT = ("share", "diversified", "return", "meets hurdle", "within limit")  # texts that stand like numbers
TOP = "at the top"
MARKS = {"candidates": "increments", "before": "comparisons", "after": "comparisons"}
"""Members of a request that belong to one calculation alone."""
BAR = 30  # characters of a full progress bar
BAR_SECONDS = 0.1  # between two drawings of it
CAUTION = (
    "These figures are estimates from the scenarios given; their errors are those of sampling, not of the model. "
    "They are no statement of required or available capital: local rules and the responsible actuary or risk "
    "officer decide."
)

_OBJECT = msgspec.json.Decoder(dict[str, msgspec.Raw])

Answer = MeasuresAnswer | AllocationsAnswer | IncrementsAnswer | ComparisonsAnswer


def readable(answer: Answer) -> str:
    """Return an answer as text: a table per result, then notes, cautions and where it came from."""
    blocks = [*_heading(answer)]
    if isinstance(answer, AllocationsAnswer):
        blocks += [_allocation(one) for one in answer.allocations]
    elif isinstance(answer, MeasuresAnswer):
        blocks += [_measure(one) for one in answer.measures]
    elif isinstance(answer, ComparisonsAnswer):
        blocks += [_comparison(one) for one in answer.comparisons]
    else:
        blocks += _increments(answer)
    blocks += [_wrapped(f"Note: {note.detail}.") for note in answer.notes]
    blocks.append(_wrapped(CAUTION))
    blocks.append(f"{answer.provenance.method}\nrequest {answer.provenance.request_digest}\n")
    return "\n".join(blocks)


def _heading(answer: Answer) -> Iterator[str]:
    labels = answer.labels
    words = [labels.reference, labels.valuation_date, labels.horizon and f"horizon {labels.horizon}"]
    known = [word for word in words if word]
    if known:
        yield ", ".join(known)
    unit = f", amounts in {labels.currency}" if labels.currency else ""
    heading = f"{answer.provenance.scenarios:,} scenarios{unit}"
    if isinstance(answer, IncrementsAnswer | ComparisonsAnswer):
        yield heading + "\n"
        return
    yield f"{heading}, expected loss {_short(answer.expected_loss.value)}"
    coverage = next((ends.coverage for one in _figures(answer) if (ends := one.interval) is not None), None)
    if coverage is not None:
        yield f"lower and upper: {100.0 * coverage:g} % intervals of the error of sampling\n"


def _figures(answer: MeasuresAnswer | AllocationsAnswer) -> Iterator[Figure]:
    """Yield the figures whose intervals the tables show."""
    if isinstance(answer, MeasuresAnswer):
        for measured in answer.measures:
            yield measured.total
            yield from (one.figure for one in measured.stand_alone)
            yield from (one.figure for one in measured.groups)
        return
    for allocated in answer.allocations:
        yield from (allocated.total, *(one.contribution for one in (*allocated.sub_portfolios, *allocated.groups)))


def _allocation(result: AllocationResult) -> str:
    """Return one allocation: sub-portfolios, groups, and the total at the foot."""
    rows: list[tuple[object, ...]] = []
    parts: list[AllocationRow | GroupRow] = [*result.sub_portfolios, *result.groups]
    for one in parts:
        name = f"{one.attribute}: {one.group or '(none)'}" if isinstance(one, GroupRow) else one.id
        alone = None if one.stand_alone is None else one.stand_alone.value
        benefit, allocated = one.diversification_benefit, one.allocated_capital
        part = one.contribution
        rows.append(
            (
                name,
                part.value,
                *_ends(part),
                _percent(one.share),
                alone,
                _percent(benefit),
                allocated,
                _percent(one.return_on_capital),
            )
        )
    total = result.total
    rows.append(
        (
            "total",
            total.value,
            *_ends(total),
            None,
            None,
            None,
            result.capital,
            _percent(result.return_on_capital),
        )
    )
    names = ("lower", "upper", "share", "alone", "diversified", "allocated", "return")
    columns = (_text("sub-portfolio"), _number("contribution"), *(_ratio_or_number(name) for name in names))
    rule = result.rule.replace("_", " ")
    residual = "" if result.residual is None else f"not shared out: {_short(result.residual)}\n"
    return f"{result.measure}, {rule}\n{text_table(Table(columns, rows))}{residual}"


def _measure(result: MeasureResult) -> str:
    parts: list[tuple[str, Figure]] = [(one.id, one.figure) for one in result.stand_alone]
    parts += [(f"{one.attribute}: {one.group or '(none)'}", one.figure) for one in result.groups]
    parts.append(("total", result.total))
    rows = [(name, figure.value, figure.standard_error, *_ends(figure)) for name, figure in parts]
    columns = (_text("alone"), *(_number(name) for name in ("figure", "standard error", "lower", "upper")))
    saved = (
        ""
        if result.diversification_benefit is None
        else f"diversification {_percent(result.diversification_benefit)}\n"
    )
    return f"{result.measure}\n{text_table(Table(columns, rows))}{saved}"


def _increments(answer: IncrementsAnswer) -> Iterator[str]:
    """Yield a table per measure, and the reasons of the candidates that were refused."""
    columns = (_text("candidate"), *(_ratio_or_number(name) for name in OF_CANDIDATES))
    for number, base in enumerate(answer.base):
        rows = []
        for one in answer.candidates:
            if one.figures:
                of = one.figures[number]
                figure = of.increment
                row = (
                    one.id,
                    figure.value,
                    *_ends(figure),
                    of.stand_alone.value,
                    _percent(of.diversification_benefit),
                    one.expected_profit,
                    _percent(of.return_on_capital),
                    of.required_profit,
                    _verdict(of.meets_hurdle),
                    _verdict(of.within_limit),
                )
                rows.append(row)
        yield f"{base.measure} now {_short(base.total.value)}\n{text_table(Table(columns, rows))}"
    for one in answer.candidates:
        if one.reason is not None:
            yield f"{one.id or 'a candidate without a name'} refused: {one.reason}\n"


def _comparison(result: ComparisonResult) -> str:
    """Return how one measure changed: by sub-portfolio, by state, and the total at the foot."""
    rows: list[tuple[object, ...]] = [
        (one.id, one.state, one.before, one.after, one.change.value, *_ends(one.change))
        for one in result.sub_portfolios
    ]
    rows += [(f"all {one.state}", None, None, None, one.change, None, None) for one in result.by_state]
    rows.append(("total", None, result.before.value, result.after.value, result.change.value, *_ends(result.change)))
    columns = (
        _text("sub-portfolio"),
        _text("state"),
        *(_number(name) for name in ("before", "after", "change", "lower", "upper")),
    )
    return f"{result.measure}\n{text_table(Table(columns, rows))}"


def _verdict(passed: bool | None) -> str | None:  # noqa: FBT001  # a verdict is what it is
    return None if passed is None else "yes" if passed else "no"


def _ends(figure: Figure) -> tuple[float | None, float | None]:
    return (None, None) if figure.interval is None else (figure.interval.lower, figure.interval.upper)


def _percent(ratio: float | None) -> str | None:
    return None if ratio is None else f"{100.0 * ratio:z.1f} %"


def _short(value: float) -> str:
    return f"{value:,.0f}" if abs(value) >= 1e4 else f"{value:,.6g}"  # noqa: PLR2004  # whole units say enough


def _text(name: str) -> Column:
    return Column(name=name, kind="text")


def _number(name: str) -> Column:
    return Column(name=name, kind="number")


def _ratio_or_number(name: str) -> Column:
    return Column(name=name, kind="percent" if name in AT_RIGHT else "number")


def _wrapped(words: str) -> str:
    return textwrap.fill(words, WIDTH) + "\n"


def mistaken(name: str, body: bytes, calculation: str) -> str | None:
    """Return what a body that is no request of `calculation` looks like, and what to do with it, if that is known.

    Parameters
    ----------
    name : str
        Of its file.
    body : bytes
    calculation : str
        What it was read as.
    """
    if Path(name).suffix in TABLES:
        return f'this is a table, not a request: put it beside a book whose losses say "file": "{Path(name).name}"'
    members = _members(body)
    meant = next((other for member, other in MARKS.items() if member in members), calculation)
    if meant != calculation:
        return f"this looks like {meant}: --to {meant}"
    if "file" in _members(members.get("losses", b"")) or ("kind" in members and "losses" not in members):
        losses = f'"losses": {{"kind": "book", "name": "{Path(name).stem}"}}'
        return f"this is a book, not a request: a request asks it by {losses}, with its folder behind --books"
    return None


def _members(text: bytes | msgspec.Raw) -> dict[str, msgspec.Raw]:
    """Return the members of a JSON object, none of anything else."""
    try:
        return _OBJECT.decode(text)
    except (ValueError, RecursionError):
        return {}


def complaint(error: TailraceError) -> str:
    """Return an error in a person's words: one line for each fault, and a single one where the sentence is its own."""
    if [fault.detail for fault in error.faults] == [error.detail]:
        place = _place(error.faults[0])
        return f"{place}: {error.detail}" if place not in ("", TOP) else error.detail
    lines = [error.detail]
    lines += [f"  {place}: {fault.detail}" for fault in error.faults if (place := _place(fault))]
    return "\n".join(lines)


def _place(fault: Fault) -> str:
    if fault.pointer is not None:
        return f"at {fault.pointer}" if fault.pointer else TOP
    if fault.parameter or fault.header:
        return f"at {fault.parameter or fault.header}"
    words = [f"row {fault.row}" if fault.row else "", f"column {fault.column}" if fault.column else ""]
    return " ".join(filter(None, words))


class ProgressBar:
    """A progress bar on a terminal; silent elsewhere."""

    def __init__(self, stream: TextIO = sys.stderr, clock: Callable[[], float] = time.monotonic) -> None:
        self._stream, self._clock = stream, clock
        self._shown = stream.isatty()
        self._start = self._last = clock()
        self._drawn = False

    def __call__(self, fraction: float = 0.0, /) -> None:
        """Draw the bar at `fraction`, not too often, and not for what is over at once."""
        now = self._clock()
        if not self._shown or now - self._last < BAR_SECONDS or fraction <= 0.0:
            return
        self._last = now
        done = round(BAR * min(fraction, 1.0))
        left = (now - self._start) * (1.0 / fraction - 1.0)
        self._stream.write(f"\r[{'#' * done}{'.' * (BAR - done)}] {fraction:4.0%}, {left:.0f} s left ")
        self._stream.flush()
        self._drawn = True

    def end(self) -> None:
        """Wipe the bar."""
        if self._drawn:
            self._stream.write("\r" + " " * (BAR + 25) + "\r")
            self._stream.flush()
