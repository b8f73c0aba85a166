"""The JSON routes described in the OpenAPI form, from the same table of keys that reads the links."""

import functools
from collections.abc import Iterable, Mapping
from dataclasses import dataclass, field
from typing import Any

from app import __version__
from app.cutoff_plan import CUTOFF, POINT
from app.cutoff_sheets import CUTOFF_KEYS
from app.keys import GRAMMAR_VERSION, KEYS, MOST_CURVES, SWEPT, Key
from app.links import STORED_KEY, STORED_NAME, WAIT
from app.pages import COUPLING_AS
from app.places import MEMBER, STATE

JSON = "application/json"
CSV = "text/csv; charset=utf-8"
TEXT = "text/plain; charset=utf-8"
EVENTS = "text/event-stream; charset=utf-8"

PARTIAL = Key("partial", "choice", "0", "whether an unfinished result will do", choices=("0", "1"))
FIRST = Key("first", "real", 0.0, "seconds to wait for the first picture", low=0.0, high=5.0)
SHEET = tuple(KEYS.values())
DESK = (*SHEET, *CUTOFF_KEYS.values())

Schema = dict[str, Any]

_DIGITS = r"[+-]?([0-9]+(\.[0-9]*)?|\.[0-9]+)([eE][+-]?[0-9]{1,4})?"


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


def _named(name: str) -> Schema:
    return {"$ref": f"#/components/schemas/{name}"}


_ANY: Schema = {"type": "object"}
_WORDS: Schema = {"type": "string"}
_JOB = (JSON, _named("Job"))
_RESULT = (JSON, _named("Result"))
_LEASE: Schema = {"name": "lease", "in": "query", "schema": _WORDS, "description": "the lease given up"}
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
        {200: (CSV, _WORDS), 202: _JOB},
        (*SHEET, WAIT),
        sheet=True,
    ),
    Operation(
        "get",
        "/api/sweep.py",
        "A script that fetches the sweep or computes it",
        {200: (TEXT, _WORDS)},
        SHEET,
        sheet=True,
    ),
    Operation(
        "get",
        "/api/face",
        "What a page shows of a sheet beside its figure",
        {200: (JSON, _ANY)},
        (*SHEET, COUPLING_AS),
        sheet=True,
    ),
    Operation(
        "get",
        "/api/point",
        "The result of one point, with its phase-space pictures",
        {200: (JSON, _ANY), 202: (JSON, _named("Running"))},
        (*SHEET, MEMBER, STATE, WAIT),
        sheet=True,
    ),
    Operation(
        "get",
        "/api/point/picture",
        "The figures of one point",
        {200: (JSON, _ANY), 202: (JSON, _named("Running"))},
        (*SHEET, MEMBER, STATE, WAIT),
        sheet=True,
    ),
    Operation(
        "get",
        "/api/cutoff",
        "The cutoffs that a question of the cutoff desk needs",
        {200: (JSON, _ANY), 202: _JOB},
        (*DESK, WAIT),
        sheet=True,
    ),
    Operation(
        "get",
        "/api/cutoff.csv",
        "The needed cutoffs as a table",
        {200: (CSV, _WORDS), 202: _JOB},
        (*DESK, WAIT),
        sheet=True,
    ),
    Operation(
        "get",
        "/api/cutoff/sizes.csv",
        "The sizes of the calculation as a table",
        {200: (CSV, _WORDS), 202: _JOB},
        (*DESK, WAIT),
        sheet=True,
    ),
    Operation(
        "get",
        "/api/cutoff/margins",
        "The errors at some cutoffs around one, at one point",
        {200: (JSON, _ANY), 202: (JSON, _named("Running"))},
        (*DESK, POINT, CUTOFF, WAIT),
        sheet=True,
        needed=frozenset({CUTOFF.name}),
    ),
    Operation(
        "get",
        "/api/cutoff/face",
        "What the page of the cutoff desk shows of a question",
        {200: (JSON, _ANY)},
        (*DESK, COUPLING_AS),
        sheet=True,
    ),
    Operation(
        "post",
        "/api/link",
        "The link for what was typed into the form of a sweep",
        {200: (JSON, _named("Address"))},
        body=_named("Form"),
    ),
    Operation(
        "post",
        "/api/cutoff/link",
        "The link for what was typed into the form of the cutoff desk",
        {200: (JSON, _named("Address"))},
        body=_named("Form"),
    ),
    Operation(
        "post",
        "/api/jobs",
        "Start the job of a sheet, or join it; hands out a lease",
        {200: _JOB, 202: _JOB},
        (FIRST,),
        body={"anyOf": [_named("Sheet"), _named("Link"), _named("FormOfJob")]},
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
        {200: (EVENTS, _WORDS)},
    ),
    Operation(
        "get",
        "/api/jobs/{name}/result",
        "The result of a job; its keys, when given, must ask the same numbers",
        {200: (JSON, _ANY), 202: _JOB},
        (*SHEET, PARTIAL),
        sheet=True,
    ),
    Operation(
        "get",
        "/api/jobs/{name}/picture",
        "The figure of a job as far as it is computed",
        {200: (JSON, _ANY)},
        SHEET,
        sheet=True,
    ),
    Operation("get", "/api/limits", "What this server takes, and the grammar of links", {200: (JSON, _ANY)}),
    Operation("get", "/api/openapi.json", "This description", {200: (JSON, _ANY)}),
    Operation("get", "/health", "Version, state of the store, counters", {200: (JSON, _named("Health"))}),
    Operation("get", "/metrics", "The numbers of the server for a monitoring system", {200: (TEXT, _WORDS)}),
)


