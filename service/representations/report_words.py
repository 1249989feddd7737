"""What measures, rules and errors mean, in words that a committee reads."""

from decimal import Decimal

from service.representations.shapes import Figure, Measure
from service.representations.wording import Amounts, level_words, odds

CAUTIONS = (
    "These figures are estimates from the scenarios given; their errors are those of sampling, not of the model.",
    (
        "They are no statement of required or available capital: local rules and the responsible actuary or risk "
        "officer decide."
    ),
    "A figure far in the tail rests on few scenarios, and no scenario can show a loss that the model does not know.",
    "A contribution depends on the rule that shares the total; another rule shares it otherwise.",
)

RULES = {
    "euler": "Each part contributes what the whole would grow by if that part grew, in proportion to its size. The "
    "contributions add up to the total.",
    "proportional_stand_alone": "The total is shared in the ratio of what each part would need alone.",
    "covariance": "Each part bears its own mean, and what the total exceeds the mean by is shared in the ratio of the "
    "parts' covariances with the total.",
    "with_without": "Each part contributes what the whole would fall by if that part were left out. These "
    "contributions do not add up to the total.",
    "shapley": "Each part contributes what it adds on joining the others, averaged over the orders in which they may "
    "join. The contributions add up to the total.",
}
"""Rule to its meaning."""

OF_LEVEL = {
    "value_at_risk": "The amount that losses stay at or below with a probability of {level}.",
    "expected_shortfall": "The mean of the worst {rest} of losses.",
    "expectile": "The amount at which what losses exceed it by, weighted {level}, balances what they fall short of it "
    "by, weighted {rest}.",
}
OTHERS = {
    "standard_deviation": "How far losses usually lie from their mean, times the multiple given.",
    "entropic": "The mean loss with a surcharge that grows exponentially with the size of losses.",
}
DISTORTED = "A mean over all scenarios in which worse losses weigh more."


def measure_meaning(measure: Measure) -> str:
    """Return what a measure says."""
    numbers = measure.parameters
    level = numbers.get("level", 0.5)
    if measure.kind in ("value_at_risk", "expected_shortfall", "expectile"):
        meaning = OF_LEVEL[measure.kind].format(level=level_words(level), rest=level_words(_rest(level)))
    elif measure.kind == "range_value_at_risk":
        lower, upper = level_words(numbers["lower_level"]), level_words(numbers["upper_level"])
        meaning = f"The mean of the losses between the levels {lower} and {upper}."
    elif measure.kind == "return_level":
        meaning = f"A loss that is exceeded once in {numbers['return_period']:,.15g} periods in the long run."
    else:
        meaning = OTHERS.get(measure.kind, DISTORTED)
    if measure.above == "mean":
        return f"The excess over the expected loss of another amount, which means: {meaning[0].lower()}{meaning[1:]}"
    return meaning


def _rest(level: float) -> float:
    return float(1 - Decimal(f"{level:.15g}"))


def sampling_error(figure: Figure, amounts: Amounts) -> str:
    """Return how sure a figure is."""
    ends = figure.interval
    if ends is None:
        return "No error of sampling can be given for it; see the notes."
    between = f"{amounts.text(ends.lower)} and {amounts.text(ends.upper)}{amounts.after}"
    return (
        f"Error of sampling: between {between}. A range made this way holds the model's own figure in "
        f"{odds(ends.coverage)} repetitions of the sampling."
    )
