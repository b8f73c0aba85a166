"""The JSON routes described in the OpenAPI form."""

import functools
from collections.abc import Iterable, Mapping

from app import __version__
from app.keys import GRAMMAR_VERSION, KEYS, MOST_CURVES, SWEPT, Key
from app.links import STORED_KEY, STORED_NAME
from app.operations import ANY, EVENTS, JSON, OPERATIONS, WORDS, Operation, Schema, named

_DIGITS = r"[+-]?([0-9]+(\.[0-9]*)?|\.[0-9]+)([eE][+-]?[0-9]{1,4})?"


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
        "content": {JSON: {"schema": named("Error")}},
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
        {"code": WORDS, "message": WORDS, "field": maybe_words, "value": {}, "allowed": {}},
        ("code", "message", "field", "value", "allowed"),
        closed=True,
    )
    form: Schema = {"type": "object", "additionalProperties": WORDS}
    return {
        "Error": _object({"error": error}, ("error",), closed=True),
        "Sheet": _object({name: _body_schema(key) for name, key in KEYS.items()}, closed=True),
        "Link": _object({"link": WORDS}, ("link",), closed=True),
        "Form": form,
        "FormOfJob": _object(
            {"form": form, "instead": _object({"id": WORDS, "lease": WORDS})}, ("form",), closed=True
        ),
        "Address": _object(
            {"link": WORDS, "query": WORDS, "sheet": ANY, "id": WORDS}, ("link", "query", "sheet", "id")
        ),
        "Running": _object({"state": {"enum": ["running"]}}, ("state",)),
        "Job": _object(
            {
                "id": WORDS,
                "state": {"enum": ["queued", "running", "done", "failed", "cancelled", "restarting"]},
                "done": whole,
                "total": whole,
                "seconds_left": {"type": ["number", "null"]},
                "revision": whole,
                "lease": WORDS,
            },
            ("id", "state", "done", "total", "seconds_left", "revision"),
        ),
        "Result": _object(
            {
                "sheet": ANY,
                "link": WORDS,
                "id": WORDS,
                "complete": {"type": "boolean"},
                "provenance": ANY,
                "axis": _object({"name": WORDS, "values": {"type": "array", "items": {"type": "number"}}}),
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
