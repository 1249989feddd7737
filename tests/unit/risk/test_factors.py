"""FactorModel: from a checked spec to the losses of a block."""

import math
from dataclasses import replace

import numpy as np
import pytest
from scipy import special

from service.errors import InvalidValue
from service.risk.components import TYPICAL as TYPICAL_COMPONENTS
from service.risk.components import (
    CompoundComponent,
    ConstantComponent,
    CreditObligor,
    CreditPoolComponent,
    DeltaGammaComponent,
    FactorExposure,
    FactorLoading,
    FactorPair,
    IdiosyncraticComponent,
    LinearComponent,
    PoissonFrequency,
)
from service.risk.components.portfolio import SubPortfolioTerms
from service.risk.copulas import ComonotonicCopula, GaussianCopula, IndependentCopula, StudentTCopula
from service.risk.correlation import EqualCorrelation
from service.risk.covers import CapCover, CedeLayerCover, FloorCover, LayerCover, QuotaShareCover, Tails
from service.risk.factors import FactorModel, ModelScratch
from service.risk.marginals import ExponentialMarginal, LognormalMarginal, LomaxMarginal, NormalMarginal
from service.risk.streams import BLOCK, SobolSequence
from tests.unit.risk.blocks import assert_mean

SEED = 2**53 - 1
INDEPENDENT = IndependentCopula(family="independent")
EQUAL = EqualCorrelation(kind="equal", value=0.4)
GAUSSIAN = GaussianCopula(family="gaussian", correlation=EQUAL)
STUDENT = StudentTCopula(family="student_t", correlation=EQUAL, df=4.0)
NORMAL = NormalMarginal(family="normal", mean=0.5, standard_deviation=2.0)
LOGNORMAL = LognormalMarginal(family="lognormal", mu=0.0, sigma=0.5)
LIGHT = ExponentialMarginal(family="exponential", mean=3.0)
FACTORS = (("rates", NORMAL), ("equity", LOGNORMAL), ("claims", LIGHT))


def linear(**amounts):
    exposures = [FactorExposure(factor=name, amount=amount) for name, amount in amounts.items()]
    return LinearComponent(kind="linear", exposures=exposures)


def own(marginal=LOGNORMAL):
    return IdiosyncraticComponent(kind="idiosyncratic", marginal=marginal)


BONDS = SubPortfolioTerms("bonds", (linear(rates=2.0, equity=-1.0), ConstantComponent(kind="constant", amount=7.0)))
SHARES = SubPortfolioTerms("shares", (linear(equity=3.0),), "profit")
HULL = SubPortfolioTerms(
    "hull",
    (
        linear(claims=1.0),
        CompoundComponent(kind="compound", frequency=PoissonFrequency(family="poisson", mean=2.0), severity=LIGHT),
        own(),
    ),
    cover=(
        CedeLayerCover(kind="cede_layer", attachment=5.0, limit=10.0),
        QuotaShareCover(kind="quota_share", retained=0.5),
    ),
)
LOANS = SubPortfolioTerms(
    "loans",
    (
        CreditPoolComponent(
            kind="credit_pool",
            obligors=[
                CreditObligor(
                    count=50,
                    exposure=1.0,
                    default_probability=0.1,
                    loss_given_default=0.6,
                    loadings=[FactorLoading(factor="equity", weight=0.5)],
                )
            ],
        ),
    ),
)
DRIVEN = SubPortfolioTerms(
    "driven",
    (
        CompoundComponent(
            kind="compound",
            frequency=PoissonFrequency(family="poisson", mean=2.0),
            severity=LIGHT,
            driver="claims",
        ),
    ),
)
ALL = (BONDS, SHARES, HULL, LOANS, DRIVEN)


def model(*terms, dependence=GAUSSIAN, factors=FACTORS):
    return FactorModel.of(factors, dependence, terms)


def blocks(of, number=8, seed=SEED):
    return np.concatenate([of.block(block, seed) for block in range(number)])


