"""Only the tail is ordered where only the tail matters: the answer must be that of the whole."""

from fractions import Fraction

import numpy as np
import pytest

from service.risk import frame as frames
from service.risk import ranking as rankings
from service.risk.quantiles import decimal
from tests.properties.tables import QUANTILES, ids
from tests.unit.risk.arithmetic import alone, es, framed, measure, split, total, var

TAILS = (
    var(0.9),
    var(0.995),
    es(0.8),
    es(0.99),
    measure("range_value_at_risk", lower_level=0.85, upper_level=0.95),
    measure("range_value_at_risk", lower_level=0.9, upper_level=1.0),
    measure("return_level", return_period=50.0),
)


def _rounded(rng, n):
    return np.round(rng.normal(size=(n, 4)), 1)


LOSSES = {
    "normal": lambda rng, n: rng.normal(size=(n, 4)),
    "lognormal": lambda rng, n: rng.lognormal(sigma=2.0, size=(n, 4)),
    "integers": lambda rng, n: rng.integers(0, 6, size=(n, 4)) * 1.0,
    "97 % zeros": lambda rng, n: np.where(rng.random((n, 4)) < 0.97, 0.0, rng.exponential(size=(n, 4))),
    "counts": lambda rng, n: rng.poisson(0.3, size=(n, 4)) * 1.0,
    "rounded": _rounded,
    "equal": lambda rng, n: np.ones((n, 4)),
    "negative": lambda rng, n: -rng.lognormal(size=(n, 4)),
}
ATTRIBUTES = [{"line": "hull"}, {"line": "cargo"}, {"line": "hull"}, {}]


def _answers(one, losses):
    book = {"attributes": ATTRIBUTES, "group_by": ["line"]}
    return {
        "total": total(one, losses, **book),
        "alone": alone(one, losses, **book),
        "euler": split("euler", one, losses, **book).figures,
        "unsmoothed": split("euler", one, losses, smoothing="none", **book).figures,
    }


@pytest.mark.parametrize("kind", LOSSES)
@pytest.mark.parametrize("one", TAILS, ids=ids)
@pytest.mark.parametrize("n", [60, 3000])
def test_the_tail_answers_as_the_whole(monkeypatch, n, one, kind):
    losses = LOSSES[kind](np.random.default_rng(n), n)
    by_tail = _answers(one, losses)
    kept = framed(one, losses)._ranking.order.size
    monkeypatch.setattr(frames, "MOST_PARTIAL", 0.0)
    monkeypatch.setattr(rankings, "MOST_PARTIAL", 0.0)
    assert framed(one, losses)._ranking.ordered.complete
    whole = _answers(one, losses)
    if n == 3000 and kind in ("normal", "lognormal"):
        assert kept < 0.4 * n
    size = np.abs(losses).max() * 4.0
    for name, figures in whole.items():
        of_tail = by_tail[name]
        assert of_tail.values == pytest.approx(figures.values, rel=1e-12, abs=1e-12 * size), name
        assert of_tail.remarks == figures.remarks, name
        assert of_tail.tail_scenarios == pytest.approx(figures.tail_scenarios), name
        if (
            one.kind in QUANTILES
            and name in ("euler", "unsmoothed")
            and kind not in ("normal", "lognormal", "negative")
        ):
            # the line through a wide atom at the quantile may reach past the tail that was kept
            continue
        for part in ("standard_errors", "lower", "upper"):
            near = pytest.approx(getattr(figures, part), rel=1e-9, abs=1e-10 * size, nan_ok=True)
            assert getattr(of_tail, part) == near, (name, part)


def _exact_shortfall(losses, share):
    """Return the tail mean of each column in exact fractions of the binary numbers."""
    found = []
    for column in losses.T:
        worst = sorted((Fraction(x) for x in column.tolist()), reverse=True)
        mass = share * len(worst)
        whole = int(mass)
        part = sum(worst[:whole], Fraction(0))
        found.append(float((part + (mass - whole) * (worst[whole] if mass > whole else 0)) / mass))
    return np.array(found)


@pytest.mark.parametrize("kind", LOSSES)
@pytest.mark.parametrize("level", [0.85, 0.9, 0.975, 0.995])
@pytest.mark.parametrize("n", [40, 997])
def test_against_exact_fractions(n, level, kind):
    losses = LOSSES[kind](np.random.default_rng(n), n)
    share = 1 - decimal(level)
    size = np.abs(losses).max() * 4.0
    assert alone(es(level), losses).values == pytest.approx(_exact_shortfall(losses, share), rel=0.0, abs=1e-14 * size)
    rank = int(n - int(share * n))  # of the quantile, counted from the smallest
    assert alone(var(level), losses).values.tolist() == np.sort(losses, axis=0)[rank - 1].tolist()
    totals = losses.sum(axis=1)
    assert total(var(level), losses).values == pytest.approx(np.sort(totals)[rank - 1], rel=0.0, abs=1e-15 * size)
    # contributions: scenarios above the quantile in full, those at it by what is left of the tail
    q = np.sort(totals)[rank - 1]
    beyond, at = totals > q + 1e-12 * size, np.abs(totals - q) <= 1e-12 * size
    left = float(share) * n - beyond.sum()
    expected = (losses[beyond].sum(axis=0) + left * losses[at].mean(axis=0)) / (float(share) * n)
    found = split("euler", es(level), losses).figures.values
    assert found == pytest.approx(expected, rel=0.0, abs=1e-12 * size)
