"""What a plan costs: operations, loads, stores, bytes; known before anything is compiled.

The counts are exact for the sizes given: loops whose bodies hold no further loop are counted
by their number of passes, all others are run through. Scalars that are passed at run time count
as general (neither 0 nor 1).
"""

from __future__ import annotations

from collections import Counter
from collections.abc import Iterator, Mapping
from contextlib import suppress
from dataclasses import dataclass, field
from fractions import Fraction
from typing import Any

from demilune.dtypes import REAL_SIZE, lanes_of, real_of
from demilune.index import Compare
from demilune.plan.build import Plan
from demilune.plan.tree import (
    Assign,
    Binary,
    Call,
    Convert,
    Declare,
    Equals,
    Finish,
    Fma,
    Fold,
    For,
    Function,
    If,
    Integer,
    Load,
    Negate,
    Reject,
    Statement,
    Store,
    leaves,
    values,
    walk,
)


@dataclass
class Counts:
    """Counts of one call; loads and stores are of elements (a complex number is one)."""

    operations: Counter[str] = field(default_factory=Counter)
    loads: Counter[str] = field(default_factory=Counter)
    stores: Counter[str] = field(default_factory=Counter)

    def add(self, other: Counts, times: int = 1) -> None:
        for mine, theirs in (
            (self.operations, other.operations),
            (self.loads, other.loads),
            (self.stores, other.stores),
        ):
            for name, count in theirs.items():
                mine[name] += count * times

    @property
    def flops(self) -> int:
        """Additions, subtractions and multiplications; a fused multiply-add counts as two."""
        ops = self.operations
        return ops["+"] + ops["-"] + ops["*"] + 2 * ops["fma"]


def flat(plan: Plan, sizes: Mapping[str, Any]) -> dict[str, int]:
    """The counts of one call as a flat record, with bytes moved and bytes of locals."""
    counts = count(plan, sizes)
    arrays = plan.arrays
    width = {name: REAL_SIZE[one.type] * one.parts for name, one in arrays.items()}
    result = {
        "flops": counts.flops,
        "additions": counts.operations["+"] + counts.operations["-"],
        "multiplications": counts.operations["*"],
        "fused multiply-adds": counts.operations["fma"],
        "conversions": counts.operations["convert"],
    }
    for name in arrays:
        result[f"loads of {name}"] = counts.loads[name]
        result[f"stores of {name}"] = counts.stores[name]
    result["bytes loaded"] = sum(counts.loads[name] * size for name, size in width.items())
    result["bytes stored"] = sum(counts.stores[name] * size for name, size in width.items())
    result["bytes of locals"] = locals_size(plan)
    return result


def count(plan: Plan, sizes: Mapping[str, Any]) -> Counts:
    """The counts of one call with these sizes (``n``, ``ld``, strides, profile ...)."""
    env = plan.spec.layout.environment(sizes)
    for name in ("incx", "incy"):
        env.setdefault(name, 1)
    counter = _Counter({one.name: one for one in plan.routine.functions})
    total = Counts()
    counter.run(plan.routine.body, env, total)
    return total


def locals_size(plan: Plan) -> int:
    """Bytes of all numbers and integers that are alive at once, as if none shared a register."""
    return _deepest(plan.routine.body)


def _deepest(body: tuple[Statement, ...]) -> int:
    here, inside = 0, 0
    for one in body:
        if isinstance(one, Declare):
            here += REAL_SIZE[real_of(one.type)] * lanes_of(one.type)
        elif isinstance(one, Integer):
            here += 8
        elif isinstance(one, Call):
            here += len(one.targets) * REAL_SIZE[real_of(one.type)]
        elif isinstance(one, For):
            inside = max(inside, 8 + _deepest(one.body))
        elif isinstance(one, If):
            inside = max(inside, _deepest(one.then), _deepest(one.otherwise))
    return here + inside


class _Done(Exception):  # noqa: N818 - no error
    """The routine has ended."""


