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
import math
import tomllib
from collections.abc import Hashable, Iterator, Mapping
from dataclasses import dataclass, replace
from pathlib import Path
from typing import Any

from demilune.errors import InputError, Problem, SpecError
from demilune.files import contents
from demilune.isa import PORTABLE
from demilune.keys import defaults_of, nearest
from demilune.languages import LANGUAGES
from demilune.layouts import LAYOUTS
from demilune.operations import OPERATIONS
from demilune.spec import (
    DEFAULTS,
    Spec,
    accepts,
    all_keys,
    choices_for,
    known_keys,
    make_spec,
    shown,
)

TABLES = ("defaults", "kernel")
BOARDS = "boards"
LARGEST_PRODUCT = 100_000
"""Kernels that one file may stand for."""


@dataclass(frozen=True)
class SpecFile:
    """What a file asks for."""

    path: str
    text: str
    specs: tuple[Spec, ...]
    boards: tuple[str, ...] = ()
    """The boards on which routines are checked: names, or paths of files that describe them."""


def read(path: str | Path) -> SpecFile:
    """Reads and checks a file; raises :class:`SpecError` with everything that is wrong."""
    path = Path(path)
    data = contents(path)
    try:
        text = data.decode("utf-8")
    except UnicodeDecodeError as error:
        raise InputError(f"{path}: not UTF-8 (byte {error.start}); TOML files are") from error
    specs = parse(text, path.name)
    names = tomllib.loads(text.removeprefix("\ufeff")).get(BOARDS, [])
    # A board's file is found from where the specification lies.
    boards = [str(path.parent / name) if name.endswith(".toml") else name for name in names]
    return SpecFile(str(path), text, specs, tuple(boards))


def parse(text: str, file: str = "specification") -> tuple[Spec, ...]:
    """The specifications that a TOML text stands for; ``file`` is named in messages."""
    try:
        document = tomllib.loads(text.removeprefix("\ufeff"))
    except (ValueError, RecursionError) as error:  # also what Python limits: digits, nesting
        raise SpecError([Problem(f"not TOML: {error}", file=file)]) from error
    problems = list(_document_problems(document))
    told = {one.key for one in problems if one.kernel == "[defaults]"}
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
                problems += [p for p in error.problems if p.key in table or p.key not in told]
    problems += _clashes(specs)
    if problems:
        unique = dict.fromkeys(replace(problem, file=file) for problem in problems)
        raise SpecError(list(unique))
    return tuple(specs)


def _document_problems(document: Mapping[str, Any]) -> Iterator[Problem]:
    for key in document:
        if key not in (*TABLES, BOARDS):
            yield Problem(
                f"unknown table {shown(key)}{nearest(key, (*TABLES, BOARDS))} "
                "(allowed: [defaults], [kernel.NAME], and boards = [...] before them)",
                key=key,
            )
    boards = document.get(BOARDS, [])
    if not isinstance(boards, list) or not all(isinstance(one, str) for one in boards):
        yield Problem(f"found {shown(boards)}, allowed is a list of names or files", key=BOARDS)
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
                    f"unknown key {shown(key)}{nearest(key, known)} (allowed: {', '.join(known)})",
                    "[defaults]",
                    key,
                )
            elif not any(accepts(one, v) for one in all_keys(key) for v in _listed(defaults[key])):
                found, words = defaults[key], known[key].words
                hint = nearest(found, words) if isinstance(found, str) else ""
                yield Problem(
                    f"found {shown(found)}, allowed is {known[key].allowed}{hint}",
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
    everywhere = "language" not in given
    given.setdefault("language", [name for name, one in LANGUAGES.items() if one.default])
    lists = {key: value if isinstance(value, list) else [value] for key, value in given.items()}
    problems = list(_list_problems(name, lists))
    lists = {key: value for key, value in lists.items() if value}
    total = math.prod(len(value) for value in lists.values())
    if total > LARGEST_PRODUCT:
        problems.append(Problem(f"{total} combinations are more than {LARGEST_PRODUCT}", name))
    if total == 0 or total > LARGEST_PRODUCT:
        raise SpecError(problems)
    varied = [key for key, value in lists.items() if len(value) > 1 and key != "language"]
    made: dict[tuple[str, str], Spec] = {}
    for combination in itertools.product(*lists.values()):
        values = _fitting(dict(zip(lists, combination, strict=True)), lists)
        if everywhere and not _in_language(values):
            continue
        variant = "_".join([name, *(_short(key, values[key]) for key in varied if key in values)])
        try:
            spec = make_spec(variant, **values)
        except SpecError as error:
            # A wrong value may make the variant's name wrong: then the name is not to blame.
            own = [p for p in error.problems if variant == name or p.key != "name"]
            problems += [replace(p, kernel=p.kernel and name) for p in own or error.problems]
        else:
            made.setdefault((spec.language, spec.name), spec)
    if problems:
        raise SpecError(list(dict.fromkeys(problems)))
    return list(made.values())


def _in_language(values: Mapping[str, Any]) -> bool:
    """Whether a kernel makes sense in a language that nobody asked for."""
    return values.get("isa", PORTABLE) == PORTABLE or LANGUAGES[values["language"]].lanes


def _list_problems(name: str, lists: Mapping[str, list[Any]]) -> Iterator[Problem]:
    for key, values in lists.items():
        if not values:
            yield Problem("found an empty list; it stands for no kernel", name, key)
        kinds = [(isinstance(one, bool), one) for one in values if isinstance(one, Hashable)]
        if len(set(kinds)) < len(kinds):
            yield Problem(f"found {shown(values)}, in which a value stands twice", name, key)


def _fitting(values: dict[str, Any], lists: Mapping[str, list[Any]]) -> dict[str, Any]:
    """The values without keys that only another operation or layout of the lists has."""
    chosen = {**DEFAULTS, **values}
    here = known_keys(str(chosen["operation"]), str(chosen["layout"]))
    others: set[str] = set()
    for operation in lists.get("operation", [DEFAULTS["operation"]]):
        for layout in lists.get("layout", [DEFAULTS["layout"]]):
            if operation in OPERATIONS and layout in LAYOUTS:
                others |= known_keys(operation, layout).keys()
    return {key: value for key, value in values.items() if key in here or key not in others}


def _usable(table: Mapping[str, Any], defaults: Mapping[str, Any]) -> dict[str, Any]:
    """The defaults that one of the table's operations and layouts has a use for."""
    known: set[str] = set()
    for operation in _listed({**DEFAULTS, **defaults, **table}["operation"]):
        for layout in _listed({**DEFAULTS, **defaults, **table}["layout"]):
            known |= known_keys(str(operation), str(layout)).keys()
    return {key: value for key, value in defaults.items() if key in known}


def _listed(value: Any) -> list[Any]:
    return value if isinstance(value, list) else [value]


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
        elif other.target.isa != spec.target.isa:
            yield Problem(
                f'the file "{spec.file}" has routines for several instruction sets; give each a '
                'file of its own, or use isa = "runtime"',
                spec.name,
                "file",
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
            BOARDS: {
                "description": "boards on which routines are checked: names, or files ending .toml",
                "type": "array",
                "items": {"type": "string"},
                "uniqueItems": True,
            },
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
