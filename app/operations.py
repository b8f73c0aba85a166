"""The JSON routes: what each takes and what it answers, from the same table of keys that reads the links."""

from collections.abc import Mapping
from dataclasses import dataclass, field
from typing import Any

from app.cutoff_plan import CUTOFF, POINT
from app.cutoff_sheets import CUTOFF_KEYS
from app.keys import KEYS, Key
from app.links import WAIT
from app.map_pages import COLUMN, ROW
from app.map_sheets import MAP_OWN_KEYS
from app.pages import COUPLING_AS
from app.places import MEMBER, STATE

JSON = "application/json"
CSV = "text/csv; charset=utf-8"
TEXT = "text/plain; charset=utf-8"
ARRAYS = "application/octet-stream"
EVENTS = "text/event-stream; charset=utf-8"

PARTIAL = Key("partial", "choice", "0", "whether an unfinished result will do", choices=("0", "1"))
FIRST = Key("first", "real", 0.0, "seconds to wait for the first picture", low=0.0, high=5.0)
SHEET = tuple(KEYS.values())
DESK = (*SHEET, *CUTOFF_KEYS.values())
MAP = (*SHEET, *MAP_OWN_KEYS.values())

Schema = dict[str, Any]


@dataclass(frozen=True)
class Operation:
    """One method of one address.

    `keys` are those of the query; `sheet` says that the grammar's version and short links are taken too;
    `answers` gives the schema of each good status by media type.
    """

    method: str
    path: str
    words: str
    answers: Mapping[int, tuple[str, Schema]]
    keys: tuple[Key, ...] = ()
    sheet: bool = False
    needed: frozenset[str] = frozenset()
    body: Schema | None = None
    more: tuple[Schema, ...] = field(default=())


def named(name: str) -> Schema:
    """Return a reference to a schema of the document."""
    return {"$ref": f"#/components/schemas/{name}"}


ANY: Schema = {"type": "object"}
WORDS: Schema = {"type": "string"}
_JOB = (JSON, named("Job"))
_RESULT = (JSON, named("Result"))
_LEASE: Schema = {"name": "lease", "in": "query", "schema": WORDS, "description": "the lease given up"}
_EVERYONE: Schema = {
    "name": "for",
    "in": "query",
    "schema": {"enum": ["everyone"]},
    "description": "stop the job for everybody, in place of a lease",
}

