"""What a measure needs of the law of the losses, when a simulation stops, and what it may take."""

import math

import pytest

from service.errors import CallerError, LimitExceeded, NotDefined
from service.executors import Work
from tests.asking import answered, compound, equal, es, factor_model, law, linear, step, var

SD = {"kind": "standard_deviation"}
MEAN = {"kind": "range_value_at_risk", "lower_level": 0.0, "upper_level": 1.0}


def one_loss(marginal, *, cover=(), sign="loss", scenarios=20_000, **more):
    book = {"a": {"components": [linear(x=1.0)], "cover": list(cover), "sign": sign}}
    return factor_model({"x": marginal}, book, scenarios=scenarios, **more)


def measured(losses, *measures, calculation="measures", work=None, **more):
    settings = {name: more.pop(name) for name in ("max_memory_bytes", "max_scenarios") if name in more}
    request = {"losses": losses, "measures": list(measures), **more}
    return answered(calculation, request, work=work, **settings)


PARETO = law("pareto", shape=0.8, scale=1.0)
T2 = law("student_t", df=2.0, location=0.0, scale=1.0)
LOMAX = law("lomax", shape=1.5, scale=1.0)
EXPONENTIAL = law("exponential", mean=1.0)
LOGNORMAL = law("lognormal", mu=0.0, sigma=1.0)

REFUSED = [
    pytest.param(one_loss(PARETO), var(0.99), "/losses/sub_portfolios/0", "has no mean", id="pareto 0.8"),
    pytest.param(one_loss(PARETO, sign="profit"), var(0.99), "/losses/sub_portfolios/0", "has no mean", id="gains"),
    pytest.param(one_loss(T2), SD, "/measures/0", "tail index is 2 and must be above 2", id="sd of t2"),
    pytest.param(one_loss(LOMAX), {"kind": "proportional_hazard", "exponent": 0.5}, "/measures/0", "above 2", id="ph"),
    pytest.param(one_loss(LOGNORMAL), {"kind": "entropic", "aversion": 0.1}, "/measures/0", "exp", id="lognormal"),
    pytest.param(
        one_loss(EXPONENTIAL), {"kind": "entropic", "aversion": 1.0}, "/measures/0", "below 1", id="too averse"
    ),
]


@pytest.mark.parametrize(("losses", "measure", "pointer", "words"), REFUSED)
def test_figures_that_do_not_exist(losses, measure, pointer, words):
    for stand_alone in (True, False):
        with pytest.raises(NotDefined, match=words) as caught:
            measured(losses, measure, include_stand_alone=stand_alone)
        assert caught.value.faults[0].pointer == pointer


def test_what_exists_is_answered():
    layer = step("layer", attachment=1.0, limit=9.0)
    limited = measured(one_loss(PARETO, cover=[layer]), es(0.99), SD).measures
    assert 0.0 < limited[0].total.value <= 9.0
    assert limited[1].total.standard_error is not None
    # of Pareto(0.8) above 1 up to 10: E = (10^0.2 - 1)/0.2
    mean = measured(one_loss(PARETO, cover=[layer], scenarios=100_000), MEAN).measures[0].total
    assert abs(mean.value - (10.0**0.2 - 1.0) / 0.2) < 4.0 * mean.standard_error
    assert measured(one_loss(EXPONENTIAL), {"kind": "entropic", "aversion": 0.3}).measures[0].total.value > 1.0
    assert measured(one_loss(T2), es(0.99)).measures[0].total.value > 0.0


def test_a_bounded_part_does_not_save_the_total():
    """The measure of the total does not exist, although that of one sub-portfolio does."""
    book = {"a": {"components": [linear(x=1.0)], "cover": [step("cap", amount=5.0)]}, "b": linear(x=1.0)}
    losses = factor_model({"x": T2}, book)
    with pytest.raises(NotDefined, match="of the total"):
        measured(losses, SD)


@pytest.mark.parametrize(
    ("marginal", "measure"), [(T2, es(0.99)), (LOMAX, MEAN), (law("lomax", shape=3.0, scale=1.0), SD)]
)
def test_no_error_where_the_law_has_no_second_moment(marginal, measure):
    answer = measured(one_loss(marginal), measure)
    for figure in (answer.measures[0].total, answer.measures[0].stand_alone[0].figure):
        assert figure.standard_error is None
        assert figure.interval is None
    assert "infinite_variance" in {note.code for note in answer.notes}
    # a quantile needs no moment
    assert measured(one_loss(marginal), var(0.99)).measures[0].total.standard_error is not None


def test_contributions_have_no_error_where_their_own_law_has_no_second_moment():
    losses = factor_model({"x": T2, "y": EXPONENTIAL}, {"a": linear(x=1.0), "b": linear(y=1.0)}, scenarios=20_000)
    answer = measured(losses, es(0.99), calculation="allocations")
    assert answer.expected_loss.standard_error is None
    assert answer.allocations[0].total.standard_error is None
    assert all(row.contribution.standard_error is None for row in answer.allocations[0].sub_portfolios)
    assert [row.stand_alone.standard_error is None for row in answer.allocations[0].sub_portfolios] == [True, False]