def test_linear_books_are_values_times_exposures():
    found = model(BONDS, SHARES)
    draws = found.factor_draws(found.random_draw(3, SEED), np.arange(BLOCK))
    rates, equity = draws.values[:, 0], draws.values[:, 1]
    expected = np.column_stack([2.0 * rates - equity + 7.0, -3.0 * equity])
    losses = found.block(3, SEED)
    np.testing.assert_allclose(losses, expected, rtol=1e-12, atol=1e-12)
    assert losses.flags.c_contiguous


def test_many_exposures_take_the_matrix_product():
    """Two sub-portfolios of which one has all factors, so that the exposure matrix is nearly full."""
    wide = SubPortfolioTerms("wide", (linear(rates=1.0, equity=2.0, claims=-3.0),))
    other = SubPortfolioTerms(
        "other", (linear(rates=-1.0, equity=1.0, claims=1.0),), cover=(FloorCover(kind="floor", amount=0.0),)
    )
    for terms in ((wide,), (wide, other)):
        found = model(*terms)
        draws = found.factor_draws(found.random_draw(0, SEED), np.arange(BLOCK)).values
        np.testing.assert_allclose(found.block(0, SEED)[:, 0], draws @ [1.0, 2.0, -3.0], rtol=1e-11, atol=1e-11)


def test_another_sub_portfolio_and_another_order_change_no_draw():
    alone = {terms.id: model(terms).block(5, SEED)[:, 0] for terms in ALL}
    found = model(*ALL).block(5, SEED)
    turned = model(*reversed(ALL)).block(5, SEED)
    for column, terms in enumerate(ALL):
        np.testing.assert_allclose(found[:, column], alone[terms.id], rtol=1e-13, atol=1e-13)
        np.testing.assert_allclose(turned[:, -1 - column], alone[terms.id], rtol=1e-13, atol=1e-13)


def test_scratch_and_order_of_blocks_do_not_matter():
    found, scratch, out = model(*ALL), ModelScratch(), np.empty((BLOCK, len(ALL)))
    for block in (3, 0, 7, 3):
        assert found.block(block, SEED, scratch=scratch, out=out) is out
        np.testing.assert_array_equal(out, found.block(block, SEED))
    short = found.block(3, SEED, scenarios=100, scratch=scratch)
    assert short.shape == (100, len(ALL))


def test_blocks_and_seeds_differ():
    found = model(*ALL)
    first = found.block(0, SEED)
    assert not np.any(np.all(first == found.block(1, SEED), axis=0))
    assert not np.any(np.all(first == found.block(0, 1), axis=0))


def test_each_component_has_a_stream_of_its_own():
    two = SubPortfolioTerms("two", (own(NORMAL), own(NORMAL)))
    losses = blocks(model(two, SubPortfolioTerms("three", (own(NORMAL),))))
    assert_mean((losses[:, 0] - 1.0) ** 2, 8.0)
    assert_mean((losses[:, 0] - 1.0) * (losses[:, 1] - 0.5), 0.0)


def test_means_of_all_kinds():
    found = model(*ALL)
    losses = blocks(found, 16)
    growth = math.exp(0.125)
    expected = {"bonds": 1.0 - growth + 7.0, "shares": -3.0 * growth, "loans": 50 * 0.06, "driven": 6.0}
    for column, terms in enumerate(ALL):
        if terms.id in expected:
            assert_mean(losses[:, column], expected[terms.id])


def test_sign_and_covers_come_in_order():
    terms = SubPortfolioTerms(
        "a",
        (linear(rates=1.0), ConstantComponent(kind="constant", amount=2.0)),
        "profit",
        (
            FloorCover(kind="floor", amount=-3.0),
            CapCover(kind="cap", amount=1.0),
            QuotaShareCover(kind="quota_share", retained=0.5),
        ),
    )
    plain = model(SubPortfolioTerms("a", terms.components)).block(0, SEED)[:, 0]
    expected = 0.5 * np.minimum(np.maximum(-plain, -3.0), 1.0)
    np.testing.assert_allclose(model(terms).block(0, SEED)[:, 0], expected, atol=1e-14)


def test_writer_and_buyer_share_the_whole():
    layer = {"attachment": 2.0, "limit": 4.0, "share": 0.7}
    ceded = SubPortfolioTerms("h", HULL.components, cover=(LayerCover(kind="layer", **layer),))
    kept = SubPortfolioTerms("h", HULL.components, cover=(CedeLayerCover(kind="cede_layer", **layer),))
    whole = SubPortfolioTerms("h", HULL.components)
    parts = sum(model(terms).block(0, SEED) for terms in (ceded, kept))
    np.testing.assert_allclose(parts, model(whole).block(0, SEED), rtol=1e-12)


