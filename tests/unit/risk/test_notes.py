"""What an answer says about figures that cannot be sure, or cannot be: asked of a running service."""

import numpy as np
import pytest

from tests.serving import assert_problem, running

RNG = np.random.default_rng(12)


@pytest.fixture(scope="module")
def client():
    with running() as made:
        yield made


def _post(client, losses, measures, *, path="/v1/allocations", sub_portfolios=None, table=None, **more):
    names = sub_portfolios or [{"id": f"s{j}"} for j in range(losses.shape[1])]
    source = {"kind": "scenarios", "sub_portfolios": names, "values": losses.tolist(), **(table or {})}
    return client.post(path, json={"losses": source, "measures": measures, **more})


def _answer(*arguments, **options):
    response = _post(*arguments, **options)
    assert response.status_code == 200, response.text
    return response.json()


def _codes(answer):
    return {(note["code"], note["pointer"]) for note in answer["notes"]}


def _detail(answer, code):
    return next(note["detail"] for note in answer["notes"] if note["code"] == code)


def _errors(answer):
    one = answer["allocations"][0]
    figures = [one["total"], *(row["contribution"] for row in one["sub_portfolios"])]
    return [figure["standard_error"] for figure in figures]


THIN = RNG.normal(size=(1000, 2))


@pytest.mark.parametrize(
    ("level", "code"), [(0.9901, "no_error"), (0.99, "thin_tail"), (0.9001, "thin_tail"), (0.9, None)]
)
def test_thin_tails(client, level, code):
    answer = _answer(client, THIN, [{"kind": "expected_shortfall", "level": level}])
    assert _codes(answer) == ({(code, "/measures/0")} if code else set())
    assert all((error is None) == (code == "no_error") for error in _errors(answer))
    total = answer["allocations"][0]["total"]
    assert (total["interval"] is None) == (code == "no_error")
    assert total["tail_scenarios"] == pytest.approx(1000.0 * (1.0 - level))
    if code:
        (note,) = answer["notes"]
        assert "scenarios in all would do" in note["detail"]
        wanted = int(note["detail"].split("; ")[1].split(" ")[0].replace(",", ""))
        assert wanted == pytest.approx(100.0 / (1.0 - level), abs=1.0)


def test_a_quantile_without_a_finite_rank(client):
    answer = _answer(
        client, THIN, [{"kind": "value_at_risk", "level": 0.9975}, {"kind": "value_at_risk", "level": 0.99}]
    )
    without, with_ = (one["total"] for one in answer["allocations"])
    assert (without["standard_error"], without["interval"]) == (None, None)
    assert with_["standard_error"] > 0.0
    assert with_["interval"]["method"] == "order_statistics"
    assert with_["interval"]["lower"] < with_["value"] < with_["interval"]["upper"]
    assert ("no_error", "/measures/0") in _codes(answer)


@pytest.mark.parametrize("coverage", [0.999999999, 1.0 - 1e-15, 1e-300])
def test_coverages_at_the_ends(client, coverage):
    """An interval that would need more of the tail than is kept is null, and no failure."""
    losses = np.random.default_rng(2).normal(size=(5000, 2))
    measures = [{"kind": "value_at_risk", "level": 0.9}, {"kind": "expected_shortfall", "level": 0.9}]
    answer = _answer(client, losses, measures, interval_coverage=coverage)
    for one in answer["allocations"]:
        interval = one["total"]["interval"]
        assert interval is None or interval["lower"] <= one["total"]["value"] <= interval["upper"]


def test_smoothed_contributions_name_their_window(client):
    answer = _answer(client, THIN, [{"kind": "value_at_risk", "level": 0.9}])
    (one,) = answer["allocations"]
    assert ("smoothed_quantile", "/measures/0") in _codes(answer)
    assert one["window"]["lower"] < one["total"]["value"] < one["window"]["upper"]
    assert one["window"]["scenarios"] == pytest.approx(180, abs=3)  # 90 % of the tail of 100 on each side
    plain = _answer(client, THIN, [{"kind": "value_at_risk", "level": 0.9}], smoothing="none")
    assert plain["allocations"][0]["window"] is None
    assert "smoothed_quantile" not in {code for code, _ in _codes(plain)}
    totals = THIN.sum(axis=1)
    at = int(np.argsort(totals)[899])
    rows = plain["allocations"][0]["sub_portfolios"]
    assert [row["contribution"]["value"] for row in rows] == THIN[at].tolist()