TARGET = {"relative_standard_error": 0.02, "max_scenarios": 4_000_000}


def test_a_simulation_stops_after_two_looks_in_a_row():
    answer = measured(one_loss(EXPONENTIAL, stop_when=TARGET), es(0.99))
    assert answer.scenarios == 2 * 102_400  # looked at 1,000 tail scenarios, in whole blocks, and once more
    [note] = [note for note in answer.notes if note.code == "stopped"]
    assert note.pointer == "/losses/simulation/stop_when"
    assert "not corrected for stopping" in note.detail
    total = answer.measures[0].total
    assert total.standard_error / total.value <= 0.02
    # and the figures are those of the same number of scenarios asked for at once
    assert measured(one_loss(EXPONENTIAL, scenarios=answer.scenarios), es(0.99)).measures == answer.measures


def test_a_simulation_stops_at_the_most_scenarios():
    hard = TARGET | {"relative_standard_error": 1e-5, "max_scenarios": 150_000}
    answer = measured(one_loss(EXPONENTIAL, stop_when=hard), es(0.9))
    assert answer.scenarios == 150_000
    assert "most scenarios allowed" in next(note.detail for note in answer.notes if note.code == "stopped")


@pytest.mark.parametrize("method", ["random", "sobol"])
def test_stopping_works_with_streams_and_sobol_points(method):
    easy = TARGET | {"relative_standard_error": 0.05, "max_scenarios": 400_000}
    memory = 1 << 20 if method == "random" else 1 << 28
    answer = measured(one_loss(EXPONENTIAL, stop_when=easy, method=method), es(0.95), max_memory_bytes=memory)
    assert answer.scenarios == 2 * 65_536


@pytest.mark.parametrize(("most", "taken"), [(70_001, 65_536), (131_072, 131_072), (262_143, 131_072), (16, 16)])
def test_sobol_points_never_go_beyond_the_most_scenarios(most, taken):
    """Points come as eight times a power of two (`Plan.quasi_random`): the largest of them that is allowed."""
    hard = {"relative_standard_error": 1e-9, "max_scenarios": most}
    answer = measured(one_loss(EXPONENTIAL, stop_when=hard, method="sobol"), es(0.985), max_scenarios=most)
    assert answer.scenarios == answer.provenance.scenarios == taken
    assert "sobol_points" not in {note.code for note in answer.notes}
    [note] = [note for note in answer.notes if note.code == "stopped"]
    fitted = f"{taken:,} Sobol points, as many as fit into the {most:,} scenarios allowed"
    where = f"the most scenarios allowed, {most:,}" if taken == most else fitted
    assert note.detail.startswith(f"stopped at {where}: ")


def test_the_last_look_at_sobol_points_is_not_taken_twice():
    """The first look, at 1,000 tail scenarios, is at all points that are allowed: its error is small enough once."""
    easy = {"relative_standard_error": 0.5, "max_scenarios": 131_072}
    answer = measured(one_loss(EXPONENTIAL, stop_when=easy, method="sobol"), es(0.99))
    assert answer.scenarios == 131_072
    assert "most scenarios allowed" in next(note.detail for note in answer.notes if note.code == "stopped")


LARGE = one_loss(EXPONENTIAL, scenarios=100_000)


@pytest.mark.parametrize(
    ("request_", "method"),
    [
        ({"measures": [SD]}, "random"),
        ({"measures": [es(0.99, above="mean")]}, "random"),
        ({"measures": [es(0.99)], "rules": ["covariance"]}, "random"),
        ({"measures": [es(0.99)], "capital_measure": SD}, "random"),
        ({"measures": [es(0.99)]}, "sobol"),
    ],
)
def test_what_does_not_fit_and_cannot_stream_is_refused(request_, method):
    losses = LARGE | {"simulation": LARGE["simulation"] | {"method": method}}
    with pytest.raises(LimitExceeded, match="their tails") as caught:
        answered("allocations", {"losses": losses, **request_}, max_memory_bytes=1 << 20)
    limit = caught.value.limit
    assert (limit.name, limit.allowed) == ("max_memory_bytes", 1 << 20)
    assert limit.asked > limit.allowed
    assert caught.value.faults[0].pointer == "/losses/simulation/scenarios"


def test_faults_found_in_the_simulation_point_into_the_request():
    grid = {"kind": "revaluation_grid", "factor": "x", "points": [0.0, 1.0], "losses": [0.0, 5.0], "beyond": "refuse"}
    losses = factor_model({"x": EXPONENTIAL}, {"a": linear(x=1.0), "g": grid}, scenarios=20_000)
    for memory in (1 << 30, 1 << 20):
        with pytest.raises(NotDefined, match="outside the points") as caught:
            measured(losses, es(0.9), max_memory_bytes=memory)
        assert caught.value.faults[0].pointer == "/losses/sub_portfolios/1/components/0/points"


