"""Components with draws of their own from a law."""

import json
import math

import numpy as np
import pytest
from pydantic import TypeAdapter
from scipy import special

from service.errors import InvalidValue
from service.risk.components import (
    TYPICAL_FREQUENCIES,
    BinomialFrequency,
    CompoundComponent,
    IdiosyncraticComponent,
    NegativeBinomialFrequency,
    PoissonFrequency,
)
from service.risk.components.claims import PIECE
from service.risk.covers import CapCover, CedeLayerCover, LayerCover, QuotaShareCover, Tails
from service.risk.marginals import (
    EmpiricalMarginal,
    ExponentialMarginal,
    LognormalMarginal,
    LomaxMarginal,
    NormalMarginal,
    PointMarginal,
)
from tests.unit.risk.blocks import GivenBlock, assert_mean, losses, normal_factors

FACTORS = normal_factors("a", "b")
SCENARIOS = 40_000
EMPTY = np.zeros((2, SCENARIOS))
UNIT = PointMarginal(family="point", value=1.0)
LIGHT = ExponentialMarginal(family="exponential", mean=2.0)
HEAVY = LomaxMarginal(family="lomax", shape=1.5, scale=3.0)


def compound(frequency, severity, *cover, driver=None):
    return CompoundComponent(
        kind="compound", frequency=frequency, severity=severity, claim_cover=list(cover), driver=driver
    )


def poisson(mean):
    return PoissonFrequency(family="poisson", mean=mean)


def layer(attachment, limit=None, **annual):
    return LayerCover(kind="layer", attachment=attachment, limit=limit, **annual)


@pytest.mark.parametrize("frequency", TYPICAL_FREQUENCIES, ids=lambda one: one.family)
def test_counts_have_their_mean_and_variance(frequency):
    counts = losses(compound(frequency, UNIT), FACTORS, GivenBlock(EMPTY))
    assert_mean(counts, frequency.expected)
    assert_mean((counts - frequency.expected) ** 2, frequency.spread)


@pytest.mark.parametrize("frequency", TYPICAL_FREQUENCIES, ids=lambda one: one.family)
def test_generating_functions_agree_with_the_counts(frequency):
    counts = losses(compound(frequency, UNIT), FACTORS, GivenBlock(EMPTY))
    z = 0.6 + 0.3j
    found = frequency.generating(np.array([z - 1.0]))[0]
    assert_mean((z**counts).real, found.real)
    assert_mean((z**counts).imag, found.imag)


@pytest.mark.parametrize("mean", [1e-4, 0.3, 3.0, 40.0])
def test_sums_equal_those_of_a_plain_loop(mean):
    """The same stream read in the same order: numbers of claims first, then their normal scores."""
    component = compound(poisson(mean), LognormalMarginal(family="lognormal", mu=1.0, sigma=0.5), layer(2.0, 3.0))
    block, again = GivenBlock(EMPTY[:, :5000]), GivenBlock(EMPTY[:, :5000])
    found = losses(component, FACTORS, block)
    counts = again.generator.poisson(mean, 5000)
    claims = np.exp(1.0 + 0.5 * again.generator.standard_normal(counts.sum()))
    paid = np.minimum(np.maximum(claims - 2.0, 0.0), 3.0)
    expected = np.bincount(np.repeat(np.arange(5000), counts), paid, minlength=5000)
    np.testing.assert_allclose(found, expected, rtol=1e-9, atol=1e-12)


def test_scenarios_with_more_claims_than_a_piece():
    found = losses(compound(poisson(2.5 * PIECE), UNIT), FACTORS, GivenBlock(np.zeros((2, 8))))
    expected = GivenBlock(np.zeros((2, 8))).generator.poisson(2.5 * PIECE, 8)
    np.testing.assert_array_equal(found, expected)


def test_terms_of_the_year_come_after_the_sum():
    cover = (
        layer(0.5, 0.5, annual_deductible=1.0, annual_limit=2.0),
        QuotaShareCover(kind="quota_share", retained=0.5),
    )
    found = losses(compound(poisson(4.0), UNIT, *cover), FACTORS, GivenBlock(EMPTY))
    counts = GivenBlock(EMPTY).generator.poisson(4.0, SCENARIOS)
    np.testing.assert_allclose(found, 0.5 * np.minimum(np.maximum(0.5 * counts - 1.0, 0.0), 2.0), atol=1e-15)


@pytest.mark.parametrize(
    ("cover", "claim"),
    [
        ((), 2.0),
        ((layer(1.0, 3.0),), 2.0 * (math.exp(-0.5) - math.exp(-2.0))),
        ((layer(1.0),), 2.0 * math.exp(-0.5)),
        (
            (CedeLayerCover(kind="cede_layer", attachment=1.0, limit=3.0, share=0.5),),
            2.0 - math.exp(-0.5) + math.exp(-2.0),
        ),
        ((layer(1.0, 3.0), QuotaShareCover(kind="quota_share", retained=0.5)), math.exp(-0.5) - math.exp(-2.0)),
    ],
)
def test_means_with_a_closed_form(cover, claim):
    """Of an exponential claim of mean θ a layer (d, d + l] takes θ (e^(-d/θ) - e^(-(d + l)/θ))."""
    component = compound(poisson(5.0), LIGHT, *cover)
    assert component.mean(FACTORS) == pytest.approx(5.0 * claim, rel=1e-12)
    assert_mean(losses(component, FACTORS, GivenBlock(EMPTY)), 5.0 * claim)


def test_means_without_one():
    assert compound(poisson(5.0), LIGHT, CapCover(kind="cap", amount=1.0)).mean(FACTORS) is None
    assert compound(poisson(5.0), LIGHT, layer(1.0, annual_limit=9.0)).mean(FACTORS) is None


