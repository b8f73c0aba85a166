"""The command line without a server."""

import subprocess
import sys
from pathlib import Path

import pytest

from tests.running import ROOT


def softmode(*arguments: str) -> subprocess.CompletedProcess[str]:
    return subprocess.run(
        [sys.executable, "-W", "error", "-m", "app", *arguments],
        cwd=ROOT,
        capture_output=True,
        text=True,
        timeout=60,
        check=False,
    )


@pytest.mark.parametrize(
    ("link", "words"),
    [
        ("/sweep?spin=3", ["spins", "did you mean"]),
        ("/sweep?spins=0", ["spins", "1 to 5000"]),
        ("/chart?spins=3", ["not a link to"]),
        ("/sweep?stored=" + "0" * 32, ["short link"]),
        ("spins=5&spins=6", ["twice"]),
    ],
)
def test_bad_links_are_explained(link: str, words: list[str], tmp_path: Path) -> None:
    ended = softmode("compute", link, "--out", str(tmp_path / "x.json"))
    assert ended.returncode == 2
    assert all(word in ended.stderr for word in words)
    assert "Traceback" not in ended.stderr
    assert not (tmp_path / "x.json").exists()


def test_other_endings_are_refused(tmp_path: Path) -> None:
    ended = softmode("compute", "/sweep", "--out", str(tmp_path / "x.xlsx"))
    assert ended.returncode == 2
    assert ".csv, .json" in ended.stderr


def test_progress_and_summary(tmp_path: Path) -> None:
    ended = softmode("compute", "spins=2&points=12", "--out", str(tmp_path / "x.csv"))
    assert ended.returncode == 0, ended.stderr
    assert "12/12" in ended.stderr
    assert "12 points" in ended.stdout


def test_a_directory_that_is_not_there(tmp_path: Path) -> None:
    ended = softmode("compute", "spins=2&points=3", "--out", str(tmp_path / "none" / "x.csv"))
    assert ended.returncode == 2
    assert "Traceback" not in ended.stderr
    assert "none" in ended.stderr


def test_limits_of_this_machine(tmp_path: Path) -> None:
    ended = softmode("--data", str(tmp_path), "limits")
    assert ended.returncode == 0, ended.stderr
    assert "computing processes" in ended.stdout
    told = [line for line in ended.stdout.splitlines() if line.startswith("measured ")]
    assert len(told) == 1
    # measured once, kept
    assert told[0] in softmode("--data", str(tmp_path), "limits").stdout
    rows = [
        line.split()
        for line in ended.stdout.splitlines()
        if line.strip()[:1].isdigit() and len(line.split()) == 5
    ]
    assert {row[0] for row in rows} >= {"1", "20", "100", "1000", "5000"}
    assert all(float(row[2]) > 0.0 and float(row[3]) >= 0.0 for row in rows)


def test_version() -> None:
    assert softmode("--version").stdout.startswith("softmode 0.")
