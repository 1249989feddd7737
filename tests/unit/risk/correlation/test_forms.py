"""Forms of a correlation matrix: checks, and that their roots make the correlations they stand for."""

import tracemalloc

import numpy as np
import pytest

from service.errors import InvalidValue
from service.risk.correlation import (
    MOST_FACTORS,
    EqualCorrelation,
    KendallTauCorrelation,
    LoadingsCorrelation,
    MatrixCorrelation,
    Mixing,
    SpearmanRhoCorrelation,
)
from service.risk.correlation.roots import DenseRoot, FactorRoot, NegativeEqualRoot
from service.risk.correlation.spearman import spearman_rhos
from service.risk.streams import RandomDraw, stream

FALSE_ALARM = 4.0  # standard errors: 6e-5
N = 1 << 17
GAUSSIAN = Mixing()
KINDS = {
    "matrix": MatrixCorrelation,
    "kendall_tau": KendallTauCorrelation,
    "spearman_rho": SpearmanRhoCorrelation,
}


def form(kind, values, **more):
    return KINDS[kind](kind=kind, values=[list(map(float, row)) for row in values], **more)


def loadings(values):
    return LoadingsCorrelation(kind="loadings", values=[list(map(float, row)) for row in values])


def equal(value):
    return EqualCorrelation(kind="equal", value=value)


def random_matrix(factors, seed=1):
    draws = stream(seed, "test", 0).standard_normal((factors, 2 * factors))
    return np.corrcoef(draws)


def assert_root(root, expected, *, exact=1e-12):
    """Hold the root against the correlations, in its own words and as sample moments of its normals."""
    expected = np.asarray(expected, dtype=float)
    factors = expected.shape[0]
    np.testing.assert_allclose(root.correlations(np.arange(factors)), expected, rtol=0.0, atol=exact)
    normals = root.normals(RandomDraw(stream(3, "test", 0), N))
    assert normals.shape == (factors, N)
    moments = normals @ normals.T / N
    assert np.all(np.abs(moments - expected) <= FALSE_ALARM * np.sqrt((1.0 + expected**2) / N) + 1e-9)


PAIR = np.array([[1.0, 0.5, -0.2], [0.5, 1.0, 0.3], [-0.2, 0.3, 1.0]])
TOP = np.array([[0.8, 0.1], [0.0, 0.0], [-0.6, 0.8]])
MADE = {
    "matrix": (form("matrix", PAIR), PAIR),
    "kendall_tau": (form("kendall_tau", PAIR), np.sin(0.5 * np.pi * PAIR)),
    "spearman_rho": (form("spearman_rho", PAIR), 2.0 * np.sin(np.pi / 6.0 * PAIR)),
    "loadings": (loadings(TOP), TOP @ TOP.T + np.diag(1.0 - np.sum(TOP**2, axis=1))),
    "equal": (equal(0.3), np.full((3, 3), 0.3) + 0.7 * np.eye(3)),
    "equal 0": (equal(0.0), np.eye(3)),
    "equal 1": (equal(1.0), np.ones((3, 3))),
    "equal below 0": (equal(-0.45), np.full((3, 3), -0.45) + 1.45 * np.eye(3)),
    "large": (form("matrix", random_matrix(30)), random_matrix(30)),
    "singular": (form("matrix", [[1, 1, 0.6], [1, 1, 0.6], [0.6, 0.6, 1]]), [[1, 1, 0.6], [1, 1, 0.6], [0.6, 0.6, 1]]),
    "all opposed": (form("matrix", np.full((3, 3), -0.5) + 1.5 * np.eye(3)), np.full((3, 3), -0.5) + 1.5 * np.eye(3)),
    "all the same": (form("matrix", np.ones((3, 3))), np.ones((3, 3))),
}


@pytest.mark.parametrize(("given", "expected"), MADE.values(), ids=MADE)
def test_roots_make_the_correlations(given, expected):
    root = given.root(len(expected), GAUSSIAN)
    assert root.repair is None
    assert_root(root, expected)


