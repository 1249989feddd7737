"""What all copulas and all forms of correlation have in common."""

import json
import warnings

import numpy as np
import pytest
from pydantic import TypeAdapter

from service.errors import CallerError
from service.risk import copulas, correlation
from service.risk.copulas import (
    ClaytonCopula,
    FrankCopula,
    GumbelCopula,
    JoeCopula,
    NestedCopula,
    NestedGroup,
    SurvivalClaytonCopula,
)
from service.risk.scores import UniformScores, normal_scores
from service.risk.streams import RandomDraw, Scratch, SobolSequence, stream
from service.validation import refusal

IDS = ("a", "b", "c")
FAMILIES = [(copulas.Copula, copulas.TYPICAL), (correlation.Correlation, correlation.TYPICAL)]
MEMBERS = [
    pytest.param(union, one, id=f"{union.__name__}-{type(one).__name__}")
    for union, members in FAMILIES
    for one in members
]
COPULAS = [pytest.param(one, id=one.family) for one in copulas.TYPICAL]

EXTREMES = [
    *(ClaytonCopula(family="clayton", theta=theta) for theta in (1e-300, 1e-8, 1e3, 1e6)),
    *(SurvivalClaytonCopula(family="survival_clayton", theta=theta) for theta in (1e-8, 1e3)),
    *(GumbelCopula(family="gumbel", theta=theta) for theta in (1.0, 1.0 + 1e-8, 1e3, 1e6)),
    *(JoeCopula(family="joe", theta=theta) for theta in (1.0, 1.0 + 1e-8, 1e3, 1e6)),
    *(FrankCopula(family="frank", theta=theta) for theta in (1e-300, 1e-8, 1e3, 1e6)),
    *(
        NestedCopula(
            family="nested",
            generator=generator,
            theta=outer,
            groups=[NestedGroup(factors=["c", "a"], theta=inner), NestedGroup(factors=["b"], theta=outer)],
        )
        for generator in ("clayton", "gumbel", "joe", "frank")
        for outer, inner in ((1.0, 1.0), (1.0, 1.0 + 1e-8), (1.0, 1e3), (1e-8, 1e3), (900.0, 1e3))
        if outer >= 1.0 or generator in ("clayton", "frank")
    ),
]


def named(copula):
    thetas = [copula.theta, *(group.theta for group in getattr(copula, "groups", ()))]
    return " ".join([copula.family, getattr(copula, "generator", "alone"), *map(repr, thetas)])


@pytest.mark.parametrize(("union", "members"), FAMILIES, ids=lambda one: getattr(one, "__name__", ""))
def test_there_is_a_typical_instance_of_each_member(union, members):
    mapping = TypeAdapter(union).json_schema()["discriminator"]["mapping"]
    assert sorted(getattr(one, "kind", None) or one.family for one in members) == sorted(mapping)


@pytest.mark.parametrize(("union", "member"), MEMBERS)
def test_members_go_through_json_unchanged(union, member):
    adapter = TypeAdapter(union)
    assert adapter.validate_json(adapter.dump_json(member)) == member


@pytest.mark.parametrize(("union", "member"), MEMBERS)
def test_unknown_fields_are_refused_and_all_fields_described(union, member):
    adapter = TypeAdapter(union)
    document = json.loads(adapter.dump_json(member)) | {"misspelt": 1}
    with pytest.raises(ValueError, match="misspelt"):
        adapter.validate_json(json.dumps(document))
    schema = TypeAdapter(type(member)).json_schema()
    assert all(field.get("description") for field in schema["properties"].values())
    assert schema["description"]


@pytest.mark.parametrize("copula", COPULAS)
def test_a_typical_copula_gives_the_same_finite_scores_again(copula):
    copula.check(IDS)
    sampler = copula.prepared(IDS)
    assert sampler.repair is None
    first, again = (sampler.scores(RandomDraw(stream(1, "factors", 3), 1000)) for _ in range(2))
    assert first.laws == sampler.laws
    assert first.values.shape == (1000, 3)
    assert first.values.flags.f_contiguous
    np.testing.assert_array_equal(first.values, again.values)
    assert np.all(np.isfinite(first.values))


@pytest.mark.parametrize("copula", COPULAS)
def test_scratch_changes_nothing(copula):
    sampler, scratch = copula.prepared(IDS), Scratch()
    for block in range(2):
        fresh = sampler.scores(RandomDraw(stream(1, "factors", block), 500))
        reused = sampler.scores(RandomDraw(stream(1, "factors", block), 500, scratch))
        np.testing.assert_array_equal(fresh.values, reused.values)


@pytest.mark.parametrize("copula", COPULAS)
def test_the_declared_dimensions_are_all_used_and_no_more(copula):
    sampler = copula.prepared(IDS)
    enough = SobolSequence.of(1, "factors", 0, dimensions=sampler.dimensions, exponent=8)
    assert np.all(np.isfinite(sampler.scores(enough.draw(0)).values))
    too_few = SobolSequence.of(1, "factors", 0, dimensions=sampler.dimensions - 1, exponent=8)
    with pytest.raises(IndexError, match="dimensions"):
        sampler.scores(too_few.draw(0))


