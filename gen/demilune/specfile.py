"""Specification files: TOML to specifications, and the JSON Schema of the file.

[defaults]                  # keys for every kernel (optional)
dtype = "float32"

[kernel.innovation]         # a table a kernel; a list stands for each of its values
operation = "matvec"
layout = "packed"
n = 12
loop = ["dot", "axpy", "fused"]
"""

from __future__ import annotations

import itertools
import tomllib
from collections.abc import Iterator, Mapping
from dataclasses import dataclass, replace
from pathlib import Path
from typing import Any

from demilune.errors import InputError, Problem, SpecError
from demilune.keys import defaults_of, nearest
from demilune.languages import LANGUAGES
from demilune.layouts import LAYOUTS
from demilune.operations import OPERATIONS
from demilune.spec import Spec, choices_for, known_keys, make_spec, shown

TABLES = ("defaults", "kernel")
LARGEST_PRODUCT = 100_000
"""Kernels that one file may stand for."""


@dataclass(frozen=True)
class SpecFile:
    """What a file asks for."""

    path: str
    text: str
    specs: tuple[Spec, ...]


def read(path: str | Path) -> SpecFile:
    """Reads and checks a file; raises :class:`SpecError` with everything that is wrong."""
    path = Path(path)
    try:
        data = path.read_bytes()
    except OSError as error:
        raise InputError(f"{path}: cannot be read: {error.strerror}") from error
    try:
        text = data.decode("utf-8")
    except UnicodeDecodeError as error:
        raise InputError(f"{path}: not UTF-8 (byte {error.start}); TOML files are") from error
    return SpecFile(str(path), text, parse(text, path.name))


def parse(text: str, file: str = "specification") -> tuple[Spec, ...]:
    """The specifications that a TOML text stands for; ``file`` is named in messages."""
    try:
        document = tomllib.loads(text)
    except tomllib.TOMLDecodeError as error:
        raise SpecError([Problem(f"not TOML: {error}", file=file)]) from error
    problems = list(_document_problems(document))
    kernels = document.get("kernel")
    defaults = document.get("defaults", {})
    specs: list[Spec] = []
    if isinstance(kernels, dict) and isinstance(defaults, dict):
        for name, table in kernels.items():
            if not isinstance(table, dict):
                message = f"found {shown(table)}, allowed is a table [kernel.{name}]"
                problems.append(Problem(message, name))
                continue
            try:
                specs += expand(name, table, defaults)
            except SpecError as error:
                problems += error.problems
    if not problems:
        problems += _clashes(specs)
    if problems:
        unique = dict.fromkeys(replace(problem, file=file) for problem in problems)
        raise SpecError(list(unique))
    return tuple(specs)


def _document_problems(document: Mapping[str, Any]) -> Iterator[Problem]:
    for key in document:
        if key not in TABLES:
            yield Problem(
                f'unknown table "{key}"{nearest(key, TABLES)} (allowed: [defaults], [kernel.NAME])',
                key=key,
            )
    for key in TABLES:
        if key in document and not isinstance(document[key], dict):
            yield Problem(f"found {shown(document[key])}, allowed is a table", key=key)
    if not document.get("kernel"):
        yield Problem("no kernel: at least one table [kernel.NAME] is needed", key="kernel")
    defaults = document.get("defaults", {})
    if isinstance(defaults, dict):
        known = known_keys()
        for key in defaults:
            if key not in known:
                yield Problem(
                    f'unknown key "{key}"{nearest(key, known)} (allowed: {", ".join(known)})',
                    "[defaults]",
                    key,
                )


