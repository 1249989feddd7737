"""Factor specs, read and answered whole, against closed forms and numerical oracles.

Every figure is held against the truth within 4 of its own stated errors: a right one is beyond with a
probability of 6e-5. Seeds are fixed. Where a case has its truth in a file, `data/README.md` says where from.
"""

import math
from itertools import groupby

import numpy as np
import pytest
from scipy import integrate, special

from tests.asking import answered, compound, equal, es, factor_model, law, linear, matrix, step, var
from tests.reference.laws import rows
from tests.unit.risk.blocks import FALSE_ALARM

SCENARIOS = 100_000


def assert_near(figure, truth):
    assert figure.standard_error is not None
    assert abs(figure.value - truth) <= FALSE_ALARM * figure.standard_error + 1e-12 * abs(truth)


def allocated(losses, *measures, **more):
    request = {"losses": losses, "measures": list(measures), "include_stand_alone": False, **more}
    return answered("allocations", request)


def assert_allocation(result, truth):
    """Compare a total and its contributions."""
    assert_near(result.total, sum(truth))
    for row, wanted in zip(result.sub_portfolios, truth, strict=True):
        assert_near(row.contribution, wanted)


EULER = {
    case: {
        (kind, float(level) if level else None): [float(row["contribution"]) for row in found]
        for (kind, level), found in groupby(found, lambda row: (row["measure"], row["level"]))
    }
    for case, found in groupby(rows("b_euler_contributions"), lambda row: row["case"])
}

SIZES = {"x": (1.0, 1.0), "y": (2.0, 2.0), "z": (0.5, 3.0)}  # mean and scale
CORRELATION = matrix([[1.0, 0.5, 0.2], [0.5, 1.0, -0.1], [0.2, -0.1, 1.0]])


def _plain(marginals, dependence=None, **more):
    """Return a book with one sub-portfolio for each factor."""
    return factor_model(marginals, {name: linear(**{name: 1.0}) for name in marginals}, dependence=dependence, **more)


BOOKS = {
    "mvn3": _plain(
        {name: law("normal", mean=mean, standard_deviation=sd) for name, (mean, sd) in SIZES.items()},
        law("gaussian", correlation=CORRELATION),
        scenarios=SCENARIOS,
    ),
    "mvt3_df4": _plain(
        {name: law("student_t", df=4.0, location=mean, scale=scale) for name, (mean, scale) in SIZES.items()},
        law("student_t", correlation=CORRELATION, df=4.0),
        scenarios=SCENARIOS,
    ),
    "gamma_same_scale": _plain(
        {name: law("gamma", shape=shape, scale=2.0) for name, shape in (("x", 0.5), ("y", 1.5), ("z", 3.0))},
        scenarios=SCENARIOS,
    ),
    "gamma_diff_scale": _plain(
        {"x": law("gamma", shape=2.0, scale=1.0), "y": law("gamma", shape=1.5, scale=3.0)}, scenarios=SCENARIOS
    ),
    "exp_mean1_exp_mean2": _plain(
        {"x": law("exponential", mean=1.0), "y": law("exponential", mean=2.0)}, scenarios=SCENARIOS
    ),
    "comonotone_exp_lognormal_pareto": _plain(
        {
            "x": law("exponential", mean=1.0),
            "y": law("lognormal", mu=0.0, sigma=1.0),
            "z": law("pareto", shape=3.0, scale=1.0),
        },
        law("comonotonic"),
        scenarios=SCENARIOS,
    ),
}
KINDS = {"var": var, "es": es, "sd": lambda _: {"kind": "standard_deviation"}}


@pytest.mark.parametrize("case", BOOKS)
def test_euler_contributions_of_known_laws(case):
    wanted = {key: truth for key, truth in EULER[case].items() if (case, key[0]) != ("mvt3_df4", "sd")}
    answer = allocated(BOOKS[case], *(KINDS[kind](level) for kind, level in wanted))
    for result, truth in zip(answer.allocations, wanted.values(), strict=True):
        assert_allocation(result, truth)


def test_a_standard_deviation_without_a_fourth_moment_has_no_error():
    """Student's t with 4 degrees of freedom: the figure exists, its variance does not."""
    answer = allocated(BOOKS["mvt3_df4"], KINDS["sd"](None))
    [result] = answer.allocations
    assert result.total.value == pytest.approx(math.sqrt(32.0), rel=0.05)
    assert result.total.standard_error is None
    assert result.total.interval is None
    assert all(row.contribution.standard_error is None for row in result.sub_portfolios)
    assert "infinite_variance" in {note.code for note in answer.notes}