def test_roots_take_no_more_numbers_than_needed():
    assert form("matrix", PAIR).root(3, GAUSSIAN).dimensions == 3
    assert form("matrix", np.ones((3, 3))).root(3, GAUSSIAN).dimensions == 1
    assert loadings(TOP).root(3, GAUSSIAN).dimensions == 5
    assert isinstance(equal(0.2).root(9, GAUSSIAN), FactorRoot)
    assert isinstance(equal(-0.1).root(9, GAUSSIAN), NegativeEqualRoot)
    assert equal(0.2).root(9, GAUSSIAN).dimensions == 10
    assert equal(-0.1).root(9, GAUSSIAN).dimensions == 9


def test_a_single_factor():
    assert_root(equal(-0.9).root(1, GAUSSIAN), [[1.0]])
    assert_root(form("matrix", [[1.0]]).root(1, GAUSSIAN), [[1.0]])


def test_a_triangular_root_is_cut_without_loss():
    matrix = random_matrix(50)
    root = form("matrix", matrix).root(50, GAUSSIAN)
    assert isinstance(root, DenseRoot)
    draw = RandomDraw(stream(1, "test", 0), 100)
    independent = RandomDraw(stream(1, "test", 0), 100).normals(50)
    np.testing.assert_allclose(root.normals(draw), np.linalg.cholesky(matrix) @ independent, rtol=0.0, atol=1e-13)


def test_thousands_of_factors_never_make_a_square_matrix():
    values = stream(1, "test", 0).uniform(-0.3, 0.3, (5000, 10))
    given = loadings(values)
    tracemalloc.start()
    try:
        root = given.root(5000, GAUSSIAN)
        normals = root.normals(RandomDraw(stream(1, "test", 1), 64))
        peak = tracemalloc.get_traced_memory()[1]
        for value in (0.2, -1e-4):
            equal(value).root(5000, GAUSSIAN).normals(RandomDraw(stream(1, "test", 1), 64))
    finally:
        tracemalloc.stop()
    assert normals.shape == (5000, 64)
    assert peak < 12e6  # a matrix of 5,000 × 5,000 would be 200e6
    few = np.array([7, 4999, 7])
    np.testing.assert_allclose(np.diag(root.correlations(few)), 1.0)
    assert root.correlations(few)[0, 2] == 1.0
    assert root.correlations(few)[0, 1] == pytest.approx(values[7] @ values[4999])


def test_spearman_rho_of_a_student_t_is_that_of_its_root():
    rhos = form("spearman_rho", PAIR)
    found = rhos.root(3, Mixing(df=3.0)).correlations(np.arange(3))
    back, _ = spearman_rhos(found[np.triu_indices(3, 1)], 3.0)
    np.testing.assert_allclose(back, PAIR[np.triu_indices(3, 1)], rtol=0.0, atol=1e-9)


WRONG = {
    "diagonal": ([[1.0, 0.1], [0.1, 0.9]], "/values/1/1", "not_a_correlation", "diagonal .* is 1, not 0.9"),
    "asymmetric": ([[1.0, 0.1], [0.2, 1.0]], "/values/1/0", "not_a_correlation", "0.2 here and 0.1 across"),
    "beyond 1": ([[1.0, -1.2], [-1.2, 1.0]], "/values/0/1", "out_of_range", "-1.2 is not between"),
    "rows": ([[1.0]], "/values", "wrong_count", "1 rows for 2"),
    "ragged": ([[1.0], [0.1, 1.0]], "/values/0", "wrong_count", "1 entries for 2"),
}


@pytest.mark.parametrize(("values", "pointer", "code", "words"), WRONG.values(), ids=WRONG)
@pytest.mark.parametrize("kind", KINDS)
def test_what_is_no_correlation_matrix_is_refused_at_its_entry(kind, values, pointer, code, words):
    with pytest.raises(InvalidValue, match=words) as raised:
        form(kind, values, repair="nearest").check(2)
    assert raised.value.faults[0].pointer == pointer
    assert raised.value.faults[0].code == code


