"""How large a calculation is in each way of writing the model down: exact integers.

Counts are of stored numbers in a matrix that holds every diagonal entry and every coupling of
the general model (both couplings, splitting and bias where the symmetry allows one), or of a
given model. Three ways: the collective spin (N+1 states), one parity block of it (the larger),
and the full product space of N separate spins (2^N states).
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Literal, get_args

from solver.errors import QuestionError
from solver.model import CollectiveModel

Treatment = Literal["collective", "parity", "product"]
TREATMENTS: tuple[Treatment, ...] = get_args(Treatment)

_NUMBER = 8
_LARGEST_SHORT_INDEX = 2**31 - 1


@dataclass(frozen=True, slots=True)
class CalculationSize:
    """Size of one calculation.

    dimension: states; nonzeros: stored entries of H; dense_bytes, sparse_bytes: float64, dense
    and compressed rows (4-byte indices as long as they hold the entries, else 8-byte);
    density_matrix_bytes: complex128.
    """

    dimension: int
    nonzeros: int
    dense_bytes: int
    sparse_bytes: int
    density_matrix_bytes: int


@dataclass(frozen=True, slots=True)
class _Terms:
    """Which terms of H are there."""

    rotating: bool = True
    counter: bool = True
    bias: bool = True


def calculation_size(
    spins: int, cutoff: int, treatment: str, model: CollectiveModel | None = None
) -> CalculationSize:
    """Size of a calculation with n <= cutoff.

    treatment: "collective", "parity" or "product". model: count its own couplings instead of the
    general ones; its bias is left out of a parity block. Raises QuestionError.
    """
    if spins < 1:
        raise QuestionError("spins", spins, "1 or more")
    if cutoff < 0:
        raise QuestionError("cutoff", cutoff, "0 or more")
    terms = _Terms()
    if model is not None:
        terms = _Terms(model.rotating != 0.0, model.counter != 0.0, model.bias != 0.0)
    layers = cutoff + 1
    if treatment == "collective":
        dimension, nonzeros = layers * (spins + 1), _collective(spins, layers, terms)
    elif treatment == "parity":
        dimension, nonzeros = _parity(spins, layers, terms)
    elif treatment == "product":
        dimension, nonzeros = layers * 2**spins, _product(spins, layers, terms)
    else:
        raise QuestionError("treatment", treatment, ", ".join(TREATMENTS))
    index = 4 if max(nonzeros, dimension) <= _LARGEST_SHORT_INDEX else 8
    return CalculationSize(
        dimension=dimension,
        nonzeros=nonzeros,
        dense_bytes=_NUMBER * dimension**2,
        sparse_bytes=(_NUMBER + index) * nonzeros + index * (dimension + 1),
        density_matrix_bytes=2 * _NUMBER * dimension**2,
    )


def _collective(spins: int, layers: int, terms: _Terms) -> int:
    """Diagonal; N links of neighbouring layers per coupling; N links inside a layer for the bias."""
    between = 2 * spins * (layers - 1)
    inside = 2 * spins * layers if terms.bias else 0
    return layers * (spins + 1) + between * (terms.rotating + terms.counter) + inside


def _parity(spins: int, layers: int, terms: _Terms) -> tuple[int, int]:
    """The larger of the two blocks, and among blocks of one size the one with more entries."""
    return max(_parity_block(spins, layers, odd, terms) for odd in (0, 1))


def _parity_block(spins: int, layers: int, odd: int, terms: _Terms) -> tuple[int, int]:
    """Dimension and entries of the block with n + j even (odd = 0) or odd (odd = 1)."""
    # spin states and raising steps that start at an even or odd j
    states = (spins // 2 + 1, (spins + 1) // 2)
    steps = ((spins + 1) // 2, spins // 2)
    even_layers, odd_layers = (layers + 1) // 2, layers // 2
    dimension = even_layers * states[odd] + odd_layers * states[1 - odd]
    # links n -> n + 1 leave even layers (n even, j of the parity of `odd`) or odd ones
    from_even, from_odd = layers // 2, (layers - 1) // 2
    # counter: j -> j + 1; rotating: j -> j - 1, that is a raising step from j - 1
    counter = from_even * steps[odd] + from_odd * steps[1 - odd]
    rotating = from_even * steps[1 - odd] + from_odd * steps[odd]
    return dimension, dimension + 2 * (rotating * terms.rotating + counter * terms.counter)


def _product(spins: int, layers: int, terms: _Terms) -> int:
    """Every spin flips by itself: N 2^(N-1) raising steps."""
    flips: int = spins * 2 ** (spins - 1)
    between = 2 * flips * (layers - 1)
    inside = 2 * flips * layers if terms.bias else 0
    diagonal: int = layers * 2**spins
    return diagonal + between * (terms.rotating + terms.counter) + inside
