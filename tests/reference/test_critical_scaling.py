"""Finite size at the critical coupling: exponents and amplitudes, extrapolated.

Exponents: Vidal, Dusuel, EPL 74, 817 (2006); entropy: Lambert, Emary, Brandes, Phys. Rev. Lett.
92, 073602 (2004). Amplitudes: own derivation from the quartic oscillator p^2/2 + x^4 (levels from
memory, verified numerically).

Corrections run in powers of N^(-1/3): a fit in N^(-2/3) alone leaves one to three per cent at the
sizes reachable here. Both the number of terms and the smallest size are varied, and every variant
has to agree.
"""

from __future__ import annotations

import math
from functools import cache

import numpy as np
import pytest

from tests.reference.asking import ask, critical, dicke, value

SIZES = (80, 160, 320, 640, 1280, 2560, 5000)
RESONANT, DETUNED = (1.0, 1.0), (2.0, 0.5)
FREQUENCIES = [RESONANT, DETUNED]


@cache
def at_criticality(w: float, w0: float) -> dict[str, np.ndarray]:
    """Gap, singular energy, <Jx^2>, <n> and entropy at the critical coupling for all sizes."""
    rows = []
    constant = 0.5 * (math.hypot(w, w0) - w - w0)
    for spins in SIZES:
        answer = ask(dicke(spins, w, w0, critical(w, w0)), 2, 1e-8)
        rows.append(
            (
                answer.gap_any,
                answer.energy[0] + 0.5 * spins * w0 - constant,
                (0.5 * spins * value(answer, "order_parameter")) ** 2,
                value(answer, "boson_number"),
                value(answer, "entropy"),
            )
        )
    names = ("gap", "energy", "jxx", "quanta", "entropy")
    return dict(zip(names, np.array(rows).T, strict=True))


def extrapolations(x: np.ndarray, numbers: np.ndarray) -> list[float]:
    """Values at x = 0 of polynomials of degree 1, 2, 3 through the last points."""
    out = []
    for degree in (1, 2, 3):
        table = np.vander(x[-degree - 2 :], degree + 1, increasing=True)
        out.append(float(np.linalg.lstsq(table, numbers[-degree - 2 :], rcond=None)[0][0]))
    return out


def amplitudes(w: float, w0: float) -> dict[str, tuple[float, float]]:
    """Exponent of N and amplitude."""
    stiffness = w**4 * w0**3 / (4.0 * (w**2 + w0**2) ** 2)
    root = stiffness ** (1.0 / 3.0)
    return {
        "gap": (-1.0 / 3.0, 1.725657757 * root),
        "energy": (-1.0 / 3.0, 0.667986259 * root),
        "jxx": (4.0 / 3.0, 0.287337567 * w0 * w**2 / (2.0 * (w**2 + w0**2)) / root),
    }


@pytest.mark.slow
@pytest.mark.parametrize("frequencies", FREQUENCIES)
@pytest.mark.parametrize("name", ["gap", "energy", "jxx"])
def test_amplitudes(frequencies, name):
    exponent, amplitude = amplitudes(*frequencies)[name]
    sizes = np.array(SIZES, dtype=float)
    scaled = at_criticality(*frequencies)[name] / sizes**exponent
    assert extrapolations(sizes ** (-1.0 / 3.0), scaled) == pytest.approx([amplitude] * 3, rel=0.03)
    assert extrapolations(sizes ** (-1.0 / 3.0), scaled)[1:] == pytest.approx([amplitude] * 2, rel=2e-3)


@pytest.mark.slow
@pytest.mark.parametrize("frequencies", FREQUENCIES)
@pytest.mark.parametrize(
    ("name", "exponent"),
    # the singular part of E0/N goes as N^(-4/3), so that of E0 as N^(-1/3)
    [("gap", -1.0 / 3.0), ("energy", -1.0 / 3.0), ("jxx", 4.0 / 3.0), ("quanta", 1.0 / 3.0)],
)
def test_exponents(frequencies, name, exponent):
    """Local slopes still drift at N = 5000 (by up to 4 %): extrapolate them, three ways."""
    numbers = at_criticality(*frequencies)[name]
    sizes = np.array(SIZES, dtype=float)
    slopes = np.diff(np.log(numbers)) / np.diff(np.log(sizes))
    x = (sizes[1:] * sizes[:-1]) ** (-1.0 / 6.0)
    assert extrapolations(x, slopes) == pytest.approx([exponent] * 3, rel=0.03)


@pytest.mark.slow
@pytest.mark.parametrize("frequencies", FREQUENCIES)
def test_entropy_grows_by_a_sixth_of_a_bit_per_doubling(frequencies):
    numbers = at_criticality(*frequencies)["entropy"]
    sizes = np.array(SIZES, dtype=float)
    slopes = np.diff(numbers) / np.diff(np.log2(sizes))
    x = (sizes[1:] * sizes[:-1]) ** (-1.0 / 6.0)
    assert extrapolations(x, slopes)[1:] == pytest.approx([1.0 / 6.0] * 2, rel=0.03)
