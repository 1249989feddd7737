"""What a caller says of the form of an answer, and what is drawn of it."""

from collections.abc import Sequence

from service.calculate import Drawing
from service.errors import Fault, InvalidValue
from service.query import Pairs
from service.representations import charts
from service.representations.charts import CHARTS, Chart
from service.representations.formats import Form
from service.representations.page import PICTURE_POLICY, POLICY
from service.schemas.results import AllocationsAnswer

POLICIES = {"svg": PICTURE_POLICY, "png": PICTURE_POLICY, "html": POLICY}
"""Content-Security-Policy of a form."""


def headers_of(form: Form) -> dict[str, str]:
    """Return the header fields of an answer in a form."""
    policy = POLICIES.get(form.suffix)
    return {"content-type": form.content_type} | ({} if policy is None else {"content-security-policy": policy})


def wants_mark(parameters: Pairs) -> bool:
    """Return whether a CSV answer begins with the byte order mark."""
    return _chosen(parameters, "bom", ("0", "1")) == "1"


def chart_asked(parameters: Pairs, form: Form) -> Chart | None:
    """Return the picture that a caller names; only a picture has one."""
    chart = _chosen(parameters, "chart", CHARTS)
    if chart is not None and not form.drawn:
        detail = "chart is for pictures: ask for .svg or .png"
        raise InvalidValue.of(Fault(detail=detail, code="not_allowed", parameter="chart"))
    return next((known for known in CHARTS if known == chart), None)


def picture(drawing: Drawing, chart: Chart | None) -> str:
    """Return a picture as SVG: the one named, or the contributions where there is one allocation."""
    answer = drawing.answer
    single = isinstance(answer, AllocationsAnswer) and len(answer.allocations) == 1
    usual: Chart = "contributions" if single else "distribution"
    return charts.draw(chart or usual, answer, drawing.distribution, drawing.marks)


def _chosen(parameters: Pairs, name: str, words: Sequence[str]) -> str | None:
    """Return the word of a parameter of the form, None if it is not there."""
    given = [value for key, value in parameters if key == name]
    if not given:
        return None
    if len(given) > 1 or given[0] not in words:
        detail = f"{name} is {' or '.join(words)}, once"
        raise InvalidValue.of(Fault(detail=detail, code="not_allowed", parameter=name))
    return given[0]
