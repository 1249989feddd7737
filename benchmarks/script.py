"""The same figures by a plain pandas script, as an analyst would write it: no errors, no intervals."""

import numpy as np
import pandas as pd

from benchmarks.books import LEVELS

NEIGHBOURS = 0.002  # share of scenarios each side of a quantile over which its contributions are averaged
LEAST_NEIGHBOURS = 5


def figures(losses: pd.DataFrame) -> dict[object, object]:
    """Return means, covariances with the total, and at each level value at risk and expected shortfall.

    Both of the total, of each column's part in them and of each column alone.
    """
    total = losses.sum(axis=1)
    ranks = total.rank()
    found: dict[object, object] = {
        "mean": losses.mean(),
        "covariance": losses.apply(lambda column: column.cov(total)),
    }
    near = max(LEAST_NEIGHBOURS, int(NEIGHBOURS * len(losses)))
    for level in LEVELS:
        quantile = total.quantile(level)
        tail = total >= quantile
        alone = losses.quantile(level)
        found[level] = {
            "value_at_risk": quantile,
            "expected_shortfall": total[tail].mean(),
            "expected_shortfall_contributions": losses[tail].mean(),
            "value_at_risk_contributions": losses[(ranks - np.ceil(level * len(losses))).abs() <= near].mean(),
            "value_at_risk_alone": alone,
            "expected_shortfall_alone": pd.Series(
                {name: losses.loc[losses[name] >= alone[name], name].mean() for name in losses}
            ),
        }
    return found
