"""Sums over the parts for the row of a total."""

from types import SimpleNamespace

import pytest

from service.representations.sums import share_of_all, sum_alone, sum_profit


def part(alone, profit, share=0.5):
    figure = None if alone is None else SimpleNamespace(value=alone)
    return SimpleNamespace(stand_alone=figure, expected_profit=profit, share=share)


def test_sums_are_of_all_parts_or_none():
    assert sum_alone([part(1.0, None), part(2.5, None)]) == 3.5
    assert sum_alone([part(1.0, None), part(None, None)]) is None
    assert sum_profit([part(None, 1.0), part(None, -0.5)]) == 0.5
    assert sum_profit([part(None, 1.0), part(None, None)]) is None


@pytest.mark.parametrize(
    ("shares", "residual", "whole"), [((0.5, 0.5), None, 1.0), ((0.5, 0.5), 0.1, None), ((None, None), None, None)]
)
def test_shares_add_up_where_the_rule_does(shares, residual, whole):
    parts = [part(1.0, 1.0, share) for share in shares]
    assert share_of_all(SimpleNamespace(sub_portfolios=parts, residual=residual)) == whole
