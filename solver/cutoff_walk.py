"""Smallest cutoff from which on an error stays within what is wanted, by few evaluations.

The error falls like a power of the error of the ground level, which one converged solve gives for
every cutoff: two evaluations tell the power, the next one is made where the wanted error is
expected. An error may change sign on the way down, so the walk also looks beyond its end.
"""

from __future__ import annotations

import math
from collections.abc import Callable
from itertools import pairwise

import numpy as np
from numpy.typing import NDArray

Array = NDArray[np.float64]

_DECADE = 0.1
_NOTHING = 1e-3
_FLATTEST, _STEEPEST = 0.1, 3.0


class Walk:
    """Evaluations of one error and what follows from them.

    error: signed error at a cutoff; known: what is known of it already; curve: error of the
    ground level for every cutoff from 0 on; last: from there on the error is zero; limit:
    largest cutoff that can be evaluated.
    """

    def __init__(
        self,
        error: Callable[[int], float],
        known: dict[int, float],
        wanted: float,
        curve: Array,
        last: int,
        limit: int,
    ) -> None:
        self.known, self.wanted, self.curve = known, wanted, curve
        self.last, self.limit = last, min(limit, last)
        self._error = error

    def signed(self, cutoff: int) -> float:
        """The error, evaluated once per cutoff."""
        if cutoff >= self.last:
            return 0.0
        if cutoff not in self.known:
            self.known[cutoff] = self._error(cutoff)
        return self.known[cutoff]

    def holds(self, cutoff: int) -> bool:
        """Whether the error is within what is wanted."""
        return abs(self.signed(cutoff)) <= self.wanted

    def run(self, guess: int) -> int | None:
        """The cutoff, or None where cutoffs beyond `limit` would have to be tried."""
        bad = -1
        while True:
            good = self._between(bad, guess)
            if good is None:
                return None
            returned = self._returns(good)
            if returned is None:
                return good
            bad, guess = returned, returned + 1

    def _between(self, bad: int, guess: int) -> int | None:
        """Smallest cutoff above `bad` that holds where its neighbour below does not."""
        bad = max([bad, *(cutoff for cutoff in self.known if not self.holds(cutoff))])
        good = min([self.last, *(cutoff for cutoff in self.known if cutoff > bad)])
        at = self._predicted() if self.known else None
        at = guess if at is None else at
        side, step = 0, 1
        while good - bad > 1:
            at = min(max(at, bad + 1), good - 1)
            if at > self.limit:
                if self.limit <= bad:
                    return None
                at = self.limit
            held = self.holds(at)
            if held:
                good = at
            else:
                bad = at
            # a wrong slope must not creep: the same side again and again doubles the stride
            step = 2 * step if side == (1 if held else -1) else 1
            side = 1 if held else -1
            proposed = self._predicted()
            if held:
                at = good - step if proposed is None else min(proposed, good - step)
                at = max(at, bad + 1)
            else:
                at = bad + step if proposed is None else max(proposed, bad + step)
                at = min(at, good - 1)
        return good

    def _predicted(self) -> int | None:
        """Where the error should reach the wanted one, from the evaluations nearest to it."""
        points = []
        for cutoff, error in self.known.items():
            if cutoff < len(self.curve) and 0.0 < self.curve[cutoff] < math.inf:
                size = abs(error)
                if 0.0 < size < math.inf:
                    points.append((abs(math.log(size / self.wanted)), cutoff, math.log(size)))
        if not points:
            return None
        points.sort()
        _, first, size = points[0]
        height = math.log(self.curve[first])
        power = 1.0
        for _, other, other_size in points[1:]:
            fall = math.log(self.curve[other]) - height
            if fall != 0.0:
                power = min(max((other_size - size) / fall, _FLATTEST), _STEEPEST)
                break
        goal = math.exp(min(700.0, height + (math.log(self.wanted) - size) / power))
        below = np.flatnonzero(self.curve <= goal)
        return int(below[0]) if below.size else len(self.curve)

    def _returns(self, good: int) -> int | None:
        """A cutoff above `good` that does not hold; None where the error goes on falling."""
        far = self._far(good)
        marks = [good, good + 1, good + 2, far]
        errors = [self.signed(cutoff) for cutoff in marks]
        for cutoff, error in zip(marks[::-1], errors[::-1], strict=True):
            if abs(error) > self.wanted:
                return cutoff
        sizes = [abs(error) for error in errors]
        floor = _NOTHING * self.wanted
        falling = all(after <= max(before, floor) for before, after in pairwise(sizes))
        signs = {math.copysign(1.0, error) for error in errors if abs(error) > floor}
        if falling and len(signs) <= 1:
            return None
        beyond = range(far - 1, good + 2, -1)
        return next((cutoff for cutoff in beyond if not self.holds(cutoff)), None)

    def _far(self, good: int) -> int:
        """A cutoff where the ground level is ten times better, taken from those known if possible."""
        least = good + 3
        if good < len(self.curve) and 0.0 < self.curve[good] < math.inf:
            below = np.flatnonzero(self.curve <= _DECADE * self.curve[good])
            least = max(least, int(below[0]) if below.size else self.last)
        known = [cutoff for cutoff in self.known if cutoff >= least]
        return min(known) if known else min(least, max(self.limit, good))
