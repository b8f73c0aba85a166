"""Banded eigensolver and inertia against dense LAPACK."""

from __future__ import annotations

import numpy as np
import pytest

from solver.eigen import count_below_zero, dense_from_band, lowest_of_band


def random_band(size: int, half_width: int, seed: int) -> np.ndarray:
    random = np.random.default_rng(seed)
    band = random.standard_normal((half_width + 1, size))
    for k in range(half_width + 1):
        band[k, size - k :] = 0.0
    return np.asfortranarray(band)


@pytest.mark.parametrize(("size", "half_width"), [(1, 1), (7, 2), (60, 5), (200, 9)])
def test_inertia(size, half_width):
    for seed in range(6):
        band = random_band(size, half_width, seed)
        band[0] += 0.7 * (seed - 2)
        expected = int(np.sum(np.linalg.eigvalsh(dense_from_band(band)) < 0.0))
        assert count_below_zero(band, half_width) == expected


@pytest.mark.parametrize("size", [5, 30, 90, 400])
def test_lowest_pairs(size):
    band = random_band(size, 3, size)
    band[0] = np.abs(band[0]) + np.linspace(12.0, 90.0, size)
    values = np.linalg.eigvalsh(dense_from_band(band))
    found = lowest_of_band(band, 3, 1, None, 1e-9)
    wanted = min(3, size)
    assert found.values[:wanted] == pytest.approx(values[:wanted], abs=1e-9)
    rows = found.vectors
    assert rows @ rows.T == pytest.approx(np.eye(rows.shape[0]), abs=1e-12)
    residual = rows @ dense_from_band(band) - found.values[:, None] * rows
    assert np.linalg.norm(residual[:wanted], axis=1).max() < 1e-6


def test_degenerate_pairs_are_found_blockwise():
    half = random_band(60, 2, 5)
    half[0] = np.abs(half[0]) + np.linspace(10.0, 60.0, 60)
    twice = np.asfortranarray(np.concatenate([half, half], axis=1))
    values = np.linalg.eigvalsh(dense_from_band(half))
    found = lowest_of_band(twice, 4, 1, None, 1e-9, blockwise=True)
    assert found.values[:4] == pytest.approx(np.repeat(values[:2], 2), abs=1e-9)
