"""One result, four faces: the data of a sweep, and the same as CSV or as a Python script."""

import csv
import io
import json
from collections.abc import Mapping, Sequence
from dataclasses import asdict
from typing import Any

from app import links
from app.companions import LIMIT_KEYS
from app.keys import SWEPT, number_text
from app.places import Place
from app.plan import Plan, model_at
from app.series import SERIES_KEYS
from app.sheets import Sheet

Row = Mapping[str, Any]


def result_of(
    sheet: Sheet,
    plan: Plan,
    rows: Sequence[Row | None],
    *,
    name: str,
    provenance: Mapping[str, Any],
) -> dict[str, Any]:
    """Return the public result of a sweep as JSON-able data.

    Parameters
    ----------
    sheet, plan : Sheet, Plan
        The question and its points.
    rows : sequence
        For each point of the plan its `answer` (series key to value), `limit`, `effective` and `uncoupled`,
        or None while it is not computed.
    name : str
        Content hash of the computation.
    provenance : mapping
        Versions, date and processor seconds.
    """
    data = sheet.data()
    result: dict[str, Any] = {
        "sheet": data,
        "link": links.link_of(sheet),
        "id": name,
        "complete": all(row is not None for row in rows),
        "provenance": dict(provenance),
        "axis": {"name": sheet.along, "values": list(plan.curves[0].axis)},
    }
    drawn = []
    for number, curve in enumerate(plan.curves):
        part = rows[number * sheet.points : (number + 1) * sheet.points]
        drawn.append({"name": curve.name, "value": curve.value} | columns_of(sheet, part))
    if sheet.each is None:
        result |= {key: value for key, value in drawn[0].items() if key not in {"name", "value"}}
    else:
        for curve_data in drawn:
            curve_data["axis"] = result["axis"]
        result["curves"] = drawn
    return result


def point_of(place: Place, row: Row, *, name: str, provenance: Mapping[str, Any]) -> dict[str, Any]:
    """Return the public result of one point: that of a sweep with one value, and its `portrait`."""
    model = asdict(model_at(place.sheet, place.at, place.member))
    below, above = (
        None if x is None else links.whole(links.place_query(place.moved(x)), links.POINT_PAGE)
        for x in place.neighbours
    )
    return {
        "sheet": place.sheet.data(),
        "link": links.whole(links.place_query(place), links.POINT_PAGE),
        "id": name,
        "complete": True,
        "provenance": dict(provenance),
        "axis": {"name": place.sheet.along, "values": [place.at]},
        "member": place.member,
        "model": model,
        "neighbours": {"below": below, "above": above},
        **columns_of(place.sheet, [row]),
        "portrait": row["portrait"],
    }


def columns_of(sheet: Sheet, rows: Sequence[Row | None]) -> dict[str, Any]:
    """Return the series of one curve as columns, None where a point is missing."""
    answers = [None if row is None else row["answer"] for row in rows]
    limits = [None if row is None else row["limit"] for row in rows]
    columns: dict[str, Any] = {
        "series": {
            key: [None if answer is None else answer[key] for answer in answers] for key in SERIES_KEYS
        },
        "limit": {key: [None if limit is None else limit[key] for limit in limits] for key in LIMIT_KEYS},
        "uncoupled": {
            "energy": [None if row is None else row["uncoupled"][0] for row in rows],
            "levels": [None if row is None else row["uncoupled"] for row in rows],
        },
        "notes": [
            {"point": point, "note": answer["note"]}
            for point, answer in enumerate(answers)
            if answer is not None and answer["note"]
        ],
    }
    if sheet.overlay == "effective":
        columns["effective"] = {"energy": [None if row is None else row["effective"] for row in rows]}
    return columns


def curves_of(result: Mapping[str, Any]) -> list[dict[str, Any]]:
    """Return the curves of a result in one form, whether or not the sheet has a family.

    Each has `name` and `value` (None without a family), `axis`, `series`, `limit`, `uncoupled`, `notes` and,
    when asked for, `effective`.
    """
    if "curves" in result:
        return list(result["curves"])
    kept = ("axis", "series", "limit", "uncoupled", "effective", "notes")
    return [{"name": None, "value": None} | {key: result[key] for key in kept if key in result}]


def encode(data: Any) -> bytes:
    """Return compact JSON; NaN and infinities are refused, never written."""
    return json.dumps(data, separators=(",", ":"), ensure_ascii=False, allow_nan=False).encode()


def csv_of(result: Mapping[str, Any]) -> str:
    """Return a result as a table: one line per point, levels in numbered columns, comments first."""
    sheet = result["sheet"]
    columns = _csv_columns(result)
    out = io.StringIO()
    out.write(f"# {one_line(sheet['title']) or 'softmode sweep'}\r\n")
    out.write(f"# link {result['link']}\r\n# id {result['id']}\r\n")
    made = result["provenance"]
    out.write("# " + ", ".join(f"{key} {value}" for key, value in made.items()) + "\r\n")
    writer = csv.writer(out)
    writer.writerow(columns)
    for curve in curves_of(result):
        flat = _flat(curve)
        for point, x in enumerate(curve["axis"]["values"]):
            first = [] if curve["name"] is None else [cell_text(curve["value"])]
            start = len(first) + 1
            writer.writerow([*first, cell_text(x), *(cell_text(flat[key][point]) for key in columns[start:])])
    return out.getvalue()