OPERATIONS = (
    Operation(
        "get",
        "/api/sweep",
        "The result of a sweep, or its job when it takes longer than 'wait'",
        {200: _RESULT, 202: _JOB},
        (*SHEET, WAIT),
        sheet=True,
    ),
    Operation(
        "get",
        "/api/sweep.csv",
        "The result of a sweep as a table",
        {200: (CSV, WORDS), 202: _JOB},
        (*SHEET, WAIT),
        sheet=True,
    ),
    Operation(
        "get",
        "/api/sweep.py",
        "A script that fetches the sweep or computes it",
        {200: (TEXT, WORDS)},
        SHEET,
        sheet=True,
    ),
    Operation(
        "get",
        "/api/face",
        "What a page shows of a sheet beside its figure",
        {200: (JSON, ANY)},
        (*SHEET, COUPLING_AS),
        sheet=True,
    ),
    Operation(
        "get",
        "/api/point",
        "The result of one point, with its phase-space pictures",
        {200: (JSON, ANY), 202: (JSON, named("Running"))},
        (*SHEET, MEMBER, STATE, WAIT),
        sheet=True,
    ),
    Operation(
        "get",
        "/api/point/picture",
        "The figures of one point",
        {200: (JSON, ANY), 202: (JSON, named("Running"))},
        (*SHEET, MEMBER, STATE, WAIT),
        sheet=True,
    ),
    Operation(
        "get",
        "/api/point/convergence",
        "The errors of truncated calculations of one point against the cutoff",
        {200: (JSON, ANY), 202: (JSON, named("Running"))},
        (*SHEET, MEMBER, STATE, WAIT),
        sheet=True,
    ),
    Operation(
        "get",
        "/api/map",
        "The result of a map, or its job when it takes longer than 'wait'",
        {200: (JSON, ANY), 202: _JOB},
        (*MAP, WAIT),
        sheet=True,
    ),
    Operation(
        "get",
        "/api/map.csv",
        "The result of a map as a table",
        {200: (CSV, WORDS), 202: _JOB},
        (*MAP, WAIT),
        sheet=True,
    ),
    Operation(
        "get",
        "/api/map.npz",
        "The result of a map as arrays of numpy",
        {200: (ARRAYS, WORDS), 202: _JOB},
        (*MAP, WAIT),
        sheet=True,
    ),
    Operation(
        "get",
        "/api/map/cell",
        "The addresses of a cell's point, and of its row and column as sweeps",
        {200: (JSON, ANY)},
        (*MAP, ROW, COLUMN),
        sheet=True,
    ),
    Operation(
        "get",
        "/api/map/face",
        "What the page of a map shows of it",
        {200: (JSON, ANY)},
        (*MAP, COUPLING_AS),
        sheet=True,
    ),
    Operation(
        "get",
        "/api/cutoff",
        "The cutoffs that a question of the cutoff desk needs",
        {200: (JSON, ANY), 202: _JOB},
        (*DESK, WAIT),
        sheet=True,
    ),
    Operation(
        "get",
        "/api/cutoff.csv",
        "The needed cutoffs as a table",
        {200: (CSV, WORDS), 202: _JOB},
        (*DESK, WAIT),
        sheet=True,
    ),
    Operation(
        "get",
        "/api/cutoff/sizes.csv",
        "The sizes of the calculation as a table",
        {200: (CSV, WORDS), 202: _JOB},
        (*DESK, WAIT),
        sheet=True,
    ),
    Operation(
        "get",
        "/api/cutoff/margins",
        "The errors at some cutoffs around one, at one point",
        {200: (JSON, ANY), 202: (JSON, named("Running"))},
        (*DESK, POINT, CUTOFF, WAIT),
        sheet=True,
        needed=frozenset({CUTOFF.name}),
    ),
    Operation(
        "get",
        "/api/cutoff/face",
        "What the page of the cutoff desk shows of a question",
        {200: (JSON, ANY)},
        (*DESK, COUPLING_AS),
        sheet=True,
    ),
    Operation(
        "post",
        "/api/link",
        "The link for what was typed into the form of a sweep",
        {200: (JSON, named("Address"))},
        body=named("Form"),
    ),
    Operation(
        "post",
        "/api/cutoff/link",
        "The link for what was typed into the form of the cutoff desk",
        {200: (JSON, named("Address"))},
        body=named("Form"),
    ),
    Operation(
        "post",
        "/api/map/link",
        "The link for what was typed into the form of a map",
        {200: (JSON, named("Address"))},
        body=named("Form"),
    ),
    Operation(
        "post",
        "/api/jobs",
        "Start the job of a sheet, or join it; hands out a lease",
        {200: _JOB, 202: _JOB},
        (FIRST,),
        body={"anyOf": [named("Sheet"), named("Link"), named("FormOfJob")]},
    ),
    Operation("get", "/api/jobs/{name}", "Where a job stands", {200: _JOB}),
    Operation(
        "delete",
        "/api/jobs/{name}",
        "Give up a lease, or stop the job",
        {200: _JOB},
        more=(_LEASE, _EVERYONE),
    ),
    Operation(
        "post",
        "/api/jobs/{name}/leases/{lease}",
        "Say that somebody still waits for this job",
        {200: _JOB},
    ),
    Operation(
        "get",
        "/api/jobs/{name}/events",
        "The progress of a job as server-sent events: snapshot, progress, heartbeat, end",
        {200: (EVENTS, WORDS)},
    ),
    Operation(
        "get",
        "/api/jobs/{name}/result",
        "The result of a job; its keys, when given, must ask the same numbers",
        {200: (JSON, ANY), 202: _JOB},
        (*SHEET, PARTIAL),
        sheet=True,
    ),
    Operation(
        "get",
        "/api/jobs/{name}/picture",
        "The figure of a job as far as it is computed",
        {200: (JSON, ANY)},
        SHEET,
        sheet=True,
    ),
    Operation("get", "/api/limits", "What this server takes, and the grammar of links", {200: (JSON, ANY)}),
    Operation("get", "/api/openapi.json", "This description", {200: (JSON, ANY)}),
    Operation("get", "/health", "Version, state of the store, counters", {200: (JSON, named("Health"))}),
    Operation("get", "/metrics", "The numbers of the server for a monitoring system", {200: (TEXT, WORDS)}),
)
