"""From scores to values: errors against the exact function, exactness where it is promised, and the use of memory."""

import math
from concurrent.futures import ThreadPoolExecutor

import numpy as np
import pytest
from scipy import special

from service.risk import marginals as m
from service.risk.score_tables import ScoreTable, Scratch
from service.risk.score_tables import tables as inner
from service.risk.scores import NormalScores, StudentScores, UniformScores

PROMISED = 1e-10
LAWS = [NormalScores(), StudentScores(4.0), StudentScores(1.5), UniformScores()]
EXTREME = [
    m.GammaMarginal(family="gamma", shape=0.02, scale=1.0),
    m.GammaMarginal(family="gamma", shape=1e12, scale=1e-6),
    m.GammaMarginal(family="gamma", shape=1e-12, scale=1.0),
    m.WeibullMarginal(family="weibull", shape=0.08, scale=1.0),
    m.WeibullMarginal(family="weibull", shape=1e12, scale=5.0),
    m.ParetoMarginal(family="pareto", shape=0.3, scale=1.0),
    m.GeneralizedParetoMarginal(family="generalized_pareto", shape=-0.5, scale=10.0, threshold=100.0),
    m.GeneralizedParetoMarginal(family="generalized_pareto", shape=1e-12, scale=10.0, threshold=-1e6),
    m.GeneralizedExtremeValueMarginal(family="generalized_extreme_value", shape=-1.5, location=0.0, scale=1.0),
    m.StudentTMarginal(family="student_t", df=0.5, location=0.0, scale=1.0),
    m.StudentTMarginal(family="student_t", df=1e9, location=0.0, scale=1.0),
    m.BetaMarginal(family="beta", a=0.05, b=0.05),
    m.BetaMarginal(family="beta", a=1e6, b=3.0),
    m.InverseGaussianMarginal(family="inverse_gaussian", mean=1.0, shape=1e-4),
    m.LognormalByMeanMarginal(family="lognormal_by_mean", mean=1.0, cv=1e6),
    m.NormalMarginal(family="normal", mean=1e6, standard_deviation=1.0),
    m.UniformMarginal(family="uniform", lower=1e6, upper=1e6 + 1.0),
    m.BurrXIIMarginal(family="burr_xii", c=0.2, d=8.0, scale=1.0),
]
CASES = [
    pytest.param(marginal, law, id=f"{name}-{marginal.family}-{number}-{law}")
    for name, members, laws in (("typical", m.TYPICAL, LAWS), ("extreme", EXTREME, LAWS[:2] + LAWS[-1:]))
    for number, marginal in enumerate(members)
    for law in laws
]
CASES += [pytest.param(marginal, StudentScores(1e6), id=f"{marginal.family}-1e6") for marginal in m.TYPICAL[3:6]]


def scores_of(law, normal):
    """Return the scores of a law that have the same probability below as normal scores."""
    near = special.ndtr(-np.abs(normal))
    if isinstance(law, NormalScores):
        return normal
    size = special.logit(near) if isinstance(law, UniformScores) else special.stdtrit(law.df, near)
    return np.copysign(np.abs(size), normal)


def exact(marginal, law, scores):
    smallest = np.finfo(float).tiny
    return marginal.quantile(np.maximum(law.lower(scores), smallest), np.maximum(law.upper(scores), smallest))


def error(marginal, found, expected):
    """Return the largest error over the unit in which it is promised, but for what rounding makes of such values."""
    quarters = np.array([0.25, 0.5, 0.75])
    low, median, high = marginal.quantile(quarters, quarters[::-1])
    unit = np.abs(expected - median) + (high - low)
    if marginal.support[0] >= 0.0:
        unit = np.minimum(unit, np.abs(expected))
    off = np.maximum(np.abs(found - expected) - 3e-14 * np.abs(expected) - 1e-307, 0.0)
    return float(np.max(np.divide(off, unit, out=np.zeros_like(off), where=off > 0.0)))


@pytest.mark.parametrize(("marginal", "law"), CASES)
def test_the_error_is_as_promised(marginal, law):
    grid = np.random.Generator(np.random.PCG64(11)).uniform(-8.0, 8.0, 4000)
    scores = scores_of(law, np.concatenate([grid, grid / 4.0]))
    found = ScoreTable.of(marginal, law).values(scores)
    assert np.all(np.isfinite(found))
    assert error(marginal, found, exact(marginal, law, scores)) <= PROMISED
    low, high = marginal.support
    assert low <= found.min()
    assert found.max() <= high


