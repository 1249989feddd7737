"""Rounded numbers and names in words."""

import pytest

from service.representations.wording import (
    Amounts,
    brief,
    level_words,
    measure_words,
    odds,
    percent,
    probability,
    shortened,
    width,
)


@pytest.mark.parametrize(
    ("values", "currency", "shown", "unit"),
    [
        ([1234.5678, 2.0], "EUR", "1,234.6", "EUR"),
        ([12_345_678.0], "EUR", "12.346", "million EUR"),
        ([12_345_678.5], "EUR thousand", "12,345,678", "EUR thousand"),
        ([12_345_678_901.0], "EUR thousand", "12.346", "billion × EUR thousand"),
        ([-9.87e12], None, "-9,870.0", "billion"),
        ([5e-7], "BTC", "500.00", "1e-9 BTC"),
        ([100.0, 7.0], None, "100", ""),
        ([0.0], "EUR", "0", "EUR"),
        ([-1e-9, 1e6 + 0.5], "EUR", "0", "EUR"),
        ([3e40], "EUR", "30.000", "1e39 EUR"),
    ],
)
def test_amounts_have_one_unit_and_five_digits(values, currency, shown, unit):
    amounts = Amounts.of(values, currency)
    assert amounts.text(values[0]) == shown
    assert amounts.unit == unit


@pytest.mark.parametrize(
    ("value", "power", "shown"),
    [
        (1_610_282.0, 6, "1.6103"),
        (0.0, 6, "0"),
        (0.012, 6, "0.000000012"),
        (3e7, 0, "30,000,000"),
        (5e-9, 0, "0.000000005"),
    ],
)
def test_amounts_in_the_unit_of_others(value, power, shown):
    amounts = Amounts.of([value], "EUR", power=power)
    assert amounts.text(value) == shown
    assert amounts.unit == ("million EUR" if power else "EUR")


def test_what_is_missing_is_a_dash():
    assert Amounts.of([None, 1.0], None).text(None) == "–"
    assert percent(None) == "–"


def test_percentages_and_odds():
    assert percent(-0.00004) == "0.0 %"
    assert percent(0.1234) == "12.3 %"
    assert [probability(one) for one in (1.0, 0.05, 0.00123, 1e-6, 0.0)] == [
        "100 %", "5 %", "0.12 %", "0.0001 %", "0 %",
    ]  # fmt: skip
    assert [odds(one) for one in (0.95, 0.9, 0.999, 0.123456789)] == [
        "95 of 100", "90 of 100", "999 of 1,000", "12.3456789 %",
    ]  # fmt: skip
    assert level_words(0.995) == "99.5 %"
    assert level_words(0.9) == "90 %"


@pytest.mark.parametrize(
    ("name", "words"),
    [
        ("expected_shortfall 0.995", "expected shortfall 99.5 %"),
        ("value_at_risk 0.99 above mean", "value at risk 99 % above the mean"),
        ("standard_deviation 1", "standard deviation"),
        ("standard_deviation 2", "2 × standard deviation"),
        ("standard_deviation", "standard deviation"),
        ("return_level 200", "loss of once in 200 periods"),
        ("return_level 2 12 above mean", "loss of once in 2 periods of 12 scenarios above the mean"),
        ("return_level as last year", "return level as last year"),
        ("my_own label", "my_own label"),
        ("expected_shortfall of the year", "expected shortfall of the year"),
    ],
)
def test_names_of_measures(name, words):
    assert measure_words(name) == words


def test_names_in_brief():
    names = ("value at risk 99.5 %", "2 × standard deviation", "loss of once in 200 periods", "wang 0.5")
    assert [brief(one) for one in names] == ["VaR 99.5 %", "2 × SD", "once in 200 periods", "wang 0.5"]


def test_long_names_are_cut_to_the_room():
    name = "quay property and warehouses of the northern harbour"
    cut = shortened(name, 120.0, 12.0)
    assert cut.endswith("…")
    assert width(cut, 12.0) <= 120.0
    assert shortened("short", 120.0, 12.0) == "short"
    assert width("日本", 10.0) == 20.0
