"""What was asked: a checked specification, made from keywords.

A specification is flat: keys and values. Each of the five choices declares its keys; here they
are gathered, checked together and turned into a :class:`Spec`.
"""

from __future__ import annotations

import json
import math
import re
from collections.abc import Iterator, Mapping
from dataclasses import dataclass
from functools import cached_property
from typing import Any

from demilune.arithmetic import Arithmetic
from demilune.errors import Problem, SpecError
from demilune.isa import is_primitive
from demilune.keys import Key, defaults_of, keys_of, nearest, pick
from demilune.languages import LANGUAGES
from demilune.layouts import LAYOUTS, Layout
from demilune.operations import OPERATIONS, Operation
from demilune.rules import filled, resolved
from demilune.schedules import Schedule
from demilune.targets import Target

OPERATION = Key("what is computed", words=tuple(OPERATIONS))
LAYOUT = Key("where the half lies", words=tuple(LAYOUTS))
DEFAULTS = {"operation": "matvec", "layout": "full"}
DECISIVE = {"operation", "layout", "dtype", "n"}
"""Keys on which so much depends that nothing else can be told while they are wrong."""
INTEGER_ACCUMULATOR = "wide"
"""The accumulator of integers where none is named: the element type holds few sums."""
LONGEST_NAME = 63
"""C99 (5.2.4.1) promises as many significant characters for internal names."""


@dataclass(frozen=True)
class Spec:
    """One kernel: a name and the five choices, checked together.

    Made by :func:`make_spec`, which refuses what does not go together.
    """

    name: str
    operation: Operation
    layout: Layout
    schedule: Schedule
    arithmetic: Arithmetic
    target: Target

    @cached_property
    def values(self) -> dict[str, Any]:
        """All keys and values, as a specification would hold them."""
        found: dict[str, Any] = {"operation": self.operation.name, "layout": self.layout.name}
        for choice in self.choices:
            found |= {name: getattr(choice, name) for name in keys_of(type(choice))}
        return {name: value for name, value in found.items() if value is not None}

    @property
    def choices(self) -> tuple[Any, ...]:
        return self.layout, self.operation, self.schedule, self.arithmetic, self.target

    @cached_property
    def stated(self) -> dict[str, Any]:
        """The values that differ from the defaults, and the four that are always said."""
        default = {key: value for c in self.choices for key, value in defaults_of(type(c)).items()}
        if self.arithmetic.type.integer:
            default["accumulator"] = INTEGER_ACCUMULATOR
        always = ("operation", "layout", "n", "dtype", "loop")
        return {
            name: value
            for name, value in self.values.items()
            if name in always or value != default.get(name)
        }

    @property
    def file(self) -> str:
        """The name of the file that the routine goes to, without ending."""
        return self.target.file or self.name

    @property
    def language(self) -> str:
        return self.target.language


def choices_for(operation: str, layout: str) -> tuple[type, ...]:
    """The classes whose keys a kernel with this operation and layout may use."""
    return LAYOUTS[layout], OPERATIONS[operation], Schedule, Arithmetic, Target


def known_keys(operation: str | None = None, layout: str | None = None) -> dict[str, Key]:
    """The keys of these choices, or of every operation and layout where it is not given."""
    found = {"operation": OPERATION, "layout": LAYOUT}
    layouts = [LAYOUTS[layout]] if layout in LAYOUTS else list(LAYOUTS.values())
    operations = [OPERATIONS[operation]] if operation in OPERATIONS else list(OPERATIONS.values())
    for choice in (*layouts, *operations, Schedule, Arithmetic, Target):
        for name, key in keys_of(choice).items():
            found.setdefault(name, key)
    return found


def all_keys(name: str) -> list[Key]:
    """What the operations and layouts that have a key called ``name`` allow for it."""
    choices = (*LAYOUTS.values(), *OPERATIONS.values(), Schedule, Arithmetic, Target)
    found = [keys_of(choice)[name] for choice in choices if name in keys_of(choice)]
    return found or [{"operation": OPERATION, "layout": LAYOUT}[name]]


def accepts(key: Key, value: Any) -> bool:
    """Whether ``value`` is one that ``key`` allows."""
    if isinstance(value, bool):
        return key.flag
    if isinstance(value, str):
        return key.text or value in key.words
    if isinstance(value, int) and key.numbers:
        return value in key.numbers
    if isinstance(value, int) and key.whole:
        above = key.minimum is None or value >= key.minimum
        below = key.maximum is None or value <= key.maximum
        return above and below and not (key.nonzero and value == 0)
    try:
        return key.number and isinstance(value, int | float) and math.isfinite(value)
    except OverflowError:  # a whole number beyond all floats
        return False


