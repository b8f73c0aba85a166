"""Figures are pure functions of a sheet and its result, and leave nothing of it out."""

import copy
import json
import re
from typing import Any

import pytest

from app import links
from app.figures import picture
from app.symbols import axis_title, hamiltonian, member_name, sheet_title, values_in_force
from tests.running import ROOT, RunningServer

STYLESHEET = (ROOT / "static" / "softmode.css").read_text()


def result_of(server: RunningServer, query: str) -> dict[str, Any]:
    data: dict[str, Any] = server.client.get(f"/api/sweep?{query}").json()
    return data


def traces(shown: dict[str, Any], name: str) -> list[dict[str, Any]]:
    return [trace for trace in shown["figure"]["data"] if trace["name"] == name]


@pytest.mark.parametrize(
    "query",
    [
        "spins=3&points=9",
        "spins=3&points=9&bias=0.1",
        "spins=1&ratio=0&points=9&each=detuning:-0.3,0.3",
        "spins=3&points=9&energies=uncoupled&bosons=per-spin&overlay=effective&unit=kHz&frame=trap",
    ],
)
def test_figures_are_plain_data_and_their_tokens_exist(server: RunningServer, query: str) -> None:
    shown = picture(links.parse(query), result_of(server, query))
    text = json.dumps(shown, allow_nan=False)
    tokens = {token.partition("/")[0] for token in re.findall(r'"token:([^"]+)"', text)}
    assert tokens
    for token in tokens:
        assert f"--{token}:" in STYLESHEET, token
    for panel in shown["figure"]["layout"]["meta"]["panels"]:
        for entry in panel["key"]:
            assert f".token-{entry['token']} {{" in STYLESHEET


def test_every_level_is_drawn_in_the_curve_of_its_parity(server: RunningServer) -> None:
    query = "spins=3&points=9&levels=5"
    result = result_of(server, query)
    shown = picture(links.parse(query), result)
    for name, parity in (("even", 1), ("odd", -1)):
        (trace,) = traces(shown, name)
        drawn = sorted(value for value in trace["y"] if value is not None)
        series = result["series"]
        wanted = sorted(
            energy
            for energies, parities in zip(series["energy"], series["parity"], strict=True)
            for energy, own in zip(energies, parities, strict=True)
            if own == parity
        )
        assert drawn == wanted


def test_points_not_yet_within_tol_are_ringed_and_named_in_the_key(server: RunningServer) -> None:
    query = "spins=3&points=9"
    result = copy.deepcopy(result_of(server, query))
    clean = picture(links.parse(query), result)
    assert not traces(clean, "not yet within tol")
    result["series"]["meets_tolerance"][4] = False
    shown = picture(links.parse(query), result)
    rings = traces(shown, "not yet within tol")
    assert {ring["yaxis"] for ring in rings} == {"y", "y2", "y3", "y4", "y5"}
    assert all(set(ring["x"]) == {result["axis"]["values"][4]} for ring in rings)
    labels = [entry["label"] for entry in shown["figure"]["layout"]["meta"]["panels"][0]["key"]]
    assert "not yet within tol" in labels


def test_bounds_are_drawn_as_bands_of_the_curves_own_colour(server: RunningServer) -> None:
    query = "spins=3&points=9&levels=2"
    result = copy.deepcopy(result_of(server, query))
    series = result["series"]
    series["energy_lower"] = [[value - 0.1 for value in row] for row in series["energy"]]
    series["inversion_error"] = [0.05] * 9
    shown = picture(links.parse(query), result)
    (band,) = traces(shown, "even: bounds")
    assert band["fillcolor"].startswith("token:even/")
    outline = [value for value in band["y"] if value is not None]
    even = [row[parities.index(1)] for row, parities in zip(series["energy"], series["parity"], strict=True)]
    assert max(outline) == max(even)
    assert min(outline) == pytest.approx(min(even) - 0.1)
    assert traces(shown, "inversion: bounds")


def test_missing_points_are_left_out_and_absent_values_are_gaps(server: RunningServer) -> None:
    query = "spins=3&points=9"
    result = copy.deepcopy(result_of(server, query))
    for group in (result["series"], result["limit"], result["uncoupled"]):
        for values in group.values():
            for missing in (1, 2, 3):
                values[missing] = None
    result["series"]["gap"][5] = None
    result["complete"] = False
    shown = picture(links.parse(query), result)
    (gap,) = traces(shown, "same parity")
    assert len(gap["x"]) == 6
    assert gap["y"][2] is None


@pytest.mark.parametrize(
    ("query", "places"),
    [
        ("points=9", [0.5]),
        ("points=9&ratio=0&to=1.4", [1.0]),
        ("points=9&along=coupling-over-critical", [1.0]),
        ("points=21&along=splitting&coupling=0.5", [1.0]),
        ("points=9&bias=0.1", []),
        ("points=9&to=0.4", []),
    ],
)
def test_critical_line_stands_where_the_coupling_is_critical(
    server: RunningServer, query: str, places: list[float]
) -> None:
    query = f"spins=2&{query}"
    shown = picture(links.parse(query), result_of(server, query))
    found = [entry["x"] for entry in shown["figure"]["layout"]["meta"]["critical"]]
    assert found == pytest.approx(places, abs=2e-3)


@pytest.mark.parametrize(
    ("query", "member"),
    [
        ("spins=1", "Rabi model"),
        ("spins=5", "Dicke model"),
        ("spins=1&ratio=0", "Jaynes–Cummings model"),
        ("spins=5&ratio=0", "Tavis–Cummings model"),
        ("spins=5&ratio=0.5", "Anisotropic Dicke model"),
        ("spins=1&each=spins:1,2", "Dicke model"),
        ("spins=5&bias=0.1", "Dicke model with bias"),
    ],
)
def test_members_of_the_family_have_their_names(query: str, member: str) -> None:
    assert member_name(links.parse(query)) == member


def test_symbols_follow_the_frame_and_the_unit() -> None:
    cavity, trap = links.parse("spins=4"), links.parse("spins=4&frame=trap&unit=kHz")
    assert axis_title(cavity) == "collective coupling  λ/ω"
    assert axis_title(trap) == "half of the force strength  (g<sub>0</sub>/2)/2π (kHz)"
    assert "<mi>δ</mi>" in hamiltonian(trap)
    assert "<mi>ω</mi>" not in hamiltonian(trap)
    assert "kHz" in " ".join(values_in_force(trap))
    assert axis_title(links.parse("mode=2")) == "collective coupling  λ"


def test_hamiltonian_is_written_in_the_general_form_when_it_is_general() -> None:
    isotropic, general = links.parse("spins=4"), links.parse("spins=4&ratio=0.5&bias=0.2")
    assert "λ</mi><mo>′" not in hamiltonian(isotropic)
    assert "<mo>′</mo>" in hamiltonian(general)
    assert "<mi>ε</mi>" in hamiltonian(general)
    trap = hamiltonian(links.parse("spins=4&ratio=0.5&frame=trap"))
    assert "<mi>S</mi><mi>y</mi>" in trap
    assert sheet_title(links.parse("title=a%3Cb")) == "a<b"
