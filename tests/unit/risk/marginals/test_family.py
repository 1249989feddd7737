"""What all marginals have in common: the contract, the schema, and figures that follow from the quantile function."""

import itertools
import json
import math

import numpy as np
import pytest
from pydantic import TypeAdapter, ValidationError
from scipy import special

from service.risk import marginals as m

ADAPTER = TypeAdapter(m.Marginal)
ALL = [pytest.param(law, id=law.family) for law in m.TYPICAL]
SMOOTH = [pytest.param(law, id=law.family) for law in m.TYPICAL if not isinstance(law, m.DiscreteMarginal)]
SMALL = 10.0 ** np.array([-300.0, -200.0, -100.0, -50.0, -20.0, -16.0, -12.0, -8.0, -4.0, -2.0, -1.0, -0.5])
LOWER = np.concatenate([SMALL, [0.4, 0.5, 0.6], 1.0 - SMALL[::-1]])
UPPER = np.concatenate([1.0 - SMALL, [0.6, 0.5, 0.4], SMALL[::-1]])
NODES, WEIGHTS = special.roots_legendre(20)


def test_there_is_a_typical_instance_of_each_family():
    assert sorted(law.family for law in m.TYPICAL) == sorted(ADAPTER.json_schema()["discriminator"]["mapping"])


def test_the_union_and_its_parts_are_named_types():
    assert set(ADAPTER.json_schema()["$defs"]) == {type(law).__name__ for law in m.TYPICAL} | {"SplicePart"}


@pytest.mark.parametrize("law", ALL)
def test_every_field_is_described(law):
    for name, field in TypeAdapter(type(law)).json_schema()["properties"].items():
        assert field.get("description") or "$ref" in field, name


@pytest.mark.parametrize("law", ALL)
def test_through_json_and_back(law):
    again = ADAPTER.validate_json(ADAPTER.dump_json(law))
    assert again == law
    assert hash(again) == hash(law)
    law.quantile(LOWER, UPPER), law.mean, law.variance  # what is kept for later is no part of the law
    assert ADAPTER.dump_json(law) == ADAPTER.dump_json(again)


@pytest.mark.parametrize("law", ALL)
def test_quantiles_increase_within_the_support(law):
    values = law.quantile(LOWER, UPPER)
    low, high = law.support
    assert np.all(np.isfinite(values))
    assert np.all(np.diff(values) >= 0.0)
    assert low <= values[0]
    assert values[-1] <= high
    ends = law.quantile(np.array([0.0, 1.0]), np.array([1.0, 0.0]))
    assert ends.tolist() == [low, high]


@pytest.mark.parametrize("law", ALL)
def test_shapes_are_kept(law):
    lower = np.full((2, 3, 4), 0.3)
    assert law.quantile(lower, 1.0 - lower).shape == (2, 3, 4)
    assert law.below(lower).shape == law.beyond(lower).shape == (2, 3, 4)


@pytest.mark.parametrize("law", ALL)
def test_both_tails_outside_the_support(law):
    low, high = law.support
    outside = np.array([low - 1.0 - abs(low), high + 1.0 + abs(high)])
    assert law.below(outside).tolist() == [0.0, 1.0]
    assert law.beyond(outside).tolist() == [1.0, 0.0]


@pytest.mark.parametrize("law", SMOOTH)
def test_probabilities_of_quantiles(law):
    """Condition: a relative rounding error of the value times the elasticity of its probability, at most 1500 here."""
    inner = (LOWER >= 1e-16) & (UPPER >= 1e-16)
    values = law.quantile(LOWER, UPPER)[inner]
    low, high = (0.0 if end in {0.0, -math.inf, math.inf} else 1e-15 for end in law.support)
    np.testing.assert_allclose(law.below(values), LOWER[inner], rtol=1e-11, atol=low)
    np.testing.assert_allclose(law.beyond(values), UPPER[inner], rtol=1e-11, atol=high)


@pytest.mark.parametrize("law", ALL)
def test_below_and_beyond_add_up(law):
    values = law.quantile(LOWER, UPPER)
    np.testing.assert_allclose(law.below(values) + law.beyond(values), 1.0, rtol=1e-14)


def quadrature(law, function, *cuts):
    """Return E f(X) from panels over the normal score, parted at `cuts` and where the quantile function bends."""
    kinks = [special.ndtri(piece.lower) for piece in law.pieces[:-1]]
    if law.pieces[0].atoms is not None:
        kinks = special.ndtri(law.pieces[0].atoms.lower[:-1]).tolist()
    edges = np.unique([*np.linspace(-37.0, 37.0, 149), *kinks, *cuts])
    low, width = edges[:-1, None], np.diff(edges)[:, None]
    scores = (low + width * (0.5 + 0.5 * NODES)).ravel()
    weights = (0.5 * width * WEIGHTS).ravel() * np.exp(-0.5 * scores**2) / math.sqrt(2.0 * math.pi)
    return float(weights @ function(law.quantile(special.ndtr(scores), special.ndtr(-scores))))


