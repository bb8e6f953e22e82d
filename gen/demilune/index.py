"""Integer expressions for sizes, loop bounds and storage indices.

An :class:`Expr` is a polynomial with integer coefficients over atoms. An atom is a symbol
(``n``, ``ld``, ``k`` ...), an exact or floored quotient, a least or greatest of several
expressions, an element of an integer array, or a choice between two expressions. Equal
expressions compare equal, so that a plan can tell that a loop is empty, has one pass, or
starts where another ends, without running anything.
"""

from __future__ import annotations

from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass, field
from functools import cached_property
from typing import Any, TypeAlias, Union

Environment: TypeAlias = Mapping[str, Any]
"""Values of symbols (int) and of integer arrays (sequences of int)."""

Term: TypeAlias = Union["Expr", int]
Substitution: TypeAlias = Mapping[str, "Expr"]
"""What symbols are replaced by."""


@dataclass(frozen=True)
class Symbol:
    """A named integer."""

    name: str

    def value(self, env: Environment) -> int:
        return int(env[self.name])

    def substitute(self, by: Substitution) -> Expr:
        return by.get(self.name, _single(self))

    @property
    def names(self) -> frozenset[str]:
        return frozenset({self.name})


@dataclass(frozen=True)
class Quotient:
    """The product of ``factors`` divided by ``divisor``, rounded down; never negative."""

    factors: tuple[Expr, ...]
    divisor: int

    def value(self, env: Environment) -> int:
        product = 1
        for factor in self.factors:
            product *= factor.value(env)
        return product // self.divisor

    def substitute(self, by: Substitution) -> Expr:
        return quotient(*(factor.substitute(by) for factor in self.factors), divisor=self.divisor)

    @property
    def names(self) -> frozenset[str]:
        return frozenset().union(*(factor.names for factor in self.factors))


@dataclass(frozen=True)
class Extreme:
    """The least or the greatest of two or more expressions."""

    least: bool
    items: tuple[Expr, ...]

    def value(self, env: Environment) -> int:
        values = [item.value(env) for item in self.items]
        return min(values) if self.least else max(values)

    def substitute(self, by: Substitution) -> Expr:
        return _extreme(self.least, [item.substitute(by) for item in self.items])

    @property
    def names(self) -> frozenset[str]:
        return frozenset().union(*(item.names for item in self.items))


@dataclass(frozen=True)
class Element:
    """An element of an integer array that the caller passes, such as the diagonal's places."""

    array: str
    index: Expr

    def value(self, env: Environment) -> int:
        return int(env[self.array][self.index.value(env)])

    def substitute(self, by: Substitution) -> Expr:
        return element(self.array, self.index.substitute(by))

    @property
    def names(self) -> frozenset[str]:
        return self.index.names | {self.array}


@dataclass(frozen=True)
class Choice:
    """``then`` where ``condition`` holds, else ``otherwise``; only the chosen one is read."""

    condition: Compare
    then: Expr
    otherwise: Expr

    def value(self, env: Environment) -> int:
        return (self.then if self.condition.holds(env) else self.otherwise).value(env)

    def substitute(self, by: Substitution) -> Expr:
        condition = self.condition.substitute(by)
        return choice(condition, self.then.substitute(by), self.otherwise.substitute(by))

    @property
    def names(self) -> frozenset[str]:
        return self.condition.names | self.then.names | self.otherwise.names


Atom: TypeAlias = Symbol | Quotient | Extreme | Element | Choice
Monomial: TypeAlias = tuple[Atom, ...]


@dataclass(frozen=True)
class Expr:
    """A polynomial: pairs of a monomial (a product of atoms) and its coefficient."""

    terms: tuple[tuple[Monomial, int], ...] = field(default=())

    @staticmethod
    def of(terms: Mapping[Monomial, int]) -> Expr:
        kept = [(monomial, factor) for monomial, factor in terms.items() if factor]
        return Expr(tuple(sorted(kept, key=_term_order)))

    @cached_property
    def _map(self) -> dict[Monomial, int]:
        return dict(self.terms)

    @property
    def constant(self) -> int | None:
        """The value, if it depends on nothing."""
        if not self.terms:
            return 0
        if len(self.terms) == 1 and not self.terms[0][0]:
            return self.terms[0][1]
        return None

    def constant_or(self, other: int) -> int:
        """The value if it depends on nothing, else ``other``."""
        return other if self.constant is None else self.constant

    @cached_property
    def names(self) -> frozenset[str]:
        """The symbols and arrays that the value depends on."""
        return frozenset().union(*(atom.names for monomial, _ in self.terms for atom in monomial))

    @property
    def atom(self) -> Atom | None:
        """The only atom, if the expression is no more than one."""
        if len(self.terms) == 1 and self.terms[0][1] == 1 and len(self.terms[0][0]) == 1:
            return self.terms[0][0][0]
        return None

    def value(self, env: Environment) -> int:
        """The integer value, given the values of all ``names``."""
        total = 0
        for monomial, factor in self.terms:
            product = factor
            for atom in monomial:
                product *= atom.value(env)
            total += product
        return total

    def substitute(self, by: Substitution) -> Expr:
        """The expression with symbols replaced, simplified again."""
        if self.names.isdisjoint(by):
            return self
        total = expr(0)
        for monomial, factor in self.terms:
            product = expr(factor)
            for atom in monomial:
                product = product * atom.substitute(by)
            total = total + product
        return total

    def __add__(self, other: Term) -> Expr:
        total = dict(self._map)
        for monomial, factor in expr(other).terms:
            total[monomial] = total.get(monomial, 0) + factor
        return Expr.of(total)

    __radd__ = __add__

    def __neg__(self) -> Expr:
        return Expr.of({monomial: -factor for monomial, factor in self.terms})

    def __sub__(self, other: Term) -> Expr:
        return self + -expr(other)

    def __rsub__(self, other: Term) -> Expr:
        return expr(other) + -self

    def __mul__(self, other: Term) -> Expr:
        total: dict[Monomial, int] = {}
        for left, left_factor in self.terms:
            for right, right_factor in expr(other).terms:
                monomial = tuple(sorted(left + right, key=repr))
                total[monomial] = total.get(monomial, 0) + left_factor * right_factor
        return Expr.of(total)

    __rmul__ = __mul__


