"""Laws of the shared variables, by their Laplace transforms; every check is 4 standard errors wide (6e-5)."""

import numpy as np
import pytest

from service.risk.copulas.frailties import (
    log_log_series,
    log_one_less_exp,
    log_positive_stable,
    log_sibuya,
    log_sums,
    log_tilted_stable,
    stable_draws,
)
from service.risk.copulas.inner import MOST_TERMS, TiltedSibuya, log_inner
from service.risk.streams import RandomDraw, stream

N = 100_000
QUANTILES = (0.05, 0.3, 0.7, 0.95)


def generator(seed=1):
    return stream(seed, "test", 0)


def assert_transform(logs, transform):
    """Hold the Laplace transform against `transform` where its value is about that of the quantiles."""
    for q in QUANTILES:
        log_t = np.log(-np.log(q)) - np.median(logs)
        values = np.exp(-np.exp(np.clip(log_t + logs, -700.0, 700.0)))
        error = values.std() / np.sqrt(logs.size)
        assert abs(values.mean() - transform(np.exp(log_t))) < 4.0 * error + 1e-13


@pytest.mark.parametrize("alpha", [0.02, 0.3, 0.7, 0.99])
def test_positive_stable(alpha):
    assert_transform(log_positive_stable(alpha, *stable_draws(N, generator())), lambda t: np.exp(-(t**alpha)))


@pytest.mark.parametrize("alpha", [0.05, 0.3, 0.7, 0.99])
def test_sibuya(alpha):
    uniforms, _ = stable_draws(N, generator())
    assert_transform(log_sibuya(alpha, uniforms), lambda t: 1.0 - (-np.expm1(-t)) ** alpha)


def test_sibuya_is_exact_about_the_end_of_its_table():
    """V exceeds k if the uniform is below prod (1 - alpha / j), j = 1, ..., k."""
    alpha, k = 0.6, 5000
    exceeding = np.cumprod(1.0 - alpha / np.arange(1.0, k + 1.0))
    for j in (1, 2, 100, 4094, 4095, 4096, 4097, 4999):
        uniforms = exceeding[j - 1] * np.array([1.0 - 1e-7, 1.0 + 1e-7])
        found = np.rint(np.exp(log_sibuya(alpha, uniforms)))
        assert found[0] > j
        assert found[1] <= j


@pytest.mark.parametrize("theta", [0.5, 5.0, 30.0, 1e3])
def test_log_series(theta):
    logs = log_log_series(theta, *stable_draws(N, generator()))
    assert_transform(logs, lambda t: -np.log(np.exp(-theta) - np.expm1(-theta) * -np.expm1(-t)) / theta)


@pytest.mark.parametrize("alpha", [0.01, 0.3, 0.9, 0.999])
@pytest.mark.parametrize("time", [0.01, 1.0, 3.0, 20.0, 1e6])
def test_tilted_stable(alpha, time):
    logs = log_tilted_stable(alpha, np.full(N, np.log(time)), generator())
    assert_transform(logs, lambda t: np.exp(-time * np.expm1(alpha * np.log1p(t))))


def test_tilted_stable_of_hardly_any_time():
    logs = log_tilted_stable(0.1, np.full(1000, -600.0), generator())
    assert np.all(np.isfinite(logs))
    assert np.median(logs) < -5000.0


@pytest.mark.parametrize(("outer", "inner"), [(0.01, 10.0), (2.0, 5.0), (5.0, 30.0), (12.0, 14.0), (1.0, 900.0)])
def test_terms_of_a_nested_frank_copula(outer, inner):
    uniforms, _ = stable_draws(N, generator())
    alpha = outer / inner

    def transform(t):
        rest = np.exp(-inner) - np.expm1(-inner) * -np.expm1(-t)
        return -np.expm1(alpha * np.log(rest)) / -np.expm1(-outer)

    assert_transform(TiltedSibuya.of(outer, inner)(uniforms), transform)


@pytest.mark.parametrize(("outer", "inner"), [(5.0, 12.0), (12.0, 14.0)])
def test_probabilities_of_a_tilted_sibuya_variable_sum_to_1(outer, inner):
    exceeding = TiltedSibuya.of(outer, inner).exceeding
    alpha, p = outer / inner, -np.expm1(-inner)
    first = alpha * p / -np.expm1(-outer)
    assert exceeding[-1] == pytest.approx(1.0 - first, rel=1e-6)


@pytest.mark.parametrize(("generator_name", "outer", "inner"), [("joe", 1.5, 3.0), ("frank", 9.0, 15.0)])
@pytest.mark.parametrize("count", [1, 40, 2000])
def test_inner_variables_are_sums_of_so_many_terms(generator_name, outer, inner, count):
    draw = RandomDraw(generator(), N)
    logs = log_inner(generator_name, outer, inner, np.full(N, np.log(count)), draw)
    alpha = outer / inner

    def joe(t):
        return np.exp(count * np.log1p(-((-np.expm1(-t)) ** alpha)))

    def frank(t):
        rest = np.exp(-inner) - np.expm1(-inner) * -np.expm1(-t)
        return np.exp(count * (np.log1p(-(rest**alpha)) - np.log(-np.expm1(-outer))))

    assert_transform(logs, joe if generator_name == "joe" else frank)


@pytest.mark.parametrize("alpha", [0.2, 0.5, 0.8, 0.95])
def test_a_stable_variable_in_place_of_a_long_sum_moves_a_transform_little(alpha):
    t = np.geomspace(1e-30, 10.0, 4000)
    exact = np.exp(MOST_TERMS * np.log1p(-((-np.expm1(-t)) ** alpha)))
    assert np.max(np.abs(np.exp(-MOST_TERMS * t**alpha) - exact)) < 0.3 / MOST_TERMS


def test_sums_of_logarithms_far_apart():
    logs = np.array([0.0, 0.0, 5000.0, 0.0, -9000.0])
    found = log_sums(logs, np.array([2, 2, 1]))
    np.testing.assert_allclose(found, [np.log(2.0), 5000.0, -9000.0], rtol=1e-15)


def test_log_one_less_exp_on_both_sides():
    log_t = np.array([-2000.0, -50.0, -1.0, -0.3665, 3.0, 6.0])
    expected = [
        -2000.0,
        -50.0,
        np.log(-np.expm1(-np.exp(-1.0))),
        np.log(0.5),
        -np.exp(-np.exp(3.0)),
        -np.exp(-np.exp(6.0)),
    ]
    np.testing.assert_allclose(log_one_less_exp(log_t), expected, rtol=5e-5)