@pytest.mark.parametrize("marginal", m.TYPICAL, ids=lambda marginal: marginal.family)
def test_typical_tables_rarely_need_the_exact_function(marginal, monkeypatch):
    asked = []
    quantile = type(marginal).quantile
    for law in (NormalScores(), StudentScores(4.0), UniformScores()):
        table = ScoreTable.of(marginal, law)
        normal = np.random.Generator(np.random.PCG64(12)).standard_normal(200_000)
        scores = scores_of(law, normal)
        with monkeypatch.context() as patch:
            patch.setattr(
                type(marginal),
                "quantile",
                lambda self, lower, upper: asked.append(lower.size) or quantile(self, lower, upper),
            )
            table.values(scores)
    assert sum(asked) <= 6  # of 600,000


@pytest.mark.parametrize(
    ("marginal", "law"),
    [
        (m.NormalMarginal(family="normal", mean=3.0, standard_deviation=2.0), NormalScores()),
        (m.StudentTMarginal(family="student_t", df=4.0, location=3.0, scale=2.0), StudentScores(4.0)),
        (m.LogisticMarginal(family="logistic", location=3.0, scale=2.0), UniformScores()),
    ],
    ids=lambda one: getattr(one, "family", ""),
)
def test_lines(marginal, law):
    scores = np.linspace(-8.0, 8.0, 101)
    assert ScoreTable.of(marginal, law).values(scores).tolist() == (scores * 2.0 + 3.0).tolist()


def test_exponentials_of_lines():
    marginal = m.LognormalMarginal(family="lognormal", mu=3.0, sigma=2.0)
    scores = np.linspace(-8.0, 8.0, 101)
    assert ScoreTable.of(marginal, NormalScores()).values(scores).tolist() == np.exp(scores * 2.0 + 3.0).tolist()


@pytest.mark.parametrize("law", LAWS, ids=str)
@pytest.mark.parametrize("marginal", [m.TYPICAL[4], m.TYPICAL[17], m.TYPICAL[19]], ids=lambda marginal: marginal.family)
def test_scores_beyond_the_table(marginal, law):
    normal = np.array([-36.0, -20.0, -9.0, 9.0, 20.0, 36.0])
    scores = scores_of(law, normal)
    scores = scores[np.isfinite(scores)]
    found = ScoreTable.of(marginal, law).values(scores)
    np.testing.assert_allclose(found, exact(marginal, law, scores), rtol=1e-15)


@pytest.mark.parametrize("law", LAWS, ids=str)
def test_a_score_without_probability_beyond_has_a_finite_value(law):
    scores = np.array([-690.0, 690.0])
    for marginal in m.TYPICAL:
        if marginal.family not in {"lognormal", "lognormal_by_mean"}:  # a line in the exponent has no end
            assert np.all(np.isfinite(ScoreTable.of(marginal, law).values(scores)))


def steps(count, *, equal):
    rng = np.random.Generator(np.random.PCG64(count))
    weights = None if equal else rng.dirichlet(np.full(count, 0.3)).tolist()
    return m.EmpiricalMarginal(family="empirical", values=rng.standard_normal(count).tolist(), probabilities=weights)


@pytest.mark.parametrize("law", LAWS, ids=str)
@pytest.mark.parametrize("equal", [True, False])
@pytest.mark.parametrize("count", [1, 2, 3, 50, 1000, 60_000])
def test_steps_are_exact(count, equal, law):
    marginal = steps(count, equal=equal)
    scores = scores_of(law, np.random.Generator(np.random.PCG64(2)).uniform(-8.0, 8.0, 20_000))
    found = ScoreTable.of(marginal, law).values(scores)
    expected = exact(marginal, law, scores)
    # a score within rounding of a step may be taken for either side of it
    assert np.count_nonzero(found != expected) <= 3


def test_a_step_belongs_to_the_lower_value():
    marginal = m.EmpiricalMarginal(family="empirical", values=[1.0, 2.0, 3.0, 4.0])
    breaks = special.ndtri(np.array([0.25, 0.5])).tolist()
    table = ScoreTable.of(marginal, NormalScores())
    scores = np.array([[one, math.nextafter(one, math.inf)] for one in breaks])
    assert table.values(scores).tolist() == [[1.0, 2.0], [2.0, 3.0]]


@pytest.mark.parametrize("law", LAWS, ids=str)
@pytest.mark.parametrize("probability", [0.003, 0.05, 0.5, 0.97])
def test_a_spliced_law_bends_and_jumps_at_its_threshold(probability, law):
    tail = m.GeneralizedParetoMarginal(family="generalized_pareto", shape=0.4, scale=900.0, threshold=1500.0)
    body = m.GammaMarginal(family="gamma", shape=2.0, scale=500.0)
    marginal = m.SplicedMarginal(family="spliced", body=body, tail=tail, threshold=2000.0, tail_probability=probability)
    split = scores_of(law, -special.ndtri(np.array([probability])))
    around = (
        split * (1.0 + np.array([-1e-3, -1e-6, -1e-12, 1e-12, 1e-6, 1e-3])) + np.array([-1, -1, -1, 1, 1, 1]) * 1e-9
    )
    found = ScoreTable.of(marginal, law).values(np.sort(around))
    np.testing.assert_allclose(found, exact(marginal, law, np.sort(around)), rtol=PROMISED)
    assert np.all(np.diff(found) >= -1e-7)


