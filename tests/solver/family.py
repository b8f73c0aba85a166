"""Random members of the family, sized so that a dense reference stays affordable."""

from __future__ import annotations

import math

from hypothesis import strategies as st

from solver import CollectiveModel
from tests.solver.dense import generous_cutoff

LARGEST_BLOCK = 700


def block_size(model: CollectiveModel) -> int:
    """Dimension of the largest sector of the dense reference."""
    full = (generous_cutoff(model) + 1) * (model.spins + 1)
    return full if model.bias != 0.0 else (full + 1) // 2


def affordable(
    spins: int, mode: float, splitting: float, multiple: float, *, ratio: float, bias: float, largest: int
) -> CollectiveModel:
    """Model at `multiple` times the critical coupling, less where the reference would grow too large."""
    critical = math.sqrt(mode * max(abs(splitting), 0.1 * mode)) / (1.0 + abs(ratio))
    while True:
        model = CollectiveModel.from_ratio(spins, mode, splitting, multiple * critical, ratio, bias)
        if multiple < 1e-2 or block_size(model) <= largest:
            return model
        multiple *= 0.8


@st.composite
def models(draw: st.DrawFn, largest: int = LARGEST_BLOCK, biased: bool | None = None) -> CollectiveModel:
    """Any sign of the splitting, ratio from below 0 to above 1, with or without bias."""
    spins = draw(st.integers(1, 24) | st.integers(25, 40))
    mode = draw(st.sampled_from((1.0, 1.0, 0.37, 2.9)))
    splitting = mode * draw(st.sampled_from((1.0, -1.0, 0.0)) | st.floats(-4.0, 4.0).map(_rounded))
    ratio = draw(st.sampled_from((1.0, 1.0, 0.0, 0.5, 2.0, -1.0)) | st.floats(-1.5, 3.0).map(_rounded))
    multiple = draw(st.sampled_from((0.0, 1.0, 2.0)) | st.floats(0.0, 4.0).map(_rounded))
    has_bias = draw(st.booleans()) if biased is None else biased
    sign = draw(st.sampled_from((1.0, -1.0)))
    bias = sign * mode * draw(st.floats(0.02, 1.5).map(_rounded)) if has_bias else 0.0
    return affordable(spins, mode, splitting, multiple, ratio=ratio, bias=bias, largest=largest)


def _rounded(value: float) -> float:
    """Three digits: readable failures, and no couplings of 1e-200 that no laboratory has."""
    return round(value, 3)