def test_risk_modules_aggregated_by_correlation():
    """Normal losses whose stand-alone figures are given risk charges: the square-root formula and its Euler shares."""
    charges, together = np.array([100.0, 40.0, 25.0, 60.0]), 0.25
    correlation = np.full((4, 4), together) + (1.0 - together) * np.eye(4)
    quantile = float(special.ndtri(0.995))
    laws = {f"m{j}": law("normal", mean=10.0, standard_deviation=charge / quantile) for j, charge in enumerate(charges)}
    losses = _plain(laws, law("gaussian", correlation=equal(together)), scenarios=SCENARIOS)
    total = math.sqrt(charges @ correlation @ charges)
    [result] = allocated(losses, var(0.995, above="mean")).allocations
    assert_allocation(result, charges * (correlation @ charges) / total)


@pytest.mark.parametrize("row", rows("f_lognormal_995_factor"), ids=lambda row: row["cv_sigma"])
def test_lognormal_factors_of_solvency_regimes(row):
    losses = _plain({"a": law("lognormal_by_mean", mean=1.0, cv=float(row["cv_sigma"]))}, scenarios=SCENARIOS)
    first, second = allocated(losses, var(0.995, above="mean"), es(0.99, above="mean")).allocations
    assert_near(first.total, float(row["rho_sigma_var995_minus_mean"]))
    assert_near(second.total, float(row["es99_minus_mean"]))


def lattice_figures(masses, partial, level):
    """Return value at risk and the contributions to expected shortfall of losses on whole numbers.

    Parameters
    ----------
    masses : ndarray of shape (m,)
        P(S = s).
    partial : ndarray of shape (d, m)
        E[X_i; S = s].
    level : float
    """
    below = np.cumsum(masses)
    q = int(np.argmax(below >= level))
    beyond = partial[:, q + 1 :].sum(axis=1)
    return q, (beyond + (below[q] - level) * partial[:, q] / masses[q]) / (1.0 - level)


def assert_lattice(losses, masses, partial, *, levels=(0.95, 0.99)):
    """Compare totals and contributions; those to a quantile are conditional means at the number found."""
    measures = [measure for level in levels for measure in (var(level), es(level))]
    results = iter(allocated(losses, *measures).allocations)
    for level in levels:
        q, shortfall = lattice_figures(masses, partial, level)
        value_at_risk = next(results)
        found = int(value_at_risk.total.value)
        assert found == q or abs(found - q) <= FALSE_ALARM * value_at_risk.total.standard_error
        for row, wanted in zip(value_at_risk.sub_portfolios, partial[:, found] / masses[found], strict=True):
            assert_near(row.contribution, wanted)
        assert_allocation(next(results), shortfall)


GROUPS = ((60, 1.0, 0.02, 0.5), (25, 4.0, 0.01, 0.4), (200, 1.0, 0.004, 0.6))  # obligors, exposure, PD, weight


