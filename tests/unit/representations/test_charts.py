"""Pictures: well-formed, readable by a screen reader, escaped, and they show the figures of the answer."""

import io
import zlib
from types import SimpleNamespace
from xml.etree import ElementTree as ET

import numpy as np
import pytest

from service.errors import InvalidValue, NotAcceptable
from service.representations.charts import CHARTS, NARROW, Look, contributions_chart, draw, exceedance_chart, marks_of
from service.representations.charts.axes import Scale, log_ticks, round_ticks
from service.representations.charts.marks import Flags, Mark
from service.representations.png import png
from service.representations.wording import Amounts, brief, width
from service.risk.distribution import distribution_of
from tests.unit.representations.answers import MEASURES, ODD, asked, storms

SVG = "{http://www.w3.org/2000/svg}"
ALLOWED = {"svg", "title", "desc", "rect", "text", "path", "circle"}


def parsed(svg):
    return ET.fromstring(svg)  # made here


def texts(svg):
    return ["".join(one.itertext()) for one in parsed(svg).iter(f"{SVG}text")]


@pytest.fixture(scope="module")
def one_measure():
    return asked(storms(), ODD, measures=MEASURES[1:], currency="EUR", horizon="1 year")


@pytest.fixture(scope="module")
def two_measures():
    return asked(storms(), currency="EUR")


@pytest.mark.parametrize("chart", CHARTS)
@pytest.mark.parametrize("look", [Look(), Look(width=NARROW), Look(inside="p1")], ids=["file", "narrow", "inside"])
def test_a_picture_is_plain_svg_with_title_and_description(one_measure, chart, look):
    svg = draw(chart, one_measure.answer, one_measure.distribution, one_measure.marks, look)
    root = parsed(svg)
    assert {one.tag.removeprefix(SVG) for one in root.iter()} <= ALLOWED
    assert root.get("role") == "img"
    ids = {one.get("id"): one for one in root.iter() if one.get("id")}
    title, description = (ids[one] for one in root.get("aria-labelledby").split())
    assert title.tag == f"{SVG}title"
    assert title.text
    assert description.tag == f"{SVG}desc"
    assert len(description.text) > 40
    assert all("href" not in name and not name.startswith("on") for one in root.iter() for name in one.attrib)
    assert "url(" not in svg
    assert "<script" not in svg
    ground = root.find(f"{SVG}rect[@width='100%']")
    assert (ground is None) == (look.inside is not None)
    assert svg == draw(chart, one_measure.answer, one_measure.distribution, one_measure.marks, look)


@pytest.mark.parametrize("chart", CHARTS)
def test_nothing_is_drawn_outside(one_measure, chart):
    root = parsed(draw(chart, one_measure.answer, one_measure.distribution, one_measure.marks))
    wide, high = float(root.get("width")), float(root.get("height"))
    for one in root.iter(f"{SVG}text"):
        assert 0.0 <= float(one.get("x")) <= wide
        assert 0.0 < float(one.get("y")) <= high


def test_measures_are_marked_with_the_rounded_figures_of_the_answer(two_measures):
    totals = {one.measure: one.total for one in two_measures.answer.allocations}
    risk, shortfall = totals["value_at_risk 0.95"], totals["expected_shortfall 0.9"]
    for chart in ("distribution", "exceedance"):
        svg = draw(chart, two_measures.answer, two_measures.distribution, two_measures.marks)
        shown = " | ".join(texts(svg))
        assert f"value at risk 95 %: {risk.value:,.0f}" in shown
        assert f"expected shortfall 90 %: {shortfall.value:,.0f}" in shown
        description = parsed(svg).find(f"{SVG}desc").text
        assert f"interval {risk.interval.lower:,.0f} to {risk.interval.upper:,.0f}" in description
        assert "right in 95 of 100 repetitions" in shown
        assert "loss, in EUR" in shown


def test_marks_stand_where_the_scale_says(two_measures):
    svg = draw("exceedance", two_measures.answer, two_measures.distribution, two_measures.marks)
    dots = [float(one.get("cx")) for one in parsed(svg).iter(f"{SVG}circle") if one.get("r") == "4"]
    wide = dots[1] - dots[0]
    by_loss = two_measures.marks[1].at - two_measures.marks[0].at
    assert np.sign(wide) == np.sign(by_loss)
    assert len(dots) == 2