@pytest.mark.parametrize("memory", [1 << 30, 1 << 20], ids=["held", "streamed"])
def test_sums_too_large_to_be_squared_are_refused(memory):
    losses = factor_model({"x": EXPONENTIAL}, {"a": linear(x=1e151)}, scenarios=150_000)
    with pytest.raises(CallerError, match="overflows") as caught:
        measured(losses, var(0.9), max_memory_bytes=memory)
    assert caught.value.faults[0].pointer == "/losses"


class Stop(Exception):
    pass


@pytest.mark.parametrize("memory", [1 << 30, 1 << 20], ids=["held", "streamed"])
def test_long_draws_stop_inside_a_block(memory):
    """A single block of this book would draw 4e9 claims."""
    asked = 0

    def checkpoint(_fraction=0.0, /):
        nonlocal asked
        asked += 1
        if asked > 20:
            raise Stop

    losses = factor_model({}, {"a": compound(law("poisson", mean=1e6), EXPONENTIAL)}, scenarios=100_000)
    with pytest.raises(Stop):
        measured(losses, es(0.99), work=Work(2, checkpoint), max_memory_bytes=memory)
    assert math.isclose(asked, 20, abs_tol=5)


def test_exact_dependence_is_judged_by_its_worst_case():
    """Exponential losses of mean 1 under a normal copula: E exp(tL) of the sum exists below 1/(1 + ρ)."""
    losses = factor_model(
        {"x": EXPONENTIAL, "y": EXPONENTIAL},
        {"a": linear(x=1.0), "b": linear(y=1.0)},
        dependence=law("gaussian", correlation=equal(0.5)),
        scenarios=20_000,
    )
    assert measured(losses, {"kind": "entropic", "aversion": 0.6}).measures[0].total.value > 2.0
    with pytest.raises(NotDefined, match=r"below 0\.666667"):
        measured(losses, {"kind": "entropic", "aversion": 0.7})


@pytest.mark.parametrize(("correlation", "aversion", "too_averse"), [(0.0, 0.8, 1.0), (0.5, 0.6, 0.7)])
def test_a_group_of_all_exists_where_the_total_does(correlation, aversion, too_averse):
    """Two exponential losses of mean 1: E exp(tL) of their sum exists below 1/(1 + ρ), so that of their group does."""
    book = {one: {"components": [linear(**{one: 1.0})], "attributes": {"g": "all"}} for one in "xy"}
    losses = factor_model(
        {"x": EXPONENTIAL, "y": EXPONENTIAL},
        book,
        dependence=law("gaussian", correlation=equal(correlation)) if correlation else None,
        scenarios=4096,
    )
    answer = measured(losses, {"kind": "entropic", "aversion": aversion}, group_by=["g"]).measures[0]
    assert [one.figure.value for one in answer.groups] == [answer.total.value]
    with pytest.raises(NotDefined, match=r"of the total does not exist"):
        measured(losses, {"kind": "entropic", "aversion": too_averse}, group_by=["g"])


EXPONENTIALS = {"x": EXPONENTIAL, "y": EXPONENTIAL}


@pytest.mark.parametrize(
    ("book", "dependence"),
    [
        ({"a": linear(x=1.0), "b": linear(y=1.0)}, law("gaussian", correlation=equal(-0.5))),
        ({"a": linear(x=1.0, y=1.0)}, law("gaussian", correlation=equal(-0.5))),
        ({"a": linear(x=0.9, y=-0.4), "b": linear(y=-0.4, x=0.9)}, law("comonotonic")),
    ],
)
def test_losses_that_do_not_grow_together_have_the_moment_of_one(book, dependence):
    """E exp(tL) exists below 1: of X + Y at ρ = -1/2 by quadrature (test_factors), of 1.8X - 0.8X since it is X."""
    losses = factor_model(EXPONENTIALS, book, dependence=dependence, scenarios=4096)
    assert measured(losses, {"kind": "entropic", "aversion": 0.8}).measures[0].total.value > 0.0
    with pytest.raises(NotDefined, match=r"does not exist: E\[exp\(t L\)\] is finite for t below 1 only"):
        measured(losses, {"kind": "entropic", "aversion": 1.0})


def test_a_bound_that_may_be_too_strict_is_not_said_to_be_the_last_word():
    """Under other copulas the bound is Hölder's inequality, which only perfect dependence needs."""
    dependence = law("student_t", correlation=equal(0.5), df=4.0)
    losses = factor_model(EXPONENTIALS, {"a": linear(x=1.0, y=1.0)}, dependence=dependence, scenarios=4096)
    words = r"entropic 0\.5 of the total may not exist: E\[exp\(t L\)\] is surely finite only for t below 0\.5"
    with pytest.raises(NotDefined, match=words):
        measured(losses, {"kind": "entropic", "aversion": 0.5})
    with pytest.raises(NotDefined, match=r"does not exist: E\[exp\(t L\)\] is infinite for every t above 0"):
        measured(one_loss(LOGNORMAL), {"kind": "entropic", "aversion": 0.1})