@pytest.mark.parametrize("law", ALL)
def test_mean_and_variance_are_those_of_the_quantile_function(law):
    mean = quadrature(law, lambda x: x)
    size = math.sqrt(law.variance) + abs(law.mean)
    assert law.mean == pytest.approx(mean, rel=1e-11, abs=1e-11 * size)
    assert law.variance == pytest.approx(quadrature(law, lambda x: (x - mean) ** 2), rel=1e-9, abs=1e-20)


@pytest.mark.parametrize("law", ALL)
@pytest.mark.parametrize("level", [1e-3, 0.3, 0.5, 0.95, 0.9999])
def test_limited_means_are_those_of_the_quantile_function(law, level):
    limit = float(law.quantile(np.array([level]), np.array([1.0 - level]))[0])
    expected = limit + quadrature(law, lambda x: np.minimum(x - limit, 0.0), special.ndtri(level))
    assert law.limited_mean(limit) == pytest.approx(expected, rel=1e-11, abs=1e-11 * math.sqrt(law.variance))
    step = 1e-4 * (math.sqrt(law.variance) or 1.0)
    slope = (law.limited_mean(limit + step) - law.limited_mean(limit)) / step
    assert float(law.beyond(np.array(limit + step))) - 1e-9 <= slope <= float(law.beyond(np.array(limit))) + 1e-9


@pytest.mark.parametrize("law", ALL)
def test_limits_that_cut_nothing_or_everything(law):
    assert law.limited_mean(math.inf) == law.mean
    low, high = law.support
    if math.isfinite(low):
        assert law.limited_mean(low) == low
        assert law.limited_mean(low - 5.0) == low - 5.0
    if math.isfinite(high):
        assert law.limited_mean(high + 5.0) == law.mean
    far = float(law.quantile(np.array([1.0]), np.array([1e-40]))[0])
    assert law.limited_mean(far) == pytest.approx(law.mean, rel=1e-9)


@pytest.mark.parametrize("law", ALL)
def test_layers_add_up(law):
    levels = np.array([0.1, 0.6, 0.97, 0.9999, 1.0 - 1e-9])
    cuts = law.quantile(levels, 1.0 - levels).tolist()
    for start, stop in itertools.pairwise(cuts):
        layer = law.layer_mean(start, stop)
        difference = law.limited_mean(stop) - law.limited_mean(start)
        assert layer == pytest.approx(difference, rel=1e-9, abs=1e-12 * max(abs(law.mean), math.sqrt(law.variance)))
        reached, passed = law.beyond(np.array([start, stop])).tolist()
        width = (stop - start) * (1.0 + 1e-12)
        assert passed * (stop - start) <= layer * (1.0 + 1e-12)
        assert layer <= reached * width


def slopes(law, of_value, side):
    """Return the change of -ln(probability) per change of f(|value|) halfway out and at the far end of a tail."""
    near = np.exp(-np.array([100.0, 150.0, 400.0, 600.0]))
    values = law.quantile(1.0 - near, near) if side == "upper" else -law.quantile(near, 1.0 - near)
    with np.errstate(divide="ignore", invalid="ignore"):
        change = np.diff(of_value(values))
        return 50.0 / change[0] if change[0] > 0.0 else math.inf, 200.0 / change[2] if change[2] > 0.0 else math.inf


@pytest.mark.parametrize("law", ALL)
@pytest.mark.parametrize("side", ["upper", "lower"])
def test_the_tail_index_is_that_of_the_quantile_function(law, side):
    index = law.upper_tail_index if side == "upper" else law.lower_tail_index
    middle, far = slopes(law, lambda x: np.log(np.maximum(x, 1e-300)), side)
    if math.isfinite(index):
        assert far == pytest.approx(index, rel=1e-6)
    else:
        assert far > 1.2 * middle or far == math.inf


@pytest.mark.parametrize("law", ALL)
@pytest.mark.parametrize("side", ["upper", "lower"])
def test_the_exponential_moment_is_that_of_the_quantile_function(law, side):
    rate = law.exponential_moment if side == "upper" else law.lower_exponential_moment
    middle, far = slopes(law, lambda x: x, side)
    if rate == 0.0:
        assert far < 0.9 * middle
    elif math.isfinite(rate):
        assert far == pytest.approx(rate, rel=0.01)
    else:
        assert far > 1.1 * middle or far == math.inf


