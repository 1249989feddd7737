"""How the scenarios of the demonstration were made up: ``python -m service.demo.invent`` writes them again."""

from collections.abc import Mapping
from pathlib import Path

import numpy as np
from numpy.typing import NDArray

SCENARIOS = 10_000
SEED = 1874  # the year in which, in our story, the mutual was founded
SURGE = 1.1  # normal score of the gale from which on the quay is flooded
DEFAULT = -2.3  # normal score of the market below which a counterparty of the treasury fails


def losses() -> Mapping[str, NDArray[np.float64]]:
    """Return one year's losses of each sub-portfolio in thousands of euros, rounded to a whole thousand.

    One gale factor drives storm, quay and ferry; the treasury book loses when rates rise and spreads widen,
    and spreads widen a little in bad harbour years.
    """
    rng = np.random.Generator(np.random.Philox(SEED))
    gale = rng.standard_normal(SCENARIOS)
    market = -0.25 * gale + np.sqrt(1.0 - 0.25**2) * rng.standard_normal(SCENARIOS)

    def driven(by: NDArray[np.float64], loading: float) -> NDArray[np.float64]:
        return loading * by + float(np.sqrt(1.0 - loading**2)) * rng.standard_normal(SCENARIOS)

    def claims(mean: float, shape: float, scale: float, most: float) -> NDArray[np.float64]:
        counts = rng.poisson(mean * np.exp(0.3 * gale - 0.045))
        sizes = np.minimum(scale * rng.pareto(shape, counts.sum()), most)
        return np.bincount(np.repeat(np.arange(SCENARIOS), counts), sizes, SCENARIOS).astype(np.float64)

    table = {
        "ferry_hull": claims(3.0, 2.4, 600.0, 25_000.0),
        "ferry_liability": claims(1.2, 1.9, 450.0, 40_000.0),
        "cargo": np.exp(8.2 + 0.35 * driven(gale, 0.2)),
        "quay_property": np.where(driven(gale, 0.5) > SURGE, 2_500.0 * rng.pareto(2.2, SCENARIOS) + 800.0, 0.0),
        "storm": np.maximum(np.exp(6.6 + 1.25 * driven(gale, 0.85)) - 900.0, 0.0),
        "rates_book": -2_600.0 * driven(market, 0.6) - 400.0,
        "credit_book": -1_900.0 * driven(market, 0.8) + 900.0 * (driven(market, 0.7) < DEFAULT) - 300.0,
    }
    return {name: np.round(column) + 0.0 for name, column in table.items()}


def csv() -> str:
    """Return the table as CSV with a header line."""
    table = losses()
    lines = [",".join(table)]
    lines += [",".join(f"{value:.0f}" for value in row) for row in np.column_stack(list(table.values()))]
    return "\r\n".join(lines) + "\r\n"


if __name__ == "__main__":
    (Path(__file__).parent / "ternholm.csv").write_bytes(csv().replace("-0,", "0,").encode())
