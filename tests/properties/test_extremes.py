"""Whatever is allowed is answered in every form or refused in words, however extreme it is: never a failure."""

import json
import warnings
from itertools import product

import pytest

from service import calculate, intake, problems
from service.errors import CallerError
from service.executors import Work
from service.representations import formats
from service.schemas.requests import Rule
from service.settings import Settings

SETTINGS = Settings()
LEVELS = (5e-324, 1e-16, 0.5, 0.995, 1 - 1e-15)
SIZES = (5e-324, 1e-300, 1e-9, 1.0, 37.5, 1e150, 1.7e308)
PERIODS = ((1e-3, 1.7e308), (1e9, 1e300), (1.5, 1.0), (1e150, 1.0))
MEASURES = [
    *(
        {"kind": kind, "level": level}
        for kind in ("value_at_risk", "expected_shortfall", "expectile")
        for level in LEVELS
    ),
    *({"kind": "range_value_at_risk", "lower_level": 5e-324, "upper_level": level} for level in LEVELS[1:]),
    *({"kind": "standard_deviation", "multiple": size} for size in SIZES),
    *({"kind": "wang", "shift": size} for size in (0.0, *SIZES)),
    *({"kind": "proportional_hazard", "exponent": level} for level in LEVELS),
    *({"kind": "dual_power", "exponent": size} for size in SIZES[3:]),
    *({"kind": kind, "aversion": size} for kind in ("exponential_distortion", "entropic") for size in SIZES),
    *({"kind": "return_level", "return_period": years, "scenarios_per_period": each} for years, each in PERIODS),
]
TABLES = {
    "usual": [[1, 2], [3, -1], [5, 6], [0, 0.5], [2, 2]],
    "denormal": [[5e-324, 0], [0, 5e-324], [1e-310, 0]],
    "large": [[1e149, 1], [-1e149, 2], [1, 3]],
    "constant": [[1, 1], [1, 1]],
    "single": [[1, 2]],
}
AMOUNTS = (5e-324, 1.0, 1.7e308, -1.7e308)


def ask(calculation, document):
    """Answer in JSON and CSV, or refuse."""
    body = json.dumps(document).encode()
    try:
        taken = intake.read(calculation, body, content_type=intake.JSON, parameters=(), settings=SETTINGS)
        answer = calculate.answer(taken, Work(), SETTINGS, problems.describe)
    except CallerError:
        return
    for form in formats.FORMATS.values():
        formats.write(answer, form)


def losses_of(values, **more):
    columns = [{"id": "hull", "expected_profit": 1}, {"id": "quay"}]
    return {"kind": "scenarios", "sub_portfolios": columns, "values": values, **more}


@pytest.mark.parametrize("above", ["zero", "mean"])
@pytest.mark.parametrize("table", TABLES)
def test_measures_at_their_limits(table, above):
    losses = losses_of(TABLES[table])
    after = {**losses, "sub_portfolios": [{"id": "hull"}, {"id": "storm"}]}
    candidate = {"id": "cargo", "values": [1.0] * len(TABLES[table])}
    with warnings.catch_warnings():
        warnings.simplefilter("ignore", RuntimeWarning)  # overflow on the way to a refusal is no failure
        for given in MEASURES:
            measure = given if given["kind"] == "standard_deviation" else {**given, "above": above}
            for rule in Rule.__args__:
                ask("allocations", {"losses": losses, "measures": [measure], "rules": [rule]})
            ask("increments", {"losses": losses, "measures": [measure], "candidates": [candidate]})
            ask("comparisons", {"before": losses, "after": after, "measures": [measure]})


def test_amounts_at_their_limits():
    measure = {"kind": "expected_shortfall", "level": 0.5}
    for profit, other, amount in product(AMOUNTS, repeat=3):
        losses = losses_of(TABLES["usual"])
        losses["sub_portfolios"] = [
            {"id": "hull", "attributes": {"line": "sea"}, "expected_profit": profit},
            {"id": "quay", "attributes": {"line": "sea"}, "expected_profit": other},
        ]
        document = {"losses": losses, "measures": [measure]}
        capital = {"capital": amount} if amount > 0.0 else {}
        ask("allocations", {**document, "group_by": ["line"], "rules": list(Rule.__args__), **capital})
        candidate = {"id": "cargo", "values": [9.0, -3.0, 4.0, 1.0, 0.0], "expected_profit": profit}
        terms = {"hurdle_rate": amount, "cost_of_capital": abs(other), "capital_limit": amount}
        ask("increments", {**document, "candidates": [candidate], **terms})


@pytest.mark.parametrize("coverage", [5e-324, 1e-300, 1 - 1e-15])
@pytest.mark.parametrize("table", TABLES)
def test_coverage_at_its_limits(table, coverage):
    measures = [{"kind": "expected_shortfall", "level": 0.5}, {"kind": "value_at_risk", "level": 0.5}]
    document = {"losses": losses_of(TABLES[table]), "measures": measures, "interval_coverage": coverage}
    ask("measures", document)
    ask("allocations", {**document, "rules": list(Rule.__args__)})


def test_the_asking_reaches_the_arithmetic(monkeypatch):
    def fail(*_):
        raise ZeroDivisionError

    monkeypatch.setattr(calculate, "answer", fail)
    with pytest.raises(ZeroDivisionError):
        ask("measures", {"losses": losses_of(TABLES["usual"]), "measures": [MEASURES[0]]})
