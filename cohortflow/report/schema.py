"""The JSON that `--format json` prints, as JSON Schema (draft 2020-12): one entry a kind of output.

Every output is one object with `kind` and `format_version`. Within a version keys may be added, and none is
renamed, removed or given another meaning: readers ignore what they do not know. Missing figures are null,
infinite ones the texts "inf" and "-inf"; figures are in full precision, shares are fractions.
"""

from __future__ import annotations

from typing import Any

from cohortflow.errors import CallError, listed, nearest

FORMAT_VERSION = 1
_ROW = {
    "type": "object",
    "additionalProperties": {"type": ["string", "number", "boolean", "null"]},
}
_ROWS = {"type": "array", "items": _ROW}
_TABLES = {"type": "object", "additionalProperties": _ROWS}
_TEXT, _TEXTS = {"type": "string"}, {"type": "array", "items": {"type": "string"}}
_PROGRAM = {
    "type": "object",
    "required": ["name", "version"],
    "properties": {"name": {"const": "cohortflow"}, "version": _TEXT},
}
_FINDING = {
    "type": "object",
    "required": ["code", "serious", "detail"],
    "properties": {"code": _TEXT, "serious": {"type": "boolean"}, "detail": {"type": "object"}},
}
_INPUT = {
    "type": "object",
    "required": ["name", "bytes", "sha256", "rows"],
    "properties": {
        "name": _TEXT,
        "bytes": {"type": "integer"},
        "sha256": {"type": "string", "pattern": "^[0-9a-f]{64}$"},
        "rows": {"type": ["integer", "null"]},
    },
}
_BODIES: dict[str, dict[str, Any]] = {
    "run": {
        "program": _PROGRAM,
        "stage": {"enum": ["check", "fit", "project", "whatif", "backtest", "run"]},
        "by": {"type": ["string", "null"]},
        "libraries": {"type": "object", "additionalProperties": _TEXT},
        "made_at": {"type": ["string", "null"]},
        "seed": {"type": "integer"},
        "study": {"type": "object"},
        "set_by": {"type": "object", "additionalProperties": _TEXT},
        "definitions": {"type": "string", "pattern": "^[0-9a-f]{64}$"},
        "assumptions": _ROWS,
        "inputs": {"type": "array", "items": _INPUT},
        "accounting": _ROWS,
        "findings": {"type": "array", "items": _FINDING},
        "warnings": _TEXTS,
        "absent": {"type": "object", "additionalProperties": _TEXT},
        "tables": _TABLES,
    },
    "comparison": {
        "program": _PROGRAM,
        "about": {
            "type": "object",
            "required": ["earlier", "later", "first", "last", "period", "level", "restated"],
        },
        "tables": _TABLES,
    },
    "sql": {"dialect": _TEXT, "table": _TEXT, "statement": _TEXT},
    "demo": {"folder": _TEXT, "study": _TEXT},
}


def schema(kind: str) -> dict[str, Any]:
    """The schema of one kind of output. CallError for an unknown kind.

    >>> schema("sql")["required"]
    ['kind', 'format_version', 'dialect', 'table', 'statement']
    """
    if kind not in _BODIES:
        raise CallError(
            f'There is no output of kind "{kind}"{nearest(kind, _BODIES)}; there are {listed(_BODIES)}.'
        )
    body = _BODIES[kind]
    return {
        "$schema": "https://json-schema.org/draft/2020-12/schema",
        "title": f"cohortflow {kind}, format version {FORMAT_VERSION}",
        "type": "object",
        "required": ["kind", "format_version", *body],
        "properties": {"kind": {"const": kind}, "format_version": {"const": FORMAT_VERSION}, **body},
    }


def kinds() -> tuple[str, ...]:
    """Kinds of output that have a schema."""
    return tuple(_BODIES)
