"""Sources of losses: what is known of them before anything is simulated, and what is refused."""

import numpy as np
import pytest
from scipy import special

from service.errors import CallerError, InvalidValue, LimitExceeded
from tests.asking import answered, compound, equal, es, factor_model, law, linear, var

MARGINALS = {name: law("lognormal", mu=0.0, sigma=1.0) for name in "xy"}
BOOK = {"a": linear(x=1.0), "b": linear(y=2.0)}
COPULA = law("gaussian", correlation=equal(0.5))


def measured(losses, *measures, **more):
    settings = {name: more.pop(name) for name in ("max_scenarios", "max_memory_bytes") if name in more}
    return answered("measures", {"losses": losses, "measures": list(measures or (es(0.9),)), **more}, **settings)


def model(**more):
    return factor_model(MARGINALS, BOOK, **({"dependence": COPULA, "scenarios": 4096} | more))


def test_the_digest_covers_what_makes_the_losses_and_no_labels():
    def digest(losses):
        return measured(losses).provenance.losses_digest

    plain = digest(model())
    labelled = model() | {"currency": "EUR", "valuation_date": "2026-09-30", "horizon": "1 year"}
    labelled["sub_portfolios"] = [
        one | {"expected_profit": 3.0, "attributes": {"k": "v"}} for one in labelled["sub_portfolios"]
    ]
    assert digest(labelled) == plain
    assert digest(model(seed=2)) != plain
    assert digest(model(method="sobol")) != plain
    assert digest(model(dependence=law("gaussian", correlation=equal(0.4)))) != plain


def test_provenance_names_method_and_seed():
    provenance = measured(model(seed=9)).provenance
    assert (provenance.method, provenance.seed, provenance.scenarios) == ("simulated scenarios, random draws", 9, 4096)
    provenance = measured(model(method="sobol", scenarios=5000)).provenance
    assert (provenance.method, provenance.scenarios) == ("simulated scenarios, Sobol points in 8 scramblings", 8192)


def test_points_are_rounded_up_with_a_note():
    [note] = [one for one in measured(model(method="sobol", scenarios=5000)).notes if one.code == "sobol_points"]
    assert note.pointer == "/losses/simulation/scenarios"
    assert "8,192 points" in note.detail
    assert "sobol_points" not in {one.code for one in measured(model(method="sobol", scenarios=4096)).notes}


@pytest.mark.parametrize(
    "plan", [{"scenarios": 5000}, {"stop_when": {"relative_standard_error": 0.01, "max_scenarios": 5000}}]
)
def test_too_many_scenarios_are_refused_before_work(plan):
    with pytest.raises(LimitExceeded, match="5000 scenarios are more than the 4999") as caught:
        measured(model(**plan), max_scenarios=4999)
    assert caught.value.limit.name == "max_scenarios"
    assert caught.value.limit.setting == "TAILRACE_MAX_SCENARIOS"
    assert (caught.value.limit.allowed, caught.value.limit.asked) == (4999, 5000)
    assert caught.value.faults[0].pointer == "/losses/simulation/scenarios"


def test_the_points_that_are_taken_are_held_against_the_limit():
    """5,000 Sobol scenarios are 8,192 points, the next eight times a power of two."""
    with pytest.raises(LimitExceeded, match="8192 scenarios are more than the 8191") as caught:
        measured(model(method="sobol", scenarios=5000), max_scenarios=8191)
    assert (caught.value.limit.allowed, caught.value.limit.asked) == (8191, 8192)
    assert measured(model(method="sobol", scenarios=5000), max_scenarios=8192).scenarios == 8192


def test_scenarios_that_stop_when_leaves_unused_are_not_counted():
    stop = {"relative_standard_error": 0.01, "max_scenarios": 5000}
    assert measured(model(scenarios=100_000, stop_when=stop), max_scenarios=5000).scenarios == 5000


def test_fewer_points_than_there_can_be_are_no_most():
    """Eight scramblings of two points are the fewest."""
    stop = {"relative_standard_error": 0.01, "max_scenarios": 15}
    with pytest.raises(InvalidValue, match="at least 16 Sobol points") as caught:
        measured(model(method="sobol", stop_when=stop))
    assert caught.value.faults[0].pointer == "/losses/simulation/stop_when/max_scenarios"


def test_faults_point_into_the_losses():
    for losses, pointer in (
        (factor_model(MARGINALS, {"a": linear(z=1.0)}), "/losses/sub_portfolios/0/components/0/exposures/0/factor"),
        (model(dependence=law("gaussian", correlation=equal(-1.5))), "/losses/dependence/correlation/value"),
        (model() | {"factors": model()["factors"] * 2}, "/losses/factors/2/id"),
    ):
        with pytest.raises(CallerError) as caught:
            measured(losses)
        assert caught.value.faults[0].pointer == pointer


def test_a_repaired_correlation_is_noted():
    values = [[1.0, 0.9, -0.9], [0.9, 1.0, 0.9], [-0.9, 0.9, 1.0]]
    marginals = {name: law("normal", mean=0.0, standard_deviation=1.0) for name in "xyz"}
    book = {"a": linear(x=1.0, y=1.0, z=1.0)}
    refused = law("gaussian", correlation={"kind": "matrix", "values": values})
    with pytest.raises(InvalidValue, match="eigenvalue"):
        measured(factor_model(marginals, book, dependence=refused))
    repaired = law("gaussian", correlation={"kind": "matrix", "values": values, "repair": "nearest"})
    notes = measured(factor_model(marginals, book, dependence=repaired, scenarios=4096)).notes
    assert "/losses/dependence/correlation" in {note.pointer for note in notes}


