"""One-factor credit pools.

Sources: the risk-weight table in Annex 5 of Basel Committee, International Convergence of Capital Measurement and
Capital Standards (comprehensive version, June 2006), most of it read there, the rest recalled; finite pools are our
own mixtures of binomials over 4000 nodes of the factor, good to 1e-12 in mass and mean (mark: own).
"""

import math

import numpy as np
import pytest
from numpy.random import Generator, Philox
from scipy import special

from service.risk.components import CreditObligor, CreditPoolComponent, FactorLoading, conditional_probability
from tests.reference.laws import rows
from tests.unit.risk.blocks import FALSE_ALARM, GivenBlock, losses, normal_factors

FACTORS = normal_factors("economy")
SCENARIOS = 400_000
BLOCK = 4096

WORST = 0.999
LOW = np.array([[-special.ndtri(WORST)]])  # a low factor means default


def asset_class(name, pd):
    """Loss given default, correlation and maturity factor of paragraphs 272, 273 and 328 to 330."""
    kind, lgd = name.split("_")[:2]
    if name.startswith("other_retail"):
        kind, lgd = "other_retail", name.split("_")[2]
    maturity = 1.0
    if kind == "corporate":
        weight = -math.expm1(-50.0 * pd) / -math.expm1(-50.0)
        correlation = 0.12 * weight + 0.24 * (1.0 - weight)
        if name.endswith("turnover5"):
            correlation -= 0.04
        b = (0.11852 - 0.05478 * math.log(pd)) ** 2
        maturity = 1.0 / (1.0 - 1.5 * b)  # at 2.5 years
    elif kind == "mortgage":
        correlation = 0.15
    elif kind == "revolving":
        correlation = 0.04
    else:
        weight = -math.expm1(-35.0 * pd) / -math.expm1(-35.0)
        correlation = 0.03 * weight + 0.16 * (1.0 - weight)
    return float(lgd) / 100.0, correlation, maturity


@pytest.mark.parametrize(
    "row", rows("e_irb_risk_weights"), ids=lambda row: f"{row['asset_class_lgd']}-{row['pd_percent']}"
)
def test_published_risk_weights(row):
    """12.5 times the loss in the worst 0.1 % of the economy beyond the expected one, to 0.01 percentage point."""
    pd = float(row["pd_percent"]) / 100.0
    lgd, correlation, maturity = asset_class(row["asset_class_lgd"], pd)
    chance = conditional_probability(
        np.array([special.ndtri(pd)]), np.array([[math.sqrt(correlation)]]), np.array([math.sqrt(1 - correlation)]), LOW
    )[0, 0]
    found = 100.0 * 12.5 * lgd * (chance - pd) * maturity
    assert found == pytest.approx(float(row["risk_weight_percent_recomputed"]), rel=1e-8)
    assert found == pytest.approx(float(row["risk_weight_percent_published"]), abs=0.01)


def simulated(n, pd, correlation):
    component = CreditPoolComponent(
        kind="credit_pool",
        obligors=[
            CreditObligor(
                count=n,
                exposure=1.0,
                default_probability=pd,
                loss_given_default=1.0,
                loadings=[FactorLoading(factor="economy", weight=math.sqrt(correlation))],
            )
        ],
    )
    economy = Generator(Philox(17)).standard_normal((1, SCENARIOS))
    return losses(component, FACTORS, GivenBlock(economy, seed=23))


@pytest.mark.parametrize(
    ("n", "pd", "correlation"),
    sorted({(int(r["n"]), float(r["pd"]), float(r["rho"])) for r in rows("e_onefactor_finite_portfolio")}),
)
def test_finite_pools(n, pd, correlation):
    """Within 4 standard errors (false alarm 6e-5 each): zero defaults, variance, cdf at the quantile, tail mean."""
    defaults = simulated(n, pd, correlation)
    for row in rows("e_onefactor_finite_portfolio"):
        if (int(row["n"]), float(row["pd"]), float(row["rho"])) != (n, pd, correlation):
            continue
        level, quantile = float(row["level"]), float(row["var_defaults"])
        influence = [
            (defaults == 0.0, float(row["prob_zero_defaults"])),
            ((defaults - n * pd) ** 2, float(row["variance_defaults"])),
            (defaults <= quantile, float(row["cdf_at_var"])),
            # Rockafellar and Uryasev: q + E(L - q)+ / (1 - level) is the expected shortfall at any quantile q
            (quantile + np.maximum(defaults - quantile, 0.0) / (1.0 - level), float(row["es_defaults"])),
        ]
        for values, expected in influence:
            error = np.std(values) / math.sqrt(SCENARIOS)
            assert abs(np.mean(values) - expected) < FALSE_ALARM * error
