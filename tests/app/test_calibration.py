"""The measured speed of the machine: found once, kept with its versions, and only prices follow from it."""

import dataclasses
import json
from pathlib import Path
from typing import Any

import pytest

from app import calibration, identity, limits, plan
from app.calibration import NEEDS, POINTS, Calibration
from app.settings import Settings
from app.sheets import Sheet
from tests.running import ServerFactory

SLOW = Calibration({POINTS: 3.0, NEEDS: 2.0}, identity.versions(), calibration.processor_name(), "2026-01-01")


def test_kept_and_found_again(tmp_path: Path) -> None:
    assert calibration.load(tmp_path) is None
    calibration.keep(tmp_path, SLOW)
    assert calibration.load(tmp_path) == SLOW
    assert [path.name for path in tmp_path.iterdir()] == [calibration.FILE]


@pytest.mark.parametrize(
    "changed",
    [
        {"versions": identity.versions() | {"numpy": "0"}},
        {"versions": identity.versions() | {"solver": "0"}},
        {"processor": "another one"},
        {"factors": {POINTS: 1.0}},
        {"factors": {POINTS: 1e9, NEEDS: 1.0}},
        {"factors": {POINTS: "fast", NEEDS: 1.0}},
    ],
)
def test_measured_again_when_it_may_differ(tmp_path: Path, changed: dict[str, Any]) -> None:
    calibration.keep(tmp_path, dataclasses.replace(SLOW, **changed))
    assert calibration.load(tmp_path) is None


@pytest.mark.parametrize("text", ["", "{", "[]", "null", '{"factors": 3}', json.dumps({"versions": 1})])
def test_a_damaged_file_is_no_calibration(tmp_path: Path, text: str) -> None:
    (tmp_path / calibration.FILE).write_text(text)
    assert calibration.load(tmp_path) is None


def test_the_machines_of_a_cluster_are_not_this_one(tmp_path: Path) -> None:
    calibration.keep(tmp_path, SLOW)
    assert calibration.load(tmp_path, "cluster tcp://127.0.0.1:8786") is None


def test_the_middle_of_the_ratios_counts() -> None:
    """Known ratios, one of them out of line."""
    known = calibration.references()
    spent = {one: 2.0 * one.seconds for one in known}
    spent[known[0]] *= 100.0
    found = calibration.concluded(spent)
    assert found.factor(POINTS) == pytest.approx(2.0)
    assert found.factor(NEEDS) == pytest.approx(2.0)
    assert found.factor("portrait") == found.factor(POINTS)
    assert found.factor("margins") == found.factor(NEEDS)
    assert found.measured_at is not None


def test_references_are_short_and_of_both_kinds() -> None:
    known = calibration.references()
    assert {one.work for one in known} == {POINTS, NEEDS}
    assert sum(one.seconds for one in known) < 1.0


def test_prices_follow_and_chunks_do_not() -> None:
    made = plan.make(Sheet.model_validate({"spins": 50, "points": 40}))
    priced = SLOW.priced(made)
    assert priced.seconds == pytest.approx(3.0 * made.seconds)
    assert priced.chunks == made.chunks
    assert Calibration().priced(made) == made


def test_limits_are_told_in_seconds_of_this_machine() -> None:
    plain, slow = (limits.describe(Settings(), one) for one in (Calibration(), SLOW))
    assert slow["calibration"]["factors"] == {POINTS: 3.0, NEEDS: 2.0}
    for one, other in zip(plain["point_prices"], slow["point_prices"], strict=True):
        assert other["seconds"] == pytest.approx(3.0 * one["seconds"], abs=2e-5)


@pytest.mark.soak
def test_a_server_measures_once(start_server: ServerFactory) -> None:
    server = start_server("--workers", "1")

    def told() -> dict[str, Any]:
        found: dict[str, Any] = server.client.get("/api/limits").json()["calibration"]
        return found

    assert told()["measured_at"] is None
    server.wait_until(lambda: told()["measured_at"])
    first = told()
    assert set(first["factors"]) == {POINTS, NEEDS}
    assert json.loads((server.data / calibration.FILE).read_text()) == first
    server.stop()
    server = start_server("--workers", "1")
    assert told() == first


def test_a_slow_machine_is_asked_for_less(start_server: ServerFactory, tmp_path: Path) -> None:
    sheet = Sheet.model_validate({"spins": 100, "points": 101})
    ceiling = 2.0 * plan.make(sheet).seconds
    data = tmp_path / "slow"
    data.mkdir()
    calibration.keep(data, SLOW)
    server = start_server("--workers", "1", "--ceiling", str(ceiling), data="slow")
    refused = server.client.post("/api/jobs", json={"spins": 100, "points": 101})
    assert refused.status_code == 422
    assert refused.json()["error"]["code"] == "too-expensive"
