"""A real Dask cluster for the tests: scheduler and workers in processes of their own, on loopback."""

import contextlib
import os
import re
import signal
import socket
import subprocess
import sys
import time
from pathlib import Path

from app.workers import stand_back
from tests.running import ROOT

START_SECONDS = 60.0
# a Dask command without its timers for lost peers would make tests wait for minutes
QUICK = {
    "DASK_DISTRIBUTED__COMM__TIMEOUTS__CONNECT": "5s",
    "DASK_DISTRIBUTED__SCHEDULER__WORKER_TTL": "30s",
    "DASK_DISTRIBUTED__DEPLOY__LOST_WORKER_TIMEOUT": "5s",
}


def free_port() -> int:
    with socket.socket() as found:
        found.bind(("127.0.0.1", 0))
        port: int = found.getsockname()[1]
        return port


class Process:
    """One Dask command, its log, and its end."""

    def __init__(
        self,
        place: Path,
        name: str,
        *arguments: str,
        environment: dict[str, str] | None = None,
        behind: bool = False,
    ) -> None:
        self.log = place / f"{name}.log"
        self._log_file = self.log.open("ab")
        one_thread = dict.fromkeys(("OMP_NUM_THREADS", "OPENBLAS_NUM_THREADS", "MKL_NUM_THREADS"), "1")
        self.process = subprocess.Popen(
            [sys.executable, "-m", "dask", *arguments],
            cwd=ROOT,
            stdin=subprocess.DEVNULL,
            stdout=self._log_file,
            stderr=subprocess.STDOUT,
            env=os.environ | one_thread | QUICK | {"PYTHONPATH": str(ROOT)} | (environment or {}),
            preexec_fn=stand_back if behind else None,  # noqa: PLW1509 - no threads here
        )

    def wait_for(self, words: str, times: int = 1) -> None:
        deadline = time.monotonic() + START_SECONDS
        while len(re.findall(words, self.log.read_text())) < times:
            assert self.process.poll() is None, self.log.read_text()[-2000:]
            assert time.monotonic() < deadline, f"waited in vain for {words!r}"
            time.sleep(0.05)

    def send(self, sign: signal.Signals) -> None:
        self.process.send_signal(sign)

    def stop(self) -> None:
        with contextlib.suppress(ProcessLookupError):
            self.process.kill()
        self.process.wait(20)
        self._log_file.close()


class Cluster:
    """A scheduler and its workers, each one process with one thread."""

    def __init__(self, place: Path, certificate: Path | None = None) -> None:
        self.place = place
        self.certificate = certificate
        self.port = free_port()
        self.processes: list[Process] = []
        self.started = 0
        self.scheduler = self.start_scheduler()

    @property
    def address(self) -> str:
        return f"{'tls' if self.certificate else 'tcp'}://127.0.0.1:{self.port}"

    def _start(
        self,
        kind: str,
        *arguments: str,
        environment: dict[str, str] | None = None,
        behind: bool = False,
    ) -> Process:
        self.started += 1
        if self.certificate:
            file = str(self.certificate)
            arguments += ("--tls-ca-file", file, "--tls-cert", file, "--tls-key", file)
        name = f"{kind}-{self.started}"
        found = Process(self.place, name, kind, *arguments, environment=environment, behind=behind)
        self.processes.append(found)
        return found

    def start_scheduler(self) -> Process:
        """Start the scheduler, at the same address each time."""
        found = self._start(
            "scheduler", "--host", self.address.rpartition(":")[0], "--port", str(self.port), "--no-dashboard"
        )
        found.wait_for("Scheduler at")
        return found

    def start_worker(self, *, environment: dict[str, str] | None = None, behind: bool = False) -> Process:
        """Start a worker and wait until the scheduler knows it.

        `behind`: it stands back behind everything else, as the processes of a server do.
        """
        found = self._start(
            "worker",
            self.address,
            "--host",
            self.address.rpartition(":")[0],
            "--nthreads",
            "1",
            "--no-nanny",
            "--no-dashboard",
            "--local-directory",
            str(self.place),
            environment=environment,
            behind=behind,
        )
        found.wait_for("Registered to")
        return found

    def stop(self) -> None:
        for process in reversed(self.processes):
            process.stop()