def test_a_one_factor_pool_in_three_parts():
    """Oracle: given the factor the defaults are independent, so the law of the sum is a mixture of convolutions.

    200 Gauss-Legendre nodes over the factor, the transform of each part taken to the power of its obligors;
    E[X_i; S = s] likewise with one obligor fixed in default.
    """
    pools = {}
    for number, (count, exposure, pd, weight) in enumerate(GROUPS):
        obligor = {"count": count, "exposure": exposure, "default_probability": pd, "loss_given_default": 1.0}
        loadings = [{"factor": "economy", "weight": weight}]
        pools[f"pool{number}"] = {"kind": "credit_pool", "obligors": [obligor | {"loadings": loadings}]}
    economy = {"economy": law("normal", mean=0.0, standard_deviation=1.0)}
    losses = factor_model(economy, pools, scenarios=SCENARIOS)
    nodes, weights = np.polynomial.legendre.leggauss(200)
    nodes, weights = 9.0 * nodes, 9.0 * weights * np.exp(-0.5 * (9.0 * nodes) ** 2) / math.sqrt(2.0 * math.pi)
    size = 512
    turns = np.exp(-2j * np.pi * np.arange(size // 2 + 1) / size)
    factors = []
    for count, exposure, pd, weight in GROUPS:
        chance = special.ndtr((special.ndtri(pd) - weight * nodes) / math.sqrt(1.0 - weight**2))[:, None]
        factors.append((count, exposure, chance, 1.0 + chance * (turns**exposure - 1.0)))
    whole = np.prod([one**count for count, _, _, one in factors], axis=0)
    masses = np.fft.irfft(weights @ whole, n=size)
    partial = np.stack(
        [
            np.fft.irfft(weights @ (count * exposure * chance * turns**exposure * whole / one), n=size)
            for count, exposure, chance, one in factors
        ]
    )
    assert masses.sum() == pytest.approx(1.0, abs=1e-12)
    assert_lattice(losses, masses, partial)


@pytest.mark.parametrize("row", rows("e_onefactor_finite_portfolio"), ids=lambda row: "-".join(list(row.values())[:4]))
def test_equal_obligors(row):
    pd, weight, level = float(row["pd"]), math.sqrt(float(row["rho"])), float(row["level"])
    obligor = {"count": int(row["n"]), "exposure": 1.0, "default_probability": pd, "loss_given_default": 1.0}
    pool = {"kind": "credit_pool", "obligors": [obligor | {"loadings": [{"factor": "economy", "weight": weight}]}]}
    economy = {"economy": law("normal", mean=0.0, standard_deviation=1.0)}
    losses = factor_model(economy, {"pool": pool}, scenarios=SCENARIOS)
    first, second = allocated(losses, var(level), es(level)).allocations
    assert abs(first.total.value - float(row["var_defaults"])) <= FALSE_ALARM * (first.total.standard_error or 0.0)
    assert_near(second.total, float(row["es_defaults"]))


CLAIMS = {1.0: 0.6, 2.0: 0.3, 7.0: 0.1}
COUNTS = (
    (law("poisson", mean=2.5), lambda z: np.exp(2.5 * (z - 1.0)), lambda _: 2.5),
    (law("binomial", trials=12, probability=0.3), lambda z: (0.7 + 0.3 * z) ** 12, lambda z: 3.6 / (0.7 + 0.3 * z)),
    (
        law("negative_binomial", mean=2.0, variance=6.0),  # r = 1, β = 2
        lambda z: 1.0 / (1.0 - 2.0 * (z - 1.0)),
        lambda z: 2.0 / (1.0 - 2.0 * (z - 1.0)),
    ),
)


def test_independent_sums_of_whole_claims():
    """Oracle: generating functions P(z) on a circle, E[X_i; S = s] from z P_i'(z)/P_i(z) = (ln P_i)'(f) z f'(z)."""
    severity = law("empirical", values=list(CLAIMS), probabilities=list(CLAIMS.values()))
    book = {f"sum{number}": compound(frequency, severity) for number, (frequency, _, _) in enumerate(COUNTS)}
    size = 1024
    turns = np.exp(-2j * np.pi * np.arange(size // 2 + 1) / size)
    claim = sum(p * turns**x for x, p in CLAIMS.items())
    grown = sum(p * x * turns**x for x, p in CLAIMS.items())
    whole = np.prod([generated(claim) for _, generated, _ in COUNTS], axis=0)
    masses = np.fft.irfft(whole, n=size)
    partial = np.stack([np.fft.irfft(whole * slope(claim) * grown, n=size) for _, _, slope in COUNTS])
    assert_lattice(factor_model({}, book, scenarios=SCENARIOS), masses, partial)


SUMS = ((4.0, 0.0, 1.0, 1.0, 6.0), (1.5, 0.6, 0.8, 2.0, None), (0.3, 1.0, 1.2, 5.0, 40.0))
"""Mean number of claims, mu and sigma of a lognormal claim, attachment and limit of the layer on each."""


def test_independent_sums_of_layered_lognormal_claims():
    """Oracle: Fourier transform of claims put on a grid so that every cell keeps its mass and mean.

    The grid of 0.02 moves a tail mean by about grid²/24 times the density's curvature, far below the errors here.
    """
    width, size = 0.02, 1 << 15
    edges = width * np.arange(size + 1)
    book, phases, slopes = {}, [], []
    for number, (mean, mu, sigma, attachment, limit) in enumerate(SUMS):
        layer = step("layer", attachment=attachment, **({} if limit is None else {"limit": limit}))
        severity = law("lognormal", mu=mu, sigma=sigma)
        book[f"layer{number}"] = compound(law("poisson", mean=mean), severity, claim_cover=[layer])
        # E[min(Y, w)] of Y = min((X - a)+, l): E[min(X, a + min(w, l))] - E[min(X, a)]
        limited = _limited_mean(attachment + np.minimum(edges, math.inf if limit is None else limit), mu, sigma)
        limited = limited - limited[0]
        masses = np.empty(size)
        masses[0] = 1.0 - limited[1] / width
        masses[1:] = (2.0 * limited[1:-1] - limited[:-2] - limited[2:]) / width
        phases.append(mean * (np.fft.rfft(masses) - masses.sum()))
        slopes.append(mean * np.fft.rfft(masses * edges[:-1]))
    whole = np.exp(np.sum(phases, axis=0))
    masses = np.fft.irfft(whole, n=size)
    partial = np.stack([np.fft.irfft(whole * slope, n=size) for slope in slopes])
    answer = allocated(factor_model({}, book, scenarios=SCENARIOS), var(0.99), es(0.99))
    q, shortfall = lattice_figures(masses, partial, 0.99)
    first, second = answer.allocations
    assert_near(first.total, width * q)
    for row, wanted in zip(first.sub_portfolios, partial[:, q] / masses[q], strict=True):
        assert_near(row.contribution, wanted)
    assert_allocation(second, shortfall)


def _limited_mean(amounts, mu, sigma):
    """Return E[min(X, amount)] of a lognormal X."""
    with np.errstate(divide="ignore"):
        score = (np.log(amounts) - mu) / sigma
    below = math.exp(mu + 0.5 * sigma**2) * special.ndtr(score - sigma)
    return below + amounts * special.ndtr(-score)


@pytest.mark.parametrize(
    "row",
    [row for row in rows("i_compound_continuous") if row["model"] == "geometric-exponential"],
    ids=lambda row: f"{row['parameters']}-{row['level']}",
)
def test_geometric_sums_of_exponential_claims(row):
    mean, size = (float(part.partition("=")[2]) for part in row["parameters"].split(";"))
    frequency = law("negative_binomial", mean=mean, variance=mean * (1.0 + mean))
    book = {"sum": compound(frequency, law("exponential", mean=size))}
    level = float(row["level"])
    first, second = allocated(factor_model({}, book, scenarios=SCENARIOS), var(level), es(level)).allocations
    assert_near(first.total, float(row["var"]))
    assert_near(second.total, float(row["es"]))


LEAST_HITS = 200  # scenarios that reach a layer: with far fewer an error of 4 standard errors is not that rare
LAYERED = {
    "lomax": ("shape", "scale"),
    "pareto": ("shape", "scale"),
    "lognormal": ("mu", "sigma"),
    "exponential": ("mean",),
    "gamma": ("shape", "scale"),
    "weibull": ("shape", "scale"),
}


def test_layers_of_known_laws():
    """All layers of the file in one book of independent factors: each mean within 4 errors."""
    marginals, book, truths = {}, {}, []
    reached = [row for row in rows("i_layers") if float(row["prob_claim_exceeds_attachment"]) * SCENARIOS > LEAST_HITS]
    for number, row in enumerate(reached):
        family = row["severity"].replace("pareto1", "pareto")
        fields = dict(zip(LAYERED[family], map(float, row["parameters"].split(";")), strict=True))
        marginals[f"f{number}"] = law(family, **fields)
        layer = step("layer", attachment=float(row["attachment"]), limit=float(row["limit"]))
        book[f"s{number}"] = {"components": [linear(**{f"f{number}": 1.0})], "cover": [layer]}
        truths.append(float(row["expected_layer_loss_per_claim"]))
    # the range value at risk from 0 to 1 is the mean
    mean = {"kind": "range_value_at_risk", "lower_level": 0.0, "upper_level": 1.0}
    answer = answered("measures", {"losses": factor_model(marginals, book, scenarios=SCENARIOS), "measures": [mean]})
    for one, truth in zip(answer.measures[0].stand_alone, truths, strict=True):
        assert_near(one.figure, truth)


def _both_beyond(df, correlation, probability):
    """Return P(T1 > t, T2 > t) where each has this probability; given T1 the other is a t with df + 1."""
    t = -float(special.stdtrit(df, probability))
    constant = special.gamma((df + 1.0) / 2.0) / (math.sqrt(df * math.pi) * special.gamma(df / 2.0))

    def integrand(u):  # T1 = t/u
        x = t / u
        spread = math.sqrt((1.0 - correlation**2) * (df + x * x) / (df + 1.0))
        density = constant * (1.0 + x * x / df) ** (-(df + 1.0) / 2.0)
        return density * special.stdtr(df + 1.0, -(t - correlation * x) / spread) * t / u**2

    return integrate.quad(integrand, 0.0, 1.0, epsrel=1e-10)[0]


@pytest.mark.parametrize(
    "row",
    [row for row in rows("l_t_tail_dependence") if row["rho"] in ("0", "0.5")],
    ids=lambda row: f"{row['df']}-{row['rho']}",
)
def test_tail_dependence_of_the_t_copula(row):
    """Two events of probability 0.001: what a layer above the first of them pays is their joint probability."""
    df, correlation, rare = float(row["df"]), float(row["rho"]), 0.001
    assert _both_beyond(df, correlation, 1e-12) / 1e-12 == pytest.approx(float(row["lambda"]), rel=0.02, abs=1e-3)
    event = law("empirical", values=[0.0, 1.0], probabilities=[1.0 - rare, rare])
    both = {"components": [linear(x=1.0, y=1.0)], "cover": [step("layer", attachment=1.0)]}
    copula = law("student_t", correlation=equal(correlation), df=df)
    losses = factor_model({"x": event, "y": event}, {"both": both}, dependence=copula, scenarios=5 * SCENARIOS)
    answer = answered("measures", {"losses": losses, "measures": [var(0.5)], "include_stand_alone": False})
    assert_near(answer.expected_loss, _both_beyond(df, correlation, rare))
