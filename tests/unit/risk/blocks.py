"""A block of scenarios whose factors are given, and what a component makes of it."""

import numpy as np
from numpy.random import Generator, Philox
from scipy import special

from service.risk.components import FactorSet
from service.risk.copulas import GaussianCopula, IndependentCopula
from service.risk.correlation import MatrixCorrelation
from service.risk.marginals import NormalMarginal

FALSE_ALARM = 4.0  # standard errors; a correct mean is beyond with probability 6e-5


class GivenBlock:
    """Factors of shape (k, n), as values and as normal scores, and one stream."""

    def __init__(self, factors, seed=1):
        self.factors = np.atleast_2d(np.asarray(factors, dtype=float))
        self.scenarios = self.factors.shape[1]
        self.generator = Generator(Philox(seed))

    def values(self, columns):
        return self.factors[columns]

    normal_scores = values

    def pause(self):
        """Go on."""

    def uniform(self, column):
        return special.ndtr(self.factors[column])


def losses(component, factors, block):
    component.check(factors)
    out = np.full(block.scenarios, np.nan)
    component.prepared(factors).losses(block, out)
    return out


def normal_factors(*ids, correlation=None, **marginal):
    """Independent standard normal factors, or correlated ones."""
    fields = {"mean": 0.0, "standard_deviation": 1.0} | marginal
    laws = tuple(NormalMarginal(family="normal", **fields) for _ in ids)
    if correlation is None:
        copula = IndependentCopula(family="independent")
    else:
        form = MatrixCorrelation(kind="matrix", values=[list(row) for row in correlation])
        copula = GaussianCopula(family="gaussian", correlation=form)
    return FactorSet(ids, laws, copula, copula.prepared(ids))


def assert_mean(draws, expected):
    error = draws.std() / draws.size**0.5
    assert abs(draws.mean() - expected) < FALSE_ALARM * error
