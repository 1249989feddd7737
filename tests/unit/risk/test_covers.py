"""Covers: maps, their inverses, what they do to tails, and refusals."""

import math

import numpy as np
import pytest

from service.errors import InvalidValue
from service.risk.covers import (
    TYPICAL,
    CapCover,
    CedeLayerCover,
    ClaimTerms,
    FloorCover,
    LayerCover,
    QuotaShareCover,
    Tails,
    check_cover,
    covered,
    preimage,
    tails_after,
)

AMOUNTS = np.array([-250.0, 0.0, 40.0, 100.0, 120.0, 499.0, 500.0, 501.0, 1e9])
HEAVY = Tails(1.5, 2.5, 0.0, 0.0)


def layer(attachment, limit=None, share=1.0, **annual):
    return LayerCover(kind="layer", attachment=attachment, limit=limit, share=share, **annual)


def cede(attachment, limit=None, share=1.0):
    return CedeLayerCover(kind="cede_layer", attachment=attachment, limit=limit, share=share)


def cap(amount):
    return CapCover(kind="cap", amount=amount)


def floor(amount):
    return FloorCover(kind="floor", amount=amount)


def quota(retained):
    return QuotaShareCover(kind="quota_share", retained=retained)


@pytest.mark.parametrize(
    ("step", "expected"),
    [
        (layer(100.0, 400.0, 0.5), [0.0, 0.0, 0.0, 0.0, 10.0, 199.5, 200.0, 200.0, 200.0]),
        (layer(100.0), [0.0, 0.0, 0.0, 0.0, 20.0, 399.0, 400.0, 401.0, 1e9 - 100.0]),
        (cede(100.0, 400.0), [-250.0, 0.0, 40.0, 100.0, 100.0, 100.0, 100.0, 101.0, 1e9 - 400.0]),
        (cede(100.0), [-250.0, 0.0, 40.0, 100.0, 100.0, 100.0, 100.0, 100.0, 100.0]),
        (quota(0.25), AMOUNTS * 0.25),
        (cap(110.0), [-250.0, 0.0, 40.0, 100.0, 110.0, 110.0, 110.0, 110.0, 110.0]),
        (floor(50.0), [50.0, 50.0, 50.0, 100.0, 120.0, 499.0, 500.0, 501.0, 1e9]),
    ],
)
def test_each_step_maps_the_running_amount(step, expected):
    before = AMOUNTS.copy()
    np.testing.assert_allclose(step.mapped(AMOUNTS), expected, rtol=1e-15)
    np.testing.assert_array_equal(AMOUNTS, before)
    assert step.mapped(before, out=before) is before
    np.testing.assert_allclose(before, expected, rtol=1e-15)


@pytest.mark.parametrize("limit", [None, 0.5, 400.0])
@pytest.mark.parametrize("share", [0.3, 1.0])
def test_a_layer_and_what_is_kept_of_it_are_the_whole(limit, share):
    amounts = np.linspace(-300.0, 1200.0, 1501)
    whole = layer(100.0, limit, share).mapped(amounts) + cede(100.0, limit, share).mapped(amounts)
    np.testing.assert_allclose(whole, amounts, rtol=0.0, atol=1e-12)


@pytest.mark.parametrize(
    "steps",
    [[step] for step in TYPICAL]
    + [
        [cede(10.0)],
        [cede(10.0, 5.0)],
        [cede(10.0, None, 0.25)],
        [layer(10.0)],
        [cap(300.0), quota(0.5), floor(20.0)],
        [layer(50.0, 100.0), cede(20.0, 30.0, 0.5)],
    ],
)
def test_the_preimage_is_the_largest_amount_that_stays_below(steps):
    amounts = np.linspace(-50.0, 2000.0, 8201)
    mapped = covered(steps, amounts)
    for bound in np.linspace(-60.0, 700.0, 153) + 0.003:
        below = amounts[mapped <= bound]
        found = preimage(steps, np.array([bound]))[0]
        if below.size == 0:
            assert found < amounts[0]
        elif below.size < amounts.size:
            assert below[-1] <= found < below[-1] + 0.25
        else:
            assert found >= amounts[-1]


def test_no_steps_leave_the_amount_as_it_is():
    out = np.empty_like(AMOUNTS)
    assert covered([], AMOUNTS) is AMOUNTS
    assert covered([], AMOUNTS, out=out) is out
    np.testing.assert_array_equal(out, AMOUNTS)


