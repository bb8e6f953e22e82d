"""Numbers and integers of a plan as text, through the macros of a language."""

from __future__ import annotations

from collections.abc import Callable
from functools import cache

import jinja2

from demilune.dtypes import lanes_of, real_of
from demilune.index import (
    Atom,
    Choice,
    Compare,
    Element,
    Expr,
    Extreme,
    Monomial,
    Quotient,
    Symbol,
)
from demilune.languages import ALL, TEMPLATES, Language
from demilune.plan.tree import (
    ONE,
    Binary,
    Broadcast,
    Condition,
    Constant,
    Convert,
    Fma,
    Fold,
    Load,
    Local,
    Negate,
    Pack,
    Store,
    Value,
    Where,
)

NEAR = (2, 3)
"""Fixed strides for which an instruction set may have something better than single loads."""


@cache
def templates() -> jinja2.Environment:
    """All templates of all languages."""
    env = jinja2.Environment(
        loader=jinja2.FileSystemLoader(TEMPLATES),
        undefined=jinja2.StrictUndefined,
        autoescape=False,  # noqa: S701 - sources are no markup
    )
    env.filters["zip"] = lambda first, second: list(zip(first, second, strict=True))
    return env


@cache
def syntax(language: str) -> dict[str, Callable[..., str]]:
    """The macros of a language by name."""
    module = templates().get_template(f"{language}/syntax.j2").module
    return {name: getattr(module, name) for name in dir(module) if not name.startswith("_")}


