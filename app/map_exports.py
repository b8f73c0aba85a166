"""The public result of a map: JSON, a table, and arrays of numpy."""

import csv
import io
import itertools
import json
from collections.abc import Mapping, Sequence
from typing import Any

import numpy as np

from app import links
from app.exports import cell_text, one_line
from app.map_grid import CELL_SERIES, LEVELS, Grid, critical_couplings
from app.map_plan import Row
from app.map_refine import Numbers
from app.map_sheets import MapSheet
from app.plan import Plan

_WHOLE = {"cutoff_needed", "cutoff_used", "parity"}


def result_of(
    question: MapSheet,
    made: Plan,
    rows: Sequence[Row | None],
    *,
    name: str,
    provenance: Mapping[str, Any],
) -> dict[str, Any]:
    """Return the public result of a map as JSON-able data.

    `series` hold a list of rows, one for each value of `across`, each with one entry for each value of
    `axis`; an entry of a level series lists the levels. `computed` says 1 for a computed cell and 0 for an
    interpolated one, which has no bounds. `limit` is that of N to infinity.
    """
    grid = Grid(question, made, rows)
    axis, across = list(made.curves[0].axis), list(question.rows)
    critical = critical_couplings(question, axis, across)[1]
    return {
        "sheet": question.data(),
        "link": links.map_link(question),
        "id": name,
        "complete": is_complete(made, rows),
        "provenance": dict(provenance),
        "axis": {"name": question.sheet.along, "values": axis},
        "across": {"name": question["across"], "values": across},
        "computed": grid.computed.astype(int).tolist(),
        "counts": {"cells": question.total, "computed": int(grid.computed.sum())},
        "series": {key: listed(grid.series(key), whole=key in _WHOLE) for key in (*LEVELS, *CELL_SERIES)},
        "limit": {"critical_coupling": listed(critical)},
        "notes": [
            {"row": point // len(axis), "column": point % len(axis), "note": row["answer"]["note"]}
            for point, row in enumerate(rows)
            if row is not None and row["answer"]["note"]
        ],
    }


def is_complete(made: Plan, rows: Sequence[Row | None]) -> bool:
    """Say whether every cell that a map computes is there."""
    return made.grow is None and all(
        rows[point] is not None for chunk in made.chunks for point in chunk.points
    )


def listed(values: Numbers, *, whole: bool = False) -> list[Any]:
    """Return an array as lists, None for nan."""
    plain = values.astype(object)
    if whole:
        plain[np.isfinite(values)] = values[np.isfinite(values)].astype(int)
    plain[~np.isfinite(values)] = None
    made: list[Any] = plain.tolist()
    return made


def csv_of(result: Mapping[str, Any]) -> str:
    """Return a map as a table: one line for each cell, row after row, comments first."""
    out = io.StringIO()
    out.write(f"# {one_line(result['sheet']['title']) or 'softmode map'}\r\n")
    out.write(f"# link {result['link']}\r\n# id {result['id']}\r\n")
    out.write("# " + ", ".join(f"{key} {value}" for key, value in result["provenance"].items()) + "\r\n")
    counts = result["counts"]
    out.write(f"# {counts['computed']} of {counts['cells']} cells computed, the others interpolated\r\n")
    flat = _flat(result)
    writer = csv.writer(out)
    writer.writerow(flat)
    writer.writerows(zip(*([cell_text(value) for value in column] for column in flat.values()), strict=True))
    return out.getvalue()


def _flat(result: Mapping[str, Any]) -> dict[str, Sequence[Any]]:
    """Return every column of the table by its name."""
    axis, across = result["axis"], result["across"]
    places = list(itertools.product(across["values"], axis["values"]))
    flat: dict[str, Sequence[Any]] = {
        axis["name"]: [x for _, x in places],
        across["name"]: [y for y, _ in places],
        "computed": list(itertools.chain.from_iterable(result["computed"])),
    }
    for key, rows in result["series"].items():
        cells = list(itertools.chain.from_iterable(rows))
        if key in LEVELS:
            flat |= {f"{key}_{level}": column for level, column in enumerate(zip(*cells, strict=True))}
        else:
            flat[key] = cells
    flat["limit_critical_coupling"] = list(
        itertools.chain.from_iterable(result["limit"]["critical_coupling"])
    )
    return flat


def npz_of(result: Mapping[str, Any]) -> bytes:
    """Return a map as arrays in a file that numpy reads without pickle.

    `axis`, `across`, `computed` and every series as float64, nan where the JSON has null; `axis_name`,
    `across_name`, `link`, `id` and `provenance` (JSON) as text.
    """
    arrays: dict[str, Any] = {
        "axis": np.array(result["axis"]["values"], dtype=np.float64),
        "across": np.array(result["across"]["values"], dtype=np.float64),
        "computed": np.array(result["computed"], dtype=np.float64),
        "limit_critical_coupling": np.array(result["limit"]["critical_coupling"], dtype=np.float64),
    }
    arrays |= {key: np.array(rows, dtype=np.float64) for key, rows in result["series"].items()}
    words = {
        "axis_name": result["axis"]["name"],
        "across_name": result["across"]["name"],
        "link": result["link"],
        "id": result["id"],
        "provenance": json.dumps(result["provenance"]),
    }
    out = io.BytesIO()
    arrays |= {name: np.array(text) for name, text in words.items()}
    np.savez_compressed(out, **arrays)
    return out.getvalue()