def test_an_excess_over_the_mean_is_drawn_from_the_mean():
    above = ({"kind": "value_at_risk", "level": 0.9, "above": "mean"}, {"kind": "standard_deviation"})
    found = asked(storms(), measures=above)
    mean = found.answer.expected_loss.value
    for mark, result in zip(found.marks, found.answer.allocations, strict=True):
        assert mark.value == result.total.value
        assert mark.at == pytest.approx(result.total.value + mean, rel=1e-15)
        amounts = Amounts.of([mark.value], None)
        figure = f": {amounts.text(mark.value)} above mean"
        assert mark.words(amounts).endswith(f"{figure}, at {amounts.text(mark.at)}")
        assert mark.words(amounts).count("mean") == 1
        name, figure = brief(mark.name), f": mean + {amounts.text(mark.value)}"
        whole = f"{name}{figure} = {amounts.text(mark.at)}"
        assert name != mark.name
        assert mark.short(amounts, width(whole, 12.0), 12.0) == whole
        assert mark.short(amounts, width(whole, 12.0) - 1.0, 12.0) == f"{name}{figure}"
        assert mark.short(amounts, width(figure, 12.0) + 20.0, 12.0).endswith(f"…{figure}") or len(name) < 4
    assert found.marks[0].at == pytest.approx(np.sort(storms().sum(axis=1))[1799], rel=1e-12)


def test_exceedance_has_return_periods(one_measure):
    shown = texts(draw("exceedance", one_measure.answer, one_measure.distribution, one_measure.marks))
    assert "return period in years" in shown
    assert {"10", "100", "1,000", "10 %", "1 %", "0.1 %"} <= set(shown)


def test_contributions_are_sorted_with_interval_stand_alone_figure_and_share(one_measure):
    result = one_measure.answer.allocations[0]
    svg = contributions_chart(result, one_measure.answer.labels)
    order = sorted(result.sub_portfolios, key=lambda one: -one.contribution.value)
    assert order[-1].contribution.value < 0.0
    shown = texts(svg)
    amounts = [shown.index(f"{one.contribution.value:,.1f}") for one in order]
    assert amounts == sorted(amounts)
    assert all(f"{100 * one.share:z.1f} %" in shown for one in order)
    description = parsed(svg).find(f"{SVG}desc").text
    for one in order:
        ends = one.contribution.interval
        assert f"({ends.lower:z,.1f} to {ends.upper:z,.1f}), alone {one.stand_alone.value:z,.1f}" in description
    places = [description.index(one.id) for one in order]
    assert places == sorted(places)


def test_a_picture_of_contributions_has_one_unit_and_room_for_its_figures():
    found = asked(storms() * 1e4, measures=MEASURES[1:], currency="EUR")
    svg = contributions_chart(found.answer.allocations[0], found.answer.labels)
    shown = " | ".join(texts(svg))
    assert f"total {found.answer.allocations[0].total.value / 1e6:,.3f} million EUR" in shown
    assert "amount, in million EUR" in shown
    plain = contributions_chart(found.answer.allocations[0], found.answer.labels, Look(power=0))
    assert "million" not in plain
    large = asked(storms() * 1e6, measures=MEASURES[1:], currency="EUR thousand")
    svg = contributions_chart(large.answer.allocations[0], large.answer.labels, Look(width=NARROW))
    widest = max(one.contribution.value for one in large.answer.allocations[0].sub_portfolios)
    axis = max(float(one.get("x")) for one in parsed(svg).iter(f"{SVG}text") if one.get("text-anchor") == "middle")
    assert axis < NARROW - 16 - width(f"{widest:,.0f}", 12.0)


def test_names_are_escaped_and_shown_in_full_in_a_title(one_measure):
    svg = contributions_chart(one_measure.answer.allocations[0], one_measure.answer.labels, Look(width=NARROW))
    assert "<script>" not in svg
    titles = [one.text for one in parsed(svg).iter(f"{SVG}title")]
    assert ODD[0] in titles
    assert any("layer" in one and "…" in one for one in texts(svg))
    assert any(ODD[2] in one for one in texts(svg))


def test_sixty_rows_fit_and_more_are_summed_up():
    found = asked(storms(parts=75), measures=MEASURES[1:])
    result = found.answer.allocations[0]
    svg = contributions_chart(result, found.answer.labels)
    shown = texts(svg)
    assert "16 others" in shown
    by_size = sorted(result.sub_portfolios, key=lambda one: -abs(one.contribution.value))
    rest = sum(one.contribution.value for one in by_size[59:])
    assert f"16 others {rest:,.0f}" in parsed(svg).find(f"{SVG}desc").text
    rows = sorted({float(one.get("y")) for one in parsed(svg).iter(f"{SVG}text")})
    assert min(np.diff(rows[5:-3])) > 12.0  # no row is written over another