class _Counter:
    def __init__(self, functions: Mapping[str, Function]) -> None:
        self.functions = functions
        self._flat_loops: dict[int, Counts | None] = {}
        self._statements: dict[int, Counts] = {}

    def run(self, body: tuple[Statement, ...], env: dict[str, Any], total: Counts) -> None:
        with suppress(_Done):
            self._block(body, env, total)

    def _block(self, body: tuple[Statement, ...], env: dict[str, Any], total: Counts) -> None:
        for one in body:
            self._statement(one, env, total)

    def _statement(self, one: Statement, env: dict[str, Any], total: Counts) -> None:
        if isinstance(one, Integer):
            env[one.name] = one.value.value(env)
        elif isinstance(one, For):
            self._loop(one, env, total)
        elif isinstance(one, If):
            block = one.then if self._holds(one.condition, env) else one.otherwise
            self._block(block, env, total)
        elif isinstance(one, Reject):
            pass
        elif isinstance(one, Finish):
            raise _Done
        else:
            total.add(self._counted(one, env))

    def _holds(self, condition: Compare | Equals, env: Mapping[str, Any]) -> bool:
        if isinstance(condition, Compare):
            return condition.holds(env)
        return condition.negated  # a scalar that is passed counts as neither 0 nor 1

    def _loop(self, one: For, env: dict[str, Any], total: Counts) -> None:
        low, high = one.low.value(env), one.high.value(env)
        passes = range(low, high, one.step)
        if id(one) not in self._flat_loops:
            flat = all(
                not isinstance(inner, For | If | Finish) and not _varies(inner)
                for inner in walk(one.body)
            )
            body = Counts() if flat else None
            if body is not None:
                for inner in one.body:
                    if not isinstance(inner, Integer):
                        body.add(self._counted(inner, env))
            self._flat_loops[id(one)] = body
        known = self._flat_loops[id(one)]
        if known is not None:
            total.add(known, len(passes))
            return
        for value in passes:
            env[one.variable] = value
            self._block(one.body, env, total)

    def _counted(self, one: Statement, env: Mapping[str, Any]) -> Counts:
        if _varies(one):
            return self._flat(one, env)
        if id(one) not in self._statements:
            self._statements[id(one)] = self._flat(one, env)
        return self._statements[id(one)]

    def _flat(self, one: Statement, env: Mapping[str, Any]) -> Counts:
        result = Counts()
        for value in values(one):
            for leaf in leaves(value):
                lanes = lanes_of(leaf.type)
                if isinstance(leaf, Load):
                    if leaf.part != 1:  # both parts of a complex element are one load
                        result.loads[leaf.array] += _elements(leaf, env)
                elif isinstance(leaf, Binary):
                    result.operations[leaf.operator] += lanes
                elif isinstance(leaf, Fma):
                    result.operations["fma"] += lanes
                elif isinstance(leaf, Negate):
                    result.operations["negate"] += lanes
                elif isinstance(leaf, Convert):
                    result.operations["convert"] += lanes
                elif isinstance(leaf, Fold):
                    result.operations["+"] += sum(lanes_of(p.type) - 1 for p in leaf.operands)
        if isinstance(one, Store):
            result.stores[one.array] += _elements(one, env)
        if isinstance(one, Call):
            for inner in self.functions[one.function].body:
                if isinstance(inner, Declare | Assign):
                    result.add(self._flat(inner, env))
        return result


def _places(one: Statement) -> Iterator[Load | Store]:
    """What the statement loads and stores."""
    if isinstance(one, Store):
        yield one
    for value in values(one):
        yield from (leaf for leaf in leaves(value) if isinstance(leaf, Load))


def _varies(one: Statement) -> bool:
    """Whether the number of lanes that are loaded or stored depends on integers."""
    return any(end.constant is None for place in _places(one) for end in place.active or ())


def _elements(one: Load | Store, env: Mapping[str, Any]) -> int:
    """The elements that are loaded or stored."""
    if one.active is None:
        return lanes_of(one.type)
    return max(0, one.active[1].value(env) - one.active[0].value(env))


def polynomial(points: Mapping[int, int]) -> tuple[Fraction, Fraction, Fraction] | None:
    """c2, c1, c0 with c2*n^2 + c1*n + c0 at every point, if there are such numbers.

    The first three points decide, the others must agree.
    """
    (n1, v1), (n2, v2), (n3, v3), *rest = points.items()
    d1 = Fraction(v2 - v1, n2 - n1)
    d2 = (Fraction(v3 - v2, n3 - n2) - d1) / (n3 - n1)
    c2 = d2
    c1 = d1 - d2 * (n1 + n2)
    c0 = v1 - c1 * n1 - c2 * n1 * n1
    if any(c2 * n * n + c1 * n + c0 != value for n, value in rest):
        return None
    return c2, c1, c0