def test_a_driven_sum_follows_its_factor():
    found = model(DRIVEN, SubPortfolioTerms("claims", (linear(claims=1.0),)), dependence=STUDENT)
    driven, claims = found.block(0, SEED).T
    assert np.all(np.diff(driven[np.argsort(claims)]) >= 0.0)


def test_sobol_points_drive_the_factors_and_nothing_else():
    found = model(*ALL)
    assert found.not_driven == ((2, 1), (2, 2), (3, 0))
    points = SobolSequence.of(SEED, "factors", 0, dimensions=found.sampler.dimensions, exponent=13)
    losses = np.concatenate([found.block(block, SEED, draw=points.draw(block)) for block in range(points.blocks)])
    assert losses.shape == (2**13, len(ALL))
    assert losses[:, 1].mean() == pytest.approx(-3.0 * math.exp(0.125), rel=1e-3)
    assert losses[:, 4].mean() == pytest.approx(6.0, rel=3e-3)


def test_the_grid_of_a_driven_sum_is_stated():
    [(code, detail, pointer)] = model(*ALL).notes
    assert (code, pointer) == ("driven_sum", "/sub_portfolios/4/components/0")
    name = model(*ALL).portfolio.sub_portfolios[4].id
    assert detail.startswith(f"the aggregate claims of {name} are computed ")


def test_models_without_factors():
    found = FactorModel.of([("unused", NORMAL)], INDEPENDENT, [SubPortfolioTerms("a", (own(NORMAL),))])
    assert_mean(blocks(found)[:, 0], 0.5)


def test_factors_of_chosen_scenarios():
    found = model(SHARES, dependence=STUDENT)
    chosen = np.array([4000, 7, 8])
    some = found.factor_draws(found.random_draw(2, SEED), chosen)
    every = found.factor_draws(found.random_draw(2, SEED), np.arange(BLOCK))
    np.testing.assert_array_equal(some.values, every.values[chosen])
    np.testing.assert_allclose(some.values[:, 0], 0.5 + 2.0 * some.normal_scores[:, 0], rtol=1e-8)
    np.testing.assert_allclose(found.block(2, SEED)[chosen, 0], -3.0 * some.values[:, 1], rtol=1e-12)
    assert_mean(every.normal_scores[:, 2], 0.0)


def test_the_typical_components_run():
    factors = (("rates", NORMAL), ("equity", NORMAL))
    terms = [SubPortfolioTerms(one.kind, (one,)) for one in TYPICAL_COMPONENTS]
    losses = FactorModel.of(factors, GAUSSIAN, terms).block(0, 1)
    assert np.all(np.isfinite(losses))


HEAVY = LomaxMarginal(family="lomax", shape=0.8, scale=1.0)


def test_a_limited_layer_on_a_law_without_a_mean_has_one():
    """A Pareto claim of shape 0.8 has no mean, what a limit leaves of it has all moments."""
    factors = (("heavy", HEAVY),)
    layer = LayerCover(kind="layer", attachment=1.0, limit=9.0)
    limited = SubPortfolioTerms("limited", (linear(heavy=2.0),), cover=(layer,))
    unlimited = SubPortfolioTerms("unlimited", (linear(heavy=2.0),))
    found = FactorModel.of(factors, INDEPENDENT, [limited, unlimited])
    by_id, total = found.existence()
    assert by_id == [Tails(), Tails(upper_index=0.8, upper_exponential=0.0)]
    assert total.upper_index == 0.8
    turned = SubPortfolioTerms("turned", (linear(heavy=2.0),), "profit")
    assert FactorModel.of(factors, INDEPENDENT, [turned]).existence()[1] == Tails(
        lower_index=0.8, lower_exponential=0.0
    )


def rate(*terms, dependence=INDEPENDENT, law=LIGHT):
    return FactorModel.of((("a", law), ("b", law)), dependence, terms).existence()[1].upper_exponential