def test_moments_that_do_not_exist():
    pareto = m.ParetoMarginal(family="pareto", shape=0.8, scale=1.0)
    assert (pareto.mean, pareto.variance) == (math.inf, math.inf)
    assert pareto.limited_mean(1e6) == pytest.approx(1.0 + (1e6**0.2 - 1.0) / 0.2)
    student = m.StudentTMarginal(family="student_t", df=1.0, location=5.0, scale=1.0)
    assert (student.mean, student.variance) == (math.inf, math.inf)
    assert student.limited_mean(10.0) == -math.inf
    assert student.layer_mean(5.0, 6.0) == pytest.approx(0.5 - (math.pi / 4 - 0.5 * math.log(2)) / math.pi)
    assert student.layer_mean(4.0, 6.0) == pytest.approx(1.0)


EXTREME = {
    "normal": [[-1e150, 0.0, 1e6], [1e-150, 1.0, 1e150]],
    "student_t": [[1e-12, 0.01, 0.3, 1.0, 1.0001, 1e3, 1e9, 1e12], [0.0, 1e6], [1e-150, 1.0, 1e150]],
    "lognormal": [[-1e150, -300.0, 0.0, 340.0], [1e-150, 1e-6, 1.0, 10.0, 1e10]],
    "lognormal_by_mean": [[1e-150, 1.0, 1e150], [1e-150, 1e-12, 1.0, 1e6, 1e100]],
    "gamma": [[1e-12, 1e-3, 0.05, 50.0, 3.1e5, 1e12], [1e-150, 1.0, 1e150]],
    "weibull": [[1e-12, 0.02, 0.05, 50.0, 1e12], [1e-150, 1.0, 1e150]],
    "pareto": [[1e-12, 0.3, 1.0, 1.0000001, 2.0000001, 1e12], [1e-150, 1.0, 1e140]],
    "lomax": [[1e-12, 0.3, 1.0, 1.0000001, 2.0000001, 1e12], [1e-150, 1.0, 1e140]],
    "generalized_pareto": [[-1e12, -1.0, -1e-12, 1e-320, 0.0, 1e-12, 0.5, 1.0, 1e12], [1e-150, 1.0], [0.0, 1e6]],
    "gumbel": [[-1e150, 0.0], [1e-150, 1.0, 1e149]],
    "generalized_extreme_value": [
        [-1e12, -80.0, -1.0, -1e-12, 1e-320, 0.0, 1e-12, 0.5, 1.0, 3.0],
        [0.0, 1e6],
        [1e-150, 1.0],
    ],
    "exponential": [[1e-150, 1.0, 1e150]],
    "uniform": [[-1e150, 0.0, 1.0], [1e-150, 1.0, 1.0000000000000002, 1e150]],
    "beta": [[1e-12, 1e-6, 0.01, 1.0, 30.0, 1e5, 1e8], [1e-6, 0.01, 1.0, 1e8]],
    "inverse_gaussian": [[1e-150, 1.0, 1e6], [1e-150, 1e-8, 1.0, 1e12]],
    "burr_xii": [[1e-12, 0.01, 1.0, 30.0, 1e12], [1e-12, 0.01, 1.0, 30.0, 1e5, 1e12], [1e-10, 1.0]],
    "logistic": [[-1e150, 0.0], [1e-150, 1.0, 1e147]],
}


@pytest.mark.parametrize("family", EXTREME)
def test_extreme_parameters_give_finite_values_or_a_reason(family):
    model = next(type(law) for law in m.TYPICAL if law.family == family)
    names = [name for name in TypeAdapter(model).json_schema()["properties"] if name != "family"]
    if family == "beta":
        names = ["a", "b"]
    accepted, reasons = 0, []
    for values in itertools.product(*EXTREME[family]):
        document = {"family": family, **dict(zip(names, values, strict=True))}
        try:
            law = ADAPTER.validate_json(json.dumps(document))
        except ValidationError as refused:
            reasons.append(str(refused).lower())
            continue
        accepted += 1
        assert_sound(law, document)
    assert accepted
    assert not any("nan" in reason for reason in reasons)


def assert_sound(law, document):
    quantiles = law.quantile(LOWER, UPPER)
    assert np.all(np.isfinite(quantiles)), document
    size = np.maximum(np.abs(quantiles[1:]), np.abs(quantiles[:-1]))
    width = abs(law.support[1] - law.support[0]) if np.all(np.isfinite(law.support)) else 0.0
    with np.errstate(over="ignore"):
        assert np.all(quantiles[1:] >= quantiles[:-1] - 1e-13 * size - 1e-15 * width), document
    for probabilities in (law.below(quantiles), law.beyond(quantiles)):
        assert np.all((probabilities >= 0.0) & (probabilities <= 1.0)), document
    assert not math.isnan(law.mean), document
    assert law.variance >= 0.0, document
    inner = quantiles[(np.abs(quantiles) < 1e100)]
    limited = [law.limited_mean(float(value)) for value in inner]
    assert not np.any(np.isnan(limited)), document
    assert np.all(np.array(limited) <= inner + 1e-11 * np.abs(inner) + 1e-15 * min(width, 1e150)), document
