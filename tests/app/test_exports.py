"""Page data, JSON, CSV, command line and Python script: faces of one result, equal to the last bit."""

import csv
import json
import os
import subprocess
import sys
from pathlib import Path
from typing import Any

import pytest

from app.exports import csv_of, curves_of
from app.series import SERIES_KEYS
from tests.running import ROOT, RunningServer

QUERIES = [
    "spins=6&points=23&levels=4",
    "spins=3&points=9&each=ratio:0,0.5,1&overlay=effective&title=Three",
    "along=spins&spins=12&coupling=0.8",
    "along=bias&spins=4&points=7&coupling=0.9",
    "along=coupling-over-critical&splitting=-2&spins=4&points=6",
    "along=detuning&ratio=0&spins=2&points=5",
]


def compute(link: str, out: Path, *options: str) -> subprocess.CompletedProcess[str]:
    return subprocess.run(
        [sys.executable, "-m", "app", "compute", link, "--out", str(out), *options],
        cwd=ROOT,
        capture_output=True,
        text=True,
        timeout=120,
        check=False,
    )


def comparable(result: dict[str, Any]) -> dict[str, Any]:
    made = {key: result["provenance"][key] for key in ("softmode", "solver", "numpy", "scipy")}
    return result | {"provenance": made}


@pytest.mark.parametrize("query", QUERIES)
def test_command_line_and_server_agree_to_the_last_bit(
    server: RunningServer, query: str, tmp_path: Path
) -> None:
    answer = server.client.get(f"/api/sweep?{query}")
    assert answer.status_code == 200
    served = answer.json()
    ended = compute(f"http://elsewhere:8150/sweep?{query}", tmp_path / "x.json", "--workers", "1")
    assert ended.returncode == 0, ended.stderr
    offline = json.loads((tmp_path / "x.json").read_text())
    assert comparable(offline) == comparable(served)
    # text, not only value: every float is written the same way
    assert json.dumps(comparable(offline)) == json.dumps(comparable(served))


@pytest.mark.parametrize("query", QUERIES[:3])
def test_csv_agrees_with_json(server: RunningServer, query: str, tmp_path: Path) -> None:
    result = server.client.get(f"/api/sweep?{query}").json()
    answer = server.client.get(f"/api/sweep.csv?{query}")
    assert answer.headers["content-type"].startswith("text/csv")
    assert "attachment" in answer.headers["content-disposition"]
    assert answer.text == csv_of(result)
    check_table(answer.text, result)
    assert compute(f"/sweep?{query}", tmp_path / "x.csv").returncode == 0
    offline = (tmp_path / "x.csv").read_text(encoding="utf-8")
    assert [line for line in offline.splitlines() if not line.startswith("#")] == [
        line for line in answer.text.splitlines() if not line.startswith("#")
    ]


def check_table(text: str, result: dict[str, Any]) -> None:
    lines = text.splitlines()
    assert any(line == f"# link {result['link']}" for line in lines)
    rows = list(csv.DictReader(line for line in lines if not line.startswith("#")))
    curves = curves_of(result)
    assert len(rows) == sum(len(curve["axis"]["values"]) for curve in curves)
    numbered = [(curve, point) for curve in curves for point in range(len(curve["axis"]["values"]))]
    for row, (curve, point) in zip(rows, numbered, strict=True):
        assert float(row[result["axis"]["name"]]) == curve["axis"]["values"][point]
        if curve["name"] is not None:
            assert float(row[f"each {curve['name']}"]) == curve["value"]
        for level, energy in enumerate(curve["series"]["energy"][point]):
            assert float(row[f"energy_{level}"]) == energy
        for key in ("boson_number", "inversion", "gap", "bunching"):
            value = curve["series"][key][point]
            assert row[key] == "" if value is None else float(row[key]) == value
        limit = curve["limit"]["energy_per_spin"][point]
        assert limit is None or float(row["limit_energy_per_spin"]) == limit