def _term_order(term: tuple[Monomial, int]) -> tuple[bool, int, str]:
    """Positive terms first, then by descending degree, then by name: a fixed order of text."""
    monomial, factor = term
    return (factor < 0, -len(monomial), repr(monomial))


@dataclass(frozen=True)
class Compare:
    """A comparison of two integers; ``relation`` is one of ``<``, ``<=``, ``==``, ``!=``."""

    left: Expr
    relation: str
    right: Expr

    def holds(self, env: Environment) -> bool:
        return RELATIONS[self.relation](self.left.value(env), self.right.value(env))

    def substitute(self, by: Substitution) -> Compare:
        return Compare(self.left.substitute(by), self.relation, self.right.substitute(by))

    @property
    def names(self) -> frozenset[str]:
        return self.left.names | self.right.names

    @property
    def known(self) -> bool | None:
        """Whether it holds, where that can be told without values."""
        difference = (self.left - self.right).constant
        return None if difference is None else RELATIONS[self.relation](difference, 0)


RELATIONS: dict[str, Callable[[int, int], bool]] = {
    "<": lambda left, right: left < right,
    "<=": lambda left, right: left <= right,
    "==": lambda left, right: left == right,
    "!=": lambda left, right: left != right,
}


def expr(term: Term) -> Expr:
    """``term`` as an expression."""
    if isinstance(term, Expr):
        return term
    return Expr.of({(): term})


def symbol(name: str) -> Expr:
    """The integer called ``name``."""
    return Expr((((Symbol(name),), 1),))


def _single(atom: Atom) -> Expr:
    return Expr((((atom,), 1),))


def element(array: str, index: Term) -> Expr:
    """Element ``index`` of the integer array called ``array``."""
    return _single(Element(array, expr(index)))


def quotient(*factors: Term, divisor: int) -> Expr:
    """The product of ``factors``, none negative, divided by ``divisor`` and rounded down."""
    kept = [expr(factor) for factor in factors]
    constants = [factor.constant for factor in kept]
    if any(constant == 0 for constant in constants):
        return expr(0)
    if all(constant is not None for constant in constants) or divisor == 1:
        product = expr(1)
        for factor in kept:
            product = product * factor
        value = product.constant
        return product if value is None else expr(value // divisor)
    return _single(Quotient(tuple(kept), divisor))


def choice(condition: Compare, then: Term, otherwise: Term) -> Expr:
    """``then`` where ``condition`` holds, else ``otherwise``."""
    known = condition.known
    if known is not None or expr(then) == expr(otherwise):
        return expr(otherwise if known is False else then)
    return _single(Choice(condition, expr(then), expr(otherwise)))


def minimum(*items: Term) -> Expr:
    """The least of ``items``; those that can be seen to be larger are dropped."""
    return _extreme(True, items)


def maximum(*items: Term) -> Expr:
    """The greatest of ``items``; those that can be seen to be smaller are dropped."""
    return _extreme(False, items)


def _extreme(least: bool, items: Sequence[Term]) -> Expr:
    flat: list[Expr] = []
    for item in map(expr, items):
        atom = item.atom
        nested = isinstance(atom, Extreme) and atom.least == least
        flat.extend(atom.items if nested and isinstance(atom, Extreme) else [item])
    kept: list[Expr] = []
    for item in flat:
        for place, other in enumerate(kept):
            difference = (item - other).constant
            if difference is not None:
                if (difference < 0) == least and difference != 0:
                    kept[place] = item
                break
        else:
            kept.append(item)
    if len(kept) == 1:
        return kept[0]
    return _single(Extreme(least, tuple(kept)))
