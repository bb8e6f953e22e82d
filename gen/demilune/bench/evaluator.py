"""Foretells every bit of a kernel from its plan, without templates and without a compiler.

The evaluator turns the tree of a plan into calls of numpy, element by element, with one lane for
each case: many inputs are worked on at a time, each with the arithmetic that IEEE 754 prescribes
for its type. A fused multiply-add is rounded once, whatever Python or numpy offer.
"""

from __future__ import annotations

from collections.abc import Callable, Mapping
from fractions import Fraction
from typing import Any

import numpy as np
import numpy.typing as npt

from demilune.dtypes import lanes_of, real_of
from demilune.index import Choice, Compare, Element, Expr, Extreme, Quotient, Symbol, expr
from demilune.plan.build import Plan
from demilune.plan.tree import (
    Assign,
    Binary,
    Broadcast,
    Call,
    Comment,
    Constant,
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
    Local,
    Negate,
    Pack,
    Reject,
    Statement,
    Store,
    Value,
    Where,
)
from demilune.plan.writer import PARTS

Lanes = npt.NDArray[Any]


def fused(left: Any, right: Any, addend: Any) -> Any:
    """left * right + addend with one rounding, lane by lane."""
    left, right, addend = np.broadcast_arrays(left, right, addend)
    with np.errstate(all="ignore"):
        if left.dtype == np.float32:
            return _fused32(left, right, addend)
        return _fused64_all(left, right, addend)


def _fused32(left: Lanes, right: Lanes, addend: Lanes) -> Lanes:
    # The product is exact in binary64. The sum is rounded to odd there, so that rounding it to
    # binary32 gives what one rounding would have given (Boldo, Melquiond, 2008).
    product, c = left.astype(np.float64) * right, addend.astype(np.float64)
    near = product + c
    back = near - product
    error = (product - (near - back)) + (c - back)
    bits = near.view(np.int64).copy()
    inexact = np.isfinite(near) & (error != 0) & (bits & 1 == 0)
    bits[inexact] += np.where((error > 0) == (near > 0), 1, -1)[inexact]
    return bits.view(np.float64).astype(np.float32)


def _two_sum(a: Lanes, b: Lanes) -> tuple[Lanes, Lanes]:
    """The rounded sum and its error (Knuth)."""
    s = a + b
    back = s - a
    return s, (a - (s - back)) + (b - back)


def _two_product(a: Lanes, b: Lanes) -> tuple[Lanes, Lanes]:
    """The rounded product and its error (Dekker, with Veltkamp's split)."""
    product = a * b

    def split(value: Lanes) -> tuple[Lanes, Lanes]:
        scaled = value * 134217729.0
        high = scaled - (scaled - value)
        return high, value - high

    (ah, al), (bh, bl) = split(a), split(b)
    return product, al * bl - (((product - ah * bh) - al * bh) - ah * bl)


def _fused64_all(left: Lanes, right: Lanes, addend: Lanes) -> Lanes:
    # Boldo, Melquiond, "Emulation of a FMA and Correctly Rounded Sums", IEEE Transactions on
    # Computers 57(4), 2008: the parts are added with the last but one sum rounded to odd. Where
    # an exponent is too large or too small for that, whole numbers decide.
    high, low = _two_product(left, right)
    near, far = _two_sum(addend, low)
    top, rest = _two_sum(high, near)
    odd, error = _two_sum(rest, far)
    bits = odd.view(np.int64).copy()
    inexact = (error != 0) & (bits & 1 == 0)
    bits[inexact] += np.where((error > 0) == (odd > 0), 1, -1)[inexact]
    result = np.asarray(top + bits.view(np.float64))
    sizes = np.abs(np.stack([left, right, high, addend]))
    safe = ((sizes > 2.0**-400) & (sizes < 2.0**400)).all(axis=0) & (np.abs(result) > 2.0**-400)
    for place in np.argwhere(~safe):
        here = tuple(place)
        result[here] = _fused64(left[here], right[here], addend[here])
    return result


def _fused64(left: float, right: float, addend: float) -> float:
    left, right, addend = float(left), float(right), float(addend)
    if not np.isfinite(left) or not np.isfinite(right):
        return left * right + addend
    if not np.isfinite(addend):
        return addend
    exact = Fraction(left) * Fraction(right) + Fraction(addend)
    if exact == 0:
        return left * right + addend
    try:
        return float(exact)
    except OverflowError:
        return float("inf") if exact > 0 else float("-inf")


