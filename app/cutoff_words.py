"""The answer of the cutoff desk in plain sentences."""

from collections.abc import Mapping
from typing import Any

from app.cutoff_sheets import CutoffSheet
from app.cutoff_summary import START
from app.keys import number_text
from app.sheets import Sheet
from app.symbols import energy_unit, sheet_title, symbol

NAMES = {
    "energies": "levels",
    "gap": "gap",
    "boson_number": "boson number",
    "order_parameter": "order parameter",
    "tail": "weight above the cutoff",
    START: "time evolution from its start",
}
STATUS_WORDS = {
    "proven": "proven",
    "checked": "checked by a truncated calculation at this cutoff",
}
BINARY = ("bytes", "KiB", "MiB", "GiB", "TiB", "PiB", "EiB")


def allowed_of(question: CutoffSheet) -> dict[str, float]:
    """Return the error allowed for each quantity that is judged: levels and gap in units of the mode."""
    sheet = question.sheet
    return {
        "energies": sheet.need,
        "gap": question["need-gap"],
        "boson_number": question["need-bosons"],
        "order_parameter": question["need-order"],
        "tail": sheet.tail,
        START: sheet.tail,
    }


def boson_name(question: CutoffSheet) -> str:
    """Return what the quanta are called: phonons of a trap, bosons otherwise."""
    return "phonon" if question.sheet.frame == "trap" else "boson"


def place_words(question: CutoffSheet, x: float, second: float | None) -> str:
    """Return a place in words: "λ = 0.75", with the second quantity where there is one."""
    parts = [_equals(question, question.sheet.along, x)]
    if question.second is not None and second is not None:
        parts.append(_equals(question, question.second, second))
    return ", ".join(parts)


def _equals(question: CutoffSheet, name: str, value: float) -> str:
    written = symbol(name, question.sheet.frame)
    unit = energy_unit(question.sheet) if written.frequency else ""
    return f"{written.plain} = {shown(value)}{' ' + unit if unit else ''}"


def shown(value: float) -> str:
    """Return a number in six digits, with a real minus sign."""
    return number_text(float(f"{value:.6g}")).replace("-", "−")


def shown_sheet(question: CutoffSheet) -> Sheet:
    """Return the sheet with the second axis of a map as a family: for words that say what varies."""
    across = question["across"]
    if across is None:
        return question.sheet
    # a multiple of the critical coupling needs one: 0 is left out
    ends = [value for value in (question["low"], question["high"]) if value != 0.0]
    return question.sheet.changed(each={"name": across, "values": ends})


def question_title(question: CutoffSheet) -> str:
    """Return the title of a question: its own, or one that says what is swept."""
    title = sheet_title(shown_sheet(question))
    if question["across"] is None or question.sheet.title:
        return title
    written = symbol(question["across"], question.sheet.frame)
    return f"{title}, {written.plain} from {shown(question['low'])} to {shown(question['high'])}"


def levels_words(cutoff: int, boson: str) -> str:
    """Return a cutoff so that it cannot be misread: "37 phonon levels (n = 0..36)"."""
    if cutoff == 0:
        return f"1 {boson} level (n = 0 alone)"
    return f"{cutoff + 1} {boson} levels (n = 0..{cutoff})"


def answer_words(question: CutoffSheet, result: Mapping[str, Any]) -> dict[str, Any]:
    """Return `headline`, `decided`, `stated` (None unless asked), `per_quantity` and `caution` in words."""
    summary = result["summary"]
    whole = "the whole map" if question["across"] is not None else "the whole sweep"
    if not result["complete"]:
        whole = f"the {summary['settled']} points computed so far"
    if summary["covering"] is None:
        headline = "No point is settled yet." if not result["complete"] else "No point could be settled."
        decided = ""
    else:
        verb = "covers" if summary["covering"] == 0 else "cover"
        headline = f"{levels_words(summary['covering'], boson_name(question))} {verb} {whole}."
        deciding = summary["deciding"]
        place = place_words(question, deciding["x"], deciding["second"])
        status = STATUS_WORDS.get(deciding["status"] or "", "")
        decided = f"Decided by the {NAMES[deciding['quantity']]} at {place}{'; ' + status if status else ''}."
    missing = summary["points"] - summary["settled"]
    caution = ""
    if result["complete"] and missing:
        caution = (
            f"{missing} of {summary['points']} points could not be settled: this answer leaves them out."
        )
    return {
        "headline": headline,
        "decided": decided,
        "caution": caution,
        "stated": _stated_words(question, summary["stated"], whole),
        "per_quantity": _quantities(question, summary),
        "more": [*_heat_words(question, result), *_start_words(question, result)],
    }


