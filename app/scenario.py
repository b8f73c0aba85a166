"""The example that the front page opens: an invented laboratory, and marked as invented wherever it shows."""

import functools

from app.sheets import Sheet

MARK = "Invented example"


@functools.cache
def example() -> Sheet:
    """Return the sheet of the invented laboratory: twelve ions, a force 4 kHz away from their mode."""
    return Sheet.model_validate(
        {
            "spins": 12,
            "mode": 4.0,
            "splitting": 2.5,
            "along": "coupling",
            "from": 0.0,
            "to": 4.0,
            "points": 101,
            "unit": "kHz",
            "frame": "trap",
            "at": 1.6,
            "title": "Invented lab: 12 ions, force 4 kHz from the mode",
            "note": (
                "The laboratory and its numbers are invented. Question: how many phonon levels does a "
                "simulation of this ramp need, and where does the gap close?"
            ),
        }
    )