A, B = (SubPortfolioTerms(name, (linear(**{name: 1.0}),)) for name in "ab")


def test_exponential_moments_of_totals():
    """Exponential losses of mean 3: independent ones have E exp(tL) for t < 1/3, perfectly dependent ones for half.

    With normal scores of correlation ρ the density of (x, y) falls as exp(-(x + y - 2ρ√(xy))/(3(1 - ρ²))), least
    at x = y, so t < 1/(3(1 + ρ)). Under other copulas the perfectly dependent case is the bound.
    """
    assert rate(A, B) == pytest.approx(1.0 / 3.0)
    assert rate(A, B, dependence=GAUSSIAN) == pytest.approx(1.0 / (3.0 * 1.4))
    assert rate(A, B, dependence=STUDENT) == pytest.approx(1.0 / 6.0)
    own_draws = SubPortfolioTerms("own", (own(ExponentialMarginal(family="exponential", mean=30.0)),))
    assert rate(A, B, own_draws, dependence=STUDENT) == pytest.approx(1.0 / 30.0)
    half = SubPortfolioTerms("b", B.components, cover=(QuotaShareCover(kind="quota_share", retained=0.5),))
    assert rate(half) == pytest.approx(2.0 / 3.0)
    assert rate(SubPortfolioTerms("b", B.components, cover=(CapCover(kind="cap", amount=9.0),))) == math.inf
    assert rate(A, law=LOGNORMAL) == 0.0


def moment_of_the_sum(t, farthest, correlation=-0.5, points=400):
    """Return E exp(t(X + Y)) of exponentials of mean 1 over normal scores up to `farthest`, by Gauss-Legendre."""
    nodes, weights = np.polynomial.legendre.leggauss(points)
    z, w = farthest * nodes, farthest * weights
    x = -special.log_ndtr(-z)  # -ln P(Z > z), exponential
    rest = 1.0 - correlation**2
    form = z[:, None] ** 2 + z**2 - 2.0 * correlation * z[:, None] * z
    density = np.exp(t * (x[:, None] + x) - form / (2.0 * rest)) / (2.0 * math.pi * math.sqrt(rest))
    return float(w @ density @ w)


def test_exponential_moments_under_negative_dependence():
    """Of losses that do not grow together the heavier decides; 1/(1 + ρ) would be a direction in which one is a gain.

    E exp(0.8(X + Y)) of exponentials of mean 1 and ρ = -1/2 is 11.133937 by quadrature, not infinite beyond 2/3.
    """
    assert moment_of_the_sum(0.8, 18.0) == pytest.approx(moment_of_the_sum(0.8, 25.0), rel=1e-6)
    assert moment_of_the_sum(0.8, 25.0) == pytest.approx(11.133937, rel=1e-6)
    assert moment_of_the_sum(1.05, 25.0) > 1e3 * moment_of_the_sum(1.05, 12.0)
    negative = GaussianCopula(family="gaussian", correlation=EqualCorrelation(kind="equal", value=-0.5))
    assert rate(A, B, dependence=negative) == pytest.approx(1.0 / 3.0)


TWICE_A_LESS_B = (
    SubPortfolioTerms("a", (linear(a=2.0),)),
    SubPortfolioTerms("b", B.components, "profit"),
)


def test_gains_count_where_they_are_sure():
    """2X - Y is X where the factors are the same (rate 1/3), 2X at worst where Y is independent (1/6).

    With ρ = 0.4 it is 3z₁² - 1.5z₂² (halves of squares, means of 3) at most in z₁, z₂ > 0, and z'R⁻¹z is
    (z₁² + z₂² - 0.8z₁z₂)/0.84: their ratio is searched on a grid of angles.
    """
    same = ComonotonicCopula(family="comonotonic")
    assert rate(*TWICE_A_LESS_B, dependence=same) == pytest.approx(1.0 / 3.0)
    assert rate(*TWICE_A_LESS_B) == pytest.approx(1.0 / 6.0)
    angles = np.linspace(0.0, 2.0 * np.pi, 1_000_001)
    z = np.stack([np.cos(angles), np.sin(angles)])
    growth = 6.0 * np.maximum(z[0], 0.0) ** 2 - 3.0 * np.maximum(z[1], 0.0) ** 2
    ratios = growth * 0.84 / (z[0] ** 2 + z[1] ** 2 - 0.8 * z[0] * z[1])
    assert rate(*TWICE_A_LESS_B, dependence=GAUSSIAN) == pytest.approx(1.0 / ratios.max())
    # what is hedged altogether is no loss, and a gain does not come through a cover
    assert rate(A, SubPortfolioTerms("short", A.components, "profit"), dependence=GAUSSIAN) == math.inf
    floored = replace(TWICE_A_LESS_B[1], cover=(FloorCover(kind="floor", amount=-9.0),))
    assert rate(TWICE_A_LESS_B[0], floored, dependence=same) == pytest.approx(1.0 / 6.0)


