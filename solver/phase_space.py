"""Pictures of one state in phase space: number distribution, Wigner function, spin Husimi function.

All three need the Schmidt form of the state only: real boson vectors over n, real spin vectors
over j = m_z + N/2, and their weights. Number states turn into wave functions, and spin states along
x into states along z, by three-term recurrences that run from the forbidden region into the
allowed one, where they are stable; a scale kept apart lets them start below the smallest double.

Sources: Cahill, Glauber, Phys. Rev. 177, 1882 (1969) (Wigner function); Arecchi, Courtens, Gilmore,
Thomas, Phys. Rev. A 6, 2211 (1972) (spin coherent states).
"""

from __future__ import annotations

import math
from collections.abc import Callable, Iterator
from dataclasses import dataclass
from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray
from scipy.special import gammaln

Array = NDArray[np.float64]

_NEGLIGIBLE = 1e-13
_UNSEEN = 1e-6
_NOTHING = 1e-26
_EDGE = 6.5
_SCOUTS = 1201
_RESCALED_EVERY = 8
_HUGE = 1e60
_AT_ONCE = 256
_SMALLEST_WINDOW = 2.0
_ROUND_UP_TO = 3.0
_COARSEST = 0.3
_NARROW = 0.25


@dataclass(frozen=True, slots=True)
class SchmidtState:
    """A pure state of boson and spin in its Schmidt form, or the mixtures it leaves on either side.

    weights: (r,), sum 1; boson: (r, layers), orthonormal rows over n = first, first+1, ...;
    spin: (r, N+1), orthonormal rows over j = m_z + N/2.
    """

    weights: Array
    boson: Array
    spin: Array
    first: int = 0

    @property
    def spins(self) -> int:
        """N."""
        return int(self.spin.shape[1]) - 1


def schmidt_form(amplitudes: Array) -> tuple[Array, Array, Array]:
    """Weights (r,), left (r, rows) and right (r, columns) vectors of a real matrix; weights sum to 1."""
    tall = amplitudes.shape[0] >= amplitudes.shape[1]
    matrix = amplitudes if tall else amplitudes.T
    squares, small = np.linalg.eigh(matrix.T @ matrix)
    kept = squares > _NEGLIGIBLE * squares[-1]
    weights, small = squares[kept][::-1], small[:, kept][:, ::-1]
    large = (matrix @ small) / np.sqrt(weights)
    left, right = (large, small) if tall else (small, large)
    return weights / weights.sum(), left.T, right.T


def number_distribution(state: SchmidtState) -> Array:
    """P(n) from n = 0 on, shape (first + layers,)."""
    found = state.weights @ (state.boson * state.boson)
    out: Array = np.concatenate((np.zeros(state.first), found))
    return out


# -- recurrences -----------------------------------------------------------------------------------


def _rising(
    sign: Array, logarithm: Array, step: Callable[[int, Array, Array], Array], count: int
) -> Iterator[Array]:
    """Solutions of a three-term recurrence from sign * exp(logarithm) on, `count` of them.

    step(k, here, before) gives the next one; what grows too large is scaled back.
    """
    here, before, scale = sign, np.zeros_like(sign), logarithm
    factor = np.exp(scale)
    for k in range(count):
        yield here * factor
        here, before = step(k, here, before), here
        if k % _RESCALED_EVERY == 0:
            large = np.abs(here) > _HUGE
            if large.any():
                shrink = np.where(large, 1.0 / np.where(large, np.abs(here), 1.0), 1.0)
                here, before, scale = here * shrink, before * shrink, scale - np.log(shrink)
                factor = np.exp(scale)


def wave_functions(coefficients: Array, first: int, q: Array) -> Array:
    """Sums over n of coefficients[r, n - first] times the n-th oscillator function at q.

    q = sqrt(2) Re(alpha), so that the vacuum is exp(-q^2/2)/pi^(1/4). Shape (r, len(q)).
    """
    count = first + coefficients.shape[1]
    start = -0.5 * q * q - 0.25 * math.log(math.pi)

    def step(n: int, here: Array, before: Array) -> Array:
        return math.sqrt(2.0 / (n + 1.0)) * q * here - math.sqrt(n / (n + 1.0)) * before

    return _summed(coefficients, first, _rising(np.ones_like(q), start, step, count), q.size)


def _summed(coefficients: Array, first: int, rows: Iterator[Array], width: int) -> Array:
    """coefficients @ rows[first:], without holding all rows."""
    out = np.zeros((coefficients.shape[0], width))
    held: list[Array] = []
    place = 0
    for number, row in enumerate(rows):
        if number < first:
            continue
        held.append(row)
        if len(held) == _AT_ONCE:
            out += coefficients[:, place : place + len(held)] @ np.array(held)
            place += len(held)
            held = []
    if held:
        out += coefficients[:, place:] @ np.array(held)
    return out


