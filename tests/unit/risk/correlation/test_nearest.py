"""The nearest correlation matrix, against published examples and alternating projections."""

import numpy as np
import pytest

from service.risk.correlation.nearest import nearest_correlation
from service.risk.streams import stream


def projections(matrix, steps=2000):
    """Alternating projections with Dykstra's correction: Higham, IMA J. Numerical Analysis 22 (2002), algorithm 3.3."""
    current, correction = matrix.copy(), 0.0
    for _ in range(steps):
        shifted = current - correction
        values, vectors = np.linalg.eigh(shifted)
        positive = (vectors * np.maximum(values, 0.0)) @ vectors.T
        correction = positive - shifted
        current = positive.copy()
        np.fill_diagonal(current, 1.0)
    return current


def disturbed(factors, seed, size):
    generator = stream(seed, "test", 0)
    noise = generator.uniform(-1.0, 1.0, (factors, factors))
    matrix = np.corrcoef(generator.standard_normal((factors, 2 * factors))) + size * (noise + noise.T)
    np.fill_diagonal(matrix, 1.0)
    return np.clip(matrix, -1.0, 1.0)


def test_the_three_by_three_example():
    """N. J. Higham (2002), section 1: the nearest to this matrix of ones, with its distance 0.5278."""
    matrix = np.array([[1.0, 1.0, 0.0], [1.0, 1.0, 1.0], [0.0, 1.0, 1.0]])
    found = nearest_correlation(matrix)
    a, b = 0.7607, 0.1573
    np.testing.assert_allclose(found, [[1.0, a, b], [a, 1.0, a], [b, a, 1.0]], rtol=0.0, atol=5e-5)
    assert np.linalg.norm(found - matrix) == pytest.approx(0.5278, abs=5e-5)


@pytest.mark.parametrize(("factors", "seed", "size"), [(4, 1, 1.0), (12, 2, 0.3), (25, 3, 0.2)])
def test_the_same_as_alternating_projections(factors, seed, size):
    matrix = disturbed(factors, seed, size)
    np.testing.assert_allclose(nearest_correlation(matrix), projections(matrix), rtol=0.0, atol=1e-8)


@pytest.mark.parametrize(("factors", "size"), [(2, 5.0), (60, 1.0), (150, 0.05)])
def test_a_correlation_matrix_of_lowest_distance(factors, size):
    """The result solves the problem if matrix + Diag(y) minus it is negative and orthogonal to it."""
    matrix = disturbed(factors, 4, size)
    found = nearest_correlation(matrix)
    np.testing.assert_allclose(np.diag(found), 1.0, rtol=0.0, atol=1e-14)
    values, vectors = np.linalg.eigh(found)
    assert values[0] > -1e-12
    if np.linalg.eigvalsh(matrix)[0] >= 0.0:
        np.testing.assert_allclose(found, matrix, rtol=0.0, atol=1e-10)
        return
    kept = vectors[:, values > 1e-9]
    moved = found - matrix
    # (moved - Diag(y)) kept = 0 determines y
    own = np.sum(kept**2, axis=1)
    y = np.sum((moved @ kept) * kept, axis=1) / own
    assert np.max(np.abs((moved - np.diag(y)) @ kept)) < 1e-6
    assert np.linalg.eigvalsh(moved - np.diag(y))[0] > -1e-6


def test_extreme_entries():
    matrix = np.full((6, 6), -1.0) + 2.0 * np.eye(6)
    np.testing.assert_allclose(
        nearest_correlation(matrix), np.full((6, 6), -0.2) + 1.2 * np.eye(6), rtol=0.0, atol=1e-9
    )
