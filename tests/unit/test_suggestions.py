"""What a person probably meant by a name that is not known here."""

from typing import get_args

import pytest

from service.risk.copulas import TYPICAL as COPULAS
from service.risk.marginals import TYPICAL as MARGINALS
from service.risk.measures import TYPICAL as MEASURES
from service.schemas.requests import Rule
from service.suggestions import MOST_NAMED, TRADE_WORDS, hint, suggestion

KINDS = [one.kind for one in MEASURES]
FAMILIES = [one.family for one in MARGINALS]


def test_only_if_close():
    assert suggestion("lvel", ["level", "kind"]) == "; did you mean 'level'?"
    assert suggestion("zzz", ["level"]) == ""


@pytest.mark.parametrize(
    ("word", "known", "meant"),
    [
        ("VaR", KINDS, "value_at_risk"),
        ("Value at Risk", KINDS, "value_at_risk"),
        ("es", KINDS, "expected_shortfall"),
        ("CVaR", KINDS, "expected_shortfall"),
        ("TVaR", KINDS, "expected_shortfall"),
        ("tail-VaR", KINDS, "expected_shortfall"),
        ("gaussian", FAMILIES, "normal"),
        ("normal", [one.family for one in COPULAS], "gaussian"),
        ("t", FAMILIES, "student_t"),
        ("pro rata", get_args(Rule), "proportional_stand_alone"),
        ("sigma", ["mean", "standard_deviation"], "standard_deviation"),
        ("STORM", ["hull", "storm"], "storm"),
    ],
)
def test_words_of_the_trade(word, known, meant):
    assert suggestion(word, known) == f"; did you mean '{meant}'?"


def test_every_word_of_the_trade_is_plain():
    assert all(word == word.lower() and " " not in word and "-" not in word for word in TRADE_WORDS)


def test_what_comes_near_nothing_gets_the_list():
    assert hint("strom", ["hull", "storm"]) == "; did you mean 'storm'?"
    assert hint("zzz", ["hull", "storm"]) == "; known here: hull, storm"
    assert hint("zzz", []) == "; known here: none"
    many = [f"line_{number}" for number in range(MOST_NAMED + 2)]
    assert hint("zzz", many).endswith(f"line_{MOST_NAMED - 1} and 2 more")
