"""What the points of a cutoff question say: the cutoff that covers all, where a stated one holds."""

from collections.abc import Mapping, Sequence
from dataclasses import asdict
from typing import Any

from app.cutoff_plan import model_at
from app.cutoff_sheets import CutoffSheet
from solver.sizes import calculation_size

Row = Mapping[str, Any]
START = "start"
TREATMENTS = ("collective", "parity", "product")


def quantities_of(question: CutoffSheet) -> tuple[str, ...]:
    """Return what is judged: the quantities asked, and "start" where a start is followed."""
    return question.asked + ((START,) if question["start"] != "none" else ())


def columns_of(question: CutoffSheet, rows: Sequence[Row | None]) -> dict[str, Any]:
    """Return the numbers of all points as columns, None where a point is missing or not settled.

    `needed`, `status` and `error` are given for each quantity, `error` at its needed cutoff; `covering` is
    the largest needed cutoff of a point and `deciding` its quantity. `stated` (None unless asked) has for the
    stated cutoff the `error` and `good` of each quantity, and `enough`.
    """
    points = [_point(question, row) for row in rows]
    quantities = quantities_of(question)
    columns: dict[str, Any] = {
        key: _columns(_inside(points, key), quantities) for key in ("needed", "status", "error")
    }
    columns |= {key: _inside(points, key) for key in ("covering", "deciding")}
    columns["stated"] = None
    if question["stated"] is not None:
        told = _inside(points, "stated")
        columns["stated"] = {
            "cutoff": question["stated"],
            "error": _columns(_inside(told, "error"), quantities),
            "good": _columns(_inside(told, "good"), quantities),
            "enough": _inside(told, "enough"),
        }
    columns["values"] = _columns(_inside(points, "values"), _value_names(question))
    columns["notes"] = [
        {"point": number, "note": row["note"]}
        for number, row in enumerate(rows)
        if row is not None and row["note"]
    ]
    return columns


def _value_names(question: CutoffSheet) -> tuple[str, ...]:
    if question["ensemble"] == "lowest":
        names: tuple[str, ...] = ("energy", "gap", "boson_number", "order_parameter")
    else:
        errors = ("boson_number", "boson_number_error", "order_parameter", "order_parameter_error")
        names = (*errors, "inversion", "critical_temperature")
    return names + (("at_start", "mean_bosons_most") if question["start"] != "none" else ())


def _point(question: CutoffSheet, row: Row | None) -> dict[str, Any]:
    """Return one point with the start as one more quantity; empty where something is not settled."""
    if row is None or row["answer"] is None or (question["start"] != "none" and row["start"] is None):
        return {}
    answer, started = row["answer"], row["start"]
    kept = ("needed", "status", "error", "covering", "deciding", "stated")
    point: dict[str, Any] = {key: answer[key] for key in kept} | {"values": answer}
    if started is None:
        return point
    point["needed"] = answer["needed"] | {START: started["needed"]}
    point["status"] = answer["status"] | {START: started["status"]["needed"]}
    point["values"] = answer | started
    if started["needed"] > answer["covering"]:
        point |= {"covering": started["needed"], "deciding": START}
    if answer["stated"] is not None:
        told, own = started["stated"], answer["stated"]
        point["stated"] = {
            "error": own["error"] | {START: told["weight_most"]},
            "good": own["good"] | {START: told["enough"]},
            "enough": own["enough"] and told["enough"],
        }
    return point


def _inside(rows: Sequence[Any], key: str) -> list[Any]:
    """Return one entry of each row, None where the row or the entry is missing."""
    return [None if row is None else row.get(key) for row in rows]


def _columns(rows: Sequence[Any], names: Sequence[str]) -> dict[str, list[Any]]:
    return {name: _inside(rows, name) for name in names}


