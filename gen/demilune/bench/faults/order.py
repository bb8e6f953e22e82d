"""Faults in the order of arithmetic, the sums and the refusals."""

from __future__ import annotations

from dataclasses import replace

from demilune.bench.faults.base import (
    ANY,
    OUTSIDE,
    fault,
    from_spec,
    is_strips,
    moved,
    rewritten,
    touches_matrix,
    with_body,
)
from demilune.index import Compare, expr
from demilune.plan.build import Plan, make_plan
from demilune.plan.rewrite import Statements
from demilune.plan.tree import (
    Assign,
    Binary,
    Declare,
    Fma,
    For,
    If,
    Local,
    Reject,
    Statement,
    Value,
)


@fault("sums are taken in the other direction", ("faithful",), order=True)
def order_reversed(plan: Plan) -> Plan:
    schedule = plan.spec.schedule
    other = "forward" if schedule.backward else "backward"
    if plan.spec.arithmetic.type.integer or not plan.spec.operation.sums:
        return plan
    spec = replace(plan.spec, schedule=replace(schedule, direction=other))
    return from_spec(plan, spec)


@fault("another loop order is used", ("faithful",), order=True)
def another_loop_order(plan: Plan) -> Plan:
    spec, operation = plan.spec, plan.spec.operation
    others = [loop for loop in operation.loops() if loop != spec.schedule.loop]
    if not others or spec.arithmetic.type.integer or not spec.arithmetic.in_place:
        return plan
    return from_spec(plan, replace(spec, schedule=replace(spec.schedule, loop=others[0])))


@fault("products are contracted into fused multiply-adds", ("faithful",), order=True)
def contracted(plan: Plan) -> Plan:
    arithmetic = plan.spec.arithmetic
    if arithmetic.type.integer or arithmetic.compensated or arithmetic.fma:
        return plan
    if arithmetic.accumulator == "wide" and not plan.spec.operation.sums:
        return plan
    exact_products = arithmetic.accumulator == "wide"
    if exact_products:  # a product of two narrow numbers is exact: contracting changes nothing
        return plan
    spec = replace(plan.spec, arithmetic=replace(arithmetic, fma=True))
    return from_spec(plan, spec)


@fault("fused multiply-adds are rounded twice", ("faithful",), order=True)
def rounded_twice(plan: Plan) -> Plan:
    def value(one: Value) -> Value:
        if isinstance(one, Fma):
            product = Binary("*", one.left, one.right, one.type)
            return Binary("+", product, one.addend, one.type)
        return one

    if plan.spec.arithmetic.accumulator == "wide":
        return plan
    return rewritten(plan, value=value)


@fault("float is promoted to double", ("faithful",), order=True)
def promoted_to_double(plan: Plan) -> Plan:
    arithmetic = plan.spec.arithmetic
    if arithmetic.real != "float32" or arithmetic.accumulator != "plain":
        return plan
    spec = replace(plan.spec, arithmetic=replace(arithmetic, accumulator="wide"))
    changed = make_plan(spec)
    same = [p.name for p in changed.parameters] == [p.name for p in plan.parameters]
    return with_body(plan, changed.routine.body) if same else plan


@fault("errors of the compensated sum are dropped", ("bound", "faithful"), order=True)
def compensation_dropped(plan: Plan) -> Plan:
    def statement(one: Statement) -> Statements:
        dropped = isinstance(one, Assign) and "_err" in one.name
        return () if dropped else (one,)

    return rewritten(plan, statement=statement)


@fault("an accumulator is not reset for the next strip", ANY)
def accumulator_not_reset(plan: Plan) -> Plan:
    def statement(one: Statement) -> Statements:
        if isinstance(one, For) and is_strips(one):
            resets = [
                inner
                for inner in one.body
                if isinstance(inner, Declare) and inner.name.startswith("acc") and inner.changes
            ]
            if resets:
                rest = tuple(inner for inner in one.body if inner not in resets)
                both: Statements = (*resets, replace(one, body=rest))
                return (If(Compare(expr(0), "==", expr(0)), both),)  # a block for its names
        return (one,)

    if plan.spec.schedule.block > 1:  # two loops over strips would declare the names twice
        return plan
    return rewritten(plan, statement=statement)


@fault("the sum of a strip is added to the result with the wrong sign", ANY)
def sum_subtracted(plan: Plan) -> Plan:
    def value(one: Value) -> Value:
        right = isinstance(one, Binary) and one.operator == "+" and isinstance(one.right, Local)
        if right and isinstance(one, Binary) and isinstance(one.right, Local):
            if one.right.name.startswith(("acc", "total")):
                return Binary("-", one.left, one.right, one.type)
        return one

    return rewritten(plan, value=value)


@fault("x is read one element too late", OUTSIDE)
def x_shifted(plan: Plan) -> Plan:
    return moved(plan, "x", lambda index: index + 1)


@fault("nothing is computed", ANY)
def nothing_done(plan: Plan) -> Plan:
    def drop(one: Statement) -> Statements:
        return () if isinstance(one, For) and touches_matrix(one) else (one,)

    return rewritten(plan, statement=drop)


def _without_refusal(plan: Plan, of_n: bool) -> Plan:
    def drop(one: Statement) -> Statements:
        return () if isinstance(one, Reject) and (one.argument == "n") == of_n else (one,)

    return rewritten(plan, statement=drop)


@fault("bad arguments other than n are not refused", ("calling",))
def nothing_refused(plan: Plan) -> Plan:
    return _without_refusal(plan, of_n=False)


@fault("a negative n is not refused", ("calling",))
def negative_n_accepted(plan: Plan) -> Plan:
    return _without_refusal(plan, of_n=True)
