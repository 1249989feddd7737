"""Query parameters as a request: what is no number is refused with one that would do."""

import pytest

from service import query
from service.errors import InvalidValue

NUMBERS = {"level", *query.MEASURE_NUMBERS} | {
    name
    for parameters in (query.REQUEST, query.ALLOCATIONS, query.LOSSES, query.INCREMENTS, query.COPY, query.VALUE)
    for name, parameter in parameters.items()
    if parameter.convert is query.REQUEST["interval_coverage"].convert
}


def test_every_number_has_an_example():
    assert query.EXAMPLES.keys() == NUMBERS
    assert all(query.NUMBER.fullmatch(example) for example in query.EXAMPLES.values())


@pytest.mark.parametrize(
    ("ask", "name", "value", "example"),
    [
        (query.scaled_copy, "scale", "10%", "1.1"),
        (query.measures, "level", "99.5%", "0.995"),
        (query.measures, "shift", "x", "0.5"),
        (lambda pairs: query.table_request(pairs, "allocations"), "capital", "1,000", "250000"),
    ],
)
def test_what_is_no_number_is_refused_with_an_example(ask, name, value, example):
    with pytest.raises(InvalidValue) as caught:
        ask([("measure", "wang"), (name, value)])
    assert caught.value.detail == f"{name} is {value!r}, not a number such as {example}"
    assert caught.value.faults[0].parameter == name
