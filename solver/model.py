"""The model: N spins one half as one collective spin, coupled to one bosonic mode.

    H = w a^dag a + w0 Jz + eps Jx
        + [ lr (a J+ + a^dag J-) + lc (a^dag J+ + a J-) ] / sqrt(N)

with hbar = 1 and every energy a frequency in the unit of the inputs.

Sources: Dicke, Phys. Rev. 93, 99 (1954); Rabi, Phys. Rev. 51, 652 (1937); Jaynes, Cummings,
Proc. IEEE 51, 89 (1963); Tavis, Cummings, Phys. Rev. 170, 379 (1968).
"""

from __future__ import annotations

import math
from dataclasses import dataclass

from solver.errors import ModelError

LARGEST_SPINS = 5000


@dataclass(frozen=True, slots=True)
class CollectiveModel:
    """One member of the spin-boson family (all frequencies in the unit of the inputs).

    spins: N >= 1; mode: w > 0; splitting: w0, any sign; rotating, counter: lr and lc, any sign;
    bias: eps. Raises ModelError naming the parameter that is not usable.
    """

    spins: int
    mode: float
    splitting: float
    rotating: float
    counter: float
    bias: float = 0.0

    def __post_init__(self) -> None:
        if isinstance(self.spins, bool) or not isinstance(self.spins, int):
            raise ModelError("spins", self.spins, f"a whole number, 1 to {LARGEST_SPINS}")
        if not 1 <= self.spins <= LARGEST_SPINS:
            raise ModelError("spins", self.spins, f"1 to {LARGEST_SPINS}")
        for name in ("mode", "splitting", "rotating", "counter", "bias"):
            if not math.isfinite(getattr(self, name)):
                raise ModelError(name, getattr(self, name), "a finite number")
        if self.mode <= 0.0:
            raise ModelError("mode", self.mode, "greater than 0 (H is bounded below only there)")

    @classmethod
    def from_ratio(
        cls,
        spins: int,
        mode: float,
        splitting: float,
        coupling: float,
        ratio: float = 1.0,
        bias: float = 0.0,
    ) -> CollectiveModel:
        """Model with lr = coupling and lc = ratio * coupling."""
        return cls(spins, mode, splitting, coupling, ratio * coupling, bias)

    @property
    def total_coupling(self) -> float:
        """Lr + lc, the coupling of the displacement to Jx."""
        return self.rotating + self.counter

    @property
    def coupling_difference(self) -> float:
        """Lr - lc, the coupling of the momentum to Jy."""
        return self.rotating - self.counter

    @property
    def is_uncoupled(self) -> bool:
        """No coupling at all: spins and mode do not see each other."""
        return self.rotating == 0.0 and self.counter == 0.0

    @property
    def conserves_parity(self) -> bool:
        """Pi = (-1)^(n + Jz + N/2) commutes with H."""
        return self.bias == 0.0

    @property
    def conserves_excitations(self) -> bool:
        """Whether a^dag a + Jz (or a^dag a - Jz) commutes with H, or nothing couples at all."""
        return self.is_uncoupled or (self.bias == 0.0 and (self.rotating == 0.0 or self.counter == 0.0))

    @property
    def displacement_per_quantum(self) -> float:
        """G = (lr + lc) / (w sqrt(N)): shift of the mode for one unit of Jx."""
        return self.total_coupling / (self.mode * math.sqrt(self.spins))

    @property
    def critical_coupling(self) -> float:
        """Lr at which lr + lc = sqrt(w |w0|), the ratio lc / lr held (large N, no bias).

        Hioe, Phys. Rev. A 8, 1440 (1973). For lr = 0 the ratio counts as 1.
        """
        ratio = self.counter / self.rotating if self.rotating != 0.0 else 1.0
        share = max(abs(1.0 + ratio), abs(1.0 - ratio))
        return math.sqrt(self.mode * abs(self.splitting)) / share