@pytest.mark.parametrize(
    ("steps", "expected"),
    [
        ([layer(1.0, 2.0)], Tails()),
        ([layer(1.0)], Tails(upper_index=1.5, upper_exponential=0.0)),
        ([cede(1.0)], Tails(lower_index=2.5, lower_exponential=0.0)),
        ([cede(1.0, 2.0)], HEAVY),
        ([cede(1.0, None, 0.5)], HEAVY),
        ([quota(0.5)], HEAVY),
        ([cap(9.0)], Tails(lower_index=2.5, lower_exponential=0.0)),
        ([floor(-9.0)], Tails(upper_index=1.5, upper_exponential=0.0)),
        ([cap(9.0), floor(-9.0)], Tails()),
    ],
)
def test_limits_cut_tails(steps, expected):
    assert tails_after(steps, HEAVY) == expected


def test_parts_stretch_exponential_moments():
    light = Tails(upper_exponential=3.0, lower_exponential=5.0)
    assert tails_after([quota(0.5)], light) == Tails(upper_exponential=6.0, lower_exponential=10.0)
    assert tails_after([layer(1.0, None, 0.25)], light) == Tails(upper_exponential=12.0)
    assert tails_after([cede(1.0, None, 0.75)], light) == Tails(upper_exponential=12.0, lower_exponential=5.0)


def test_sums_of_tails():
    first, second = Tails(3.0, 4.0, 2.0, math.inf), Tails(5.0, 2.0, 6.0, 1.0)
    assert first.plus(second) == Tails(3.0, 2.0, 1.5, 1.0)
    assert first.plus(second, independent=True) == Tails(3.0, 2.0, 2.0, 1.0)
    assert first.times(-2.0) == Tails(4.0, 3.0, math.inf, 1.0)
    assert first.times(0.0) == Tails()


@pytest.mark.parametrize(
    ("steps", "pointer", "words"),
    [
        ([floor(100.0), cap(50.0)], "/1", "above the cap 50"),
        ([cap(50.0), floor(100.0)], "/1", "below the floor 100"),
        ([layer(0.0, 100.0), cede(100.0)], "/1", "nothing reaches the attachment 100"),
        ([layer(100.0, annual_limit=10.0)], "/0/annual_limit", "claim_cover"),
        ([layer(100.0, annual_deductible=10.0)], "/0/annual_deductible", "claim_cover"),
    ],
)
def test_steps_that_do_not_fit_are_refused(steps, pointer, words):
    with pytest.raises(InvalidValue, match=words) as caught:
        check_cover(steps)
    assert [fault.pointer for fault in caught.value.faults] == [pointer]
    assert caught.value.faults[0].code == "cover_does_not_fit"


def test_only_quota_shares_follow_terms_of_the_year():
    check_cover([layer(100.0, 50.0, annual_limit=80.0), quota(0.5)], of_claims=True)
    with pytest.raises(InvalidValue, match="only quota_share may follow") as caught:
        check_cover([layer(100.0, 50.0, annual_limit=80.0), cap(5.0)], of_claims=True)
    assert caught.value.faults[0].pointer == "/1"


def test_fitting_steps_pass():
    check_cover([floor(0.0), layer(100.0, 400.0, 0.5), quota(0.5), cap(99.0)])
    check_cover([cede(100.0, 400.0), layer(1000.0)])
    check_cover([floor(50.0), cap(50.0)])


def test_terms_of_the_year_map_the_sum():
    terms = ClaimTerms.of([cap(90.0), layer(10.0, annual_deductible=20.0, annual_limit=100.0), quota(0.5)])
    assert len(terms.of_claim) == 2
    np.testing.assert_array_equal(terms.year(np.array([0.0, 20.0, 60.0, 500.0])), [0.0, 0.0, 20.0, 50.0])
    assert terms.year_tails(HEAVY) == Tails()
    unlimited = ClaimTerms.of([layer(10.0, annual_deductible=20.0)])
    assert unlimited.year_tails(HEAVY) == Tails(upper_index=1.5, upper_exponential=0.0)


@pytest.mark.parametrize(
    "fields",
    [
        {"attachment": -1.0},
        {"attachment": 1.0, "limit": 0.0},
        {"attachment": 1.0, "share": 0.0},
        {"attachment": 1.0, "share": 1.5},
        {"attachment": math.nan},
        {"attachment": 1.0, "annual_limit": 0.0},
        {"attachment": 1.0, "reinstatements": 1},
    ],
)
def test_wrong_parameters_are_refused(fields):
    with pytest.raises(ValueError, match="LayerCover"):
        LayerCover(kind="layer", **fields)