def test_ten_scenarios_at_the_quantile_need_no_smoothing(client):
    losses = np.concatenate([THIN[:500], np.round(THIN[500:])])
    losses = np.round(losses)
    losses[:, 0] = np.round(losses.sum(axis=1)) - losses[:, 1]
    answer = _answer(client, losses, [{"kind": "value_at_risk", "level": 0.9}])
    assert answer["allocations"][0]["window"] is None
    totals = losses.sum(axis=1)
    at = totals == np.sort(totals)[899]
    assert at.sum() > 10
    rows = answer["allocations"][0]["sub_portfolios"]
    assert [row["contribution"]["value"] for row in rows] == pytest.approx(losses[at].mean(axis=0).tolist(), abs=1e-12)


def test_a_population_has_no_errors_and_one_note(client):
    rules = ["euler", "covariance", "proportional_stand_alone", "shapley"]
    measures = [{"kind": "expected_shortfall", "level": 0.9}, {"kind": "wang", "shift": 0.5}]
    answer = _answer(client, np.abs(THIN), measures, table={"scenarios_are": "population"}, rules=rules, capital=10.0)
    assert _codes(answer) == {("population", None)}
    for one in answer["allocations"]:
        for figure in (one["total"], *(row["contribution"] for row in one["sub_portfolios"])):
            assert (figure["standard_error"], figure["interval"], figure["tail_scenarios"]) == (None, None, None)
    assert answer["expected_loss"]["standard_error"] is None


def test_rules_say_what_they_are(client):
    answer = _answer(client, THIN, [{"kind": "expected_shortfall", "level": 0.8}], rules=["euler", "with_without"])
    euler, removed = answer["allocations"]
    assert ("does_not_add_up", "/measures/0") in _codes(answer)
    assert euler["residual"] is None
    summed = sum(row["contribution"]["value"] for row in removed["sub_portfolios"])
    assert removed["residual"] == pytest.approx(removed["total"]["value"] - summed)
    wide = np.random.default_rng(1).lognormal(size=(200, 13))
    drawn = _answer(client, wide, [{"kind": "expected_shortfall", "level": 0.5}], rules=["shapley"])
    assert ("sampled_shapley", "/measures/0") in _codes(drawn)
    again = _answer(client, wide, [{"kind": "expected_shortfall", "level": 0.5}], rules=["shapley"])
    assert again["allocations"] == drawn["allocations"]


def test_ratios_without_a_positive_denominator_are_null(client):
    gains = -np.abs(THIN) - 1.0
    names = [{"id": "a", "expected_profit": 5.0}, {"id": "b"}]
    answer = _answer(client, gains, [{"kind": "expected_shortfall", "level": 0.8}], sub_portfolios=names)
    (one,) = answer["allocations"]
    assert one["total"]["value"] < 0.0
    for row in one["sub_portfolios"]:
        assert (row["share"], row["diversification_benefit"], row["return_on_capital"]) == (None, None, None)
        assert row["expected_loss"] < 0.0
    assert one["return_on_capital"] is None
    assert {code for code, _ in _codes(answer)} == {"ratio_not_defined", "no_expected_profit"}
    ratio, profit = (_detail(answer, code) for code in ("ratio_not_defined", "no_expected_profit"))
    assert ratio.startswith("a ratio is null: the total to be shared is -")
    assert ratio.endswith("not positive; 4 more are null likewise")  # two shares, two benefits, one return
    assert profit == "1 sub-portfolio has no expected profit"
    answer = _answer(client, gains, [{"kind": "expected_shortfall", "level": 0.8}], path="/v1/measures")
    (one,) = answer["measures"]
    assert one["diversification_benefit"] is None
    summed = sum(part["figure"]["value"] for part in one["stand_alone"])
    assert one["diversification_amount"] == pytest.approx(summed - one["total"]["value"])
    assert ("ratio_not_defined", "/measures/0") in _codes(answer)


@pytest.mark.parametrize("path", ["/v1/allocations", "/v1/increments"])
def test_a_ratio_that_is_null_is_named(client, path):
    losses = np.stack([np.abs(THIN[:, 0]), np.zeros(1000)], axis=1)
    names = [{"id": "hull"}, {"id": "idle", "attributes": {"line": "none"}}]
    more = {"candidates": [{"id": "nothing", "values": [0.0] * 1000}]} if path == "/v1/increments" else {}
    measures = [{"kind": "expected_shortfall", "level": 0.8}]
    answer = _answer(client, losses, measures, sub_portfolios=names, path=path, **more)
    name = "nothing" if more else "idle"
    assert (
        _detail(answer, "ratio_not_defined") == f"a ratio is null: the stand-alone figure of {name} is 0, not positive"
    )