def test_driven_sums_state_their_grid():
    book = {"a": compound(law("poisson", mean=2.0), law("exponential", mean=1.0), driver="x")}
    notes = measured(factor_model(MARGINALS, book, scenarios=4096)).notes
    assert ("driven_sum", "/losses/sub_portfolios/0/components/0") in {(note.code, note.pointer) for note in notes}


def test_factors_in_the_tail():
    """A single factor drives the total: its mean in the tail is the total's expected shortfall, in its own unit."""
    losses = factor_model(MARGINALS, {"a": linear(x=3.0)}, scenarios=50_000)
    answer = measured(losses, es(0.99), tail_detail=True)
    x, y = answer.tail.factors
    assert x.mean == pytest.approx(answer.measures[0].total.value / 3.0, rel=1e-9)
    assert x.normal_score == pytest.approx(
        float(np.exp(-0.5 * special.ndtri(0.99) ** 2) / np.sqrt(2 * np.pi) / 0.01), rel=0.02
    )
    assert abs(y.normal_score) < 4.0 / np.sqrt(500)
    assert [one.total for one in answer.tail.scenarios] == sorted(
        (one.total for one in answer.tail.scenarios), reverse=True
    )


CHANGES = np.random.Generator(np.random.Philox(3)).standard_normal((60, 2)).round(3)


def history(**more):
    columns = [{"id": "a", "components": [linear(x=1.0)]}, {"id": "b", "components": [linear(x=-1.0, y=2.0)]}]
    return {"kind": "history", "factors": ["x", "y"], "changes": CHANGES.tolist(), "sub_portfolios": columns, **more}


def test_observed_changes_are_the_scenarios():
    totals = 2.0 * CHANGES[:, 1]
    answer = measured(history(), var(0.9), es(0.9), tail_detail=True)
    assert answer.measures[0].total.value == pytest.approx(np.sort(totals)[53])
    assert answer.measures[1].total.value == pytest.approx(np.sort(totals)[-6:].mean())
    assert answer.scenarios == 60
    assert answer.provenance.seed is None
    assert answer.tail.factors[1].mean == pytest.approx(answer.measures[1].total.value / 2.0)
    worst = answer.tail.scenarios[0]
    assert worst.scenario_id == f"{np.argmax(totals)}"


def test_horizons_of_observed_changes_are_noted():
    for method, code in (("overlapping", "overlapping_periods"), ("square_root_of_time", "square_root_of_time")):
        answer = measured(history(horizon_scaling={"periods": 5, "method": method}))
        assert (code, "/losses/horizon_scaling") in {(note.code, note.pointer) for note in answer.notes}


def test_decay_makes_recent_periods_count_more():
    old, new = (measured(history(decay=decay), es(0.9)) for decay in (None, 0.9))
    assert old.provenance.losses_digest != new.provenance.losses_digest
    weights = 0.9 ** np.arange(59, -1, -1)
    assert new.expected_loss.value == pytest.approx(2.0 * CHANGES[:, 1] @ (weights / weights.sum()))


@pytest.mark.parametrize(
    ("more", "pointer"),
    [
        ({"changes": [[1.0, 2.0], [3.0]]}, "/losses/changes/1"),
        ({"factors": ["x"]}, "/losses/changes/0"),
        ({"changes": [[1.0, 2.0]]}, "/losses/changes"),
        ({"factors": ["x", "x"]}, "/losses/factors/1"),
        ({"horizon_scaling": {"periods": 60, "method": "overlapping"}}, "/losses/horizon_scaling/periods"),
    ],
)
def test_refused_histories(more, pointer):
    with pytest.raises(CallerError) as caught:
        measured(history(**more))
    assert caught.value.faults[0].pointer == pointer


HISTORY = {
    "kind": "history",
    "factors": ["x", "y"],
    "changes": [[0.1 * k, 0.2 * (k % 7)] for k in range(30)],
    "sub_portfolios": model()["sub_portfolios"],
}


@pytest.mark.parametrize("losses", [model(), HISTORY], ids=["factors", "history"])
def test_sub_portfolios_beyond_the_limit(losses):
    request = {"losses": losses, "measures": [es(0.9)]}
    assert answered("measures", request, max_sub_portfolios=2).scenarios
    with pytest.raises(LimitExceeded, match="2 sub-portfolios are more than the 1 allowed here") as caught:
        answered("measures", request, max_sub_portfolios=1)
    assert caught.value.faults[0].pointer == "/losses/sub_portfolios"


def test_changes_beyond_the_limit():
    many = HISTORY | {"sub_portfolios": [{**HISTORY["sub_portfolios"][0], "id": f"a{k}"} for k in range(3)]}
    for losses, cells, pointer in ((HISTORY, 60, "/losses"), (many, 90, "/losses/sub_portfolios")):
        request = {"losses": losses, "measures": [es(0.9)]}
        assert answered("measures", request, max_cells=cells).scenarios == 30
        with pytest.raises(LimitExceeded, match=f"{cells} cells are more than the {cells - 1} allowed") as caught:
            answered("measures", request, max_cells=cells - 1)
        assert caught.value.faults[0].pointer == pointer
