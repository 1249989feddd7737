"""Totals, sums and tails of a table in blocks: exact for whatever the columns hold."""

from concurrent.futures import ThreadPoolExecutor

import numpy as np
import pytest

from service.risk import fold as folding
from service.risk.effort import Alone
from service.risk.fold import fold

N = 5000
COLUMNS = {
    "normal": lambda rng, n: rng.normal(size=n),
    "90 % zeros": lambda rng, n: np.where(rng.random(n) < 0.9, 0.0, rng.exponential(size=n)),
    "99.9 % zeros": lambda rng, n: np.where(rng.random(n) < 0.999, 0.0, rng.exponential(size=n)),
    "negative with zeros": lambda rng, n: np.where(rng.random(n) < 0.97, 0.0, -rng.exponential(size=n)),
    "integers": lambda rng, n: rng.integers(0, 5, n) * 1.0,
    "equal": lambda rng, n: np.full(n, 0.1),
    "ascending": lambda rng, n: np.arange(n) * 1.0,
    "descending": lambda rng, n: -np.arange(n) * 1.0,
    "large only where not sampled": lambda rng, n: np.where(np.arange(n) % 2 == 1, 1e6 + np.arange(n), 0.0),
    "two values": lambda rng, n: np.where(np.arange(n) < n // 50, 7.0, -7.0),
    "one huge": lambda rng, n: np.where(np.arange(n) == n // 3, 1e100, rng.random(n)),
}


def _table(n):
    rng = np.random.default_rng(n)
    return np.ascontiguousarray(np.stack([make(rng, n) for make in COLUMNS.values()], axis=1))


class Pool(Alone):
    """Pieces on threads, in an order of their own."""

    __slots__ = ()

    def map(self, function, pieces):
        with ThreadPoolExecutor(self.threads) as pool:
            return list(pool.map(function, pieces))


@pytest.mark.parametrize("n", [1, 2, 3, 17, 100, N, 9000])
@pytest.mark.parametrize("share", [0.0, 0.005, 0.03, 0.3, 1.0])
def test_tails_are_the_largest_losses(n, share):
    losses = _table(n)
    tail = min(n, int(share * n) + 1)
    found = fold(losses, Alone(), tail=tail)
    expected = np.sort(losses, axis=0)[::-1][:tail].T
    assert found.tails.tolist() == expected.tolist()


@pytest.mark.parametrize("block", [1 << 10, 1 << 14])
@pytest.mark.parametrize("threads", [1, 2, 3, 8])
def test_any_number_of_threads_leaves_the_same_bytes(monkeypatch, threads, block):
    monkeypatch.setattr(folding, "BLOCK_BYTES", block)
    losses = _table(N)
    p = np.random.default_rng(1).random(N)
    options = {"probabilities": p, "products": True, "tail": 300}
    one, other = fold(losses, Alone(), **options), fold(losses, Pool(threads), **options)
    for name in ("totals", "sums", "products", "tails"):
        assert getattr(one, name).tobytes() == getattr(other, name).tobytes(), name


def test_sums():
    losses = _table(N)[:, :6]
    found = fold(losses, Alone(), products=True)
    totals = losses.sum(axis=1)
    assert found.totals == pytest.approx(totals, rel=1e-14, abs=1e-14)
    assert found.sums == pytest.approx(losses.sum(axis=0), rel=1e-12)
    assert found.products == pytest.approx(totals @ losses, rel=1e-12)
    assert found.tails is None
    p = np.full(N, 1.0 / N)
    assert fold(losses, Alone(), probabilities=p).sums == pytest.approx(losses.mean(axis=0), rel=1e-12)


def test_a_total_has_the_same_bits_wherever_its_row_stands():
    losses = np.random.default_rng(3).normal(size=(1003, 37))
    order = np.random.default_rng(4).permutation(1003)
    totals = fold(losses, Alone()).totals
    assert fold(np.ascontiguousarray(losses[order]), Alone()).totals.tobytes() == totals[order].tobytes()


@pytest.mark.parametrize("columns", [1, 2, 1000, 70_000])
def test_wide_tables(columns):
    losses = np.random.default_rng(5).normal(size=(7, columns))
    found = fold(losses, Alone(), tail=3)
    assert found.tails.tolist() == np.sort(losses, axis=0)[::-1][:3].T.tolist()
    assert found.totals == pytest.approx(losses.sum(axis=1), rel=1e-9, abs=1e-9)
