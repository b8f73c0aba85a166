"""Real servers for the tests: each in a process of its own, on loopback, with a data directory of its own."""

import contextlib
import os
import re
import signal
import subprocess
import sys
import time
from collections.abc import Callable
from pathlib import Path

import httpx

ROOT = Path(__file__).resolve().parent.parent
START_SECONDS = 60.0


class RunningServer:
    """A `softmode` process, its address, its log, and a client that talks to it."""

    def __init__(
        self, data: Path, *options: str, environment: dict[str, str] | None = None, root: Path = ROOT
    ) -> None:
        self.data = data
        self.log = data.parent / f"{data.name}.log"
        self._log_file = self.log.open("ab")
        self.process = subprocess.Popen(
            [sys.executable, "-m", "app", "--port", "0", "--data", str(data), "--no-browser", *options],
            cwd=root,
            stdin=subprocess.DEVNULL,
            stdout=subprocess.PIPE,
            stderr=self._log_file,
            env=os.environ | (environment or {}),
            text=True,
        )
        self.client = httpx.Client(timeout=120.0, trust_env=False)
        try:
            self.address = self._read_address()
            self.client.base_url = httpx.URL(self.address)
            self.wait_until(lambda: self.counts()["workers_ready"] == self.counts()["workers"])
        except BaseException:
            self.stop(signal.SIGKILL)
            raise

    def _read_address(self) -> str:
        assert self.process.stdout is not None
        line = self.process.stdout.readline()
        found = re.search(r"http://\S+", line)
        if found is None:
            self.process.wait(10)
            raise RuntimeError(f"the server did not start: {line} {self.log.read_text()[-2000:]}")
        return found.group().rstrip("/")

    @property
    def pid(self) -> int:
        return self.process.pid

    def counts(self) -> dict[str, int]:
        deadline = time.monotonic() + START_SECONDS
        while True:
            try:
                return self.client.get("/health").json()["counts"]
            except httpx.TransportError:
                if time.monotonic() > deadline or self.process.poll() is not None:
                    raise
                time.sleep(0.05)

    def worker_pids(self) -> list[int]:
        """Return the computing processes, found as a system administrator would."""
        found = []
        for stat in Path("/proc").glob("[0-9]*/stat"):
            with contextlib.suppress(OSError):
                parent = int(stat.read_text().rpartition(")")[2].split()[1])
                if parent == self.pid and b"spawn_main" in (stat.parent / "cmdline").read_bytes():
                    found.append(int(stat.parent.name))
        return found

    @staticmethod
    def wait_until(reached: Callable[[], object], seconds: float = START_SECONDS) -> None:
        deadline = time.monotonic() + seconds
        while not reached():
            assert time.monotonic() < deadline, "waited in vain"
            time.sleep(0.01)

    def stop(self, sign: int = signal.SIGTERM) -> None:
        """End the server and wait until it is gone."""
        self.client.close()
        if self.process.poll() is None:
            self.process.send_signal(sign)
        try:
            self.process.wait(20)
        except subprocess.TimeoutExpired:
            self.process.kill()
            self.process.wait(10)
            raise
        finally:
            if self.process.stdout is not None:
                self.process.stdout.close()
            self._log_file.close()


ServerFactory = Callable[..., RunningServer]
