"""Factor models, and the plain script that simulates the same."""

from functools import lru_cache
from typing import Literal

import numpy as np
from numpy.typing import NDArray

from service.risk.components import FactorExposure, LinearComponent
from service.risk.components.portfolio import SubPortfolioTerms
from service.risk.copulas import CopulaFamily, GaussianCopula, StudentTCopula
from service.risk.correlation import MatrixCorrelation
from service.risk.factors import FactorModel
from service.risk.loss_table import SubPortfolio
from service.risk.marginals import GammaMarginal, LognormalMarginal, MarginalLaw
from service.risk.simulation import Plan

Array = NDArray[np.float64]
Case = Literal["gaussian, lognormal", "gaussian, gamma", "student_t, gamma"]

CASES: tuple[Case, ...] = ("gaussian, lognormal", "gaussian, gamma", "student_t, gamma")
DF = 4.0
SHAPE = 2.0
LAWS: dict[str, MarginalLaw] = {
    "lognormal": LognormalMarginal(family="lognormal", mu=0.0, sigma=1.0),
    "gamma": GammaMarginal(family="gamma", shape=SHAPE, scale=1.0),
}


@lru_cache(maxsize=4)
def correlations(count: int) -> Array:
    """Return a correlation matrix without structure, shape (count, count)."""
    loadings = 0.3 * np.random.default_rng(1).standard_normal((count, count))
    covariance = loadings @ loadings.T + np.eye(count)
    sizes = np.sqrt(np.diag(covariance))
    matrix = covariance / np.outer(sizes, sizes)
    matrix = (matrix + matrix.T) / 2.0
    np.fill_diagonal(matrix, 1.0)
    return matrix


def plan(case: Case, count: int, scenarios: int) -> Plan:
    """Return the simulation of `count` factors, each of them one sub-portfolio."""
    copula, family = case.split(", ")
    form = MatrixCorrelation(kind="matrix", values=correlations(count).tolist())
    dependence: CopulaFamily = (
        GaussianCopula(family="gaussian", correlation=form)
        if copula == "gaussian"
        else StudentTCopula(family="student_t", correlation=form, df=DF)
    )
    names = [f"unit{number}" for number in range(count)]
    terms = [
        SubPortfolioTerms(name, (LinearComponent(kind="linear", exposures=[FactorExposure(factor=name, amount=1.0)]),))
        for name in names
    ]
    model = FactorModel.of([(name, LAWS[family]) for name in names], dependence, terms)
    return Plan.random(model, seed=1, scenarios=scenarios)


def columns(count: int) -> tuple[SubPortfolio, ...]:
    """Return the sub-portfolios of a plan."""
    return tuple(SubPortfolio(f"unit{number}", {}) for number in range(count))


def script(case: Case, count: int, scenarios: int) -> Array:
    """Return losses of the same law as an analyst would draw them: correlated scores, a CDF, a quantile function."""
    from scipy import stats  # noqa: TID251  # the script that tailrace is measured against uses it

    rng = np.random.default_rng(1)
    scores = rng.multivariate_normal(np.zeros(count), correlations(count), size=scenarios)
    if case == "student_t, gamma":
        mixing = rng.chisquare(DF, scenarios) / DF
        uniforms = stats.t.cdf(scores / np.sqrt(mixing)[:, None], DF)
    else:
        uniforms = stats.norm.cdf(scores)
    return stats.lognorm.ppf(uniforms, 1.0) if case == "gaussian, lognormal" else stats.gamma.ppf(uniforms, SHAPE)
