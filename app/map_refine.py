"""Which cells of a map are computed: a coarse grid first, then those where the quantities bend.

A cell that is not computed is interpolated between the corners of the block that it lies in. The cells
depend on the numbers found alone, never on the order or the time at which they came.
"""

import itertools
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

STEP = 8
# predicted error that is left alone, as a share of the range of each judged quantity
ALLOWED = (0.01, 0.01, 0.015, 0.03)
# ranges below these are flat: mean bosons per spin, order parameter, gap over mode, decades of the gap
FLAT = (0.01, 0.01, 0.01, 0.05)
# halving a block quarters the error where a quantity is smooth and halves it at an edge: judged as an edge
SHRINKS = 0.5

Numbers = NDArray[np.float64]
Flags = NDArray[np.bool_]


@dataclass(frozen=True)
class Block:
    """A rectangle of cells whose four corners are computed; all ends belong to it."""

    top: int
    bottom: int
    left: int
    right: int

    @property
    def size(self) -> int:
        """Number of cells between the corners, counted on one side of each pair of edges."""
        return (self.bottom - self.top) * (self.right - self.left)

    @property
    def rows(self) -> tuple[int, ...]:
        """Its rows after one halving: two ends, and the middle where there is one."""
        return tuple(sorted({self.top, (self.top + self.bottom) // 2, self.bottom}))

    @property
    def columns(self) -> tuple[int, ...]:
        """Its columns after one halving."""
        return tuple(sorted({self.left, (self.left + self.right) // 2, self.right}))

    def parts(self) -> list["Block"]:
        """Return what one halving makes of it."""
        rows, columns = self.rows, self.columns
        return [
            Block(top, bottom, left, right)
            for top, bottom in itertools.pairwise(rows)
            for left, right in itertools.pairwise(columns)
        ]

    @property
    def cells(self) -> tuple[slice, slice]:
        """All its cells, as an index."""
        return slice(self.top, self.bottom + 1), slice(self.left, self.right + 1)


@dataclass(frozen=True)
class Survey:
    """How far a map is known: blocks that need no more, blocks still open, and cells wanted for those."""

    settled: tuple[Block, ...]
    open: tuple[Block, ...]
    wanted: Flags


def coarse_lines(count: int) -> list[int]:
    """Return the rows, or columns, of the coarse grid."""
    return sorted({*range(0, count, STEP), count - 1})


def coarse_blocks(shape: tuple[int, int]) -> list[Block]:
    """Return the blocks between the lines of the coarse grid."""
    rows, columns = (coarse_lines(count) for count in shape)
    return [
        Block(top, bottom, left, right)
        for top, bottom in itertools.pairwise(rows)
        for left, right in itertools.pairwise(columns)
    ]


def survey(judged: Sequence[Numbers], computed: Flags) -> Survey:
    """Return what the computed cells settle and what is wanted next.

    Parameters
    ----------
    judged : sequence of arrays, shape (rows, columns)
        The quantities of ALLOWED, nan where a cell has none.
    computed : array of bool, shape (rows, columns)
        Cells that are computed, whether or not they have numbers.
    """
    wanted = np.zeros(computed.shape, dtype=bool)
    wanted[np.ix_(*(coarse_lines(count) for count in computed.shape))] = True
    blocks = coarse_blocks(computed.shape)
    if not computed[wanted].all():
        return Survey((), tuple(blocks), wanted & ~computed)
    scaled = [
        _scaled(values, computed & wanted, *bar) for values, *bar in zip(judged, ALLOWED, FLAT, strict=True)
    ]
    bends = _bends(scaled)
    waiting = [(block, bends[block.top // STEP, block.left // STEP]) for block in blocks]
    settled: list[Block] = []
    open_blocks: list[Block] = []
    while waiting:
        bent = [block for block, bend in waiting if block.size > 1 and not bend <= 1.0]
        settled += [block for block, bend in waiting if block.size == 1 or bend <= 1.0]
        waiting = []
        for block in bent:
            lattice = np.ix_(block.rows, block.columns)
            if computed[lattice].all():
                left = SHRINKS * max(_surplus(values, block) for values in scaled)
                waiting += [(part, left) for part in block.parts()]
            else:
                open_blocks.append(block)
                wanted[lattice] = True
    return Survey(tuple(settled), tuple(open_blocks), wanted & ~computed)


def _scaled(values: Numbers, coarse: Flags, allowed: float, flat: float) -> Numbers:
    """Return a quantity in units of the error that is left alone."""
    known = values[coarse & np.isfinite(values)]
    spread = float(known.max() - known.min()) if known.size else 0.0
    return values / (allowed * max(spread, flat))


def _bends(scaled: Sequence[Numbers]) -> Numbers:
    """Return for each coarse block the error that second differences predict for its middle."""
    rows, columns = (coarse_lines(count) for count in scaled[0].shape)
    at_corners = np.zeros((len(rows), len(columns)))
    for values in scaled:
        corners = values[np.ix_(rows, columns)]
        bends = [_second_differences(corners, axis, values.shape[axis]) for axis in (0, 1)]
        at_corners = np.maximum(at_corners, bends[0] + bends[1])
    # nan, a cell without numbers, stays nan: such a block is never settled by prediction
    pairs = np.maximum(at_corners[:-1], at_corners[1:])
    worst: Numbers = np.maximum(pairs[:, :-1], pairs[:, 1:])
    return worst


def _second_differences(corners: Numbers, axis: int, count: int) -> Numbers:
    """Return the error of straight lines between neighbours, an eighth of the second difference.

    It is unknown, inf, between the only two lines of an axis with `count` values.
    """
    turned = np.moveaxis(corners, axis, 0)
    found = np.full_like(turned, np.inf if count > 2 else 0.0)
    if len(turned) > 2:
        found[1:-1] = np.abs(turned[:-2] - 2.0 * turned[1:-1] + turned[2:]) / 8.0
        found[0], found[-1] = found[1], found[-2]
    return np.moveaxis(found, 0, axis)


def _surplus(values: Numbers, block: Block) -> float:
    """Return how far the cells that a halving adds lie from what its corners predict; inf without numbers."""
    predicted = between_corners(values, block)
    rows = [row - block.top for row in block.rows]
    columns = [column - block.left for column in block.columns]
    lattice = np.ix_(block.rows, block.columns)
    error = float(np.abs(predicted[np.ix_(rows, columns)] - values[lattice]).max())
    return error if np.isfinite(error) else np.inf


def between_corners(values: Numbers, block: Block) -> Numbers:
    """Return the bilinear interpolation between the corners of a block at all its cells.

    `values` has shape (rows, columns) or (rows, columns, more).
    """
    more = (1,) * (values.ndim - 2)
    down = np.linspace(0.0, 1.0, block.bottom - block.top + 1).reshape(-1, 1, *more)
    along = np.linspace(0.0, 1.0, block.right - block.left + 1).reshape(1, -1, *more)
    corner = {
        (row, column): values[row, column]
        for row in (block.top, block.bottom)
        for column in (block.left, block.right)
    }
    upper = (1.0 - along) * corner[block.top, block.left] + along * corner[block.top, block.right]
    lower = (1.0 - along) * corner[block.bottom, block.left] + along * corner[block.bottom, block.right]
    filled: Numbers = (1.0 - down) * upper + down * lower
    return filled


def filled(values: Numbers, computed: Flags, found: Survey) -> Numbers:
    """Return values with the cells that are not computed interpolated; nan where a corner is missing.

    Small blocks come last: on an edge between two, the finer one is believed.
    """
    made = np.full_like(values, np.nan)
    for block in sorted((*found.settled, *found.open), key=lambda one: -one.size):
        made[block.cells] = between_corners(values, block)
    made[computed] = values[computed]
    return made


def coarse_survey(shape: tuple[int, int]) -> Survey:
    """Return the survey of a map of which all cells will be computed: nothing but its coarse blocks."""
    return Survey((), tuple(coarse_blocks(shape)), np.ones(shape, dtype=bool))
