"""Whether data has the shape of a record: the part of JSON Schema that our own schema uses.

One thing is stricter here: 1.0 is no integer, because records are never written so.
"""

from __future__ import annotations

import importlib.resources
import json
import re
from collections.abc import Iterator
from functools import cache
from typing import Any

Schema = dict[str, Any]

KINDS: dict[str, type | tuple[type, ...]] = {
    "object": dict,
    "array": list,
    "string": str,
    "boolean": bool,
    "integer": int,
    "number": (int, float),
    "null": type(None),
}
NOTES = {"$schema", "$defs", "title", "description"}


@cache
def schema() -> Schema:
    """The JSON Schema (draft 2020-12) of a record."""
    file = importlib.resources.files("demilune") / "evidence.schema.json"
    loaded: Schema = json.loads(file.read_text(encoding="utf-8"))
    return loaded


def problems(value: Any, rule: Schema | None = None, where: str = "") -> Iterator[str]:
    """What is wrong with ``value``, each with its place; nothing if it has the shape."""
    rule = schema() if rule is None else rule
    for word, asked in rule.items():
        if word not in NOTES:
            yield from CHECKS[word](value, asked, where, rule)


def _is(value: Any, kind: str) -> bool:
    if isinstance(value, bool):
        return kind == "boolean"
    return isinstance(value, KINDS[kind])


def _wrong(where: str, found: Any, allowed: str) -> str:
    text = json.dumps(found)
    shown = text if len(text) <= 60 else f"{text[:57]}..."
    return f"{where or 'the record'}: found {shown}, allowed is {allowed}"


def _type(value: Any, asked: str | list[str], where: str, rule: Schema) -> Iterator[str]:
    kinds = [asked] if isinstance(asked, str) else asked
    if not any(_is(value, kind) for kind in kinds):
        yield _wrong(where, value, " or ".join(kinds))


def _enum(value: Any, asked: list[Any], where: str, rule: Schema) -> Iterator[str]:
    if value not in asked:
        yield _wrong(where, value, ", ".join(json.dumps(one) for one in asked))


def _const(value: Any, asked: Any, where: str, rule: Schema) -> Iterator[str]:
    if value != asked or isinstance(value, bool):
        yield _wrong(where, value, json.dumps(asked))


def _pattern(value: Any, asked: str, where: str, rule: Schema) -> Iterator[str]:
    if isinstance(value, str) and not re.search(asked.replace("$", r"\Z"), value):
        yield _wrong(where, value, f"what matches {asked}")


def _minimum(value: Any, asked: float, where: str, rule: Schema) -> Iterator[str]:
    if _is(value, "number") and value < asked:
        yield _wrong(where, value, f"at least {asked}")


def _required(value: Any, asked: list[str], where: str, rule: Schema) -> Iterator[str]:
    if isinstance(value, dict):
        for name in asked:
            if name not in value:
                yield f"{where or 'the record'}: {name} is missing"


def _properties(value: Any, asked: Schema, where: str, rule: Schema) -> Iterator[str]:
    if isinstance(value, dict):
        for name, inner in asked.items():
            if name in value:
                yield from problems(value[name], inner, f"{where}.{name}" if where else name)


def _additional(value: Any, asked: bool | Schema, where: str, rule: Schema) -> Iterator[str]:
    if not isinstance(value, dict):
        return
    for name in value.keys() - rule.get("properties", {}).keys():
        if isinstance(asked, dict):
            yield from problems(value[name], asked, f"{where}.{name!a}")
        else:
            yield f"{where or 'the record'}: {name!a} is not known"


def _items(value: Any, asked: Schema, where: str, rule: Schema) -> Iterator[str]:
    if isinstance(value, list):
        for place, one in enumerate(value):
            yield from problems(one, asked, f"{where}[{place}]")


def _any_of(value: Any, asked: list[Schema], where: str, rule: Schema) -> Iterator[str]:
    found = [list(problems(value, one, where)) for one in asked]
    if all(found):
        yield found[-1][0]


def _ref(value: Any, asked: str, where: str, rule: Schema) -> Iterator[str]:
    yield from problems(value, schema()["$defs"][asked.removeprefix("#/$defs/")], where)


CHECKS = {
    "type": _type,
    "enum": _enum,
    "const": _const,
    "pattern": _pattern,
    "minimum": _minimum,
    "required": _required,
    "properties": _properties,
    "additionalProperties": _additional,
    "items": _items,
    "anyOf": _any_of,
    "$ref": _ref,
}