def test_groups_are_drawn_like_sub_portfolios():
    attributes = [{"line": "hull"}, {"line": "cargo"}, {"line": "hull"}, {}]
    found = asked(storms(), attributes=attributes, group_by=["line"], measures=MEASURES[1:])
    result = found.answer.allocations[0]
    svg = contributions_chart(result, found.answer.labels, attribute="line")
    assert {"hull", "cargo", "(none)"} <= set(texts(svg))
    assert f"{result.groups[0].contribution.value:,.1f}" in texts(svg)


EDGES = {
    "one sub-portfolio": storms(parts=2)[:, :1],
    "ties": np.random.default_rng(2).integers(0, 4, (500, 3)) * 1.0,
    "gains": -storms() * 1e-9,
    "wide": np.abs(storms()) * 1e12,
    "heavy": np.random.default_rng(4).pareto(1.05, (3000, 2)) * 1e5,
    "two scenarios": np.array([[1.0, 2.0], [3.0, 5.0]]),
}


@pytest.mark.parametrize("name", EDGES)
@pytest.mark.parametrize("width", [760, NARROW])
def test_odd_losses_make_pictures_all_the_same(name, width):
    found = asked(EDGES[name], measures=MEASURES[:1], scenarios_are="population")
    for chart in CHARTS:
        svg = draw(chart, found.answer, found.distribution, found.marks, Look(width=width))
        parsed(svg)
        assert "nan" not in svg
        assert "inf" not in svg.replace("interval", "")


def test_losses_that_never_vary_make_pictures():
    found = asked(np.full((20, 2), 7.0), measures=MEASURES[:1], scenarios_are="population")
    assert "14" in " ".join(texts(draw("distribution", found.answer, found.distribution, found.marks)))
    parsed(draw("exceedance", found.answer, found.distribution, found.marks))


def test_contributions_need_one_allocation(two_measures):
    with pytest.raises(InvalidValue, match="one measure and one rule, not of 2"):
        draw("contributions", two_measures.answer, two_measures.distribution, two_measures.marks)
    measures = asked(storms(), calculation="measures")
    with pytest.raises(InvalidValue, match="not of measures"):
        draw("contributions", measures.answer, measures.distribution, measures.marks)
    parsed(draw("distribution", measures.answer, measures.distribution, measures.marks))


def test_an_interval_that_leaves_the_picture_has_no_tick_there(two_measures):
    mark = two_measures.marks[0]
    inside = Scale(mark.lower - 1.0, mark.upper + 1.0, 60.0, 700.0)
    outside = Scale(mark.at - 1e-3, mark.upper + 1.0, 60.0, 700.0)
    drawn = []
    canvas = SimpleNamespace(line=lambda *place, **_: drawn.append(place), text=lambda *_, **__: None)
    counts = []
    for scale in (inside, outside):
        drawn.clear()
        Flags([mark], scale, Amounts.of([1e3], None), Look()).draw(canvas, 0.0, lambda _: 100.0)
        counts.append(len(drawn))
    assert counts == [5, 4]


def test_many_marks_are_cut_and_said_to_be():
    levels = [{"kind": "value_at_risk", "level": 0.5 + 0.03 * number} for number in range(15)]
    found = asked(storms(), measures=levels)
    shown = " ".join(texts(draw("exceedance", found.answer, found.distribution, found.marks)))
    assert "The first 12 of 15 measures are marked." in shown


def test_labels_do_not_cover_each_other():
    levels = [{"kind": "value_at_risk", "level": level} for level in (0.5, 0.6, 0.9, 0.95, 0.97, 0.98, 0.99, 0.995)]
    found = asked(storms(), measures=levels)
    scale = Scale(found.distribution.lowest, found.distribution.highest, 60.0, 700.0)
    labels = Flags(found.marks, scale, Amounts.of([1e3], "EUR"), Look()).placed()
    assert len(labels) == len(levels)
    for one in labels:
        for other in labels:
            if one is not other and one.row == other.row:
                assert one.taken[1] <= other.taken[0] or other.taken[1] <= one.taken[0]


def test_marks_need_the_measures_as_asked():
    figure = SimpleNamespace(value=5.0, interval=None)
    results = [SimpleNamespace(measure="m", total=figure), SimpleNamespace(measure="m", total=figure)]
    measure = SimpleNamespace(name="m", kind="wang", above="zero", parameters={})
    (mark,) = marks_of([measure], results, SimpleNamespace(value=1.0, interval=None))
    assert (mark.at, mark.lower) == (5.0, None)


