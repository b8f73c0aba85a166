"""The server under load for ten seconds: nobody meets an error, and memory stays where it is."""

import pytest

from tests.benchmarks.measure_load import run
from tests.running import ServerFactory

STREAMS = 100
REQUESTS = 150
MOST_GROWTH = 120e6


@pytest.mark.soak
@pytest.mark.slow
def test_a_crowd_meets_no_errors(start_server: ServerFactory) -> None:
    server = start_server("--workers", "2")
    load = run(server, 10.0, STREAMS, REQUESTS)
    answered = sum(len(times) for times in load.seconds.values())
    assert answered >= REQUESTS
    # busy is the one refusal that is meant
    assert set(load.statuses) <= {200, 202, 503}
    assert load.statuses[200] + load.statuses[202] >= 0.9 * (answered + STREAMS)
    assert load.events > STREAMS
    assert load.memory[-1][1] - load.memory[0][1] < MOST_GROWTH
    assert "Traceback" not in server.log.read_text()
    # all streams are gone, and with them what they held
    server.wait_until(lambda: server.counts()["jobs_active"] == 0)