@pytest.mark.parametrize(
    ("measure", "beyond"),
    [
        ({"kind": "value_at_risk", "level": 0.995}, ": the figure is simply the worst loss"),
        (
            {"kind": "expected_shortfall", "level": 0.75, "above": "mean"},
            ": the figure is simply the worst loss less the mean",
        ),
        ({"kind": "return_level", "return_period": 4}, ": the figure is simply the worst loss"),
        ({"kind": "value_at_risk", "level": 0.001}, None),
        ({"kind": "expected_shortfall", "level": 0.6}, None),
    ],
)
def test_a_level_beyond_the_set_is_the_worst_loss(client, measure, beyond):
    answer = _answer(client, THIN[:3], [measure])
    detail = _detail(answer, "no_error")
    assert ("the level is beyond the set" in detail) == bool(beyond)
    if beyond:
        assert detail.endswith(beyond)
        worst = THIN[:3].sum(axis=1).max() - ("above" in measure) * THIN[:3].sum() / 3.0
        assert answer["allocations"][0]["total"]["value"] == pytest.approx(worst, rel=1e-12)


def test_one_scenario_carries_and_thousands_have_separators(client):
    answer = _answer(client, THIN[:100], [{"kind": "expected_shortfall", "level": 0.99}])
    assert ": 1 tail scenario carries expected_shortfall 0.99; 10,000 scenarios in all would do" in _detail(
        answer, "no_error"
    )


def test_capital_is_spread_in_the_ratio_of_the_contributions(client):
    names = [{"id": "a", "expected_profit": 5.0}, {"id": "b", "expected_profit": 1.0}]
    losses = np.abs(THIN)
    measures = [{"kind": "expected_shortfall", "level": 0.8}]
    other = {"kind": "expected_shortfall", "level": 0.9}
    answer = _answer(client, losses, measures, sub_portfolios=names, capital_measure=other)
    (one,) = answer["allocations"]
    figure = _answer(client, losses, [other])["allocations"][0]["total"]["value"]
    assert one["capital"] == pytest.approx(figure, rel=1e-14)
    total = one["total"]["value"]
    for row, profit in zip(one["sub_portfolios"], (5.0, 1.0), strict=True):
        assert row["share"] == pytest.approx(row["contribution"]["value"] / total)
        assert row["allocated_capital"] == pytest.approx(row["share"] * one["capital"])
        assert row["return_on_capital"] == pytest.approx(profit / row["allocated_capital"])
    assert one["return_on_capital"] == pytest.approx(6.0 / one["capital"])
    plain = _answer(client, losses, measures, sub_portfolios=names)["allocations"][0]
    assert plain["capital"] is None
    assert plain["sub_portfolios"][0]["allocated_capital"] is None
    assert plain["sub_portfolios"][0]["return_on_capital"] == pytest.approx(
        5.0 / plain["sub_portfolios"][0]["contribution"]["value"]
    )


@pytest.mark.parametrize(
    ("losses", "options", "code", "place"),
    [
        (np.ones((5, 2)), {"rules": ["covariance"]}, "not_defined", "/measures/0"),
        (np.full((40, 3), 0.1), {"rules": ["covariance"]}, "not_defined", "/measures/0"),
        (-np.ones((5, 2)), {"rules": ["proportional_stand_alone"]}, "not_defined", "/measures/0"),
        (np.full((5, 2), 1e150), {}, "not_defined", None),
    ],
)
def test_what_does_not_exist_is_refused(client, losses, options, code, place):
    response = _post(client, losses, [{"kind": "expected_shortfall", "level": 0.8}], **options)
    problem = assert_problem(response, code)
    if place:
        assert problem["errors"][0]["pointer"] == place


@pytest.mark.parametrize("rule", ["euler", "covariance"])
@pytest.mark.parametrize(
    "losses",
    [np.ones((5, 2)), np.full((40, 3), 0.1), np.stack([THIN[:, 0] * 1e6, 0.1 - THIN[:, 0] * 1e6], axis=1)],
    ids=["exact", "rounded", "hedged"],
)
def test_a_total_that_does_not_vary_has_no_parts_of_its_deviation(client, losses, rule):
    """Also where rounding alone varies: its covariances would be noise, enlarged to any size."""
    response = _post(client, losses, [{"kind": "standard_deviation"}], rules=[rule])
    problem = assert_problem(response, "not_defined", pointer="/measures/0")
    assert "does not vary" in problem["detail"]