def test_ticks_are_round():
    assert round_ticks(0.0, 9.0, 4) == [0.0, 5.0]
    assert round_ticks(-3.0, 3.0, 6) == [-3.0, -2.0, -1.0, 0.0, 1.0, 2.0, 3.0]
    assert log_ticks(1e-4, 1.0, 8) == pytest.approx([1e-4, 1e-3, 1e-2, 1e-1, 1.0])
    assert log_ticks(0.3, 1.0, 8) == pytest.approx([0.5, 1.0])


def pixels(data):
    """Return the pixels of an 8-bit RGBA PNG, shape (rows, columns, 4)."""
    stream, chunks, size = io.BytesIO(data[8:]), b"", (0, 0)
    while head := stream.read(8):
        length, kind = int.from_bytes(head[:4], "big"), head[4:]
        body = stream.read(length)
        stream.read(4)
        if kind == b"IHDR":
            size = int.from_bytes(body[4:8], "big"), int.from_bytes(body[:4], "big")
            assert body[8:10] == b"\x08\x06"
        chunks += body if kind == b"IDAT" else b""
    raw = np.frombuffer(zlib.decompress(chunks), np.uint8).reshape(size[0], 1 + 4 * size[1])
    rows = np.zeros((size[0], 4 * size[1]), np.uint8)
    for number, (method, line) in enumerate(zip(raw[:, 0], raw[:, 1:], strict=True)):
        above = rows[number - 1] if number else np.zeros_like(line)
        rows[number] = unfiltered(int(method), line, above)
    return rows.reshape(*size, 4)


def unfiltered(method, line, above):
    if method == 0:
        return line
    if method == 2:
        return line + above
    out = line.astype(np.int64).copy()
    high = above.astype(np.int64)
    for i in range(out.size):
        left, corner = (out[i - 4], high[i - 4]) if i >= 4 else (0, 0)
        if method == 1:
            guess = left
        elif method == 3:
            guess = (left + high[i]) // 2
        else:
            near = left + high[i] - corner
            a, b, c = abs(near - left), abs(near - high[i]), abs(near - corner)
            guess = left if a <= b and a <= c else high[i] if b <= c else corner
        out[i] = (out[i] + guess) % 256
    return out.astype(np.uint8)


def test_a_png_has_its_text_drawn(one_measure):
    pytest.importorskip("resvg_py")
    svg = contributions_chart(one_measure.answer.allocations[0], one_measure.answer.labels)
    drawn = pixels(png(svg, zoom=1.0))
    height, width = drawn.shape[:2]
    root = parsed(svg)
    assert (width, height) == (int(root.get("width")), round(float(root.get("height"))))
    title = drawn[8:30, 14:250, :3]  # the heading stands there and nothing else
    assert np.count_nonzero(title.max(axis=2) < 100) > 150
    assert (drawn[2, 2] == 255).all()
    assert png(svg) == png(svg)


def test_the_font_is_shipped_with_its_licence():
    from importlib.resources import files

    folder = files("service.representations") / "fonts"
    assert len((folder / "LiberationSans-Regular.ttf").read_bytes()) < 500_000
    assert "SIL OPEN FONT LICENSE" in (folder / "OFL.txt").read_text()


def test_without_its_package_png_says_what_to_install(one_measure, monkeypatch):
    import sys

    monkeypatch.setitem(sys.modules, "resvg_py", None)
    with pytest.raises(NotAcceptable, match="extra `png`"):
        png("<svg/>")


def test_a_distribution_may_be_weighted(one_measure):
    totals = storms().sum(axis=1)
    weights = np.random.default_rng(1).dirichlet(np.ones(totals.size))
    found = distribution_of(totals, weights, shown=[one.at for one in one_measure.marks])
    parsed(draw("distribution", one_measure.answer, found, one_measure.marks))
    plain = SimpleNamespace(currency=None, horizon=None)
    assert "loss" in texts(exceedance_chart(found, one_measure.marks, plain))


def test_a_mark_keeps_its_name_where_the_other_side_has_room():
    scale = Scale(0.0, 40.0, 54.0, 300.0)
    mark = Mark(name="value at risk 99.5 %", value=22_843_948.0, at=27.0)
    (label,) = Flags([mark], scale, Amounts.of([mark.value], "EUR thousand"), Look(width=NARROW)).placed()
    assert label.side == "end"
    assert label.words.startswith("V")
