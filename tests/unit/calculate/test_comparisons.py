"""Two books compared: what changed adds up, and errors are paired where the scenarios are the same."""

import numpy as np
import pytest

from service.errors import CallerError, LimitExceeded
from service.executors import Work
from tests.asking import answered, equal, es, factor_model, law, linear, var

LAWS = {name: law("lognormal", mu=0.0, sigma=0.7) for name in "xyz"}
COPULA = law("gaussian", correlation=equal(0.4))
BEFORE = {"a": linear(x=1.0), "b": linear(y=2.0), "old": linear(z=0.5)}
AFTER = {"fresh": linear(z=1.0), "a": linear(x=1.2), "b": linear(y=2.0)}
MEASURES = [es(0.95), var(0.95), {"kind": "standard_deviation"}, {"kind": "wang", "shift": 0.5}, es(0.95, above="mean")]


def model(book, **more):
    return factor_model(LAWS, book, **({"dependence": COPULA, "scenarios": 20_000} | more))


def compared(before, after, measures=MEASURES, *, work=None, **more):
    request = {"before": before, "after": after, "measures": measures, **more}
    settings = {"max_scenarios": request.pop("max_scenarios")} if "max_scenarios" in request else {}
    return answered("comparisons", request, work=work, **settings)


@pytest.mark.parametrize("method", ["random", "sobol"])
def test_changes_add_up(method):
    answer = compared(model(BEFORE, method=method), model(AFTER, method=method))
    assert answer.same_scenarios
    for one in answer.comparisons:
        assert one.change.value == one.after.value - one.before.value
        assert [part.id for part in one.sub_portfolios] == ["fresh", "a", "b", "old"]
        assert [part.state for part in one.sub_portfolios] == ["new", "changed", "changed", "gone"]
        assert sum(part.change.value for part in one.sub_portfolios) == pytest.approx(one.change.value, abs=1e-10)
        assert sum(part.change for part in one.by_state) == pytest.approx(one.change.value, abs=1e-10)
        assert [(part.state, part.sub_portfolios) for part in one.by_state] == [("new", 1), ("gone", 1), ("changed", 2)]
        for part in one.sub_portfolios:
            assert part.change.value == pytest.approx((part.after or 0.0) - (part.before or 0.0), abs=1e-13)


def test_each_side_is_a_request_of_its_own():
    answer = compared(model(BEFORE), model(AFTER))
    for book, side, row in ((BEFORE, "before", 0), (AFTER, "after", 1)):
        request = {"losses": model(book), "measures": MEASURES, "include_stand_alone": False}
        alone = answered("allocations", request)
        assert getattr(answer, side).losses_digest == alone.provenance.losses_digest
        for one, result in zip(answer.comparisons, alone.allocations, strict=True):
            assert (one.before, one.after)[row] == result.total
            parts = {part.id: (part.before, part.after)[row] for part in one.sub_portfolios}
            for found in result.sub_portfolios:
                assert parts[found.id] == pytest.approx(found.contribution.value, rel=1e-12)


def test_the_same_book_has_not_changed():
    for one in compared(model(BEFORE), model(BEFORE)).comparisons:
        assert one.change.value == 0.0
        assert one.change.standard_error == 0.0
        assert all(part.change.value == 0.0 for part in one.sub_portfolios)


def test_paired_errors_are_those_of_the_difference():
    """Over 200 seeds, within 15 % (three times the error of a spread over 200)."""
    values, errors = [], []
    for seed in range(1, 201):
        books = (model(book, seed=seed, scenarios=4096) for book in (BEFORE, AFTER))
        [one] = compared(*books, [es(0.9)]).comparisons
        figures = [one.change, *(part.change for part in one.sub_portfolios)]
        values.append([figure.value for figure in figures])
        errors.append([figure.standard_error for figure in figures])
    np.testing.assert_allclose(np.mean(errors, axis=0), np.std(values, axis=0, ddof=1), rtol=0.15)