def expand(
    name: str, table: Mapping[str, Any], defaults: Mapping[str, Any] | None = None
) -> list[Spec]:
    """The specifications of one kernel table: every combination of its lists.

    Variants are named by the values in which they differ; each language is a kernel of its own,
    under the same name. Defaults that a kernel's operation or layout has no use for are left out.
    """
    given = {**_usable(table, defaults or {}), **table}
    given.setdefault("language", list(LANGUAGES))
    empty = [key for key, value in given.items() if isinstance(value, list) and not value]
    if empty:
        raise SpecError([Problem("found an empty list; it stands for no kernel", name, empty[0])])
    lists = {key: value if isinstance(value, list) else [value] for key, value in given.items()}
    repeated = [k for k, v in lists.items() if len({(type(one), str(one)) for one in v}) < len(v)]
    if repeated:
        message = f"found {shown(lists[repeated[0]])}, in which a value stands twice"
        raise SpecError([Problem(message, name, repeated[0])])
    total = 1
    for value in lists.values():
        total *= len(value)
    if total > LARGEST_PRODUCT:
        raise SpecError([Problem(f"{total} combinations are more than {LARGEST_PRODUCT}", name)])
    varied = [key for key, value in lists.items() if len(value) > 1 and key != "language"]
    specs, problems = [], []
    for combination in itertools.product(*lists.values()):
        values = dict(zip(lists, combination, strict=True))
        variant = "_".join([name, *(_short(key, values[key]) for key in varied)])
        try:
            specs.append(make_spec(variant, **values))
        except SpecError as error:
            problems += [replace(p, kernel=p.kernel and name) for p in error.problems]
    if problems:
        raise SpecError(list(dict.fromkeys(problems)))
    return specs


def _usable(table: Mapping[str, Any], defaults: Mapping[str, Any]) -> dict[str, Any]:
    operation = table.get("operation", defaults.get("operation"))
    layout = table.get("layout", defaults.get("layout"))
    known = known_keys(
        operation if isinstance(operation, str) else None,
        layout if isinstance(layout, str) else None,
    )
    return {key: value for key, value in defaults.items() if key in known}


def _short(key: str, value: Any) -> str:
    """A value as a part of a name."""
    if isinstance(value, bool):
        return key if value else f"no_{key}"
    if isinstance(value, int | float):
        text = str(value).replace("-", "minus_").replace(".", "p").replace("+", "")
        return f"{key}{text}"
    return "".join(letter if letter.isalnum() else "_" for letter in str(value))


def _clashes(specs: list[Spec]) -> Iterator[Problem]:
    """Kernels or files whose names are the same, or differ in case alone."""
    names: dict[tuple[str, str], Spec] = {}
    for spec in specs:
        other = names.setdefault((spec.language, spec.name.lower()), spec)
        if other is not spec:
            yield Problem(f'two kernels are called "{spec.name}" in {spec.language}', spec.name)
    files: dict[tuple[str, str], Spec] = {}
    for spec in specs:
        other = files.setdefault((spec.language, spec.file.lower()), spec)
        if other.file != spec.file or (other.target.file is None) != (spec.target.file is None):
            yield Problem(f'the file "{spec.file}" is also that of {other.name}', spec.name, "file")
        elif other.target.environment != spec.target.environment:
            yield Problem(
                f'the file "{spec.file}" has routines for both environments', spec.name, "file"
            )


# --- JSON Schema ---------------------------------------------------------------------------------


def schema() -> dict[str, Any]:
    """The JSON Schema (draft 2020-12) of a specification file."""
    properties: dict[str, Any] = {}
    for key, one in known_keys().items():
        properties[key] = {"description": one.help, **_or_list(one.schema)}
    for choice in {c for o in OPERATIONS for la in LAYOUTS for c in choices_for(o, la)}:
        for key, default in defaults_of(choice).items():
            if default is not None:
                properties[key].setdefault("default", default)
    properties = dict(sorted(properties.items()))
    table = {"type": "object", "properties": properties, "additionalProperties": False}
    return {
        "$schema": "https://json-schema.org/draft/2020-12/schema",
        "title": "Demilune specification",
        "type": "object",
        "properties": {
            "defaults": {"$ref": "#/$defs/table", "description": "keys for every kernel"},
            "kernel": {
                "type": "object",
                "minProperties": 1,
                "propertyNames": {"pattern": "^[A-Za-z][A-Za-z0-9_]{0,62}$"},
                "additionalProperties": {"$ref": "#/$defs/table"},
            },
        },
        "required": ["kernel"],
        "additionalProperties": False,
        "$defs": {"table": table},
    }


def _or_list(one: dict[str, Any]) -> dict[str, Any]:
    return {"anyOf": [one, {"type": "array", "items": one, "minItems": 1, "uniqueItems": True}]}