def summary_of(
    question: CutoffSheet, places: Sequence[tuple[float, float | None]], columns: Mapping[str, Any]
) -> dict[str, Any]:
    """Return what all points together say; `places` has their values on the axis and of the second quantity.

    `covering` is None while no point is settled; `per_quantity` has the largest needed cutoff of each
    quantity and where it is needed, `sizes` how large the calculation is there.
    """
    covering = _peak(columns["covering"], places)
    summary: dict[str, Any] = {
        "points": len(places),
        "settled": sum(value is not None for value in columns["covering"]),
        "covering": None if covering is None else covering["cutoff"],
        "number_states": None if covering is None else covering["cutoff"] + 1,
        "deciding": None,
        "per_quantity": {},
    }
    if covering is not None:
        quantity = columns["deciding"][covering["point"]]
        status = columns["status"].get(quantity, [None] * len(places))[covering["point"]]
        summary["deciding"] = {"quantity": quantity, "status": status} | covering
    for quantity, needed in columns["needed"].items():
        peak = _peak(needed, places)
        if peak is not None:
            peak["status"] = columns["status"][quantity][peak["point"]]
        summary["per_quantity"][quantity] = peak
    summary["stated"] = _stated(question, places, columns)
    summary["sizes"] = _sizes(question, summary)
    return summary


def _peak(
    needed: Sequence[int | None], places: Sequence[tuple[float, float | None]]
) -> dict[str, Any] | None:
    """Return the largest entry and the first point that has it."""
    known = [(value, -point) for point, value in enumerate(needed) if value is not None]
    if not known:
        return None
    value, negative = max(known)
    x, second = places[-negative]
    return {"cutoff": value, "point": -negative, "x": x, "second": second}


def _stated(
    question: CutoffSheet, places: Sequence[tuple[float, float | None]], columns: Mapping[str, Any]
) -> dict[str, Any] | None:
    """Return where the stated cutoff is good enough, as a whole and for each quantity."""
    stated = columns["stated"]
    if stated is None:
        return None
    judged = {quantity: _judged(question, places, good) for quantity, good in stated["good"].items()}
    worst = {
        quantity: _worst(errors, stated["good"][quantity], places)
        for quantity, errors in stated["error"].items()
    }
    whole = _judged(question, places, stated["enough"])
    return {"cutoff": stated["cutoff"], **whole, "per_quantity": judged, "worst": worst}


def _worst(
    errors: Sequence[float | None],
    good: Sequence[bool | None],
    places: Sequence[tuple[float, float | None]],
) -> dict[str, Any] | None:
    """Return the largest error and its point; `error` None where the cutoff does not even hold the levels."""
    unheld = [p for p, error in enumerate(errors) if error is None and good[p] is False]
    known = [(error, -p) for p, error in enumerate(errors) if error is not None]
    if not known and not unheld:
        return None
    error, point = (None, unheld[0]) if unheld else (max(known)[0], -max(known)[1])
    x, second = places[point]
    return {"error": error, "point": point, "x": x, "second": second}


def _judged(
    question: CutoffSheet, places: Sequence[tuple[float, float | None]], good: Sequence[bool | None]
) -> dict[str, Any]:
    """Return how many points are good, and for each curve the stretches of the axis whose points are."""
    length = question.sheet.points
    stretches = []
    for row, second in enumerate(question.curves):
        part = range(row * length, (row + 1) * length)
        for begin, end in _runs([good[point] is True for point in part]):
            first, last = places[part[begin]][0], places[part[end]][0]
            stretches.append({"second": second, "from": first, "to": last, "points": end - begin + 1})
    known = [value for value in good if value is not None]
    return {"good_points": sum(known), "judged_points": len(known), "good": stretches}


def _runs(good: Sequence[bool]) -> list[tuple[int, int]]:
    runs: list[tuple[int, int]] = []
    for number, value in enumerate(good):
        if value and runs and runs[-1][1] == number - 1:
            runs[-1] = (runs[-1][0], number)
        elif value:
            runs.append((number, number))
    return runs


def _sizes(question: CutoffSheet, summary: Mapping[str, Any]) -> list[dict[str, Any]]:
    """Return how large a calculation is at the covering and at the stated cutoff, for the largest N."""
    sheet = question.sheet
    x = sheet.stop
    second = max(one for one in question.curves if one is not None) if question.second == "spins" else None
    if question.second is not None and second is None:
        second = question.curves[0]
    spins = model_at(question, x, second).spins
    cutoffs = {"covering": summary["covering"], "stated": question["stated"]}
    keeps_parity = sheet.bias == 0.0 and "bias" not in {sheet.along, question.second}
    return [
        {"for": name, "cutoff": cutoff, "spins": spins, "treatment": treatment}
        | asdict(calculation_size(spins, cutoff, treatment))
        for name, cutoff in cutoffs.items()
        if cutoff is not None
        for treatment in TREATMENTS
        if treatment != "parity" or keeps_parity
    ]