def value_problems(name: str, values: Mapping[str, Any]) -> Iterator[Problem]:
    """What is wrong with single keys and values of a kernel."""
    operation = values.get("operation", DEFAULTS["operation"])
    layout = values.get("layout", DEFAULTS["layout"])
    here = known_keys(
        operation if isinstance(operation, str) else None,
        layout if isinstance(layout, str) else None,
    )
    everywhere = known_keys()
    for key, value in values.items():
        if key not in everywhere:
            message = f"unknown key {shown(key)}{nearest(key, here)} (allowed: {', '.join(here)})"
            yield Problem(message, name, key)
        elif key not in here:
            yield Problem(
                f'operation "{operation}" with layout "{layout}" has no key "{key}" '
                f"(allowed: {', '.join(here)})",
                name,
                key,
            )
        elif not accepts(here[key], value):
            hint = nearest(value, here[key].words) if isinstance(value, str) else ""
            yield Problem(f"found {shown(value)}, allowed is {here[key].allowed}{hint}", name, key)


def shown(value: Any) -> str:
    """A value as a specification writes it, on one line, cut where it is long."""
    if isinstance(value, bool):
        return "true" if value else "false"
    if isinstance(value, int) and abs(value) >= 10**60:
        return f"a whole number of more than {60} digits"
    text = json.dumps(value, ensure_ascii=False) if isinstance(value, str) else repr(value)
    return text if len(text) <= 60 else f"{text[:57]}..."


def name_problems(name: str, what: str = "name") -> Iterator[Problem]:
    """Why a name cannot be the name of a routine or file in every language."""
    if not re.fullmatch(r"[A-Za-z][A-Za-z0-9_]*", name) or len(name) > LONGEST_NAME:
        yield Problem(
            f"found {shown(name)}; a {what} begins with a letter, goes on with letters, digits "
            f"and underscores, and has at most {LONGEST_NAME} characters",
            name if what == "name" else None,
            what,
        )
        return
    for language in LANGUAGES.values():
        if name in language.reserved or (language.lanes and is_primitive(name)):
            yield Problem(
                f'"{name}" is a reserved word or a name used inside routines in {language.title}',
                name,
                what,
            )
            return


def make_spec(name: str, **values: Any) -> Spec:
    """A checked specification from keywords; raises :class:`SpecError` with every problem."""
    if not isinstance(name, str):
        raise SpecError([Problem(f"found {shown(name)}; a name is a text", key="name")])
    problems = [*name_problems(name), *value_problems(name, values)]
    bad = {problem.key for problem in problems}
    if bad & DECISIVE:
        raise SpecError(problems)
    # What is wrong is left at its default, so that the rest can be checked together.
    values = {**DEFAULTS, **{key: value for key, value in values.items() if key not in bad}}
    operation, layout = OPERATIONS[values["operation"]], LAYOUTS[values["layout"]]
    if values.get("loop") is None:
        values["loop"] = operation.loops()[0]
    if values.get("accumulator") is None and values.get("dtype", "").startswith("int"):
        values["accumulator"] = INTEGER_ACCUMULATOR
    if values.get("isa") is not None:
        values = filled({**values, "isa": resolved(values["isa"])})
    spec = Spec(
        name,
        pick(operation, values),
        pick(layout, values),
        pick(Schedule, values),
        pick(Arithmetic, values),
        pick(Target, values),
    )
    problems += [Problem(text, name, key) for key, text in _together(spec) if key not in bad]
    if problems:
        raise SpecError(problems)
    return spec


def _together(spec: Spec) -> Iterator[tuple[str, str]]:
    """What does not go together."""
    yield from spec.layout.problems()
    yield from spec.operation.problems(spec.arithmetic)
    yield from spec.schedule.problems(
        spec.layout, spec.operation.name, spec.operation.loops(), spec.operation.why,
        spec.arithmetic.lanes, spec.operation.mirrored,
        spec.arithmetic.in_place,
    )  # fmt: skip
    yield from spec.arithmetic.problems()
    yield from spec.target.problems(spec.arithmetic)
    if spec.layout.hermitian and not spec.arithmetic.type.complex:
        yield (
            "structure",
            (
                f'a "hermitian" matrix needs a complex dtype, not {spec.arithmetic.dtype}; a real '
                'one is "symmetric"'
            ),
        )
    parameters = spec.operation.all_parameters(
        spec.layout, spec.arithmetic, spec.schedule.order, spec.schedule.threads
    )
    if spec.schedule.loop in spec.operation.loops() and spec.name in {p.name for p in parameters}:
        yield "name", f'"{spec.name}" is the name of a parameter of the routine'
    if spec.target.file is not None:
        for problem in name_problems(spec.target.file, "file"):
            yield "file", problem.message