def take(
    array: Lanes, lanes: int, index: int, stride: int, low: int, high: int, part: int
) -> Lanes:
    """Neighbouring elements, a lane each; 0 in the lanes before ``low`` and from ``high`` on."""
    result = np.zeros((lanes, array.shape[2]), array.dtype)
    for lane in range(low, high):
        result[lane] = array[index + lane * stride, part]
    return result


def put(
    array: Lanes, lanes: int, index: int, stride: int, low: int, high: int, part: int, value: Lanes
) -> None:
    """Writes lanes to neighbouring elements."""
    value = _spread(lanes, value)
    for lane in range(low, high):
        array[index + lane * stride, part] = value[lane]


def _spread(lanes: int, value: Lanes) -> Lanes:
    """A value with an axis of lanes, which one number in all of them does not have yet."""
    value = np.asarray(value)
    return value if value.ndim == 2 else np.broadcast_to(value, (lanes, *(value.shape or (1,))))


def fold(lanes: int, value: Lanes) -> Lanes:
    """The sum over the lanes, by halves."""
    value = _spread(lanes, value)
    while len(value) > 1:
        half = len(value) // 2
        value = value[:half] + value[half:]
    return np.asarray(value[0])


def where(lanes: int, low: int, high: int, value: Lanes, otherwise: Lanes) -> Lanes:
    """``value`` in the lanes from ``low`` to before ``high``, else ``otherwise``."""
    result = np.array(np.broadcast_arrays(_spread(lanes, otherwise), _spread(lanes, value))[0])
    result[low:high] = _spread(lanes, value)[low:high]
    return result


def pack(lanes: int, values: tuple[Lanes, ...]) -> Lanes:
    """One value a lane, and 0 in those that are left."""
    given = np.stack(np.broadcast_arrays(*(np.atleast_1d(one) for one in values)))
    rest = np.zeros((lanes - len(given), *given.shape[1:]), given.dtype)
    return np.concatenate([given, rest])


class Evaluator:
    """The arithmetic of one plan, ready to run.

    Arrays are passed as numpy arrays of the real type with the axes element, part and lane; they
    are changed in place. Scalars are tuples of real numbers, one for each part.
    """

    def __init__(self, plan: Plan) -> None:
        self.plan = plan
        self._lines: list[str] = []
        self._functions = {one.name: one for one in plan.routine.functions}
        for one in plan.routine.functions:
            self._function(one)
        names = []
        for parameter in plan.parameters:
            scalar = parameter.kind == "scalar" and parameter.complex
            names += [parameter.name + p for p in PARTS] if scalar else [parameter.name]
        self._lines.append(f"def routine({', '.join(names)}):")
        self._block(plan.routine.body, 1)
        self._lines.append("    return None")
        space: dict[str, Any] = {
            "np": np,
            "fused": fused,
            "take": take,
            "put": put,
            "fold": fold,
            "pack": pack,
            "where": where,
        }
        code = compile("\n".join(self._lines), f"<evaluator of {plan.spec.name}>", "exec")
        exec(code, space)  # noqa: S102 - the text was made just above, from the plan alone
        self._routine: Callable[..., str | None] = space["routine"]

    def run(
        self,
        sizes: Mapping[str, Any],
        scalars: Mapping[str, tuple[float | int, ...]],
        arrays: Mapping[str, Lanes],
    ) -> str | None:
        """Runs the plan; gives the name of the argument that is refused, or None."""
        arguments: list[Any] = []
        for one in self.plan.parameters:
            if one.kind in ("size", "places"):
                arguments.append(sizes[one.name])
            elif one.kind == "scalar":
                real = np.dtype(one.type).type
                arguments.extend(real(part) for part in scalars[one.name])
            else:
                arguments.append(arrays[one.name])
        with np.errstate(all="ignore"):
            return self._routine(*arguments)

    # --- statements ------------------------------------------------------------------------

    def _write(self, depth: int, text: str) -> None:
        self._lines.append("    " * depth + text)

    def _function(self, one: Function) -> None:
        self._write(0, f"def call_{one.name}({', '.join(one.arguments)}):")
        self._block(one.body, 1)
        self._write(1, f"return {', '.join(one.results)}")

    def _block(self, body: tuple[Statement, ...], depth: int) -> None:
        for one in body:
            self._statement(one, depth)
        if all(isinstance(one, Comment) for one in body):
            self._write(depth, "pass")

    def _statement(self, one: Statement, depth: int) -> None:
        if isinstance(one, Integer):
            self._write(depth, f"{one.name} = {_integer(one.value)}")
        elif isinstance(one, Declare | Assign):
            copy = ".copy()" if isinstance(one.value, Load) else ""
            self._write(depth, f"{one.name} = {_value(one.value)}{copy}")
        elif isinstance(one, Store):
            for part, value in enumerate(one.number):
                self._write(depth, f"part{part} = {_value(value)}")
            for part in range(len(one.number)):
                if lanes_of(one.type) > 1:
                    self._write(depth, f"put({_places(one)}, {part}, part{part})")
                    continue
                place = f"{one.array}[{_integer(one.index)}, {part}]"
                self._write(depth, f"{place} = part{part}")
        elif isinstance(one, Call):
            arguments = ", ".join(_value(value) for value in one.arguments)
            self._write(depth, f"{', '.join(one.targets)} = call_{one.function}({arguments})")
        elif isinstance(one, For):
            low, high = _integer(one.low), _integer(one.high)
            values = f"range({low}, {high}, {one.step})"
            if one.backward:
                values = f"reversed({values})"
            self._write(depth, f"for {one.variable} in {values}:")
            self._block(one.body, depth + 1)
        elif isinstance(one, If):
            self._write(depth, f"if {_condition(one.condition)}:")
            self._block(one.then, depth + 1)
            if one.otherwise:
                self._write(depth, "else:")
                self._block(one.otherwise, depth + 1)
        elif isinstance(one, Reject):
            self._write(depth, f"if {_condition(one.condition)}:")
            self._write(depth + 1, f"return {one.argument!r}")
        elif isinstance(one, Finish):
            self._write(depth, "return None")


