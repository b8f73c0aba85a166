"""Overlaps of displaced number states against arbitrary precision."""

from __future__ import annotations

import mpmath
import numpy as np
import pytest

from solver.displacement import displaced_overlaps


def exact_overlap(n: int, k: int, shift: float) -> float:
    """<n|D(x)|k> = sqrt(k!/n!) x^(n-k) exp(-x^2/2) L_k^(n-k)(x^2), n >= k.

    Cahill, Glauber, Phys. Rev. 177, 1857 (1969).
    """
    if k > n:
        return (-1.0) ** (k - n) * exact_overlap(k, n, shift)
    with mpmath.workdps(60):
        x, order = mpmath.mpf(shift), n - k
        before, now = mpmath.mpf(0), mpmath.mpf(1)
        for i in range(k):
            before, now = now, ((2 * i + 1 + order - x * x) * now - (i + order) * before) / (i + 1)
        scale = mpmath.exp((mpmath.loggamma(k + 1) - mpmath.loggamma(n + 1) - x * x) / 2)
        return float(scale * x**order * now)


@pytest.mark.parametrize("shift", [0.0, 1e-9, 0.02, -0.3, 1.0, -2.5, 5.5])
def test_small_tables(shift):
    table = displaced_overlaps(shift, 60, 45)
    for n in (0, 1, 2, 7, 20, 44, 59):
        for k in (0, 1, 3, 12, 30, 44):
            assert table[n, k] == pytest.approx(exact_overlap(n, k, shift), abs=1e-13)


@pytest.mark.parametrize("shift", [8.0, -11.0, 17.3, 25.0, -40.0, 40.0])
def test_large_displacements(shift):
    """Around the classical reach (x -+ sqrt(k))^2, where the overlaps live, and far from it."""
    columns = 160
    rows = int((abs(shift) + columns**0.5 + 4.0) ** 2)
    table = displaced_overlaps(shift, rows, columns)
    assert np.isfinite(table).all()
    for k in (0, 1, 5, 40, 159):
        edges = [(abs(shift) - k**0.5) ** 2, shift**2, (abs(shift) + k**0.5) ** 2]
        for n in sorted({0, 3, columns - 1, rows - 1, *(min(rows - 1, int(edge)) for edge in edges)}):
            assert table[n, k] == pytest.approx(exact_overlap(n, k, shift), abs=1e-13)


def test_columns_are_normalised():
    for shift in (0.4, 3.0, 12.0, 30.0):
        rows = int((shift + 6.0 + 7.0) ** 2)
        table = displaced_overlaps(shift, rows, 30)
        assert table.T @ table == pytest.approx(np.eye(30), abs=1e-12)


def test_arrays_of_displacements():
    shifts = np.array([0.0, -0.7, 3.0, 14.0])
    together = displaced_overlaps(shifts, 400, 20)
    assert together.shape == (4, 400, 20)
    for shift, table in zip(shifts, together, strict=True):
        assert table == pytest.approx(displaced_overlaps(float(shift), 400, 20), abs=1e-14)


def test_opposite_displacements_are_inverse():
    there = displaced_overlaps(1.3, 90, 90)
    back = displaced_overlaps(-1.3, 90, 90)
    assert (there @ back)[:40, :40] == pytest.approx(np.eye(40), abs=1e-13)
    assert back[:40, :40] == pytest.approx(there[:40, :40].T, abs=1e-14)


def test_more_columns_than_rows_are_refused():
    with pytest.raises(ValueError, match="rows"):
        displaced_overlaps(1.0, 4, 5)