def test_rounded_decimals_are_put_right():
    values = np.array([[1.0 - 1e-10, 0.3 + 1e-10], [0.3, 1.0]])
    found = form("matrix", values).root(2, GAUSSIAN).correlations(np.arange(2))
    np.testing.assert_allclose(found, [[1.0, 0.3], [0.3, 1.0]], rtol=0.0, atol=1e-10)
    assert found[0, 0] == pytest.approx(1.0, abs=1e-15)


def test_many_wrong_entries_are_one_mistake():
    with pytest.raises(InvalidValue, match="49 more") as raised:
        form("matrix", np.full((60, 60), 3.0)).check(60)
    assert len(raised.value.faults) == 50


def test_too_many_factors_for_a_whole_matrix():
    with pytest.raises(InvalidValue, match=f"at most {MOST_FACTORS} factors.*loadings") as raised:
        form("matrix", [[1.0]]).check(MOST_FACTORS + 1)
    assert raised.value.faults[0].pointer == "/values"


INDEFINITE = np.array([[1.0, 0.9, 0.1], [0.9, 1.0, 0.8], [0.1, 0.8, 1.0]])


@pytest.mark.parametrize("kind", KINDS)
@pytest.mark.parametrize("mixing", [Mixing(), Mixing(df=4.0)], ids=["gaussian", "student"])
def test_indefinite_matrices_are_refused_in_words_or_repaired(kind, mixing):
    with pytest.raises(InvalidValue, match=r"smallest eigenvalue is -0\.[0-9]+; repair: nearest") as raised:
        form(kind, INDEFINITE).root(3, mixing)
    assert raised.value.faults[0].pointer == "/values"
    root = form(kind, INDEFINITE, repair="nearest").root(3, mixing)
    used = root.correlations(np.arange(3))
    assert np.linalg.eigvalsh(used)[0] > -1e-14
    assert root.repair.smallest_eigenvalue < 0.0
    assert_root(root, used)
    if kind == "matrix":
        assert root.repair.distance == pytest.approx(np.linalg.norm(used - INDEFINITE), rel=1e-9)
        assert root.repair.largest_change == pytest.approx(np.max(np.abs(used - INDEFINITE)), rel=1e-9)


def test_a_definite_matrix_is_not_repaired():
    assert form("matrix", PAIR, repair="nearest").root(3, GAUSSIAN).repair is None


@pytest.mark.parametrize(
    ("given", "pointer", "words"),
    [
        (loadings([[0.9, 0.9], [0.1, 0.1]]), "/values/0", "1.62, more than 1"),
        (loadings([[0.1, 0.2], [0.1]]), "/values/1", "1 loadings and the first row 2"),
        (loadings([[0.1]]), "/values", "1 rows of loadings for 2"),
    ],
    ids=["beyond 1", "ragged", "rows"],
)
def test_loadings_are_checked(given, pointer, words):
    with pytest.raises(InvalidValue, match=words) as raised:
        given.check(2)
    assert raised.value.faults[0].pointer == pointer


def test_equal_values_have_a_bound_that_depends_on_the_factors():
    equal(-0.2499999).check(5)
    equal(-0.9999999).check(2)
    with pytest.raises(InvalidValue, match=r"-0\.25 is not above -0\.25: 5 factors") as raised:
        equal(-0.25).check(5)
    assert raised.value.faults[0].pointer == "/value"


def test_loadings_a_little_beyond_1_are_scaled():
    root = loadings([[1.0 + 1e-10], [0.5]]).root(2, GAUSSIAN)
    np.testing.assert_allclose(root.correlations(np.arange(2)), [[1.0, 0.5], [0.5, 1.0]], rtol=0.0, atol=1e-9)
    assert root.own[0] == 0.0
