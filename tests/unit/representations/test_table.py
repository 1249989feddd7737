"""Tables for a person at a terminal."""

import pytest

from service.representations.table import Column, Table, text_table


def table(**columns):
    kinds = {
        name: "text" if any(isinstance(cell, str) for cell in cells) else "number" for name, cells in columns.items()
    }
    made = tuple(Column(name=name, kind=kinds[name]) for name in columns)
    return Table(made, list(zip(*columns.values(), strict=True)))


def test_texts_stand_left_and_numbers_right():
    assert text_table(table(id=["hull", None], loss=[1234567.891, -0.4], nothing=[None, None])) == (
        "id         loss\n----  ---------\nhull  1,234,568\n              0\n"
    )


@pytest.mark.parametrize(
    ("numbers", "shown"),
    [
        ([12.3456, 0.0], ["12.346", "0.000"]),
        ([0.000123456], ["0.000123"]),
        ([3.0, 1000.0], ["3", "1,000"]),
        ([0.0, -0.0], ["0", "0"]),
        ([99999.4], ["99,999"]),
        ([1e20, None], ["100,000,000,000,000,000,000", ""]),
    ],
)
def test_five_digits_of_the_largest(numbers, shown):
    lines = text_table(table(x=numbers)).splitlines()[2:]
    assert [line.strip() for line in lines] == [text.rstrip() for text in shown]


def test_no_rows():
    assert text_table(Table((Column(name="a", kind="text"),), [])) == ""