@pytest.mark.parametrize(
    "body", [steps(300, equal=True), m.PointMarginal(family="point", value=0.5)], ids=lambda one: one.family
)
def test_a_discrete_body_steps_exactly_below_a_smooth_tail(body):
    tail = m.GeneralizedParetoMarginal(family="generalized_pareto", shape=0.2, scale=1.0, threshold=1.0)
    marginal = m.SplicedMarginal(family="spliced", body=body, tail=tail, threshold=1.0, tail_probability=0.1)
    scores = np.random.Generator(np.random.PCG64(2)).uniform(-8.0, 8.0, 20_000)
    found = ScoreTable.of(marginal, NormalScores()).values(scores)
    expected = exact(marginal, NormalScores(), scores)
    np.testing.assert_allclose(found[expected > 1.0], expected[expected > 1.0], rtol=PROMISED)
    assert np.count_nonzero(found[expected <= 1.0] != expected[expected <= 1.0]) <= 1


@pytest.mark.parametrize("marginal", m.TYPICAL, ids=lambda marginal: marginal.family)
def test_out_may_be_the_scores_and_chunks_do_not_show(marginal):
    scores = np.random.Generator(np.random.PCG64(3)).standard_t(3.0, 3 * inner.CHUNK + 17)
    table = ScoreTable.of(marginal, StudentScores(3.0))
    whole = table.values(scores)
    assert np.array_equal(whole, np.concatenate([table.values(part) for part in np.array_split(scores, 7)]))
    assert np.array_equal(whole, table.values(scores, scratch=Scratch()))
    own = scores.copy()
    assert table.values(own, out=own) is own
    assert np.array_equal(whole, own)
    wide = np.empty((2, scores.size))
    wide[1] = scores
    assert np.array_equal(table.values(wide.T[:, 1], out=wide.T[:, 0]), whole)


def test_any_shape_and_order():
    table = ScoreTable.of(m.TYPICAL[4], NormalScores())
    scores = np.random.Generator(np.random.PCG64(4)).standard_normal((6, 10))
    expected = table.values(scores.ravel()).reshape(6, 10)
    assert np.array_equal(table.values(scores), expected)
    assert np.array_equal(table.values(np.asfortranarray(scores)), expected)
    assert np.array_equal(table.values(scores[::2, 1:7]), expected[::2, 1:7])
    out = np.empty((10, 6))
    table.values(scores, out=out.T)
    assert np.array_equal(out.T, expected)
    assert table.values(np.empty(0)).shape == (0,)
    assert table.values(np.empty((0, 3))).shape == (0, 3)


def test_equal_laws_share_a_table_and_old_ones_go():
    def table(scale):
        return ScoreTable.of(m.GammaMarginal(family="gamma", shape=2.0, scale=scale), NormalScores())

    assert table(1.0) is table(1.0)
    assert table(1.0) is not table(2.0)
    assert steps(50, equal=True) is not steps(50, equal=True)
    assert ScoreTable.of(steps(50, equal=True), NormalScores()) is ScoreTable.of(steps(50, equal=True), NormalScores())
    assert inner._cached.cache_info().maxsize == inner.CACHED


def test_large_empirical_laws_are_not_kept():
    before = inner._cached.cache_info().currsize
    large = steps(inner.MOST_CACHED_ATOMS + 1, equal=True)
    assert ScoreTable.of(large, NormalScores()) is not ScoreTable.of(large, NormalScores())
    assert inner._cached.cache_info().currsize == before


def test_the_same_bytes_whenever_and_wherever_it_is_made():
    marginal = m.InverseGaussianMarginal(family="inverse_gaussian", mean=7.0, shape=3.0)
    scores = np.random.Generator(np.random.PCG64(5)).standard_normal(50_000)
    first = ScoreTable.of(marginal, NormalScores()).values(scores)
    inner._cached.cache_clear()
    with ThreadPoolExecutor(4) as pool:
        again = list(pool.map(lambda _: ScoreTable.of(marginal, NormalScores()).values(scores), range(4)))
    assert all(first.tobytes() == other.tobytes() for other in again)


def test_values_do_not_decrease_with_the_score():
    scores = np.linspace(-8.0, 8.0, 100_001)
    for marginal in m.TYPICAL:
        found = ScoreTable.of(marginal, NormalScores()).values(scores)
        assert np.all(np.diff(found) >= -PROMISED * np.maximum(np.abs(found[1:]), math.sqrt(marginal.variance)))


def test_tables_are_small():
    for marginal in m.TYPICAL:
        table = ScoreTable.of(marginal, NormalScores())
        if isinstance(table, inner._SmoothTable):
            assert sum(row.nbytes for row in table._coefficients) <= 200_000
