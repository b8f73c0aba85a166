"""The numbers behind the picture: what the value strip under the cursor and the printed table show."""

from collections.abc import Mapping
from typing import Any

from app.exports import curves_of
from app.sheets import Sheet
from app.symbols import curve_label, energy_unit, symbol
from solver import SERIES

# shown in the strip, in this order; everything else of the registry follows under "more"
FOREMOST = ("gap", "gap_any", "boson_number", "order_parameter", "inversion")
_TOLD_APART = {"energy", "energy_lower", "energy_status", "parity"}
_PLACES = ("cutoff_needed", "cutoff_used", "basis", "meets_tolerance", "note")


def readout(sheet: Sheet, result: Mapping[str, Any]) -> dict[str, Any]:
    """Return the values at every point with names, units and bounds, as plain data.

    `fields` describe one number each: `key`, `title`, `symbol`, `unit` (as shown), `error` (key of its error
    or None), `claim` (what that error is: "bound", "estimate" or nothing) and `foremost`. `curves` hold the
    series as they are in the result, untouched.
    """
    swept = symbol(sheet.along, sheet.frame)
    return {
        "axis": {
            "name": sheet.along,
            "symbol": swept.plain,
            "unit": energy_unit(sheet) if swept.frequency else "",
            "values": result["axis"]["values"],
        },
        "energy_unit": energy_unit(sheet),
        "fields": _fields(sheet),
        "curves": [
            {
                "label": "" if curve["name"] is None else _plain_label(curve, sheet),
                "token": None if curve["name"] is None else f"family-{number % 8 + 1}",
                "series": curve["series"],
                "notes": curve["notes"],
            }
            for number, curve in enumerate(curves_of(result))
        ],
        "pinned": sheet.at,
        "provenance": result["provenance"],
        "id": result["id"],
        "link": result["link"],
    }


def _plain_label(curve: Mapping[str, Any], sheet: Sheet) -> str:
    label = curve_label(curve["name"], curve["value"], sheet.frame)
    written = symbol(curve["name"], sheet.frame)
    return label.replace(written.figure, written.plain)


def _fields(sheet: Sheet) -> list[dict[str, Any]]:
    known = {spec.key: spec for spec in SERIES}
    bounds = {spec.error_key for spec in SERIES}
    rest = [
        key
        for key, spec in known.items()
        if key not in FOREMOST
        and key not in _TOLD_APART
        and key not in _PLACES
        and key not in bounds
        and spec.kind in {"number", "integer"}
    ]
    units: Mapping[str, str] = {"mode": energy_unit(sheet), "bits": "bits"}
    # with a bias at every point there is no parity, and one gap
    unparted = sheet.bias != 0.0 and "bias" not in sheet.swept
    return [
        {
            "key": key,
            "title": "Gap" if unparted and key == "gap_any" else known[key].title,
            "symbol": known[key].symbol,
            "unit": units.get(known[key].unit, ""),
            "error": known[key].error_key,
            "claim": known[key].claim,
            "foremost": key in FOREMOST,
        }
        for key in (*FOREMOST, *rest)
        if not (unparted and key == "gap")
    ]
