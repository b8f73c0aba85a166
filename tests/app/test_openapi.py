"""The description of the JSON routes: complete, true, and no case drawn from it brings the server down."""

import re
from collections import Counter
from collections.abc import Iterator
from typing import Any

import pytest
import schemathesis
from hypothesis import HealthCheck, given, settings
from schemathesis import GenerationMode
from schemathesis.checks import not_a_server_error
from schemathesis.specs.openapi.checks import (
    content_type_conformance,
    response_schema_conformance,
    status_code_conformance,
)
from starlette.routing import Route

from app import api, cutoff_pages, keys, map_pages, openapi, operating, operations, pages, point_pages
from tests.running import RunningServer

CASES = 2000
WAITING = {
    operation.path for operation in operations.OPERATIONS if any(key.name == "wait" for key in operation.keys)
}
# a busy server says so, and does not fail
FINE_ABOVE_500 = {503}


def described() -> set[tuple[str, str]]:
    return {(operation.method.upper(), operation.path) for operation in operations.OPERATIONS}


def test_every_json_route_is_described() -> None:
    routers = (api, pages, point_pages, cutoff_pages, map_pages, operating)
    served = set()
    for module in routers:
        for route in module.router.routes:
            assert isinstance(route, Route)
            if route.path.startswith(("/api/", "/health", "/metrics")):
                served |= {(method, route.path) for method in route.methods or ()}
    assert served == described()


def test_the_keys_are_those_of_the_grammar(server: RunningServer) -> None:
    document = server.client.get("/api/openapi.json").json()
    assert document["openapi"].startswith("3.")
    taken = {one["name"]: one for one in document["paths"]["/api/sweep"]["get"]["parameters"]}
    assert set(taken) == set(keys.KEYS) | {"wait", "v", "stored"}
    assert taken["spins"]["schema"] == {"type": "integer", "minimum": 1, "maximum": 5000, "default": 20}
    assert set(taken["along"]["schema"]["enum"]) == set(keys.SWEPT)
    # both ends of every range are taken, and what lies beyond is not
    for name, one in taken.items():
        schema = one["schema"]
        if schema.get("type") not in {"integer", "number"} or name in {"v", "wait", "from", "to", "at"}:
            continue
        for value, fine in (
            (schema["minimum"], True),
            (schema["maximum"], True),
            (schema["minimum"] - 1, False),
            (schema["maximum"] + 1, False),
        ):
            key = keys.KEYS[name]
            text = keys.number_text(value)
            if fine:
                assert key.read(text) == value
            else:
                error = server.client.get("/api/sweep", params={name: text}).json()["error"]
                assert (error["field"], error["code"]) == (name, "out-of-range")


def test_patterns_say_what_the_grammar_takes() -> None:
    family = openapi._query_schema(keys.KEYS["each"])["pattern"]
    for text, fine in (
        ("spins:5,10,20", True),
        ("ratio:.5,1e-3", True),
        ("colour:1", False),
        ("spins:", False),
        ("spins:1,,2", False),
        ("ratio:1,2,3,4,5,6,7,8,9", False),
    ):
        assert bool(re.search(family, text)) is fine
    interval = openapi._query_schema(keys.KEYS["zoom"])["pattern"]
    assert re.search(interval, "0.1:2")
    assert not re.search(interval, "0.1")


@pytest.fixture(scope="module")
def poor(tmp_path_factory: pytest.TempPathFactory) -> Iterator[RunningServer]:
    """Return a server on which nothing heavy may run."""
    running = RunningServer(
        tmp_path_factory.mktemp("poor") / "data", "--workers", "2", "--ceiling", "0.03", "--queue", "200"
    )
    yield running
    running.stop()


@pytest.mark.soak
@pytest.mark.slow
def test_no_request_brings_the_server_down(poor: RunningServer) -> None:
    schema = schemathesis.openapi.from_url(f"{poor.address}/api/openapi.json")
    operations = [result.ok() for result in schema.get_all_operations()]
    # all but the description itself, which is read to begin with
    drawn = {(one.method.upper(), one.path) for one in operations}
    assert drawn == described() - {("GET", "/api/openapi.json")}
    statuses: Counter[int] = Counter()
    job = poor.client.post("/api/jobs", json={"spins": 1, "points": 3}).json()

    def check(case: Any) -> None:
        if case.operation.path in WAITING:
            case.query = (case.query or {}) | {"wait": 0.2}
        if "name" in (case.path_parameters or {}) and statuses.total() % 2:
            case.path_parameters["name"] = job["id"]
        response = case.call(base_url=poor.address, timeout=30)
        statuses[response.status_code] += 1
        checks = [] if response.status_code in FINE_ABOVE_500 else [not_a_server_error]
        checks += [status_code_conformance, content_type_conformance, response_schema_conformance]
        case.validate_response(response, checks=checks)

    def takes_something(operation: Any) -> bool:
        return operation.method == "post" or any(True for _ in operation.query)

    drawn = [
        (operation, mode)
        for operation in operations
        for mode in (GenerationMode.POSITIVE, GenerationMode.NEGATIVE)
        # nothing can be wrong where nothing is asked
        if mode is GenerationMode.POSITIVE or takes_something(operation)
    ]
    # some have fewer different cases
    each = int(1.2 * CASES / len(drawn))
    for operation, mode in drawn:
        run = settings(
            max_examples=each, deadline=None, database=None, suppress_health_check=list(HealthCheck)
        )(given(case=operation.as_strategy(generation_mode=mode))(check))
        run()
    assert statuses.total() >= CASES
    assert statuses[200] > 20
    assert "Traceback" not in poor.log.read_text()
    assert poor.client.get("/health").json()["status"] == "ok"
