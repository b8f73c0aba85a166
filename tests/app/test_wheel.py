"""The wheel: built, installed into a fresh environment, and run from somewhere else."""

import os
import re
import subprocess
import sys
import venv
import zipfile
from pathlib import Path

import httpx
import pytest

from tests.running import ROOT


@pytest.mark.slow
@pytest.mark.timeout(600)
def test_the_wheel_runs_on_its_own(tmp_path: Path) -> None:
    subprocess.run(
        [sys.executable, "-m", "build", "--wheel", "--outdir", str(tmp_path), str(ROOT)],
        check=True,
        capture_output=True,
        timeout=300,
    )
    wheel = next(tmp_path.glob("*.whl"))
    names = zipfile.ZipFile(wheel).namelist()
    for directory in ("templates", "static"):
        shipped = {
            path.relative_to(ROOT).as_posix() for path in (ROOT / directory).rglob("*") if path.is_file()
        }
        assert shipped
        assert {f"app/{name}" for name in shipped} <= set(names)
    assert not [name for name in names if name.startswith("tests")]

    home = tmp_path / "home"
    venv.create(home, with_pip=True)
    # the dependencies are those of this environment, only the wheel itself is new
    here = next(Path(entry) for entry in sys.path if entry.endswith("site-packages"))
    site = next((home / "lib").glob("python3*")) / "site-packages"
    python = home / "bin" / "python"
    subprocess.run(
        [str(python), "-m", "pip", "install", "-q", "--no-deps", "--no-index", str(wheel)],
        check=True,
        capture_output=True,
        timeout=120,
    )
    (site / "dependencies.pth").write_text(f"{here}\n")
    clean = {key: value for key, value in os.environ.items() if key != "PYTHONPATH"}
    outside = tmp_path / "outside"
    outside.mkdir()
    where = subprocess.run(
        [str(python), "-c", "import app, solver; print(app.__file__)"],
        cwd=outside,
        env=clean,
        capture_output=True,
        text=True,
        check=True,
        timeout=60,
    )
    assert str(home) in where.stdout
    with subprocess.Popen(
        [str(home / "bin" / "softmode"), "--port", "0", "--data", str(tmp_path / "data"), "--no-browser"],
        cwd=outside,
        env=clean,
        stdout=subprocess.PIPE,
        text=True,
    ) as server:
        try:
            assert server.stdout is not None
            found = re.search(r"http://\S+", server.stdout.readline())
            assert found is not None
            with httpx.Client(base_url=found.group(), timeout=60.0, trust_env=False) as client:
                page = client.get("sweep?spins=3")
                assert page.status_code == 200
                assets = set(re.findall(r"assets/[0-9a-f]+/[^\"' )]+", page.text))
                assert assets
                assert all(client.get(asset).status_code == 200 for asset in assets)
                result = client.get("api/sweep?spins=3&points=5").json()
                assert len(result["series"]["energy"]) == 5
        finally:
            server.terminate()
