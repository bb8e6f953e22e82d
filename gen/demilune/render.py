"""From plans to source files, through the templates of a language.

A renderer walks the tree of a plan and calls one macro of the language's ``syntax.j2`` for each
node; it puts in the parentheses, breaks long lines, and knows nothing of any language's text.
"""

from __future__ import annotations

import inspect
import re
from collections.abc import Iterable
from typing import Any

from demilune import primitives
from demilune.contract import contract, file_head, title
from demilune.dtypes import REAL_SIZE, lanes_of, real_of
from demilune.expressions import ExpressionWriter, templates
from demilune.isa import InstructionSet
from demilune.languages import ALL, Language
from demilune.plan.build import Plan
from demilune.plan.tree import (
    Assign,
    Call,
    Comment,
    Declare,
    Finish,
    For,
    Function,
    If,
    Integer,
    Parameter,
    Reject,
    Statement,
    Store,
    leaves,
    values,
    walk,
)
from demilune.plan.writer import PARTS

WIDTH = 90
"""Columns of an emitted line."""

INDENT = "    "


def render(
    plans: Iterable[Plan], file: str, language: str, *, contracts: bool = True
) -> dict[str, str]:
    """The source files, by name, that hold the routines of ``plans``.

    ``file`` is the name without ending; all plans must be for this language and environment.
    Without ``contracts`` the routines are bare: for plans that no specification promises.
    """
    plans = list(plans)
    return _Renderer(ALL[language], file, plans, contracts).files()


def prototype(plan: Plan) -> str:
    """The prototype of the routine in C, without a semicolon."""
    return str(_Renderer(ALL["c"], plan.spec.name, [plan]).routine_prototype(plan))


def pseudo_code(plan: Plan) -> str:
    """The plan as pseudo-code for people."""
    return _Renderer(ALL["pseudo"], plan.spec.name, [plan]).files()[f"{plan.spec.name}.txt"]


