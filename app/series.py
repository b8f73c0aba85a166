"""The series of a result, in order: what the solver registers for a point, each followed by its error."""

from solver import SERIES

SERIES_KEYS: tuple[str, ...] = tuple(
    dict.fromkeys(key for spec in SERIES for key in (spec.key, spec.error_key) if key is not None)
)
