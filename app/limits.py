"""What a server, or this machine, can take; and the grammar of links as data."""

import functools
from typing import Any

from app.cutoff_sheets import CUTOFF_KEYS
from app.keys import GRAMMAR_VERSION, KEYS, SWEPT, Key
from app.map_sheets import MAP_OWN_KEYS
from app.places import MEMBER, STATE
from app.plan import CHUNK_SECONDS
from app.settings import Settings
from solver import CollectiveModel, PointQuestion, predicted_bytes, predicted_seconds

SPINS = (1, 20, 100, 500, 1000, 2000, 5000)
MULTIPLES = (0.5, 1.0, 2.0)


@functools.cache
def prices() -> tuple[dict[str, Any], ...]:
    """Return the predicted price of one point of the isotropic resonant model, from small to large."""
    found = []
    for spins in SPINS:
        for multiple in MULTIPLES:
            coupling = 0.5 * multiple
            model = CollectiveModel(spins=spins, mode=1.0, splitting=1.0, rotating=coupling, counter=coupling)
            question = PointQuestion(model=model)
            found.append(
                {
                    "spins": spins,
                    "coupling_over_critical": multiple,
                    "seconds": round(predicted_seconds(question), 5),
                    "bytes": predicted_bytes(question),
                }
            )
    return tuple(found)


def describe(settings: Settings) -> dict[str, Any]:
    """Return the limits of a server as JSON-able data."""
    return {
        "limits": {
            "workers": settings.workers,
            "processor_seconds_per_sheet": settings.price_ceiling,
            "bytes_per_point": settings.memory_ceiling,
            "sheets_at_a_time": settings.queue_limit,
            "store_bytes": settings.store_bytes,
            "body_bytes": settings.body_bytes,
            "query_characters": settings.query_characters,
            "lease_seconds": settings.lease_seconds,
            "grace_seconds": settings.grace_seconds,
            "chunk_seconds": CHUNK_SECONDS,
        },
        "point_prices": list(prices()),
        "grammar": {
            "version": GRAMMAR_VERSION,
            "swept": list(SWEPT),
            "keys": [_described(key) for key in KEYS.values()],
            "point_keys": [_described(key) for key in (MEMBER, STATE)],
            "map_keys": [_described(key) for key in MAP_OWN_KEYS.values()],
            "cutoff_keys": [_described(key) for key in CUTOFF_KEYS.values()],
        },
    }


def _described(key: Key) -> dict[str, Any]:
    """Return one key of the grammar as data."""
    return {
        "key": key.name,
        "kind": key.kind,
        "default": key.default,
        "allowed": key.allowed,
        "meaning": key.meaning,
        "shown_only": key.view,
    }
