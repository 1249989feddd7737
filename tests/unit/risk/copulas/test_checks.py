"""What does not fit the factors is refused at its place in the copula."""

import numpy as np
import pytest

from service.errors import InvalidValue
from service.risk.copulas import (
    FrankCopula,
    GaussianCopula,
    GroupedStudentTCopula,
    NestedCopula,
    NestedGroup,
    StudentTCopula,
    StudentTGroup,
)
from service.risk.correlation import (
    EqualCorrelation,
    KendallTauCorrelation,
    LoadingsCorrelation,
    MatrixCorrelation,
    SpearmanRhoCorrelation,
)

IDS = ("rates", "equity", "claims")
EQUAL = EqualCorrelation(kind="equal", value=0.3)
INDEFINITE = [[1.0, 0.9, -0.9], [0.9, 1.0, 0.9], [-0.9, 0.9, 1.0]]


def grouped(*groups, correlation=EQUAL):
    parts = [StudentTGroup(factors=list(factors), df=4.0) for factors in groups]
    return GroupedStudentTCopula(family="grouped_student_t", correlation=correlation, groups=parts)


def nested(generator, outer, *groups):
    parts = [NestedGroup(factors=list(factors), theta=theta) for factors, theta in groups]
    return NestedCopula(family="nested", generator=generator, theta=outer, groups=parts)


def gaussian(correlation):
    return GaussianCopula(family="gaussian", correlation=correlation)


REFUSED = {
    "opposed three": (FrankCopula(family="frank", theta=-1.0), "/theta", "out_of_range", "two factors alone"),
    "unknown": (
        grouped(["rates", "equty"], ["claims"]),
        "/groups/0/factors/1",
        "unknown_factor",
        "did you mean 'equity'",
    ),
    "in two groups": (
        grouped(["rates", "equity"], ["claims", "rates"]),
        "/groups/1/factors/1",
        "not_allowed",
        "group 0",
    ),
    "twice": (grouped(["rates", "equity", "rates"], ["claims"]), "/groups/0/factors/2", "not_allowed", "twice"),
    "in none": (grouped(["rates"]), "/groups", "missing", "'equity', 'claims'"),
    "nested in none": (nested("clayton", 1.0, (["rates"], 2.0)), "/groups", "missing", "every factor"),
    "weaker within": (
        nested("clayton", 1.5, (["rates"], 2.0), (["equity", "claims"], 1.0)),
        "/groups/1/theta",
        "out_of_range",
        "no weaker",
    ),
    "gumbel below 1": (nested("gumbel", 0.5, (IDS, 2.0)), "/theta", "out_of_range", "at least 1"),
    "joe group below 1": (nested("joe", 0.5, (IDS, 0.7)), "/theta", "out_of_range", "at least 1"),
    "rho of groups": (
        grouped(IDS, correlation=SpearmanRhoCorrelation(kind="spearman_rho", values=np.eye(3).tolist())),
        "/correlation/kind",
        "not_allowed",
        "Spearman",
    ),
    "rows": (
        gaussian(MatrixCorrelation(kind="matrix", values=[[1.0, 0.1], [0.1, 1.0]])),
        "/correlation/values",
        "wrong_count",
        "2 rows for 3 factors",
    ),
    "ragged": (
        gaussian(KendallTauCorrelation(kind="kendall_tau", values=[[1.0, 0.1, 0.0], [0.1, 1.0], [0.0, 0.0, 1.0]])),
        "/correlation/values/1",
        "wrong_count",
        "2 entries for 3",
    ),
    "loadings rows": (
        gaussian(LoadingsCorrelation(kind="loadings", values=[[0.1]])),
        "/correlation/values",
        "wrong_count",
        "1 rows of loadings for 3",
    ),
    "equal": (
        StudentTCopula(family="student_t", correlation=EqualCorrelation(kind="equal", value=-0.5), df=4.0),
        "/correlation/value",
        "out_of_range",
        "not above -0.5",
    ),
}


@pytest.mark.parametrize(("copula", "pointer", "code", "words"), REFUSED.values(), ids=REFUSED)
@pytest.mark.parametrize("ask", ["check", "prepared"])
def test_refused_with_the_place(copula, pointer, code, words, ask):
    with pytest.raises(InvalidValue, match=words) as raised:
        getattr(copula, ask)(IDS)
    assert raised.value.faults[0].pointer == pointer
    assert raised.value.faults[0].code == code


@pytest.mark.parametrize("make", [gaussian, lambda one: StudentTCopula(family="student_t", correlation=one, df=3.0)])
def test_an_indefinite_matrix_is_refused_when_prepared_or_repaired(make):
    with pytest.raises(InvalidValue, match=r"smallest eigenvalue is -0\.8.*repair: nearest") as raised:
        make(MatrixCorrelation(kind="matrix", values=INDEFINITE)).prepared(IDS)
    assert raised.value.faults[0].pointer == "/correlation/values"
    assert raised.value.faults[0].code == "not_a_correlation"
    repair = make(MatrixCorrelation(kind="matrix", values=INDEFINITE, repair="nearest")).prepared(IDS).repair
    assert repair.smallest_eigenvalue == pytest.approx(-0.8)
    assert repair.code == "correlation_repaired"
    assert f"{repair.distance:.6g}" in repair.detail


def test_all_weak_groups_are_named_at_once():
    with pytest.raises(InvalidValue, match="1 more") as raised:
        nested("frank", 3.0, (["rates", "equity"], 1.0), (["claims"], 2.0)).check(IDS)
    assert [fault.pointer for fault in raised.value.faults] == ["/groups/0/theta", "/groups/1/theta"]


def test_two_factors_may_be_opposed():
    FrankCopula(family="frank", theta=-1.0).check(IDS[:2])


def test_many_missing_factors_are_counted():
    ids = [f"factor {number}" for number in range(20)]
    with pytest.raises(InvalidValue, match=r"'factor 1', 'factor 2'.* and 14 more"):
        grouped(ids[:1]).check(ids)


def test_correlations_are_given_where_the_scores_are_normal():
    values = [[1.0, 0.5, 0.2], [0.5, 1.0, 0.3], [0.2, 0.3, 1.0]]
    sampler = gaussian(MatrixCorrelation(kind="matrix", values=values)).prepared(IDS)
    chosen = np.array([2, 0])
    np.testing.assert_allclose(sampler.correlations(chosen), [[1.0, 0.2], [0.2, 1.0]], atol=1e-15)
    assert FrankCopula(family="frank", theta=1.0).prepared(IDS).correlations(chosen) is None
    assert grouped(IDS).prepared(IDS).correlations(chosen) is None
