"""Faults in conjugation, scalars and strides."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import replace

from demilune.bench.faults.base import (
    ANY,
    OUTSIDE,
    fault,
    rewritten,
    with_body,
    with_integer,
)
from demilune.index import Compare, expr, symbol
from demilune.plan.build import Plan, make_plan
from demilune.plan.rewrite import Statements
from demilune.plan.tree import (
    Binary,
    Convert,
    Equals,
    If,
    Integer,
    Load,
    Local,
    Negate,
    Statement,
    Value,
)


@fault("nothing is conjugated", ANY)
def conjugation_missing(plan: Plan) -> Plan:
    layout = plan.spec.layout
    if not layout.hermitian:
        return plan
    spec = replace(plan.spec, layout=replace(layout, structure="symmetric"))
    changed = make_plan(spec)
    same = [p.name for p in changed.parameters] == [p.name for p in plan.parameters]
    one_part = plan.spec.operation.result != "y"
    return plan if not same or one_part else with_body(plan, changed.routine.body)


@fault("the other factor is conjugated", ANY)
def conjugation_on_the_wrong_side(plan: Plan) -> Plan:
    if not plan.spec.layout.hermitian:
        return plan
    layout = plan.spec.layout
    if len(layout.orders) == 1 or plan.spec.operation.result == "a":
        return _imaginary_sign(plan, "x")
    return _imaginary_sign(plan, "a")


@fault("x is conjugated", ANY)
def conjugation_too_much(plan: Plan) -> Plan:
    return _imaginary_sign(plan, "x")


def _imaginary_sign(plan: Plan, array: str) -> Plan:
    def value(one: Value) -> Value:
        if isinstance(one, Load) and one.array == array and one.part == 1:
            return Negate(one, one.type)
        return one

    return rewritten(plan, value=value)


def _scalar_locals(name: str) -> set[str]:
    return {name, f"{name}_re", f"{name}_im"}


def _products(plan: Plan, name: str, change: Callable[[Binary], Value]) -> Plan:
    """Changes products that have the scalar ``name`` as their left factor."""

    def value(one: Value) -> Value:
        if isinstance(one, Binary) and one.operator == "*":
            left = one.left.operand if isinstance(one.left, Convert) else one.left
            if isinstance(left, Local) and left.name in _scalar_locals(name):
                return change(one)
        return one

    return rewritten(plan, value=value)


@fault("alpha is applied twice", ANY)
def alpha_twice(plan: Plan) -> Plan:
    return _products(plan, "alpha", lambda one: Binary("*", one.left, one, one.type))


@fault("alpha is ignored", ANY)
def alpha_ignored(plan: Plan) -> Plan:
    return _products(plan, "alpha", lambda one: one.right)


@fault("beta is ignored", ANY)
def beta_ignored(plan: Plan) -> Plan:
    return _products(plan, "beta", lambda one: one.right)


@fault("beta is applied twice", ANY)
def beta_twice(plan: Plan) -> Plan:
    return _products(plan, "beta", lambda one: Binary("*", one.left, one, one.type))


def _without_test(plan: Plan, name: str, number: float, taken: bool) -> Plan:
    """The plan without the tests of a scalar for a number; ``taken`` keeps their then-part."""

    def statement(one: Statement) -> Statements:
        if isinstance(one, If) and isinstance(one.condition, Equals):
            first, wanted = one.condition.values[0], one.condition.numbers[0]
            first = first.operand if isinstance(first, Convert) else first
            if isinstance(first, Local) and first.name in _scalar_locals(name) and wanted == number:
                kept = one.then if taken else one.otherwise
                # In a block of its own, where its names clash with no other.
                return (If(Compare(expr(0), "==", expr(0)), kept),) if kept else ()
        return (one,)

    return rewritten(plan, statement=statement)


@fault("beta = 0 is done as 0*y", ("exact", "faithful", "untouched", "calling"))
def beta_zero_multiplied(plan: Plan) -> Plan:
    return _without_test(plan, "beta", 0, False) if not plan.spec.arithmetic.type.integer else plan


@fault("beta is always taken to be 0", ANY)
def beta_always_zero(plan: Plan) -> Plan:
    return _without_test(plan, "beta", 0, True)


@fault("alpha = 0 still reads A and x", ("untouched", "calling"))
def alpha_zero_reads(plan: Plan) -> Plan:
    return _without_test(plan, "alpha", 0, False) if not plan.spec.arithmetic.type.integer else plan


@fault("the stride of x is ignored", OUTSIDE)
def stride_of_x_ignored(plan: Plan) -> Plan:
    return with_integer(plan, "incx", expr(1))


@fault("the stride of y is ignored", OUTSIDE)
def stride_of_y_ignored(plan: Plan) -> Plan:
    return with_integer(plan, "incy", expr(1))


@fault("a negative stride does not begin at the far end", OUTSIDE)
def stride_sign_ignored(plan: Plan) -> Plan:
    def statement(one: Statement) -> Statements:
        if isinstance(one, Integer) and one.name.startswith("start_"):
            return (replace(one, value=expr(0)),)
        return (one,)

    return rewritten(plan, statement=statement)


@fault("the strides of x and y are swapped", OUTSIDE)
def strides_swapped(plan: Plan) -> Plan:
    names = {one.name for one in plan.parameters}
    if not {"incx", "incy"} <= names:
        return plan
    swap = {"incx": symbol("incy"), "incy": symbol("incx")}
    return rewritten(plan, integer=lambda one: one.substitute(swap))
