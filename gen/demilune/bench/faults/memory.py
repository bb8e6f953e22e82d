"""Faults in memory: reads and writes where nothing may be touched."""

from __future__ import annotations

from dataclasses import replace

from demilune.bench.faults.base import (
    OUTSIDE,
    fault,
)
from demilune.index import Compare, Expr, expr
from demilune.layouts import Piece
from demilune.plan.build import Plan
from demilune.plan.rewrite import Statements
from demilune.plan.tree import (
    Binary,
    Constant,
    Declare,
    If,
    Load,
    Local,
    Number,
    Parameter,
    Reject,
    Statement,
    Store,
)


def unused_place(plan: Plan) -> Expr:
    """The place just after the array."""
    extent = plan.arrays["a"].extent
    assert extent is not None
    return extent


def _at_end(plan: Plan, store: Store) -> Plan:
    """The plan with a store before the end, for n > 0 only, into an array made writable."""
    parameters = tuple(
        replace(one, use="inout") if one.name == store.array and one.use == "in" else one
        for one in plan.parameters
    )
    size = plan.spec.layout.size
    last: Statement = store
    if size.constant is None:
        last = If(Compare(expr(0), "<", size), (store,))
    body = (*plan.routine.body, last)
    return replace(plan, routine=replace(plan.routine, body=body, parameters=parameters))


def _zeros(array: Parameter, number: float = 0.0) -> Number:
    exact: float | int = int(number) if array.type.startswith("int") else number
    return (Constant(exact, array.type),) * array.parts


@fault("junk behind the array is multiplied by zero and added", OUTSIDE)
def junk_times_zero(plan: Plan) -> Plan:
    array = plan.arrays.get("y") or plan.arrays.get("s") or plan.arrays["a"]
    result = expr(0)
    number = plan.spec.arithmetic.type
    if number.integer or number.complex:
        return plan
    junk = Load("a", unused_place(plan), number.real)
    zero = Binary("*", Constant(0.0, number.real), junk, number.real)
    value = Binary("+", Load(array.name, result, array.type), zero, number.real)
    return _at_end(plan, Store(array.name, result, (value,), array.type))


@fault("the place behind the result is written", ("exact", "faithful", "untouched", "calling"))
def write_past_the_end(plan: Plan) -> Plan:
    array = plan.arrays.get("y") or plan.arrays.get("s") or plan.arrays["a"]
    assert array.extent is not None
    return _at_end(plan, Store(array.name, array.extent, _zeros(array), array.type))


@fault("the place before the result is written", ("exact", "faithful", "untouched", "calling"))
def write_before_the_start(plan: Plan) -> Plan:
    array = plan.arrays.get("y") or plan.arrays.get("s") or plan.arrays["a"]
    return _at_end(plan, Store(array.name, expr(-1), _zeros(array), array.type))


@fault("the place behind the array is overwritten and restored at the end", ("untouched",))
def write_that_restores(plan: Plan) -> Plan:
    size = plan.spec.layout.size
    return _restoring(plan, unused_place(plan), Compare(expr(0), "<", size))


def _restoring(plan: Plan, place: Expr, when: Compare) -> Plan:
    """The plan with a place of ``a`` overwritten at first and restored at last."""
    array = plan.arrays["a"]
    parts = [part if array.complex else None for part in range(array.parts)]
    names = [f"saved{part or 0}" for part in parts]
    saved = tuple(
        Declare(name, Load("a", place, array.type, part), False)
        for name, part in zip(names, parts, strict=True)
    )
    first = Store("a", place, _zeros(array), array.type)
    last = Store("a", place, tuple(Local(name, array.type) for name in names), array.type)
    changed = _at_end(plan, last)  # makes the array writable
    rejects = [one for one in plan.routine.body if isinstance(one, Reject)]
    rest = plan.routine.body[len(rejects) :]
    body: Statements = (*saved, first, *rest, last)
    if when.known is None:
        body = (If(when, body),)
    return replace(changed, routine=replace(changed.routine, body=(*rejects, *body)))


@fault("the other half is overwritten and restored at the end", ("untouched",))
def other_half_restored(plan: Plan) -> Plan:
    layout = plan.spec.layout
    strip = [one for one in layout.groups()[0].own if isinstance(one, Piece)]
    if layout.name != "full" or not isinstance(layout.n, str):
        return plan
    k, m = (expr(1), expr(0)) if layout.tail else (expr(0), expr(1))
    return _restoring(plan, strip[0].place(k, m), Compare(expr(1), "<", layout.size))


@fault("x is changed", ("exact", "faithful", "untouched", "calling"))
def input_changed(plan: Plan) -> Plan:
    array = plan.arrays["x"]
    return _at_end(plan, Store("x", expr(0), _zeros(array, 3.0), array.type))
