"""What can be asked, and how each kind of question is planned, put together and written as a table."""

from collections.abc import Mapping, Sequence
from typing import Any

from app import cutoff_exports, cutoff_plan, exports, map_exports, map_plan, plan
from app.cutoff_sheets import CutoffSheet
from app.map_sheets import MapSheet
from app.plan import Plan
from app.questions import Question


def plan_of(question: Question) -> Plan:
    """Return the points of a question, in chunks, with their price."""
    if isinstance(question, MapSheet):
        return map_plan.make(question)
    return cutoff_plan.make(question) if isinstance(question, CutoffSheet) else plan.make(question)


def result_of(
    question: Question,
    made: Plan,
    rows: Sequence[Mapping[str, Any] | None],
    *,
    name: str,
    provenance: Mapping[str, Any],
) -> dict[str, Any]:
    """Return the public result of a question as JSON-able data; rows that are missing are None."""
    if isinstance(question, MapSheet):
        return map_exports.result_of(question, made, rows, name=name, provenance=provenance)
    if isinstance(question, CutoffSheet):
        return cutoff_exports.result_of(question, made, rows, name=name, provenance=provenance)
    return exports.result_of(question, made, rows, name=name, provenance=provenance)


def csv_of(result: Mapping[str, Any]) -> str:
    """Return a result as a table."""
    if "across" in result:
        return map_exports.csv_of(result)
    return cutoff_exports.csv_of(result) if "needed" in result else exports.csv_of(result)


def npz_of(result: Mapping[str, Any]) -> bytes:
    """Return a map as arrays of numpy in a file."""
    return map_exports.npz_of(result)