def test_other_seeds_are_independent_and_their_variances_add():
    answer = compared(model(BEFORE), model(AFTER, seed=2))
    assert not answer.same_scenarios
    for one in answer.comparisons[:3]:
        both = np.hypot(one.before.standard_error, one.after.standard_error)
        assert one.change.standard_error == pytest.approx(both, rel=0.1)  # that of a quantile is its interval's
    paired = compared(model(BEFORE), model(AFTER))
    for one, other in zip(answer.comparisons, paired.comparisons, strict=True):
        assert other.change.standard_error < 0.6 * one.change.standard_error


def test_the_caller_may_say_that_scenarios_are_not_the_same():
    answer = compared(model(BEFORE), model(AFTER), same_scenarios=False)
    assert not answer.same_scenarios


TABLE = np.random.Generator(np.random.Philox(4)).standard_normal((400, 2)).round(3)


def table(values=TABLE, **more):
    columns = [{"id": "a"}, {"id": "b"}]
    return {"kind": "scenarios", "sub_portfolios": columns, "values": values.tolist(), **more}


def test_labels_of_scenarios_make_pairs():
    ids = [f"s{number}" for number in range(400)]
    moved = table(1.1 * TABLE, scenario_ids=ids)
    assert compared(table(scenario_ids=ids), moved, [es(0.9)]).same_scenarios
    assert not compared(table(), table(1.1 * TABLE), [es(0.9)]).same_scenarios
    assert compared(table(), table(1.1 * TABLE), [es(0.9)], same_scenarios=True).same_scenarios


@pytest.mark.parametrize(
    ("before", "after", "more", "pointer"),
    [
        (table(), table(TABLE[:300]), {"same_scenarios": True}, "/same_scenarios"),
        (model(BEFORE), model(AFTER, method="sobol"), {}, "/after"),
        (table(scenarios_are="population"), table(), {}, "/after"),
        (
            model(BEFORE),
            factor_model(LAWS, {"a": linear(w=1.0)}),
            {},
            "/after/sub_portfolios/0/components/0/exposures/0/factor",
        ),
        (
            factor_model({"x": law("pareto", shape=0.8, scale=1.0)}, {"a": linear(x=1.0)}),
            table(),
            {},
            "/before/sub_portfolios/0",
        ),
    ],
)
def test_refused(before, after, more, pointer):
    with pytest.raises(CallerError) as caught:
        compared(before, after, [es(0.9)], **more)
    assert caught.value.faults[0].pointer == pointer


def test_limits_point_at_their_book():
    with pytest.raises(LimitExceeded) as caught:
        compared(model(BEFORE), model(AFTER, scenarios=30_000), [es(0.9)], max_scenarios=25_000)
    assert caught.value.faults[0].pointer == "/after/simulation/scenarios"


def test_threads_change_nothing():
    assert compared(model(BEFORE), model(AFTER), work=Work(3)) == compared(model(BEFORE), model(AFTER))


def labelled(**labels):
    return model(BEFORE) | labels


def test_nothing_is_converted():
    assert compared(labelled(currency="EUR"), labelled(currency="EUR")).labels.currency == "EUR"
    assert compared(labelled(currency="EUR"), model(BEFORE)).notes == []
    with pytest.raises(CallerError, match="before is in EUR, after in USD") as caught:
        compared(labelled(currency="EUR"), labelled(currency="USD"))
    assert caught.value.faults[0].pointer == "/after/currency"


def test_labels_that_make_a_change_hard_to_read_are_noted():
    june = labelled(horizon="1 year", valuation_date="2026-06-30")
    september = labelled(horizon="1 day", valuation_date="2026-09-30")
    assert [note.pointer for note in compared(june, september).notes] == ["/after/horizon"]
    notes = compared(september, june).notes
    assert [(note.code, note.pointer) for note in notes] == [
        ("labels_differ", "/after/horizon"),
        ("labels_differ", "/after/valuation_date"),
    ]
    assert "2026-09-30, later than" in notes[1].detail