class ExpressionWriter:
    """Writes numbers, conditions and integers; ``needs`` gathers what they call."""

    def __init__(self, language: Language, freestanding: bool = False) -> None:
        self.language, self.freestanding = language, freestanding
        self.syntax = syntax(language.name)
        self.needs: set[str] = set()
        self.suffix = ""
        """What is added to the names of an instruction set, where a file holds several."""
        self.primitives: set[tuple[str, str]] = set()

    # --- values ----------------------------------------------------------------------------

    def value(self, value: Value) -> str:
        """A number as text."""
        s = self.syntax
        if isinstance(value, Local):
            return value.name
        if isinstance(value, Fold) or lanes_of(value.type) > 1:
            return self._lanes(value)
        if isinstance(value, Load):
            place = self.place(value.index, value.part)
            return s["load"](value.array, place, value.part, value.type)
        if isinstance(value, Constant):
            return s["constant"](_number(value), value.type)
        if isinstance(value, Binary):
            left, right = self.value(value.left), self.value(value.right)
            if value.operator == "*":
                left, right = _grouped(left, "+-"), _grouped(right, "+-*")
            else:
                right = _grouped(right, "+-")
            if value.type == "float32":
                self.needs.add("round_float32")
            return s["operation"](value.operator, left, right, value.type)
        if isinstance(value, Negate):
            return s["negate"](_grouped(self.value(value.operand), "+-*"), value.type)
        if isinstance(value, Fma):
            self.needs.add(f"fma_{value.type}")
            parts = [self.value(part) for part in (value.left, value.right, value.addend)]
            return s["fma"](*parts, value.type, self.freestanding)
        assert isinstance(value, Convert)
        if value.type == "float32":
            self.needs.add("round_float32")
        operand = _grouped(self.value(value.operand), "+-*")
        return s["convert"](operand, value.operand.type, value.type)

    def _lanes(self, value: Value) -> str:
        """A value with lanes, or the sum of its lanes, as a call of a primitive."""
        if isinstance(value, Load):
            prefix = {None: "", 0: "re_", 1: "im_"}[value.part]
            return self.primitive(f"{prefix}load", value, self.places(value))
        if isinstance(value, Negate):
            return self.primitive("negate", value, [self.value(value.operand)])
        if isinstance(value, Binary):
            name = {"+": "add", "-": "sub", "*": "mul"}[value.operator]
            return self.primitive(name, value, [self.value(value.left), self.value(value.right)])
        if isinstance(value, Fma):
            parts = [self.value(part) for part in (value.left, value.right, value.addend)]
            return self.primitive("fma", value, parts)
        if isinstance(value, Broadcast):
            return self.primitive("broadcast", value, [self.value(value.operand)])
        if isinstance(value, Where):
            ends = [self.integer(end) for end in value.active]
            return self.primitive(
                "where", value, [*ends, self.value(value.value), self.value(value.otherwise)]
            )
        assert isinstance(value, Pack | Fold)
        operands = [self.value(one) for one in value.operands]
        count = len(operands)
        if isinstance(value, Pack):
            return self.primitive(f"pack{count}", value, operands)
        return self.primitive(f"fold{count if count > 1 else ''}", value.operands[0], operands)

    def places(self, one: Load | Store) -> list[str]:
        """The array, the index, and the stride or the active lanes where they are told."""
        integers = [one.index, *([one.stride] if one.stride != ONE else []), *(one.active or ())]
        return [one.array, *map(self.integer, integers)]

    def primitive(self, name: str, value: Value | Store, arguments: list[str]) -> str:
        """The call of a primitive for values with lanes."""
        if isinstance(value, Load | Store):
            stride = value.stride.constant
            if isinstance(value, Load) and value.dense and value.part is None and stride in NEAR:
                name, arguments = f"{name}_by{stride}", [arguments[0], arguments[1], *arguments[3:]]
            elif stride != 1:
                name += "_strided"
            name += "_part" if value.active else ""
        self.primitives.add((name, value.type))
        if not self.language.lanes:
            self.needs |= _helpers_of(name, real_of(value.type))
        return self.syntax["primitive"](name, value.type + self.suffix, arguments)

    def place(self, index: Expr, part: int | None) -> str:
        """The place of an element, or of one of its parts where these are neighbours."""
        if part is None or self.language.complex_elements:
            return self.integer(index)
        if index.constant is not None or isinstance(index.atom, Symbol):
            return self.integer(2 * index + part)
        text = f"2 * {_grouped(self.integer(index), '+-*/')}"
        return f"{text} + {part}" if part else text

    def condition(self, condition: Condition) -> str:
        if isinstance(condition, Compare):
            left, right = self.integer(condition.left), self.integer(condition.right)
            return self.syntax["compare"](left, condition.relation, right)
        type = condition.values[0].type
        pairs = [
            (self.value(value), self.value(Constant(number, type)))
            for value, number in zip(condition.values, condition.numbers, strict=True)
        ]
        return self.syntax["differs" if condition.negated else "equals"](pairs)

    def integer(self, value: Expr) -> str:
        """An integer expression as text."""
        if not value.terms:
            return "0"
        text = ""
        for negative, term in self._terms(value):
            if text:
                text += f" {'-' if negative else '+'} {term}"
            else:
                text = f"-{term}" if negative else term
        return text

    def _terms(self, value: Expr) -> list[tuple[bool, str]]:
        """The terms of a sum, each with its sign; what they have in common is taken out."""
        common = _common(value)
        if common is not None:
            inside = {
                _without(monomial, common): factor
                for monomial, factor in value.terms
                if common in monomial
            }
            rest = Expr.of({m: f for m, f in value.terms if common not in m})
            negative = all(factor < 0 for factor in inside.values())
            cofactor = Expr.of(inside) if not negative else -Expr.of(inside)
            taken = _grouped(self._atom(common), "+-*/")
            term = f"{_grouped(self.integer(cofactor), '+-')} * {taken}"
            terms = [(negative, term), *(self._terms(rest) if rest.terms else [])]
            return sorted(terms, key=lambda term: term[0])
        terms = []
        for monomial, factor in value.terms:
            size = abs(factor)
            parts = [self._atom(atom) for atom in monomial]
            if len(parts) > 1 or size != 1:
                parts = [_grouped(part, "+-*/") for part in parts]
            if size != 1 or not parts:
                parts.insert(0, str(size))
            terms.append((factor < 0, " * ".join(parts)))
        return terms

    def _atom(self, atom: Symbol | Quotient | Extreme | Element | Choice) -> str:
        s = self.syntax
        if isinstance(atom, Symbol):
            return atom.name
        if isinstance(atom, Quotient):
            factors = [_grouped(self.integer(factor), "+-/") for factor in atom.factors]
            return s["quotient"](" * ".join(factors), atom.divisor)
        if isinstance(atom, Extreme):
            name = "least" if atom.least else "greatest"
            self.needs.add(name)
            items = [self.integer(item) for item in atom.items]
            while len(items) > 1:  # in pairs, so that brackets do not pile up
                pairs = [s[name](*items[i : i + 2]) for i in range(0, len(items) - 1, 2)]
                items = pairs + items[len(items) // 2 * 2 :]
            return items[0]
        if isinstance(atom, Element):
            return s["element"](atom.array, self.integer(atom.index))
        condition = self.condition(atom.condition)
        return s["choice"](condition, self.integer(atom.then), self.integer(atom.otherwise))


def _helpers_of(name: str, real: str) -> set[str]:
    """The needs, one of which a language without instruction sets may have helpers for."""
    kind = next((one for one in ("load", "store") if one in name), name.rstrip("0123456789"))
    return {kind, f"{kind}_{real}"} if kind != "fma" else {f"fma_lanes_{real}"}


def _number(constant: Constant) -> str:
    """The shortest text that a language reads back as the same number."""
    if isinstance(constant.value, int):
        return str(constant.value)
    return repr(constant.value)


def _common(value: Expr) -> Atom | None:
    """The atom that most terms share, if one of them is a product of two or more."""
    places: dict[Atom, list[int]] = {}
    for monomial, _ in value.terms:
        for atom in dict.fromkeys(monomial):
            places.setdefault(atom, []).append(len(monomial))
    shared = {atom: found for atom, found in places.items() if len(found) > 1 and max(found) > 1}
    return max(shared, key=lambda atom: (len(shared[atom]), repr(atom)), default=None)


def _without(monomial: Monomial, atom: Atom) -> Monomial:
    """The product ``monomial`` divided by ``atom``."""
    place = monomial.index(atom)
    return monomial[:place] + monomial[place + 1 :]


def _grouped(text: str, operators: str) -> str:
    """``text`` in parentheses if one of ``operators`` stands in it outside all brackets."""
    depth = 0
    for place, letter in enumerate(text):
        if letter in "([":
            depth += 1
        elif letter in ")]":
            depth -= 1
        elif depth == 0 and letter in operators:
            binary = text[place - 1] == " " and text[place + 1 : place + 2] in (" ", "/")
            if place == 0 or binary:
                return f"({text})"
    return text


def integer_text(value: Expr) -> str:
    """An integer expression as pseudo-code."""
    return ExpressionWriter(ALL["pseudo"]).integer(value)
