"""The JSON Schema of the study file, made from the table of keys, for editors' completion."""

from __future__ import annotations

from typing import Any

from cohort.model.catalogue import MODELS
from cohort.study.keys import KEYS, Key, children

_LEAVES: dict[str, dict[str, Any]] = {
    "text": {"type": "string"},
    "word": {"type": "string"},
    "whole": {"type": "integer"},
    "number": {"type": "number"},
    "yes/no": {"type": "boolean"},
    "quantity": {"type": ["string", "number"]},
    "outcome": {"type": ["string", "number"]},
}


def json_schema() -> dict[str, Any]:
    """JSON Schema (draft 2020-12) of every key."""
    found = _table("")
    found["properties"]["model"]["enum"] = list(MODELS)
    return {"$schema": "https://json-schema.org/draft/2020-12/schema", "title": "cohort study", **found}


def _table(pattern: str) -> dict[str, Any]:
    base = f"{pattern}." if pattern else ""
    names = children(pattern)
    made: dict[str, Any] = {
        "type": "object",
        "properties": {n: _key(KEYS[base + n]) for n in names if n != "*"},
        "additionalProperties": _key(KEYS[f"{base}*"]) if "*" in names else False,
    }
    if not pattern:
        made["required"] = ["seed", "subjects", "arms"]
    return made


def _key(key: Key) -> dict[str, Any]:
    default = f" (default: {key.default})" if key.default else ""
    described = {"description": key.meaning + default}
    if key.kind == "tables":
        return {"type": "array", "items": _table(f"{key.path}[]"), **described}
    if key.kind == "table":
        return {**_table(key.path), **described}
    if key.kind in ("texts", "quantities", "numbers", "outcomes"):
        kind = {"texts": "text", "quantities": "quantity", "numbers": "number", "outcomes": "outcome"}[key.kind]
        return {"type": "array", "items": _LEAVES[kind], **described}
    leaf: dict[str, Any] = dict(_LEAVES[key.kind])
    if key.words:
        leaf["enum"] = list(key.words)
    if key.kind in ("whole", "number"):
        if key.low > -float("inf"):
            leaf["exclusiveMinimum" if key.above else "minimum"] = key.low
        if key.high < float("inf"):
            leaf["maximum"] = key.high
    if children(key.path):
        return {"anyOf": [leaf, _table(key.path)], **described}
    return {**leaf, **described}