@pytest.mark.parametrize("copula", [one for one in COPULAS if one.id != "comonotonic"])
def test_normal_scores_are_standard_normal_and_in_the_same_order(copula):
    scores = copula.prepared(IDS).scores(RandomDraw(stream(2, "factors", 0)))
    normal = normal_scores(scores)
    for j in range(3):
        order = np.argsort(scores.values[:, j])
        assert np.all(np.diff(normal[order, j]) >= 0.0)
        assert abs(normal[:, j].mean()) < 4.0 / 64.0
        assert abs((normal[:, j] ** 2).mean() - 1.0) < 4.0 * 2.0**0.5 / 64.0


@pytest.mark.parametrize("copula", EXTREMES, ids=named)
def test_extreme_strengths_stay_finite_and_uniform(copula):
    with warnings.catch_warnings():
        warnings.simplefilter("error")
        scores = copula.prepared(IDS).scores(RandomDraw(stream(1, "factors", 0)))
    assert np.all(np.abs(scores.values) <= 700.0)
    law = UniformScores()
    lower, upper = law.lower(scores.values), law.upper(scores.values)
    assert np.all((lower > 0.0) & (upper > 0.0))
    assert np.all(np.abs(lower.mean(axis=0) - 0.5) < 4.0 / np.sqrt(12 * 4096))
    assert np.all(np.abs((lower**2).mean(axis=0) - 1 / 3) < 4.0 * np.sqrt(4 / 45 / 4096))


def test_extreme_strengths_are_independent_or_comonotonic():
    for copula, expected in (
        (ClaytonCopula(family="clayton", theta=1e-8), 0.0),
        (ClaytonCopula(family="clayton", theta=1e6), 1.0),
        (GumbelCopula(family="gumbel", theta=1e6), 1.0),
        (JoeCopula(family="joe", theta=1e6), 1.0),
        (FrankCopula(family="frank", theta=1e6), 1.0),
    ):
        values = copula.prepared(IDS[:2]).scores(RandomDraw(stream(1, "factors", 0))).values
        u = UniformScores().lower(values)
        assert np.corrcoef(u.T)[0, 1] == pytest.approx(expected, abs=4.0 / 64.0 if expected == 0.0 else 1e-4)


def test_a_factor_at_the_end_changes_no_factor_before_it():
    two = {"independent", "comonotonic", "clayton", "gumbel", "joe", "frank", "survival_clayton", "student_t"}
    for copula in copulas.TYPICAL:
        if copula.family in two:
            first, second = (
                copula.prepared(ids).scores(RandomDraw(stream(1, "factors", 0))).values[:, :2] for ids in (IDS[:2], IDS)
            )
            np.testing.assert_array_equal(first, second)


@pytest.mark.parametrize(
    ("document", "pointer", "code", "words"),
    [
        ({"family": "frank", "theta": 0.0}, "/theta", "out_of_range", "not 0"),
        ({"family": "clayton", "theta": 0.0}, "/theta", "out_of_range", "not greater than 0"),
        ({"family": "clayton", "theta": 2e6}, "/theta", "out_of_range", "at most 1e+06"),
        ({"family": "gumbel", "theta": 0.9}, "/theta", "out_of_range", "not at least 1"),
        ({"family": "joe", "theta": "2"}, "/theta", "wrong_type", "a number"),
        ({"family": "nested", "generator": "amh", "theta": 1.0, "groups": []}, "/generator", "not_allowed", "clayton"),
        (
            {"family": "student_t", "correlation": {"kind": "equal", "value": 0.1}, "df": 0.0},
            "/df",
            "out_of_range",
            "at least 0.5",
        ),
        (
            {"family": "gaussian", "correlation": {"kind": "equal", "value": 1.1}},
            "/correlation/value",
            "out_of_range",
            "at most 1",
        ),
        ({"family": "gaussian", "correlation": {"kind": "equl"}}, "/correlation/kind", "not_allowed", "equal"),
        (
            {"family": "gaussian", "correlation": {"kind": "matrix", "values": [[1.0, "a"], [0.0, 1.0]]}},
            "/correlation/values/0/1",
            "wrong_type",
            "a number",
        ),
    ],
)
def test_parameters_out_of_range_are_refused_at_their_place(document, pointer, code, words):
    adapter = TypeAdapter(copulas.Copula)
    with pytest.raises(ValueError, match="validation error") as raised:
        adapter.validate_json(json.dumps(document))
    error = refusal(raised.value, document)
    assert isinstance(error, CallerError)
    assert error.faults[0].pointer == pointer
    assert error.faults[0].code == code
    assert words in error.faults[0].detail