def _heat_words(question: CutoffSheet, result: Mapping[str, Any]) -> list[str]:
    """Say what the thermal equilibrium is, and where its order sets in."""
    deciding = result["summary"]["deciding"]
    if question["ensemble"] == "lowest" or deciding is None:
        return []
    spins = "distinguishable spins" if question["ensemble"] == "distinguishable" else "the collective spin"
    if question["temperature"] is not None:
        heat = f"k_B T/ħ = {_energy(question, question['temperature'])}"
    else:
        heat = f"the temperature at which the bare mode has the mean number {shown(question['quanta'])}"
    told = [f"Thermal equilibrium of {spins} at {heat}."]
    if question["ensemble"] == "distinguishable":
        critical = result["values"]["critical_temperature"][deciding["point"]]
        place = place_words(question, deciding["x"], deciding["second"])
        below = (
            "no order at any temperature"
            if critical is None
            else f"order below {_energy(question, critical)}"
        )
        told.append(f"At {place}, in the limit N → ∞: {below}.")
    return told


def _start_words(question: CutoffSheet, result: Mapping[str, Any]) -> list[str]:
    """Say what the start alone needs, and what the time evolution adds."""
    peak = result["summary"]["per_quantity"].get(START)
    if peak is None:
        return []
    values, boson = result["values"], boson_name(question)
    alone = max(value for value in values["at_start"] if value is not None)
    most = max(value for value in values["mean_bosons_most"] if value is not None)
    periods = shown(question["start-periods"])
    alone_words, later_words = levels_words(alone, boson), levels_words(peak["cutoff"], boson)
    told = f"The start alone needs {alone_words} (closed form, proven); {periods} mode periods after the "
    told += f"model is switched on, {later_words} (checked). Largest mean number of quanta met: {most:.4g}."
    return [told]


def _energy(question: CutoffSheet, value: float) -> str:
    unit = energy_unit(question.sheet)
    return f"{shown(value)}{' ' + unit if unit else ''}"


def _quantities(question: CutoffSheet, summary: Mapping[str, Any]) -> list[dict[str, Any]]:
    """Return one line per quantity: what it needs, where, how sure, and what error was allowed."""
    lines = []
    allowed = allowed_of(question)
    for quantity, peak in summary["per_quantity"].items():
        line = {
            "key": quantity,
            "name": NAMES[quantity].capitalize(),
            "allowed": allowed_words(quantity, allowed),
        }
        if peak is None:
            reason = "not judged: " + (
                "fewer than two levels of one parity" if quantity == "gap" else "no point"
            )
            lines.append(line | {"cutoff": None, "place": "", "status": reason})
            continue
        lines.append(
            line
            | {
                "cutoff": peak["cutoff"],
                "place": place_words(question, peak["x"], peak["second"]),
                "status": peak["status"] or "",
            }
        )
    return lines


def allowed_words(quantity: str, allowed: Mapping[str, float]) -> str:
    """Return the error allowed for a quantity, with its unit."""
    unit = {"energies": " of the mode frequency", "gap": " of the mode frequency", "boson_number": " quanta"}
    return f"{shown(allowed[quantity])}{unit.get(quantity, '')}"