def test_results_have_the_public_form(server: RunningServer) -> None:
    result = server.client.get(f"/api/sweep?{QUERIES[0]}").json()
    assert list(result)[:6] == ["sheet", "link", "id", "complete", "provenance", "axis"]
    assert result["link"] == "/sweep?spins=6&points=23&levels=4"
    assert set(result["provenance"]) == {"softmode", "solver", "numpy", "scipy", "computed_at", "seconds"}
    assert set(result["series"]) == set(SERIES_KEYS)
    assert {"energy", "energy_lower", "energy_status", "parity", "gap", "gap_any", "cutoff_needed"} <= set(
        SERIES_KEYS
    )
    for series in result["series"].values():
        assert len(series) == 23
    for energy, lower, uncoupled in zip(
        result["series"]["energy"],
        result["series"]["energy_lower"],
        result["uncoupled"]["levels"],
        strict=True,
    ):
        assert len(energy) == len(lower) == len(uncoupled) == 4
        assert energy == sorted(energy)
        assert all(low <= high for low, high in zip(lower, energy, strict=True))
    # no coupling at the first point: levels are those of spins and mode apart
    assert result["series"]["energy"][0] == pytest.approx(result["uncoupled"]["levels"][0], abs=1e-9)
    noted = {note["point"] for note in result["notes"]}
    for point, value in enumerate(result["series"]["bunching"]):
        assert value is not None or point in noted
    family = server.client.get(f"/api/sweep?{QUERIES[1]}").json()
    assert "series" not in family
    assert [curve["value"] for curve in family["curves"]] == [0.0, 0.5, 1.0]
    assert all("effective" in curve for curve in family["curves"])


def test_same_sheet_in_three_spellings_is_one_result(server: RunningServer) -> None:
    link = server.client.get("/api/sweep?points=9&spins=2").json()
    other = server.client.get("/api/sweep?v=1&spins=2&points=9&ratio=1.0&tol=1e-9").json()
    posted = server.client.post("/api/jobs", json=link["sheet"])
    assert posted.status_code == 200
    assert other == link
    assert posted.json()["id"] == link["id"]


@pytest.mark.parametrize("query", QUERIES)
def test_the_python_script_runs(server: RunningServer, query: str, tmp_path: Path) -> None:
    result = server.client.get(f"/api/sweep?{query}").json()
    answer = server.client.get(f"/api/sweep.py?{query}")
    assert answer.headers["content-type"].startswith("text/plain")
    script = tmp_path / "sweep.py"
    script.write_text(answer.text)
    environment = os.environ | {"PYTHONPATH": str(ROOT), "NO_PROXY": "*"}
    ran = subprocess.run(
        [sys.executable, "-W", "error", str(script)],
        capture_output=True,
        text=True,
        env=environment,
        timeout=60,
        check=False,
    )
    assert ran.returncode == 0, ran.stderr
    lines = [line.split() for line in ran.stdout.splitlines() if "=" not in line]
    energies = [row[0] for curve in curves_of(result) for row in curve["series"]["energy"]]
    assert [float(line[1]) for line in lines] == energies
    check = "import json, sweep; print(json.dumps([row['energy'][0] for row in sweep.compute()]))"
    ran = subprocess.run(
        [sys.executable, "-c", check],
        cwd=tmp_path,
        capture_output=True,
        text=True,
        env=environment,
        timeout=60,
        check=False,
    )
    assert ran.returncode == 0, ran.stderr
    # one chain instead of chunks: equal within the tolerance, not to the last bit
    assert json.loads(ran.stdout) == pytest.approx(energies, abs=1e-8)


def test_titles_cannot_break_out_of_the_script(server: RunningServer, tmp_path: Path) -> None:
    title = '"""; import os; os._exit(7) #\\'
    answer = server.client.get("/api/sweep.py", params={"title": title})
    script = tmp_path / "sweep.py"
    script.write_text(answer.text)
    ran = subprocess.run(
        [sys.executable, "-c", "import sweep"],
        cwd=tmp_path,
        capture_output=True,
        text=True,
        timeout=60,
        check=False,
    )
    assert ran.returncode == 0, ran.stderr


def test_long_links_become_short_ones_that_stay(server: RunningServer) -> None:
    note = "Ein Satz mit Umlauten: äöü. " * 60
    typed = {"spins": "2", "points": "5", "note": note, "title": "long"}
    made = server.client.post("/api/link", json=typed).json()
    assert made["sheet"]["note"] == note
    assert len(made["link"]) < 100
    assert made["link"] == f"/sweep?{made['query']}"
    again = server.client.post("/api/link", json=typed).json()
    assert again == made
    result = server.client.get(f"/api/sweep?{made['query']}&wait=20").json()
    assert result["sheet"]["note"] == note
    assert server.client.get(made["link"], headers={"accept": "text/html"}).status_code == 200
    job = server.client.post("/api/jobs", json={"link": made["link"]}).json()
    assert job["id"] == result["id"]
    both = server.client.get(f"/api/sweep?{made['query']}&spins=3")
    assert both.status_code == 422
    assert both.json()["error"]["code"] == "repeated-key"
    unknown = server.client.get("/api/sweep?stored=" + "0" * 32)
    assert unknown.status_code == 404
    assert unknown.json()["error"]["code"] == "unknown-link"
    short = server.client.post("/api/link", json={"spins": "2"}).json()
    assert short["link"] == "/sweep?spins=2"
