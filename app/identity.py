"""What a result is called, and which programs it came from."""

import functools
import hashlib

import numpy as np
import scipy

from app import __version__
from app.keys import canonical_json
from app.questions import Question
from solver import SOLVER_DIGEST


@functools.cache
def versions() -> dict[str, str]:
    """Return the versions that a number can depend on."""
    return {
        "softmode": __version__,
        "solver": SOLVER_DIGEST,
        "numpy": np.__version__,
        "scipy": scipy.__version__,
    }


def sheet_id(sheet: Question) -> str:
    """Return the content hash of a computation: 64 hex digits, equal for equal numbers."""
    named = versions()
    parts = [sheet.computation_key(), named["solver"], named["numpy"], named["scipy"]]
    return hashlib.sha256(canonical_json(parts).encode()).hexdigest()
