"""Fixtures that start real servers."""

from collections.abc import Iterator
from pathlib import Path

import pytest
from hypothesis import HealthCheck, settings

from tests.running import RunningServer, ServerFactory

# how fast a machine draws examples says nothing about the code
settings.register_profile("any machine", deadline=None, suppress_health_check=[HealthCheck.too_slow])
settings.load_profile("any machine")


@pytest.fixture
def start_server(tmp_path: Path) -> Iterator[ServerFactory]:
    """Return a function that starts servers; a second one on the same data gives the restart."""
    running: list[RunningServer] = []

    def start(*options: str, data: str = "data", environment: dict[str, str] | None = None) -> RunningServer:
        running.append(RunningServer(tmp_path / data, *options, environment=environment))
        return running[-1]

    yield start
    for server in running:
        server.stop()


@pytest.fixture(scope="session")
def server(tmp_path_factory: pytest.TempPathFactory) -> Iterator[RunningServer]:
    """Return one server that tests share when they change nothing that others look at."""
    running = RunningServer(tmp_path_factory.mktemp("shared") / "data", "--workers", "2")
    yield running
    running.stop()
