"""The public result of a cutoff question, and its tables."""

import csv
import io
from collections.abc import Mapping, Sequence
from typing import Any

from app import links
from app.cutoff_sheets import CutoffSheet
from app.cutoff_summary import columns_of, summary_of
from app.exports import cell_text, one_line
from app.plan import Plan

SIZE_COLUMNS = (
    "for",
    "cutoff",
    "number_states",
    "spins",
    "treatment",
    "dimension",
    "nonzeros",
    "dense_bytes",
    "sparse_bytes",
    "density_matrix_bytes",
)


def result_of(
    question: CutoffSheet,
    made: Plan,
    rows: Sequence[Mapping[str, Any] | None],
    *,
    name: str,
    provenance: Mapping[str, Any],
) -> dict[str, Any]:
    """Return the public result as JSON-able data.

    Points lie curve after curve (or row after row of a map), each in the order of the axis: `x` and `second`
    have their values. See `cutoff_summary` for the columns and the summary.
    """
    places = [(x, curve.value) for curve in made.curves for x in curve.axis]
    columns = columns_of(question, rows)
    return {
        "sheet": question.data(),
        "link": links.cutoff_link(question),
        "id": name,
        "complete": all(row is not None for row in rows),
        "provenance": dict(provenance),
        "axis": {"name": question.sheet.along, "values": list(made.curves[0].axis)},
        "second": None
        if question.second is None
        else {"name": question.second, "values": [curve.value for curve in made.curves]},
        "x": [x for x, _ in places],
        "computed": [row is not None for row in rows],
        **columns,
        "summary": summary_of(question, places, columns),
    }


def csv_of(result: Mapping[str, Any]) -> str:
    """Return the points as a table: one line per point, comments first."""
    out = io.StringIO()
    _write_comments(out, result, "softmode cutoffs")
    flat = _flat(result)
    writer = csv.writer(out)
    writer.writerow(flat)
    writer.writerows(zip(*([cell_text(value) for value in column] for column in flat.values()), strict=True))
    return out.getvalue()


def sizes_csv_of(result: Mapping[str, Any]) -> str:
    """Return the sizes of the calculation as a table of plain whole numbers, bytes for memory."""
    out = io.StringIO()
    writer = csv.writer(out)
    writer.writerow(SIZE_COLUMNS)
    for size in result["summary"]["sizes"]:
        row = size | {"number_states": size["cutoff"] + 1}
        writer.writerow([cell_text(row[name]) for name in SIZE_COLUMNS])
    return out.getvalue()


def _write_comments(out: io.StringIO, result: Mapping[str, Any], title: str) -> None:
    out.write(f"# {one_line(result['sheet']['title']) or title}\r\n")
    out.write(f"# link {result['link']}\r\n# id {result['id']}\r\n")
    out.write("# " + ", ".join(f"{key} {value}" for key, value in result["provenance"].items()) + "\r\n")
    summary = result["summary"]
    if summary["covering"] is not None:
        out.write(f"# covering cutoff (largest n kept) {summary['covering']}\r\n")


def _flat(result: Mapping[str, Any]) -> dict[str, Sequence[Any]]:
    """Return every column of the table by its name."""
    flat: dict[str, Sequence[Any]] = {}
    second = result["second"]
    if second is not None:
        length = len(result["axis"]["values"])
        flat[second["name"]] = [value for value in second["values"] for _ in range(length)]
    flat[result["axis"]["name"]] = result["x"]
    flat |= {"covering": result["covering"], "deciding": result["deciding"]}
    for key in ("needed", "status", "error"):
        flat |= {f"{key}_{quantity}": column for quantity, column in result[key].items()}
    stated = result["stated"]
    if stated is not None:
        flat["stated_cutoff"] = [stated["cutoff"]] * len(result["x"])
        flat["stated_enough"] = stated["enough"]
        for key in ("error", "good"):
            flat |= {f"stated_{key}_{quantity}": column for quantity, column in stated[key].items()}
    flat |= result["values"]
    notes = {entry["point"]: entry["note"] for entry in result["notes"]}
    flat["note"] = [notes.get(point) for point in range(len(result["x"]))]
    return flat