def _stated_words(
    question: CutoffSheet, stated: Mapping[str, Any] | None, whole: str
) -> dict[str, Any] | None:
    if stated is None:
        return None
    yours = f"Your {levels_words(stated['cutoff'], boson_name(question))}"
    verb = "is" if stated["cutoff"] == 0 else "are"
    good, judged = stated["good_points"], stated["judged_points"]
    if judged and good == judged:
        verdict = f"{yours} {verb} enough for {whole}."
    elif good == 0:
        verdict = f"{yours} {verb} enough nowhere on {whole}."
    else:
        verdict = f"{yours} {verb} enough at {good} of {judged} points."
    return {
        "verdict": verdict,
        "enough": bool(judged) and good == judged,
        "where": [] if good in {0, judged} or question["across"] else _stretches(question, stated["good"]),
        "quantities": [
            {
                "key": quantity,
                "name": NAMES[quantity].capitalize(),
                "good": _where(question, part),
                "worst": (stated["worst"][quantity] or {}).get("error"),
                "at": _worst_place(question, stated["worst"][quantity]),
                "allowed": allowed_of(question)[quantity],
            }
            for quantity, part in stated["per_quantity"].items()
        ],
    }


def _worst_place(question: CutoffSheet, worst: Mapping[str, Any] | None) -> str:
    return "" if worst is None else place_words(question, worst["x"], worst["second"])


def _where(question: CutoffSheet, judged: Mapping[str, Any]) -> str:
    if judged["judged_points"] == 0:
        return "not judged"
    if judged["good_points"] == judged["judged_points"]:
        return "everywhere"
    if judged["good_points"] == 0:
        return "nowhere"
    if question["across"] is not None:
        return f"at {judged['good_points']} of {judged['judged_points']} points"
    return "; ".join(_stretches(question, judged["good"]))


def _stretches(question: CutoffSheet, stretches: list[Mapping[str, Any]]) -> list[str]:
    """Return stretches of the axis in words: "λ from 0 to 0.62"."""
    written = symbol(question.sheet.along, question.sheet.frame)
    unit = energy_unit(question.sheet) if written.frequency else ""
    end = f" {unit}" if unit else ""
    found = []
    for one in stretches:
        second = one["second"]
        curve = (
            ""
            if second is None or question.second is None
            else f"{_equals(question, question.second, second)}: "
        )
        if one["points"] == 1:
            found.append(f"{curve}{written.plain} = {shown(one['from'])}{end}")
        else:
            found.append(f"{curve}{written.plain} from {shown(one['from'])} to {shown(one['to'])}{end}")
    return found


def whole_words(number: int) -> str:
    """Return a whole number in digits, or in powers of ten where it is long."""
    if number < 10**9:
        return f"{number:,}".replace(",", " ")
    digits = str(number)
    power = len(digits) - 1
    raised = str(power).translate(str.maketrans("0123456789", "⁰¹²³⁴⁵⁶⁷⁸⁹"))
    return f"{digits[0]}.{digits[1]} × 10{raised}"


def bytes_words(number: int) -> str:
    """Return an amount of memory in a readable unit."""
    unit = 0
    # whole numbers: some of these are beyond any float
    while unit + 1 < len(BINARY) and number >= 1024 ** (unit + 1):
        unit += 1
    if number >= 10_000 * 1024**unit:
        return f"{whole_words(number)} bytes"
    value = number / 1024**unit
    return (
        f"{number} bytes"
        if unit == 0
        else f"{value:.3g} {BINARY[unit]}"
        if value < 1000
        else f"{value:.0f} {BINARY[unit]}"
    )


def size_words(size: Mapping[str, Any]) -> dict[str, Any]:
    """Return one line of the size table in words."""
    treatments = {
        "collective": "collective spin",
        "parity": "one parity block",
        "product": f"all 2^{size['spins']} spin states",
    }
    return {
        "for": size["for"],
        "cutoff": size["cutoff"],
        "treatment": treatments[size["treatment"]],
        "dimension": whole_words(size["dimension"]),
        "nonzeros": whole_words(size["nonzeros"]),
        **{key: bytes_words(size[f"{key}_bytes"]) for key in ("sparse", "dense", "density_matrix")},
    }
