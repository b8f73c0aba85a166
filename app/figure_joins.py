"""Joining curves into few traces: gaps between them, outlines of bands, places where a sign changes."""

import itertools
import math
from collections.abc import Sequence

Numbers = list[float | None]

# a band thinner than this share of its panel cannot be seen at any zoom that doubles can hold apart
THINNEST_BAND = 1e-9
# nobody zooms into a picture that is still growing: bands too thin to be seen as it stands can wait
THINNEST_BAND_YET = 1e-3


def joined(x: Sequence[float], rows: Sequence[Sequence[float | None]]) -> tuple[Numbers, Numbers]:
    """Join curves into one trace: curve j runs through entry j of each row, with a gap after each."""
    across: Numbers = []
    up: Numbers = []
    for rank in range(max((len(row) for row in rows), default=0)):
        values = [row[rank] if rank < len(row) else None for row in rows]
        across += [*x, None]
        up += [*values, None]
    return across, up


def outlines(
    x: Sequence[float],
    low: Sequence[Numbers],
    high: Sequence[Numbers],
    thinnest: float = THINNEST_BAND,
) -> tuple[Numbers, Numbers] | None:
    """Return the outlines between lower and upper curves, or None when they are too thin to be seen.

    `thinnest` is the share of the curves' range that can be seen.
    """
    known = [value for row in high for value in row if value is not None]
    widths = [
        top - bottom
        for lower, upper in zip(low, high, strict=True)
        for bottom, top in zip(lower, upper, strict=True)
        if bottom is not None and top is not None
    ]
    if not widths or max(widths) <= thinnest * max(max(known) - min(known), 1e-300):
        return None
    across: Numbers = []
    up: Numbers = []
    for rank in range(max(len(row) for row in high)):
        for run in _runs(low, high, rank):
            across += [x[point] for point in run] + [x[point] for point in reversed(run)] + [None]
            up += [high[point][rank] for point in run] + [low[point][rank] for point in reversed(run)]
            up.append(None)
    return across, up


def _runs(low: Sequence[Numbers], high: Sequence[Numbers], rank: int) -> list[list[int]]:
    """Return the stretches of points at which both bounds of a curve are known."""
    runs: list[list[int]] = [[]]
    for point, (lower, upper) in enumerate(zip(low, high, strict=True)):
        if rank < len(upper) and lower[rank] is not None and upper[rank] is not None:
            runs[-1].append(point)
        elif runs[-1]:
            runs.append([])
    return [run for run in runs if run]


def crossings(x: Sequence[float], differences: Sequence[float | None]) -> list[float]:
    """Return where a sampled difference changes its sign, between points by a straight line."""
    found = []
    pairs = [(a, b) for a, b in zip(x, differences, strict=True) if b is not None and math.isfinite(b)]
    for (left, before), (right, after) in itertools.pairwise(pairs):
        if before == 0.0:
            found.append(left)
        elif before * after < 0.0:
            found.append(left + (right - left) * before / (before - after))
    if pairs and pairs[-1][1] == 0.0:
        found.append(pairs[-1][0])
    return found