def test_a_driven_sum_is_its_quantile_function_at_the_uniform():
    """Geometric number, exponential claims of mean θ: P(S > x) = b/(1+b) exp(-x/(θ(1+b)))."""
    frequency = NegativeBinomialFrequency(family="negative_binomial", mean=3.0, variance=12.0)
    component = compound(frequency, LIGHT, driver="b")
    assert not component.own_draws
    assert component.used_scores == ("b",)
    scores = np.array([-3.0, -0.7, -0.6, 0.0, 1.0, 4.0])
    found = losses(component, FACTORS, GivenBlock(np.vstack([scores, scores])))
    expected = np.maximum(8.0 * np.log(0.75 / special.ndtr(-scores)), 0.0)
    np.testing.assert_allclose(found, expected, rtol=1e-5, atol=1e-12)


def test_a_driven_sum_has_the_law_of_the_drawn_one():
    """A layer on lognormal claims with terms of the year; two-sample comparison at four fixed points."""
    severity = LognormalMarginal(family="lognormal", mu=0.0, sigma=1.0)
    cover = layer(1.0, 4.0, annual_deductible=2.0, annual_limit=20.0)
    drawn = losses(compound(poisson(6.0), severity, cover), FACTORS, GivenBlock(EMPTY))
    uniforms = (np.arange(SCENARIOS) + 0.5) / SCENARIOS
    scores = special.ndtri(uniforms)
    driven = losses(
        compound(poisson(6.0), severity, cover, driver="a"), FACTORS, GivenBlock(np.vstack([scores, scores]))
    )
    for bound in (0.0, 1.0, 5.0, 15.0):
        assert_mean((drawn <= bound).astype(float), float(np.mean(driven <= bound)))


def test_the_law_of_a_sum_is_made_once():
    component = compound(poisson(2.0), LIGHT)
    assert component.law_of_sum is compound(poisson(2.0), LIGHT, driver="a").law_of_sum


@pytest.mark.parametrize(
    ("component", "pointer", "words"),
    [
        (compound(poisson(1.0), LIGHT, driver="c"), "/driver", "no factor 'c'"),
        (
            compound(poisson(1.0), NormalMarginal(family="normal", mean=0.0, standard_deviation=1.0), driver="a"),
            "/severity",
            "no claim may be negative",
        ),
        (compound(poisson(1.0), LIGHT, layer(0.0, 5.0), layer(5.0)), "/claim_cover/1", "nothing reaches"),
        (
            compound(
                poisson(1.0), EmpiricalMarginal(family="empirical", values=[2.0, 3.0]), CapCover(kind="cap", amount=1.0)
            ),
            "/claim_cover/0",
            "above the cap",
        ),
    ],
)
def test_what_does_not_fit_is_refused(component, pointer, words):
    with pytest.raises(InvalidValue, match=words) as caught:
        component.check(FACTORS)
    assert [fault.pointer for fault in caught.value.faults] == [pointer]


@pytest.mark.parametrize(
    "frequency",
    [
        {"family": "poisson", "mean": 0.0},
        {"family": "negative_binomial", "mean": 2.0, "variance": 2.0},
        {"family": "binomial", "trials": 0, "probability": 0.5},
        {"family": "binomial", "trials": 5, "probability": 1.5},
        {"family": "geometric", "mean": 1.0},
    ],
)
def test_wrong_frequencies_are_refused(frequency):
    document = {"kind": "compound", "frequency": frequency, "severity": {"family": "exponential", "mean": 1.0}}
    with pytest.raises(ValueError, match="frequency"):
        TypeAdapter(CompoundComponent).validate_json(json.dumps(document))


def test_the_tail_of_a_sum_is_that_of_a_claim():
    assert compound(poisson(3.0), HEAVY).tails(FACTORS) == Tails(upper_index=1.5, upper_exponential=0.0)
    assert compound(poisson(3.0), HEAVY, layer(1.0, 9.0)).tails(FACTORS) == Tails()
    assert compound(poisson(3.0), HEAVY, layer(1.0, annual_limit=9.0)).tails(FACTORS) == Tails()
    assert compound(poisson(3.0), LIGHT).tails(FACTORS) == Tails(upper_exponential=0.5)


def test_a_negative_binomial_number_shortens_the_exponential_moment():
    """Geometric sums of exponentials are exponential with mean θ(1 + b); of ones, t < ln(1 + 1/b)."""
    frequency = NegativeBinomialFrequency(family="negative_binomial", mean=3.0, variance=12.0)
    tails = compound(frequency, LIGHT).tails(FACTORS)
    assert tails.upper_exponential == pytest.approx(1.0 / 8.0, rel=1e-9)
    assert tails.lower_exponential == math.inf
    ones = compound(frequency, UNIT).tails(FACTORS)
    assert ones.upper_exponential == pytest.approx(math.log(4.0 / 3.0), rel=1e-9)
    capped = compound(BinomialFrequency(family="binomial", trials=9, probability=0.5), UNIT).tails(FACTORS)
    assert capped == Tails()


def test_idiosyncratic_draws_have_the_law_asked_for():
    component = IdiosyncraticComponent(kind="idiosyncratic", marginal=LIGHT)
    assert component.independent
    assert component.tails(FACTORS) == Tails(upper_exponential=0.5)
    drawn = losses(component, FACTORS, GivenBlock(EMPTY))
    assert_mean(drawn, component.mean(FACTORS))
    assert_mean((drawn > 4.0).astype(float), math.exp(-2.0))