def _numbers(key: Key) -> Schema:
    kind = "integer" if key.kind == "integer" else "number"
    low, high = (int(key.low), int(key.high)) if kind == "integer" else (key.low, key.high)
    return {"type": kind, "minimum": low, "maximum": high}


def _query_schema(key: Key) -> Schema:
    """Return what the value of a key looks like in a query."""
    if key.kind in {"integer", "real"}:
        schema = _numbers(key)
    elif key.kind == "choice":
        schema = {"type": "string", "enum": list(key.choices)}
    elif key.kind == "names":
        choices = {"type": "string", "enum": list(key.choices)}
        schema = {"type": "array", "items": choices, "minItems": 1, "uniqueItems": True}
    elif key.kind == "text":
        schema = {"type": "string", "maxLength": int(key.high)}
    elif key.kind == "family":
        names = "|".join(SWEPT)
        schema = {
            "type": "string",
            "pattern": f"^({names}):{_DIGITS}(,{_DIGITS}){{0,{MOST_CURVES - 1}}}$",
        }
    else:
        schema = {"type": "string", "pattern": f"^{_DIGITS}:{_DIGITS}$"}
    return schema if key.default is None else schema | {"default": key.default}


def _body_schema(key: Key) -> Schema:
    """Return what the value of a key looks like in a body."""
    if key.kind == "family":
        values = {"type": "array", "items": {"type": "number"}, "minItems": 1, "maxItems": MOST_CURVES}
        name = {"type": "string", "enum": list(SWEPT)}
        return {
            "type": "object",
            "properties": {"name": name, "values": values},
            "required": ["name", "values"],
            "additionalProperties": False,
        }
    if key.kind == "interval":
        return {"type": "array", "items": {"type": "number"}, "minItems": 2, "maxItems": 2}
    return _query_schema(key)


def _parameters(operation: Operation) -> list[Schema]:
    found: list[Schema] = [
        {"name": name, "in": "path", "required": True, "schema": {"type": "string", "pattern": "^[0-9a-f]+$"}}
        for name in ("name", "lease")
        if f"{{{name}}}" in operation.path
    ]
    for key in operation.keys:
        parameter = {
            "name": key.name,
            "in": "query",
            "required": key.name in operation.needed,
            "description": f"{key.meaning} ({key.allowed})",
            "schema": _query_schema(key),
        }
        found.append(parameter | ({"style": "form", "explode": False} if key.kind == "names" else {}))
    if operation.sheet:
        version = {"type": "integer", "enum": [GRAMMAR_VERSION], "default": GRAMMAR_VERSION}
        found += [
            {"name": "v", "in": "query", "description": "version of the grammar", "schema": version},
            {
                "name": STORED_KEY,
                "in": "query",
                "description": "name of a short link, in place of the keys it stands for",
                "schema": {"type": "string", "pattern": f"^{STORED_NAME.pattern}$"},
            },
        ]
    return [*found, *operation.more]