def test_where_moments_beyond_the_bound_are_known_to_be_missing():
    def sharp(*terms, **more):
        law = more.pop("law", LIGHT)
        made = FactorModel.of((("a", law), ("b", law)), more.get("dependence", INDEPENDENT), terms)
        return made.existence()[1].upper_sharp

    assert sharp(A)
    assert sharp(A, B)
    assert sharp(A, B, dependence=GAUSSIAN)
    assert sharp(*TWICE_A_LESS_B, dependence=GAUSSIAN)
    assert not sharp(A, B, dependence=STUDENT)
    constant = SubPortfolioTerms("c", (ConstantComponent(kind="constant", amount=7.0),))
    assert sharp(A, constant, dependence=STUDENT)
    assert sharp(A, law=LOGNORMAL)
    assert not sharp(A, SubPortfolioTerms("short", B.components, "profit"), law=LOGNORMAL, dependence=GAUSSIAN)


def test_exponential_moments_of_quadratic_forms():
    """E exp(t x'Γx/2) of x ~ N(0, Σ) is det(1 - tΓΣ)^(-1/2): finite up to the largest eigenvalue of ΓΣ."""
    form = np.array([[2.0, -1.5], [-1.5, 0.5]])
    pairs = [FactorPair(first=n, second=m, amount=form["ab".index(n), "ab".index(m)]) for n, m in ("aa", "ab", "bb")]
    terms = SubPortfolioTerms("q", (DeltaGammaComponent(kind="delta_gamma", gamma=pairs),))
    largest = max(np.linalg.eigvals(form @ (4.0 * np.array([[1.0, 0.4], [0.4, 1.0]]))))
    assert rate(terms, dependence=GAUSSIAN, law=NORMAL) == pytest.approx(1.0 / largest)
    covered = SubPortfolioTerms("q", terms.components, cover=(FloorCover(kind="floor", amount=0.0),))
    assert rate(covered, dependence=GAUSSIAN, law=NORMAL) < 1.0 / largest  # gains are no longer there to offset


def test_all_that_does_not_fit_is_listed():
    wrong = [
        SubPortfolioTerms("a", (linear(rate=1.0), own())),
        SubPortfolioTerms(
            "a",
            (DeltaGammaComponent(kind="delta_gamma", gamma=[FactorPair(first="rates", second="x", amount=1.0)]),),
            cover=(FloorCover(kind="floor", amount=2.0), CapCover(kind="cap", amount=1.0)),
        ),
    ]
    with pytest.raises(InvalidValue) as caught:
        model(*wrong)
    assert [fault.pointer for fault in caught.value.faults] == [
        "/sub_portfolios/0/components/0/exposures/0/factor",
        "/sub_portfolios/1/id",
        "/sub_portfolios/1/components/0/gamma/0/second",
        "/sub_portfolios/1/cover/1",
    ]


def test_ids_of_factors_are_unique():
    with pytest.raises(InvalidValue, match="'a' is taken") as caught:
        FactorModel.of([("a", NORMAL), ("a", LIGHT)], INDEPENDENT, [SubPortfolioTerms("b", (own(),))])
    assert caught.value.faults[0].pointer == "/factors/1/id"


def test_faults_of_the_copula_point_at_it():
    short = GaussianCopula(family="gaussian", correlation=EqualCorrelation(kind="equal", value=-0.9))
    with pytest.raises(InvalidValue) as caught:
        model(BONDS, dependence=short)
    assert caught.value.faults[0].pointer.startswith("/dependence")