class _Renderer(ExpressionWriter):
    def __init__(
        self, language: Language, file: str, plans: list[Plan], contracts: bool = True
    ) -> None:
        self.contracts = contracts
        super().__init__(language, plans[0].spec.target.environment == "freestanding")
        self.file, self.plans = file, plans

    # --- files -----------------------------------------------------------------------------

    def files(self) -> dict[str, str]:
        functions: dict[str, Function] = {}
        for plan in self.plans:
            functions.update({one.name: one for one in plan.routine.functions})
        sets = self.plans[0].spec.target.instruction_sets
        variants = [self._variant(isa, len(sets) > 1) for isa in sets]
        alone = len(variants) == 1
        routines = variants[0]["routines"] if alone else [self._routine(p) for p in self.plans]
        written = [self._function(one) for one in functions.values()]
        types = self._types()
        context = {
            "file": self.file,
            "head": file_head(self.plans),
            "routines": routines,
            "variants": variants,
            "lanes_used": bool(self.primitives),
            "functions": written,
            "types": types,
            "sizes": REAL_SIZE,
            "floating": any(name.startswith("float") for name in types),
            "fma": sorted(need[4:] for need in self.needs if need.startswith("fma_")),
            "complex": any(plan.spec.arithmetic.type.complex for plan in self.plans),
            "freestanding": self.freestanding,
            "helpers": self._helpers(),
        }
        result = {}
        for extension in self.language.extensions:
            template = templates().get_template(f"{self.language.name}/file.{extension}.j2")
            result[f"{self.file}.{extension}"] = template.render(context).strip("\n") + "\n"
        return result

    def _variant(self, isa: InstructionSet, several: bool) -> dict[str, Any]:
        """The routines for one instruction set, and the primitives that they use."""
        self.suffix = f"_{isa.name}" if several else ""
        self.primitives = set()
        routines = [self._routine(plan) for plan in self.plans]
        types = [self._lanes_type(isa, type) for type in sorted({t for _, t in self.primitives})]
        helpers: dict[str, str] = {}
        for one in types:
            helpers |= one.get("functions", {})
        facts: dict[str, Any] = {"title": isa.title, "target": isa.target, "header": isa.header}
        facts |= {"flags": isa.flags, "suffix": self.suffix, "functions": helpers}
        self.suffix = ""
        return {**facts, "routines": routines, "types": types if self.language.lanes else []}

    def _lanes_type(self, isa: InstructionSet, type: str) -> dict[str, Any]:
        """A type with lanes: how many registers it is, and its primitives as text."""
        real, lanes, width = real_of(type), lanes_of(type), isa.width(type) or 1
        facts = {
            "name": type + self.suffix, "real": real, "lanes": lanes, "width": width,
            "count": lanes // width, "table": isa.registers.get(f"{real}x{width}"),
        }  # fmt: skip
        names = sorted(name for name, one in self.primitives if one == type)
        if not self.language.lanes:
            return facts
        macro = templates().get_template(f"{self.language.name}/lanes.j2").module
        texts = [self._narrow(macro.primitive(facts, name)) for name in names]  # type: ignore[attr-defined]
        if self.freestanding:  # no math.h
            texts = [re.sub(r"\bfma(f?)\(", r"__builtin_fma\1(", one) for one in texts]
        called = isa.functions("\n".join(texts))
        helpers = {name: self._narrow(source) for name, source in called.items()}
        if self.suffix:  # another instruction set of the file may call its own the same
            own = re.compile(rf"\b({'|'.join(helpers)})\(") if helpers else None
            texts = [own.sub(rf"\1{self.suffix}(", one) if own else one for one in texts]
            helpers = {n: own.sub(rf"\1{self.suffix}(", t) for n, t in helpers.items() if own}
        return {**facts, "primitives": texts, "functions": helpers}

    def _narrow(self, text: str) -> str:
        """The text with its long lines broken and its empty ones left out."""
        lines = []
        for line in filter(str.strip, text.split("\n")):
            depth = (len(line) - len(line.lstrip())) // len(INDENT)
            lines += self._broken(line.strip(), depth) if len(line) > WIDTH else [line]
        return "\n".join(lines)

    def _types(self) -> list[str]:
        found = {one.type for plan in self.plans for one in plan.parameters if one.type != "size"}
        for plan in self.plans:
            for statement in walk(plan.routine.body):
                found |= {real_of(v.type) for value in values(statement) for v in leaves(value)}
        return sorted(found)

    def _helpers(self) -> list[str]:
        """What the file needs beside its routines: names, or the sources of functions."""
        if not self.language.helpers:
            return sorted(self.needs)
        names: dict[str, None] = {}
        for need in sorted(self.needs):
            names.update(dict.fromkeys(self.language.helpers.get(need, ())))
        return [inspect.getsource(getattr(primitives, name)).rstrip() for name in names]

    def _routine(self, plan: Plan) -> dict[str, Any]:
        body = self._scalars(plan)
        body += self._block(plan.routine.body, reports=_reports(plan), plan=plan)
        routine = {
            "name": plan.routine.name,
            "arguments": ", ".join(name for one in plan.parameters for name in self._passed(one)),
            "title": title(plan),
            "parameters": [self._parameter(one) for one in plan.parameters],
            "reports": _reports(plan),
            "contract": (
                contract(plan, self.language, _reports(plan)) if self.contracts else [title(plan)]
            ),
            "body": body,
        }
        routine["prototype"] = self.routine_prototype(plan)
        return routine

    def _scalars(self, plan: Plan) -> str:
        """What a language must do with scalars before they are used: round them, take parts."""
        lines = []
        for one in plan.parameters:
            if one.kind == "scalar":
                if one.type == "float32":
                    self.needs.add("round_float32")
                lines += self.syntax["scalar"](self._parameter(one)).split("\n")
        return "".join(f"{INDENT}{line}\n" for line in lines if line)

    def routine_prototype(self, plan: Plan) -> str:
        """The head of a routine, broken where it is long."""
        parameters = [self._parameter(one) for one in plan.parameters]
        facts = {
            "name": plan.routine.name + self.suffix, "reports": _reports(plan),
            "parameters": parameters,
        }  # fmt: skip
        inner = "static " if self.suffix else ""  # one of several versions in a file
        head = inner + self.syntax["prototype"](facts) + ";"  # a declaration has one column more
        return "\n".join(self._broken(head, 0)).removesuffix(";")

    def _passed(self, one: Parameter) -> list[str]:
        """The names that stand for a parameter in a call."""
        names: list[str] = self._parameter(one)["names"]
        return names if one.kind == "scalar" else [one.name]

    def _parameter(self, one: Parameter) -> dict[str, Any]:
        names = [one.name + part for part in PARTS] if one.complex else [one.name]
        length = None if one.extent is None else one.extent.constant
        if length is not None and not self.language.complex_elements:
            length *= one.parts
        return {
            "name": one.name, "names": names, "kind": one.kind, "type": one.type,
            "use": one.use, "length": length, "complex": one.complex,
        }  # fmt: skip

    def _function(self, one: Function) -> dict[str, Any]:
        body = self._block(one.body, reports=False, plan=None)
        return {
            "name": one.name, "meaning": one.meaning, "arguments": one.arguments,
            "type": one.type, "results": one.results, "body": body,
        }  # fmt: skip

    # --- statements ------------------------------------------------------------------------

    def _block(
        self, body: tuple[Statement, ...], *, reports: bool, plan: Plan | None, depth: int = 1
    ) -> str:
        lines: list[str] = []
        for statement in body:
            text = self._statement(statement, reports=reports, plan=plan, depth=depth)
            for line in text.split("\n"):
                if line.startswith("\0"):  # an inner block, indented and broken already
                    lines.append(line)
                else:
                    lines.extend("\0" + one for one in self._broken(line, depth))
        if depth == 1:
            return "\n".join(line.lstrip("\0") for line in lines)
        return "\n".join(lines)

    def _statement(self, one: Statement, *, reports: bool, plan: Plan | None, depth: int) -> str:
        s = self.syntax

        def block(body: tuple[Statement, ...]) -> str:
            return self._block(body, reports=reports, plan=plan, depth=depth + 1)

        if isinstance(one, Declare):
            type = one.type + (self.suffix if lanes_of(one.type) > 1 else "")
            return s["declare"](one.name, self.value(one.value), type, one.changes)
        if isinstance(one, Assign):
            return s["assign"](one.name, self.value(one.value))
        if isinstance(one, Store):
            return self._store(one)
        if isinstance(one, Integer):
            return s["integer"](one.name, self.integer(one.value))
        if isinstance(one, For):
            low, high = self.integer(one.low), self.integer(one.high)
            last = self.integer(one.high - one.step)
            inside = block(one.body)
            loop = s["loop"](one.variable, low, high, last, one.step, one.backward, inside)
            return s["parallel"](loop) if one.parallel else loop
        if isinstance(one, If):
            then, otherwise = block(one.then), block(one.otherwise)
            return s["branch"](self.condition(one.condition), then, otherwise)
        if isinstance(one, Call):
            arguments = [self.value(value) for value in one.arguments]
            return s["call"](one.function, arguments, one.targets, one.type)
        if isinstance(one, Comment):
            return s["comment"](one.text)
        if isinstance(one, Reject):
            assert plan is not None
            position = argument_position(plan, one.argument)
            return s["reject"](self.condition(one.condition), one.argument, position, one.rule)
        assert isinstance(one, Finish)
        return s["finish"](reports)

    def _store(self, one: Store) -> str:
        parts = len(one.number)
        if lanes_of(one.type) > 1:
            arguments = [*self.places(one), *map(self.value, one.number)]
            name = "store" if parts == 1 else "store_pairs"
            return self.syntax["statement"](self.primitive(name, one, arguments))
        places = [self.place(one.index, part if parts > 1 else None) for part in range(parts)]
        numbers = [self.value(value) for value in one.number]
        return self.syntax["store"](one.array, places, numbers, None, one.type)

    # --- lines -----------------------------------------------------------------------------

    def _broken(self, line: str, depth: int) -> list[str]:
        """``line`` at ``depth``, broken where it is longer than the width."""
        margin = INDENT * depth
        rest, lines, opened = margin + line, [], 0
        while len(rest) > WIDTH:
            place = self._break(rest, opened)
            if place is None:
                break
            opened += _brackets(rest[:place])
            lines.append(rest[:place])
            rest = margin + 2 * INDENT + rest[place + 1 :]
        return [*lines, rest]

    def _break(self, text: str, opened: int) -> int | None:
        """The space to break at: as far out of brackets as there is one, then the last."""
        best: tuple[int, bool, int] | None = None
        start = len(text) - len(text.lstrip()) + 12
        inside = opened
        for place in range(WIDTH + 1):
            if place >= start and text[place] == " ":
                if self.language.breaks_anywhere or inside > 0:
                    rank = (-inside, text[place - 1] in ",;", place)
                    best = max(best or rank, rank)
            inside += _brackets(text[place])
        return best[2] if best else None


def _brackets(text: str) -> int:
    """How many brackets are open at the end of ``text``."""
    return sum((letter in "([{") - (letter in ")]}") for letter in text)


def _reports(plan: Plan) -> bool:
    """Whether the routine can refuse an argument."""
    return any(isinstance(one, Reject) for one in walk(plan.routine.body))


def argument_position(plan: Plan, name: str) -> int:
    """The position of a parameter, from 1, with both parts of a complex scalar counted."""
    position = 1
    for one in plan.parameters:
        if one.name == name:
            return position
        position += 2 if one.kind == "scalar" and one.complex else 1
    raise KeyError(name)