def _value(value: Value) -> str:
    if isinstance(value, Local):
        return value.name
    if isinstance(value, Constant):
        return f"np.{value.type}({value.value!r})"
    if isinstance(value, Load) and lanes_of(value.type) > 1:
        return f"take({_places(value)}, {value.part or 0})"
    if isinstance(value, Where):
        ends = f"{_integer(value.active[0])}, {_integer(value.active[1])}"
        both = f"{_value(value.value)}, {_value(value.otherwise)}"
        return f"where({lanes_of(value.type)}, {ends}, {both})"
    if isinstance(value, Broadcast):
        return _value(value.operand)
    if isinstance(value, Pack):
        operands = "".join(f"{_value(one)}, " for one in value.operands)
        return f"pack({lanes_of(value.type)}, ({operands}))"
    if isinstance(value, Fold):
        lanes = lanes_of(value.operands[0].type)
        sums = "".join(f"fold({lanes}, {_value(one)}), " for one in value.operands)
        if lanes_of(value.type) == 1:
            return f"({sums})[0]"
        return f"pack({lanes_of(value.type)}, ({sums}))"
    if isinstance(value, Load):
        return f"{value.array}[{_integer(value.index)}, {value.part or 0}]"
    if isinstance(value, Binary):
        return f"({_value(value.left)} {value.operator} {_value(value.right)})"
    if isinstance(value, Negate):
        return f"(-{_value(value.operand)})"
    if isinstance(value, Fma):
        return f"fused({_value(value.left)}, {_value(value.right)}, {_value(value.addend)})"
    assert isinstance(value, Convert)
    return f"{_value(value.operand)}.astype(np.{real_of(value.type)})"


def _places(one: Load | Store) -> str:
    lanes = lanes_of(one.type)
    low, high = one.active or (expr(0), expr(lanes))
    parts = (_integer(one.index), _integer(one.stride), _integer(low), _integer(high))
    return f"{one.array}, {lanes}, {', '.join(parts)}"


def _condition(condition: Compare | Equals) -> str:
    if isinstance(condition, Compare):
        left, right = _integer(condition.left), _integer(condition.right)
        return f"{left} {condition.relation} {right}"
    pairs = zip(condition.values, condition.numbers, strict=True)
    text = " and ".join(f"{_value(value)} == {number!r}" for value, number in pairs)
    return f"not ({text})" if condition.negated else text


def _integer(value: Expr) -> str:
    terms = [
        "*".join([str(factor), *(_atom(atom) for atom in monomial)])
        for monomial, factor in value.terms
    ]
    return f"({' + '.join(terms) or '0'})"


def _atom(atom: Symbol | Quotient | Extreme | Element | Choice) -> str:
    if isinstance(atom, Symbol):
        return atom.name
    if isinstance(atom, Quotient):
        return f"({'*'.join(_integer(one) for one in atom.factors)} // {atom.divisor})"
    if isinstance(atom, Extreme):
        items = ", ".join(_integer(one) for one in atom.items)
        return f"{'min' if atom.least else 'max'}({items})"
    if isinstance(atom, Element):
        return f"int({atom.array}[{_integer(atom.index)}])"
    then, otherwise = _integer(atom.then), _integer(atom.otherwise)
    return f"({then} if {_condition(atom.condition)} else {otherwise})"
