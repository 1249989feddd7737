"""What a person probably meant by a name that is not known here: a word of the trade, or one that looks alike."""

from collections.abc import Iterable, Mapping
from difflib import get_close_matches

MOST_NAMED = 40  # names in a list of those that are known

TRADE_WORDS: Mapping[str, str] = {
    "var": "value_at_risk",
    "quantile": "value_at_risk",
    "percentile": "value_at_risk",
    "es": "expected_shortfall",
    "cvar": "expected_shortfall",
    "tvar": "expected_shortfall",
    "avar": "expected_shortfall",
    "tce": "expected_shortfall",
    "cte": "expected_shortfall",
    "tail_var": "expected_shortfall",
    "tail_value_at_risk": "expected_shortfall",
    "conditional_value_at_risk": "expected_shortfall",
    "average_value_at_risk": "expected_shortfall",
    "conditional_tail_expectation": "expected_shortfall",
    "tail_conditional_expectation": "expected_shortfall",
    "rvar": "range_value_at_risk",
    "sd": "standard_deviation",
    "std": "standard_deviation",
    "stdev": "standard_deviation",
    "sigma": "standard_deviation",
    "volatility": "standard_deviation",
    "pml": "return_level",
    "probable_maximum_loss": "return_level",
    "confidence": "level",
    "confidence_level": "level",
    "alpha": "level",
    "gaussian": "normal",
    "normal": "gaussian",
    "t": "student_t",
    "student": "student_t",
    "mu": "mean",
    "nu": "df",
    "degrees_of_freedom": "df",
    "gpd": "generalized_pareto",
    "gev": "generalized_extreme_value",
    "constant": "point",
    "deterministic": "point",
    "discrete": "empirical",
    "nb": "negative_binomial",
    "nbinom": "negative_binomial",
    "pro_rata": "proportional_stand_alone",
    "proportional": "proportional_stand_alone",
    "incremental": "with_without",
    "marginal": "with_without",
    "gradient": "euler",
}
"""What the trade calls things, and what they are called here; it counts where that is known."""


MOST_COMPARED = 200  # names: to look for likeness takes as long as they are many
LONGEST_COMPARED = 80  # characters


def suggestion(name: str, known: Iterable[str]) -> str:
    """Return ``; did you mean 'level'?`` or nothing."""
    names = list(known)
    plain = name.strip().lower().replace("-", "_").replace(" ", "_")
    meant = [word for word in (plain, TRADE_WORDS.get(plain)) if word in names]
    few = len(names) <= MOST_COMPARED and len(name) <= LONGEST_COMPARED
    close = meant or (get_close_matches(name, names, n=1) if few else [])
    return f"; did you mean '{close[0]}'?" if close else ""


def hint(name: str, known: Iterable[str]) -> str:
    """Return a suggestion or, where nothing comes near, ``; known here: storm, hull``."""
    names = list(known)
    more = f" and {len(names) - MOST_NAMED} more" if len(names) > MOST_NAMED else ""
    return suggestion(name, names) or f"; known here: {', '.join(names[:MOST_NAMED]) or 'none'}{more}"
