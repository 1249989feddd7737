"""Sums of claims and layers.

Sources: the recursion of Panjer (Recursive evaluation of a family of compound distributions, ASTIN Bulletin
12(1), 1981, 22-26); the Poisson(0.8) example of Bowers et al., Actuarial Mathematics, 2nd edition, 1997, chapter
12 (recalled, and recomputed); all other figures are our own evaluations with 20 to 80 digits of the recursion, of
gamma mixtures and of limited expected values, each confirmed by direct convolution or quadrature (mark: own).
"""

import math
from itertools import groupby

import numpy as np
import pytest

from service.risk.components import (
    BinomialFrequency,
    CompoundComponent,
    NegativeBinomialFrequency,
    PoissonFrequency,
)
from service.risk.covers import LayerCover, covered
from service.risk.marginals import (
    EmpiricalMarginal,
    ExponentialMarginal,
    GammaMarginal,
    LognormalMarginal,
    LomaxMarginal,
    ParetoMarginal,
    WeibullMarginal,
)
from tests.reference.laws import rows
from tests.unit.risk.blocks import GivenBlock, assert_mean, losses, normal_factors

FACTORS = normal_factors("a")
NB = NegativeBinomialFrequency(family="negative_binomial", mean=3.0, variance=7.5)  # r = 2, β = 1.5
FREQUENCIES = {
    "poisson(0.8)": PoissonFrequency(family="poisson", mean=0.8),
    "poisson(2)": PoissonFrequency(family="poisson", mean=2.0),
    "poisson(2)_zero_mass": PoissonFrequency(family="poisson", mean=2.0),
    "negbin(r=2;beta=1.5)": NB,
    "negbin(r=2;beta=1.5)_zero_mass": NB,
    "binomial(10;0.2)": BinomialFrequency(family="binomial", trials=10, probability=0.2),
}
TABLES = [
    pytest.param(*name, list(found), id=name[0])
    for name, found in groupby(rows("i_panjer"), lambda row: (row["frequency"], row["severity"]))
]


def claims_of(severity):
    pairs = [pair.split(":") for pair in severity.split("|")]
    values, probabilities = ([float(pair[place]) for pair in pairs] for place in (0, 1))
    return EmpiricalMarginal(family="empirical", values=values, probabilities=probabilities)


@pytest.mark.parametrize(("frequency", "severity", "expected"), TABLES)
def test_panjer_tables(frequency, severity, expected):
    component = CompoundComponent(kind="compound", frequency=FREQUENCIES[frequency], severity=claims_of(severity))
    law = component.law_of_sum
    assert law.stepped
    masses = dict(zip(law.amounts.tolist(), np.diff(law.probabilities, prepend=0.0), strict=True))
    for row in expected:
        assert masses.get(float(row["s"]), 0.0) == pytest.approx(float(row["pmf"]), abs=1e-9)


@pytest.mark.parametrize("row", rows("i_compound_continuous"), ids=lambda row: f"{row['parameters']}-{row['level']}")
def test_sums_of_exponential_claims(row):
    """Value at risk within 1e-6, and enclosed by the bounds; expected shortfall by the mean of the quantiles beyond."""
    numbers = {name: float(number) for name, number in (one.split("=") for one in row["parameters"].split(";"))}
    if row["model"] == "geometric-exponential":
        b = numbers["mean_count"]
        frequency = NegativeBinomialFrequency(family="negative_binomial", mean=b, variance=b * (1.0 + b))
    else:
        frequency = PoissonFrequency(family="poisson", mean=numbers["lambda"])
    severity = ExponentialMarginal(family="exponential", mean=numbers["severity_mean"])
    law = CompoundComponent(kind="compound", frequency=frequency, severity=severity).law_of_sum
    level, var = float(row["level"]), float(row["var"])
    assert law.quantile(np.array([level]))[0] == pytest.approx(var, rel=1e-6)
    bound = next((one for one in law.bounds if one.probability == level), None)
    assert bound is None or bound.lower <= var <= bound.upper
    nodes, weights = np.polynomial.legendre.leggauss(24)
    depths = 0.5 * (nodes + 1.0) + np.arange(0.0, 26.0)[:, None]  # probability beyond: (1 - level) exp(-depth)
    beyond = (1.0 - level) * np.exp(-depths)
    mean = np.sum(0.5 * weights * np.exp(-depths) * law.quantile(1.0 - beyond))
    assert mean == pytest.approx(float(row["es"]), rel=1e-6)


def severity_of(row):
    name, numbers = row["severity"], [float(number) for number in row["parameters"].split(";")]
    members = {
        "lomax": (LomaxMarginal, ("shape", "scale")),
        "pareto1": (ParetoMarginal, ("shape", "scale")),
        "lognormal": (LognormalMarginal, ("mu", "sigma")),
        "exponential": (ExponentialMarginal, ("mean",)),
        "gamma": (GammaMarginal, ("shape", "scale")),
        "weibull": (WeibullMarginal, ("shape", "scale")),
    }
    member, fields = members[name]
    family = {"pareto1": "pareto"}.get(name, name)
    return member(family=family, **dict(zip(fields, numbers, strict=True)))


LAYERS = rows("i_layers")


@pytest.mark.parametrize("row", LAYERS, ids=lambda row: f"{row['severity']}-{row['parameters']}-{row['attachment']}")
def test_expected_layer_losses(row):
    """The layer's closed form, and the mean of the mapped quantile function (10⁶ midpoints of equal probability)."""
    severity = severity_of(row)
    attachment, limit = float(row["attachment"]), float(row["limit"])
    expected = float(row["expected_layer_loss_per_claim"])
    found = severity.limited_mean(attachment + limit) - severity.limited_mean(attachment)
    assert found == pytest.approx(expected, rel=1e-10, abs=1e-10 * float(row["lev_exhaustion"]))
    beyond = float(severity.beyond(np.array([attachment]))[0])
    assert beyond == pytest.approx(float(row["prob_claim_exceeds_attachment"]), rel=1e-11)
    layer = LayerCover(kind="layer", attachment=attachment, limit=limit)
    upper = beyond * (np.arange(20_000) + 0.5) / 20_000
    paid = covered([layer], severity.quantile(1.0 - upper, upper))
    assert beyond * paid.mean() == pytest.approx(expected, rel=1e-3)


@pytest.mark.parametrize(
    "row", LAYERS[::3], ids=lambda row: f"{row['severity']}-{row['parameters']}-{row['attachment']}"
)
def test_simulated_layers_have_their_expected_loss(row):
    """Within 4 standard errors (false alarm 6e-5 each); a Lomax claim of shape 1 has no mean, its layer has one."""
    probability = float(row["prob_claim_exceeds_attachment"])
    mean = min(2.0 / probability, 50.0)
    component = CompoundComponent(
        kind="compound",
        frequency=PoissonFrequency(family="poisson", mean=mean),
        severity=severity_of(row),
        claim_cover=[LayerCover(kind="layer", attachment=float(row["attachment"]), limit=float(row["limit"]))],
    )
    assert component.tails(FACTORS).upper_index == math.inf
    found = losses(component, FACTORS, GivenBlock(np.zeros((1, 10_000))))
    assert_mean(found, mean * float(row["expected_layer_loss_per_claim"]))
