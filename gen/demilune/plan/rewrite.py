"""Rewrites a plan's tree: every statement, value and integer through one function each."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, replace
from typing import Any, TypeAlias

from demilune.index import Compare, Expr
from demilune.plan.tree import (
    Assign,
    Binary,
    Broadcast,
    Call,
    Convert,
    Declare,
    Equals,
    Fma,
    Fold,
    For,
    If,
    Integer,
    Load,
    Negate,
    Pack,
    Reject,
    Statement,
    Store,
    Value,
    Where,
)

Statements: TypeAlias = tuple[Statement, ...]


@dataclass
class Rewriter:
    """Three functions, each given a node whose parts are rewritten already.

    ``statement`` gives what stands in a statement's place (nothing, one, or several), ``value``
    and ``integer`` what stands in the place of a number and of an integer expression.
    """

    statement: Callable[[Statement], Statements] = lambda one: (one,)
    value: Callable[[Value], Value] = lambda one: one
    integer: Callable[[Expr], Expr] = lambda one: one

    def body(self, body: Statements) -> Statements:
        """The rewritten statements."""
        return tuple(new for one in body for new in self.statement(self._inside(one)))

    def _inside(self, one: Statement) -> Statement:
        if isinstance(one, Declare | Assign):
            return replace(one, value=self._value(one.value))
        if isinstance(one, Store):
            number = tuple(self._value(value) for value in one.number)
            return replace(one, number=number, **self._places(one))
        if isinstance(one, Call):
            return replace(one, arguments=tuple(self._value(v) for v in one.arguments))
        if isinstance(one, Integer):
            return replace(one, value=self.integer(one.value))
        if isinstance(one, For):
            low, high = self.integer(one.low), self.integer(one.high)
            return replace(one, low=low, high=high, body=self.body(one.body))
        if isinstance(one, If):
            then, otherwise = self.body(one.then), self.body(one.otherwise)
            return If(self._condition(one.condition), then, otherwise)
        if isinstance(one, Reject):
            return replace(one, condition=self._condition(one.condition))
        return one

    def _places(self, one: Load | Store) -> dict[str, Any]:
        active = one.active and (self.integer(one.active[0]), self.integer(one.active[1]))
        index, stride = self.integer(one.index), self.integer(one.stride)
        return {"index": index, "stride": stride, "active": active}

    def _condition(self, one: Compare | Equals) -> Compare | Equals:
        if isinstance(one, Compare):
            return replace(one, left=self.integer(one.left), right=self.integer(one.right))
        return replace(one, values=tuple(self._value(value) for value in one.values))

    def _value(self, one: Value) -> Value:
        if isinstance(one, Load):
            return self.value(replace(one, **self._places(one)))
        if isinstance(one, Binary):
            left, right = self._value(one.left), self._value(one.right)
            return self.value(replace(one, left=left, right=right))
        if isinstance(one, Fma):
            left, right = self._value(one.left), self._value(one.right)
            return self.value(Fma(left, right, self._value(one.addend), one.type))
        if isinstance(one, Where):
            active = (self.integer(one.active[0]), self.integer(one.active[1]))
            value, otherwise = self._value(one.value), self._value(one.otherwise)
            return self.value(Where(active, value, otherwise, one.type))
        if isinstance(one, Pack | Fold):
            return self.value(replace(one, operands=tuple(map(self._value, one.operands))))
        if isinstance(one, Negate | Convert | Broadcast):
            return self.value(replace(one, operand=self._value(one.operand)))
        return self.value(one)
