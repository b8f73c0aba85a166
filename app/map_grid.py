"""The cells of a map as arrays: what is computed, and what lies between."""

from collections.abc import Sequence

import numpy as np

from app.map_plan import Row, computed_cells, survey_of
from app.map_refine import Flags, Numbers, filled
from app.map_sheets import MapSheet
from app.plan import Plan, axis_values
from app.series import SERIES_KEYS
from app.sheets import critical_coupling
from solver import SERIES

_BOUNDS = {spec.error_key for spec in SERIES if spec.error_key is not None}
_INTEGERS = {spec.key for spec in SERIES if spec.kind == "integer"}
_LABELS = {spec.key for spec in SERIES if spec.kind == "label"}
LEVELS = ("energy", "energy_lower", "parity")
# one number in each cell, in the order of the registry
CELL_SERIES = tuple(
    key for key in SERIES_KEYS if key not in LEVELS and key not in _LABELS and key != "meets_tolerance"
)


class Grid:
    """The cells of a map, as far as they are computed.

    `computed` and `settled` tell which cells are computed, and which are so or will not be. A series is an
    array of shape (rows, columns), levels have a third axis; nan stands for what is missing. Bounds,
    parities and flags are those of computed cells alone, everything else is interpolated between these.
    """

    def __init__(self, question: MapSheet, made: Plan, rows: Sequence[Row | None]) -> None:
        self.question = question
        self.shape = (int(question["rows"]), question.sheet.points)
        self.rows = rows
        self.computed: Flags = computed_cells(rows, self.shape)
        self._survey = survey_of(question, made, rows)
        self.settled: Flags = self.computed.copy()
        for block in self._survey.settled:
            self.settled[block.cells] = True
        # an edge that an open block shares is still open
        for block in self._survey.open:
            self.settled[block.cells] = self.computed[block.cells]

    def series(self, key: str) -> Numbers:
        """Return a series by its key in the results."""
        if key in LEVELS:
            return self._filled(key, self._levels(key))
        found = np.full(len(self.rows), np.nan)
        for point, row in enumerate(self.rows):
            value = None if row is None else row["answer"][key]
            if value is not None:
                found[point] = value
        return self._filled(key, found.reshape(self.shape))

    def shown(self) -> tuple[Numbers, Numbers]:
        """Return what the map draws, and its bounds."""
        name = self.question["show"].replace("-", "_")
        if name in {"energy", "error"}:
            upper, lower = (self.series(key) for key in ("energy", "energy_lower"))
            widths = upper - lower
            # without a lower bound on one level there is no largest bound
            largest: Numbers = widths.max(axis=2)
            if name == "error":
                return largest, np.full(self.shape, np.nan)
            return upper[..., 0], widths[..., 0]
        value = self.series(name)
        bound = self.series(f"{name}_error") if f"{name}_error" in _BOUNDS else np.full(self.shape, np.nan)
        if name == "boson_number" and self.question.sheet.bosons == "per-spin":
            spins = self.spins()
            return value / spins, bound / spins
        return value, bound

    def spins(self) -> Numbers:
        """Return the number of spins of each cell."""
        sheet, found = self.question.sheet, np.full(self.shape, float(self.question.sheet.spins))
        if sheet.along == "spins":
            found[:] = np.array(axis_values(sheet))[None, :]
        elif self.question["across"] == "spins":
            found[:] = np.array(self.question.rows)[:, None]
        return found

    def _levels(self, key: str) -> Numbers:
        count = max(
            (len(row["answer"][key]) for row in self.rows if row is not None and row["answer"][key]),
            default=self.question.sheet.levels,
        )
        found = np.full((len(self.rows), count), np.nan)
        for point, row in enumerate(self.rows):
            values = (None if row is None else row["answer"][key]) or ()
            for level, value in enumerate(values):
                found[point, level] = np.nan if value is None else value
        return found.reshape(*self.shape, count)

    def _filled(self, key: str, values: Numbers) -> Numbers:
        if key in _BOUNDS or key == "parity" or self.computed.all():
            return values
        between = filled(values, self.computed, self._survey)
        if key not in _INTEGERS:
            return between
        # a cutoff between two is the larger whole number
        return np.where(self.computed, values, np.ceil(between))


def critical_couplings(question: MapSheet, xs: Sequence[float], ys: Sequence[float]) -> Numbers:
    """Return coupling and its critical value, shape (2, len(ys), len(xs)); nan with a bias."""
    found = np.full((2, len(ys), len(xs)), np.nan)
    sheet, across = question.sheet, question["across"]
    if "bias" in {sheet.along, across} or sheet.bias != 0.0:
        return found
    known: dict[tuple[float, float, float], float] = {}
    for row, y in enumerate(ys):
        for column, x in enumerate(xs):
            values = {across: y, sheet.along: x}
            mode = values.get("mode", sheet.mode)
            splitting = values.get("splitting")
            if splitting is None:
                detuning = values.get("detuning", sheet.detuning)
                splitting = mode + detuning if detuning is not None else sheet.splitting or 0.0
            place = (mode, splitting, values.get("ratio", sheet.ratio))
            if place not in known:
                known[place] = critical_coupling(*place)
            coupling = values.get("coupling", sheet.coupling)
            if "coupling-over-critical" in values:
                coupling = values["coupling-over-critical"] * known[place]
            found[:, row, column] = coupling, known[place]
    return found