def along_z(vectors: Array, turned: Array, spins: int) -> Array:
    """Spin states over some j' = m_x + N/2 as states over j = m_z + N/2.

    vectors: (r, kept), for the kept values of j' in `turned`; in the axes of the displaced ladders,
    where Jx is diagonal and Jz has positive elements. Shape (r, N+1).
    """
    sign = 1.0 - 2.0 * (turned % 2.0)
    binomial = gammaln(spins + 1.0) - gammaln(turned + 1.0) - gammaln(spins - turned + 1.0)
    start = 0.5 * (binomial - spins * math.log(2.0))
    m = turned - 0.5 * spins

    def step(j: int, here: Array, before: Array) -> Array:
        back = math.sqrt(j * (spins - j + 1.0))
        return (2.0 * m * here - back * before) / math.sqrt((j + 1.0) * max(spins - j, 1))

    out = np.empty((vectors.shape[0], spins + 1))
    # half a turn about x maps j to N - j: the recurrence need not enter the far forbidden region
    mirrored = vectors * (1.0 - 2.0 * ((spins - turned) % 2.0))
    for j, row in enumerate(_rising(sign, start, step, spins // 2 + 1)):
        out[:, j] = vectors @ row
        out[:, spins - j] = mirrored @ row
    return out


# -- Wigner function -------------------------------------------------------------------------------


@dataclass(frozen=True, slots=True)
class WignerMap:
    """Wigner function of the boson over alpha = x + i p.

    x: (columns,), p: (rows,); values: (rows, columns), normalised to integral 1 over x and p.
    resolved: whether the grid is fine enough for all that the state can hold.
    """

    x: Array
    p: Array
    values: Array
    resolved: bool


def wigner_map(state: SchmidtState, points: int = 201) -> WignerMap:
    """Wigner function on `points` times `points` places of a window that holds all but 1e-6 of it.

    The window is symmetric about 0 unless the state lies to one side of it.
    """
    along, across = _extents(state)
    middle, half_x = 0.0, max(-along.low, along.high)
    if along.low > 0.0 or along.high < 0.0:
        middle, half_x = 0.5 * (along.low + along.high), 0.5 * (along.high - along.low)
    half_x, half_p = (max(_SMALLEST_WINDOW, 1.02 * half) for half in (half_x, across.high))
    if max(half_x, half_p) <= _ROUND_UP_TO * min(half_x, half_p):
        half_x = half_p = max(half_x, half_p)
    x = middle + np.linspace(-half_x, half_x, points)
    p = np.linspace(-half_p, half_p, points)
    values = wigner_function(state, x, p, support=(along.end, across.end))
    # interference of parts a distance d apart has the period 2 pi / 2 d across it
    step_x, step_p = x[1] - x[0], p[1] - p[0]
    fringes = max(step_p * (along.high - along.low), step_x * (across.high - across.low))
    resolved = fringes < 0.5 * math.pi and max(step_x, step_p) < _COARSEST
    return WignerMap(x, p, values, bool(resolved))


def wigner_function(
    state: SchmidtState, x: Array, p: Array, support: tuple[float, float] | None = None
) -> Array:
    """W at alpha = x + i p for an evenly spaced x and any p; shape (len(p), len(x)).

    W(q, p) = (1/pi) * integral of rho(q + y, q - y) exp(2 i p y), by the trapezoidal rule on a grid
    that contains every q: exact to rounding once its step leaves no room for aliases. support: half
    widths in x and p beyond which the state holds nothing.
    """
    if support is None:
        along, across = _extents(state)
        support = (along.end, across.end)
    root = math.sqrt(2.0)
    reach, room = root * support[0], root * (support[1] + float(np.abs(p).max()))
    spacing = root * float(x[1] - x[0])
    refinement = max(1, math.ceil(spacing * room / (0.95 * math.pi)))
    step = spacing / refinement
    left = max(0, math.ceil((root * float(x[0]) + reach) / step))
    right = max(0, math.ceil((reach - root * float(x[-1])) / step))
    steps = np.arange(-left, (x.size - 1) * refinement + right + 1, dtype=np.float64)
    waves = wave_functions(state.boson, state.first, root * float(x[0]) + step * steps)
    waves *= np.sqrt(state.weights)[:, None]
    overlap = np.zeros((x.size, (steps.size + 1) // 2))
    for column in range(x.size):
        at = left + column * refinement
        far = min(at, steps.size - 1 - at)
        ahead, behind = waves[:, at : at + far + 1], waves[:, at - far : at + 1][:, ::-1]
        overlap[column, : far + 1] = np.einsum("rk,rk->k", ahead, behind)
    overlap[:, 1:] *= 2.0
    wave = np.cos(2.0 * root * p[:, None] * step * np.arange(overlap.shape[1]))
    out: Array = (2.0 * step / math.pi) * (wave @ overlap.T)
    return out


class _Extent(NamedTuple):
    """Where a state lies along x or p: between low and high all but 1e-6, within +-end all of it."""

    low: float
    high: float
    end: float


def _extents(state: SchmidtState) -> tuple[_Extent, _Extent]:
    """Extents along x and along p."""
    top = state.first + state.boson.shape[1]
    edge = math.sqrt(2.0 * top + 1.0) + _EDGE
    q = np.linspace(-edge, edge, _SCOUTS)
    n = state.first + np.arange(state.boson.shape[1])
    # in momentum each number state carries (-i)^n: even and odd ones are out of phase
    phase = 1.0 - 2.0 * ((n // 2) % 2)
    stacked = np.concatenate(
        (state.boson, state.boson * phase * (n % 2 == 0), state.boson * phase * (n % 2 == 1))
    )
    here, even, odd = np.split(wave_functions(stacked, state.first, q) ** 2, 3)
    return _extent(q, state.weights @ here), _extent(q, state.weights @ (even + odd))


def _extent(q: Array, density: Array) -> _Extent:
    density = density / density.sum()
    below, above = np.cumsum(density), np.cumsum(density[::-1])[::-1]
    spacing = q[1] - q[0]

    def reach(share: float) -> tuple[float, float]:
        first, last = int(np.argmax(below > share)), int(np.flatnonzero(above > share)[-1])
        return float(q[first] - spacing) / math.sqrt(2.0), float(q[last] + spacing) / math.sqrt(2.0)

    low, high = reach(_UNSEEN)
    ends = reach(_NOTHING)
    return _Extent(low, high, max(-ends[0], ends[1]))


# -- Husimi function -------------------------------------------------------------------------------


@dataclass(frozen=True, slots=True)
class HusimiMap:
    """Husimi function of the spin on an equal-area grid.

    cos_theta: (rows,), midpoints; phi: (columns,), from -pi, the middle one 0 (along x); values:
    (rows, columns), <theta, phi| rho |theta, phi>, so that (N+1)/(4 pi) times their integral over
    the sphere is 1.
    """

    cos_theta: Array
    phi: Array
    values: Array


def husimi_map(state: SchmidtState, rows: int = 101, columns: int = 200) -> HusimiMap:
    """Husimi function on `rows` times `columns` places of equal area.

    All of the sphere, or the belt around z that holds all but 1e-6 where that is narrow.
    """
    low, high = _belt(state)
    cos_theta = low + (high - low) * (np.arange(rows) + 0.5) / rows
    phi = 2.0 * math.pi * (np.arange(columns) / columns - 0.5)
    return HusimiMap(cos_theta, phi, husimi_function(state, cos_theta, columns))


def _belt(state: SchmidtState) -> tuple[float, float]:
    """Ends of the belt in cos(theta) to be drawn."""
    spins = state.spins
    weights = state.weights @ (state.spin * state.spin)
    # a Dicke state has the mean (2 j - N)/(N + 2) in cos(theta), and at most the spread 1/sqrt(N + 3)
    j = np.arange(spins + 1.0)
    mean = (2.0 * j - spins) / (spins + 2.0)
    spread = np.sqrt((1.0 - mean * mean) / (spins + 3.0))
    busy = weights > _UNSEEN / (spins + 1.0)
    low, high = float((mean - 5.0 * spread)[busy].min()), float((mean + 5.0 * spread)[busy].max())
    low, high = max(-1.0, low - 10.0 / spins), min(1.0, high + 10.0 / spins)
    return (low, high) if high - low < _NARROW else (-1.0, 1.0)


def husimi_function(state: SchmidtState, cos_theta: Array, columns: int) -> Array:
    """<theta, phi| rho |theta, phi> at `columns` angles phi from -pi on; shape (len(cos_theta), columns)."""
    spins = state.spins
    coherent = spin_coherent_amplitudes(spins, cos_theta)
    turns = -(-(spins + 1) // columns)
    out = np.zeros((cos_theta.size, columns))
    for weight, vector in zip(state.weights, state.spin, strict=True):
        # angles repeat after `columns` steps of j: fold, then one Fourier sum does them all
        product = np.zeros((cos_theta.size, turns * columns))
        product[:, : spins + 1] = coherent * (vector * (1.0 - 2.0 * (np.arange(spins + 1) % 2)))
        folded = product.reshape(cos_theta.size, turns, columns).sum(axis=1)
        out += weight * np.abs(np.fft.fft(folded, axis=1)) ** 2
    return out


def spin_coherent_amplitudes(spins: int, cos_theta: Array) -> Array:
    """Moduli of a spin coherent state along theta over j = m_z + N/2; shape (len(cos_theta), N+1).

    sqrt(binomial(N, j)) cos(theta/2)^j sin(theta/2)^(N-j); at phi it gets exp(-i j phi).
    """
    j = np.arange(spins + 1, dtype=np.float64)
    binomial = gammaln(spins + 1.0) - gammaln(j + 1.0) - gammaln(spins - j + 1.0)
    with np.errstate(divide="ignore", invalid="ignore"):
        up = 0.5 * np.log(np.clip(0.5 * (1.0 + cos_theta), 0.0, 1.0))
        down = 0.5 * np.log(np.clip(0.5 * (1.0 - cos_theta), 0.0, 1.0))
        raised = np.multiply.outer(up, j)
        lowered = np.multiply.outer(down, spins - j)
    # 0 * log(0) counts as 0
    raised[:, 0] = 0.0
    lowered[:, -1] = 0.0
    out: Array = np.exp(0.5 * binomial + raised + lowered)
    return out