BOOK = [{"id": "a", "attributes": {"line": "hull", "entity": "n/s"}}, {"id": "b", "attributes": {"line": "cargo"}}]


@pytest.mark.parametrize(
    ("group_by", "code", "pointer"),
    [
        (["line", "office"], "unknown_attribute", "/group_by/1"),
        (["line/office"], "unknown_attribute", "/group_by/0"),
        (["entity/line"], "ambiguous_group", "/group_by/0"),
    ],
)
def test_groups_that_cannot_be_made(client, group_by, code, pointer):
    measures = [{"kind": "expected_shortfall", "level": 0.8}]
    response = _post(client, THIN[:50], measures, sub_portfolios=BOOK, group_by=group_by)
    problem = assert_problem(response, "invalid_value")
    assert problem["errors"][0] | {"detail": ""} == {"code": code, "detail": "", "pointer": pointer}


def test_those_without_the_attribute_are_in_a_group_without_a_name(client):
    measures = [{"kind": "expected_shortfall", "level": 0.8}]
    answer = _answer(client, THIN[:50], measures, sub_portfolios=BOOK, group_by=["entity", "line"])
    rows = answer["allocations"][0]["groups"]
    assert [(row["attribute"], row["group"]) for row in rows] == [
        ("entity", "n/s"),
        ("entity", None),
        ("line", "hull"),
        ("line", "cargo"),
    ]


@pytest.mark.parametrize(
    ("probabilities", "code"),
    [
        ([0.5, 0.5], "wrong_count"),
        ([0.5, 0.25, 0.25 + 1e-8], "probabilities"),
        ([1.5, -0.25, -0.25], "out_of_range"),
        ([0.0, 0.0, 0.0], "probabilities"),
    ],
)
def test_probabilities_that_are_none(client, probabilities, code):
    table = {"probabilities": probabilities}
    response = _post(client, THIN[:3], [{"kind": "expected_shortfall", "level": 0.5}], table=table)
    problem = assert_problem(response, "invalid_value")
    assert problem["errors"][0]["code"] == code
    assert problem["errors"][0]["pointer"].startswith("/losses/probabilities")


def test_probabilities_are_divided_by_their_sum(client):
    measures = [{"kind": "expected_shortfall", "level": 0.5}]
    exact, near = (
        _answer(client, THIN[:3], measures, table={"probabilities": [0.2, 0.3, last]})["allocations"][0]["total"][
            "value"
        ]
        for last in (0.5, 0.5 + 5e-10)
    )
    assert near == pytest.approx(exact, rel=1e-8)


def test_scenarios_without_probability_do_not_count(client):
    """The largest loss has none: measures of the whole distribution must not begin with it."""
    losses, p = THIN[:50].copy(), np.full(50, 1.0 / 49.0)
    losses[3], p[3] = 1e9, 0.0
    measures = [
        {"kind": "entropic", "aversion": 1.0},
        {"kind": "expectile", "level": 0.9},
        {"kind": "wang", "shift": 1.0},
        {"kind": "expected_shortfall", "level": 0.9},
        {"kind": "value_at_risk", "level": 0.9},
    ]
    found = _answer(client, losses, measures, table={"probabilities": p.tolist()}, smoothing="none")
    without = _answer(client, np.delete(losses, 3, axis=0), measures, smoothing="none")
    for one, other in zip(found["allocations"], without["allocations"], strict=True):
        assert one["total"]["value"] == pytest.approx(other["total"]["value"], rel=1e-12)
        values = [[row["contribution"]["value"] for row in each["sub_portfolios"]] for each in (one, other)]
        assert values[0] == pytest.approx(values[1], rel=1e-9)


def test_a_level_that_may_be_meant_as_the_probability_of_the_tail(client):
    measures = [{"kind": "expected_shortfall", "level": level} for level in (0.01, 0.99)]
    answer = _answer(client, THIN, measures)
    notes = [note for note in answer["notes"] if note["code"] == "low_level"]
    assert [note["pointer"] for note in notes] == ["/measures/0"]
    assert "the worst 99 % of all losses" in notes[0]["detail"]
    assert "level 0.99 looks at the worst 1 %" in notes[0]["detail"]