def _csv_columns(result: Mapping[str, Any]) -> list[str]:
    curves = curves_of(result)
    names = [] if curves[0]["name"] is None else [f"each {curves[0]['name']}"]
    return [*names, result["axis"]["name"], *_flat(curves[0])]


def _flat(curve: Mapping[str, Any]) -> dict[str, list[Any]]:
    """Return every column of a curve by its name in the table."""
    flat: dict[str, list[Any]] = {}
    groups = {
        "": curve["series"],
        "limit_": curve["limit"],
        "uncoupled_": {"energy": curve["uncoupled"]["levels"]},
    }
    if "effective" in curve:
        groups["effective_"] = curve["effective"]
    for prefix, group in groups.items():
        for key, values in group.items():
            width = max((len(value) for value in values if isinstance(value, list)), default=None)
            if width is None:
                flat[prefix + key] = values
                continue
            for level in range(width):
                flat[f"{prefix}{key}_{level}"] = [
                    value[level] if value is not None and level < len(value) else None for value in values
                ]
    return flat


def cell_text(value: Any) -> str:
    """Return a value as it stands in a table; empty for None, numbers without loss."""
    if value is None:
        return ""
    if isinstance(value, bool):
        return "true" if value else "false"
    return repr(value) if isinstance(value, float) else str(value)


def one_line(text: str) -> str:
    """Return a text with its line breaks turned into spaces."""
    return " ".join(text.split())


_SNIPPET = '''\
"""{title}

{link}
"""

import json
import time
import urllib.request

ADDRESS = {address!r}
KEY = None  # the server's shared key, if it has one


def fetch():
    """Return the result from the server, waiting until it is complete."""
    request = urllib.request.Request(ADDRESS)
    if KEY:
        request.add_header("Authorization", "Bearer " + KEY)
    while True:
        with urllib.request.urlopen(request, timeout=120) as answer:
            data = json.load(answer)
            if answer.status == 200:
                return data
        time.sleep(1)


def compute():
    """Yield the same points computed here, without a server (needs the solver package)."""
    from solver import CollectiveModel, PointQuestion, solve_chain

{models}
    questions = [PointQuestion(model=model, {asked}) for model in models]
    for answer in solve_chain(questions):
        yield answer.row()


if __name__ == "__main__":
    result = fetch()
    for curve in result.get("curves", [result]):
        if "value" in curve:
            print(curve["name"], "=", curve["value"])
        series = curve["series"]
        for x, energy, bosons in zip(result["axis"]["values"], series["energy"], series["boson_number"]):
            print(x, energy[0], bosons)
'''


def python_of(sheet: Sheet, base: str) -> str:
    """Return a script that fetches this sweep from the server at `base`, or computes it on its own."""
    query = links.query_of(sheet)
    return _SNIPPET.format(
        title=one_line(sheet.title).replace("\\", "\\\\").replace('"', "'") or "A sweep of Softmode",
        link=links.link_of(sheet),
        address=f"{base}/api/sweep?{query}" if query else f"{base}/api/sweep",
        models=_models_code(sheet),
        asked=f"levels={sheet.levels}, tolerance={sheet.tol!r}, need={sheet.need!r}, tail={sheet.tail!r}",
    )


def _models_code(sheet: Sheet) -> str:
    """Return the lines that build the models of a sheet, indented for a function body."""
    used: dict[str, str] = {
        name: repr(getattr(sheet, name)) for name in ("spins", "mode", "coupling", "ratio", "bias")
    }
    varied = {sheet.along: "x"} | ({sheet.each.name: "value"} if sheet.each else {})
    used |= {name: variable for name, variable in varied.items() if name in used}
    if "splitting" in varied:
        splitting = varied["splitting"]
    elif "detuning" in varied or sheet.detuning is not None:
        splitting = f"{used['mode']} + {varied.get('detuning', repr(sheet.detuning))}"
    else:
        splitting = repr(sheet.splitting)
    if "coupling-over-critical" in varied:
        # multiples of the critical value of the point's own model
        critical = (
            f"CollectiveModel(spins=1, mode={used['mode']}, splitting={splitting}, rotating=1.0, "
            f"counter={used['ratio']}).critical_coupling"
        )
        used["coupling"] = f"{varied['coupling-over-critical']} * {critical}"
    model = (
        f"CollectiveModel(spins={used['spins']}, mode={used['mode']}, splitting={splitting}, "
        f"rotating=coupling, counter={used['ratio']} * coupling, bias={used['bias']})"
    )
    lines = [_axis_code(sheet)]
    loops = ["for x in axis"]
    if sheet.each is not None:
        whole = sheet.each.name == "spins"
        values = [int(value) if whole else value for value in sheet.each.values]
        loops.insert(0, f"for value in {values!r}")
    loops.append(f"for coupling in [{used['coupling']}]")
    lines.append(f"models = [{model} {' '.join(loops)}]")
    return "\n".join("    " + line for line in lines)


def _axis_code(sheet: Sheet) -> str:
    last = sheet.points - 1
    low, high = number_text(sheet.start), number_text(sheet.stop)
    if SWEPT[sheet.along].kind == "integer":
        return (
            f"axis = [({low} * ({last} - i) + {high} * i + {last // 2}) // {last} for i in range({last + 1})]"
        )
    inner = f"({sheet.start!r} * ({last} - i) + {sheet.stop!r} * i) / {last}"
    return f"axis = [{sheet.start!r}, *({inner} for i in range(1, {last})), {sheet.stop!r}]"