def test_no_errors_that_the_laws_do_not_have():
    """A Pareto law of shape 1.5 has no variance, so neither its part nor the total has an error on either side."""
    laws = {"x": law("normal", mean=0.0, standard_deviation=1.0), "y": law("pareto", scale=1.0, shape=1.5)}

    def book(parts):
        return factor_model(laws, parts, dependence=law("independent"), scenarios=20_000)

    light, heavy = book({"a": linear(x=1.0)}), book({"a": linear(x=1.0), "b": linear(y=1.0)})
    for before, after in ((light, heavy), (heavy, light)):
        answer = compared(before, after, [es(0.99)])
        [one] = answer.comparisons
        assert one.change.standard_error is None
        assert all(part.change.standard_error is None for part in one.sub_portfolios)
        assert "infinite_variance" in {note.code for note in answer.notes}
    assert compared(light, light, [es(0.99)]).comparisons[0].change.standard_error == 0.0


def test_a_change_is_judged_by_the_thinner_book():
    few, many = ({"kind": "scenarios", "sub_portfolios": [{"id": "a"}], "values": rows} for rows in tables(300, 20_000))
    for before, after in ((few, many), (many, few)):
        answer = compared(before, after, [es(0.99)])
        [one] = answer.comparisons
        assert one.change.standard_error is None
        assert one.change.tail_scenarios == pytest.approx(3.0)
        assert [part.change.tail_scenarios for part in one.sub_portfolios] == pytest.approx([3.0])
        details = " ".join(note.detail for note in answer.notes if note.code == "no_error")
        assert "3 tail scenarios" in details
        assert "10,000 scenarios in all would do" in details
        assert "666,667" not in details


def tables(*sizes):
    rng = np.random.default_rng(1)
    return [rng.standard_normal((size, 1)).tolist() for size in sizes]


def test_samples_that_overlap_are_noted():
    def codes(before, after):
        answer = compared(before, after, [es(0.9)])
        assert not answer.same_scenarios
        return {note.code for note in answer.notes}

    assert "samples_overlap" in codes(model(BEFORE, scenarios=8192), model(BEFORE, scenarios=16_384))
    assert "samples_overlap" not in codes(model(BEFORE), model(BEFORE, seed=2))
    changes = np.random.default_rng(1).standard_normal((501, 3))
    parts = model(BEFORE)["sub_portfolios"]

    def observed(rows):
        return {"kind": "history", "factors": list("xyz"), "changes": rows.tolist(), "sub_portfolios": parts}

    assert "samples_overlap" in codes(observed(changes[:500]), observed(changes[1:]))
    assert "samples_overlap" not in codes(observed(changes[:250]), observed(changes[250:]))


def test_tables_that_share_scenarios_are_noted():
    """Also the same scenarios in another order, which count as others."""
    [rows] = tables(500)

    def table(order):
        return {
            "kind": "scenarios",
            "sub_portfolios": [{"id": "a"}],
            "values": [rows[k] for k in order],
            "scenario_ids": [f"s{k}" for k in order],
        }

    def codes(before, after):
        return {note.code for note in compared(table(before), table(after), [es(0.9)]).notes}

    assert "samples_overlap" in codes(range(400), range(1, 401))
    assert "samples_overlap" in codes(range(400), range(399, -1, -1))
    assert "samples_overlap" not in codes(range(400), range(400))
    assert "samples_overlap" not in codes(range(250), range(250, 500))


def test_dependent_scenarios_do_not_pair_with_independent_ones():
    changes = np.random.default_rng(1).standard_normal((100, 3))
    parts = model(BEFORE)["sub_portfolios"]
    scaling = {"periods": 5, "method": "overlapping"}
    observed = {"kind": "history", "factors": list("xyz"), "changes": changes.tolist(), "sub_portfolios": parts}
    losses = {"kind": "scenarios", "sub_portfolios": [{"id": "a"}], "values": tables(96)[0]}
    with pytest.raises(CallerError, match="as dependent on each other") as caught:
        compared({**observed, "horizon_scaling": scaling}, losses, [es(0.5)], same_scenarios=True)
    assert caught.value.faults[0].pointer == "/same_scenarios"
