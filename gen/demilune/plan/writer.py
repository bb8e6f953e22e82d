"""Writes the statements of a plan, block by block.

The writer gives every local a name that is free where it stands, leaves out loops that never
run, writes out loops that run once, and unrolls the others where it is told to.
"""

from __future__ import annotations

from collections.abc import Callable, Iterator
from contextlib import contextmanager
from dataclasses import replace

from demilune.index import Compare, Expr, Symbol, Term, expr, symbol
from demilune.plan.tree import (
    ONE,
    Active,
    Assign,
    Call,
    Comment,
    Condition,
    Constant,
    Convert,
    Declare,
    Equals,
    Finish,
    For,
    Function,
    If,
    Integer,
    Local,
    Number,
    Reject,
    Statement,
    Store,
    Value,
)

PARTS = ("_re", "_im")


class Writer:
    """Collects statements; ``taken`` are the names of the parameters."""

    def __init__(self, taken: tuple[str, ...] = (), unroll: bool = False) -> None:
        self._blocks: list[list[Statement]] = [[]]
        self._names: list[set[str]] = [set(taken)]
        self._integers: list[dict[Expr, Expr]] = [{}]
        self.unroll = unroll
        self.functions: dict[str, Function] = {}

    @property
    def body(self) -> tuple[Statement, ...]:
        """What was written in the outermost block."""
        return tuple(self._blocks[0])

    @property
    def outermost(self) -> bool:
        """Whether what is written now is not inside any block."""
        return len(self._blocks) == 1

    # --- names and blocks ------------------------------------------------------------------

    def _free(self, *names: str) -> tuple[str, ...]:
        """``names``, or the same with a number behind where one of them is taken."""
        taken = set().union(*self._names)
        suffix, count = "", 1
        while any(name + suffix in taken for name in names):
            suffix = f"_{count}"
            count += 1
        result = tuple(name + suffix for name in names)
        self._names[-1].update(result)
        return result

    @contextmanager
    def block(self) -> Iterator[list[Statement]]:
        """A block of its own: what is written inside goes to the list that this gives."""
        statements: list[Statement] = []
        self._blocks.append(statements)
        self._names.append(set())
        self._integers.append({})
        try:
            yield statements
        finally:
            self._blocks.pop()
            self._names.pop()
            self._integers.pop()

    def write(self, statement: Statement) -> None:
        self._blocks[-1].append(statement)

    def comment(self, text: str) -> None:
        self.write(Comment(text))

    # --- integers --------------------------------------------------------------------------

    def integer(self, name: str, value: Expr) -> Expr:
        """``value`` under a name (the one it has already, if any), or as it is if as short."""
        if value.constant is not None or isinstance(value.atom, Symbol):
            return value
        for known in self._integers:
            if value in known:
                return known[value]
        (free,) = self._free(name)
        self.write(Integer(free, value))
        self._integers[-1][value] = symbol(free)
        return symbol(free)

    # --- numbers ---------------------------------------------------------------------------

    def declare(
        self, name: str, number: Number, changes: bool = False, parts: int | None = None
    ) -> Number:
        """New locals for a number of one or two ``parts``, or for a compensated sum of them.

        A compensated sum is as many values and then as many errors.
        """
        parts = len(number) if parts is None else parts
        names = [name] if parts == 1 else [name + part for part in PARTS]
        if len(number) > parts:
            names += [one + "_err" for one in names]
        free = self._free(*names)
        for one, value in zip(free, number, strict=True):
            self.write(Declare(one, value, changes))
        return tuple(Local(one, v.type) for one, v in zip(free, number, strict=True))

    def running(self, name: str, number: Number, parts: int) -> Number:
        """New locals for a running sum that starts at ``number``."""
        return self.declare(name, number, changes=True, parts=parts)

    def bind(self, name: str, number: Number, parts: int | None = None) -> Number:
        """``number`` in locals that do not change; locals and constants stay as they are."""
        if all(isinstance(value, Local | Constant) for value in number):
            return number
        return self.declare(name, number, parts=parts)

    def assign(self, target: Number, number: Number) -> None:
        """Gives the locals ``target`` new values; the value of one may not use another."""
        for one, value in zip(target, number, strict=True):
            assert isinstance(one, Local)
            self.write(Assign(one.name, value))

    def call(self, function: Function, arguments: tuple[Value, ...]) -> Number:
        """Calls ``function``; gives its results."""
        self.functions.setdefault(function.name, function)
        targets = self._free(*function.results)
        self.write(Call(function.name, arguments, targets, function.type))
        return tuple(Local(name, function.type) for name in targets)

    def store(
        self,
        array: str,
        index: Expr,
        number: Number,
        stride: Expr = ONE,
        active: Active = None,
    ) -> None:
        self.write(Store(array, index, number, number[0].type, stride, active))

    # --- control ---------------------------------------------------------------------------

    def loop(
        self,
        variable: str,
        low: Term,
        high: Term,
        body: Callable[[Expr], None],
        *,
        step: int = 1,
        backward: bool = False,
        parallel: bool = False,
    ) -> None:
        """``body`` for every value; told the value as an expression."""
        low, high = expr(low), expr(high)
        span = (high - low).constant
        if span is not None and span <= 0:
            return
        written_out = self.unroll and low.constant is not None and not parallel
        if span is not None and (span <= step or written_out):
            passes = range(0, span, step)
            for offset in reversed(passes) if backward else passes:
                body(low + offset)
            return
        with self.block() as statements:
            (name,) = self._free(variable)
            body(symbol(name))
        if statements:
            self.write(For(name, low, high, tuple(statements), step, backward, parallel))

    def when_known(self, condition: Compare, then: Callable[[], None]) -> None:
        """``then`` where the condition holds; decided now where that can be told."""
        if condition.known is None:
            self.when(condition, then)
        elif condition.known:
            then()

    def when(
        self,
        condition: Condition,
        then: Callable[[], None],
        otherwise: Callable[[], None] = lambda: None,
    ) -> None:
        """``then`` where the condition holds, else ``otherwise``."""
        with self.block() as yes:
            then()
        with self.block() as no:
            otherwise()
        if not yes and isinstance(condition, Equals):
            condition, yes, no = replace(condition, negated=not condition.negated), no, []
        if yes:
            self.write(If(condition, tuple(yes), tuple(no)))

    def when_equal(
        self,
        number: Number,
        to: float | int,
        then: Callable[[], None],
        otherwise: Callable[[], None] = lambda: None,
    ) -> None:
        """``then`` where the scalar equals the real number ``to``; decided now if constant."""
        # Whether a number is 0 or 1 can be told before it is made wider.
        number = tuple(one.operand if isinstance(one, Convert) else one for one in number)
        first = number[0]
        if len(number) == 1 and isinstance(first, Constant):
            (then if first.value == to else otherwise)()
            return
        exact: float | int = to if first.type.startswith("int") else float(to)
        parts = (exact, *(0.0 for _ in number[1:]))
        self.when(Equals(number, parts), then, otherwise)

    def reject(self, condition: Condition, argument: str, rule: str) -> None:
        self.write(Reject(condition, argument, rule))

    def finish(self) -> None:
        self.write(Finish())