def _described(operation: Operation) -> Schema:
    answers: Schema = {
        # the form has no words for a stream of events
        str(status): {"description": "", "content": {kind: {} if kind == EVENTS else {"schema": schema}}}
        for status, (kind, schema) in operation.answers.items()
    }
    answers["default"] = {
        "description": "what is wrong, and what to change",
        "content": {JSON: {"schema": _named("Error")}},
    }
    described: Schema = {
        "summary": operation.words,
        "parameters": _parameters(operation),
        "responses": answers,
    }
    if operation.body is not None:
        described["requestBody"] = {"required": True, "content": {JSON: {"schema": operation.body}}}
    return described


def _object(properties: Mapping[str, Schema], needed: Iterable[str] = (), *, closed: bool = False) -> Schema:
    schema: Schema = {"type": "object", "properties": dict(properties), "required": list(needed)}
    if not schema["required"]:
        del schema["required"]
    return schema | ({"additionalProperties": False} if closed else {})


def _schemas() -> dict[str, Schema]:
    whole: Schema = {"type": "integer", "minimum": 0}
    maybe_words: Schema = {"type": ["string", "null"]}
    error = _object(
        {"code": _WORDS, "message": _WORDS, "field": maybe_words, "value": {}, "allowed": {}},
        ("code", "message", "field", "value", "allowed"),
        closed=True,
    )
    form: Schema = {"type": "object", "additionalProperties": _WORDS}
    return {
        "Error": _object({"error": error}, ("error",), closed=True),
        "Sheet": _object({name: _body_schema(key) for name, key in KEYS.items()}, closed=True),
        "Link": _object({"link": _WORDS}, ("link",), closed=True),
        "Form": form,
        "FormOfJob": _object(
            {"form": form, "instead": _object({"id": _WORDS, "lease": _WORDS})}, ("form",), closed=True
        ),
        "Address": _object(
            {"link": _WORDS, "query": _WORDS, "sheet": _ANY, "id": _WORDS}, ("link", "query", "sheet", "id")
        ),
        "Running": _object({"state": {"enum": ["running"]}}, ("state",)),
        "Job": _object(
            {
                "id": _WORDS,
                "state": {"enum": ["queued", "running", "done", "failed", "cancelled", "restarting"]},
                "done": whole,
                "total": whole,
                "seconds_left": {"type": ["number", "null"]},
                "revision": whole,
                "lease": _WORDS,
            },
            ("id", "state", "done", "total", "seconds_left", "revision"),
        ),
        "Result": _object(
            {
                "sheet": _ANY,
                "link": _WORDS,
                "id": _WORDS,
                "complete": {"type": "boolean"},
                "provenance": _ANY,
                "axis": _object({"name": _WORDS, "values": {"type": "array", "items": {"type": "number"}}}),
            },
            ("sheet", "link", "id", "complete", "provenance", "axis"),
        ),
        "Health": _object(
            {
                "status": {"enum": ["ok", "restarting"]},
                "store": _object(
                    {"state": {"enum": ["ok", "failing", "passing"]}, "trouble": maybe_words},
                    ("state", "trouble"),
                ),
                "counts": {"type": "object", "additionalProperties": whole},
            },
            ("status", "store", "counts", "solver"),
        ),
    }


@functools.cache
def document(prefix: str, *, with_key: bool) -> Schema:
    """Return the description of a server below `prefix`; `with_key` when it asks for its shared key."""
    paths: dict[str, Schema] = {}
    for operation in OPERATIONS:
        paths.setdefault(operation.path, {})[operation.method] = _described(operation)
    made: Schema = {
        "openapi": "3.1.0",
        "info": {"title": "Softmode", "version": __version__},
        "servers": [{"url": prefix or "/"}],
        "paths": paths,
        "components": {"schemas": _schemas()},
    }
    if with_key:
        made["components"]["securitySchemes"] = {"key": {"type": "http", "scheme": "bearer"}}
        made["security"] = [{"key": []}]
    return made
