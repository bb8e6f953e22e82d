"""Faults in the storage: the wrong triangle, place or diagonal."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import replace

from demilune.bench.faults.base import (
    ANY,
    OUTSIDE,
    fault,
    from_spec,
    is_inner,
    is_strips,
    moved,
    with_body,
    with_integer,
)
from demilune.index import symbol
from demilune.plan.build import Plan
from demilune.plan.rewrite import Statements
from demilune.plan.tree import (
    Assign,
    Binary,
    Declare,
    For,
    Load,
    Local,
    Statement,
    Store,
    leaves,
    values,
    walk,
)


@fault("the other triangle is used", OUTSIDE)
def wrong_triangle(plan: Plan) -> Plan:
    layout = plan.spec.layout
    other = "lower" if layout.triangle == "upper" else "upper"
    return from_spec(plan, replace(plan.spec, layout=replace(layout, triangle=other)))


@fault("rows and columns of the storage are exchanged", OUTSIDE)
def wrong_order(plan: Plan) -> Plan:
    layout = plan.spec.layout
    if len(layout.orders) == 1:
        return plan
    other = "row-major" if layout.order == "column-major" else "column-major"
    return from_spec(plan, replace(plan.spec, layout=replace(layout, order=other)))


@fault("the leading dimension is one too large", OUTSIDE)
def leading_dimension_plus_one(plan: Plan) -> Plan:
    return with_integer(plan, "ld", symbol("ld") + 1)


@fault("the leading dimension is one too small", OUTSIDE)
def leading_dimension_minus_one(plan: Plan) -> Plan:
    return with_integer(plan, "ld", symbol("ld") - 1)


@fault("the leading dimension is taken to be n", OUTSIDE)
def leading_dimension_ignored(plan: Plan) -> Plan:
    band = hasattr(plan.spec.layout, "kd")
    return plan if band else with_integer(plan, "ld", plan.spec.layout.size)


@fault("the half-bandwidth is one too large", OUTSIDE)
def bandwidth_plus_one(plan: Plan) -> Plan:
    return with_integer(plan, "kd", symbol("kd") + 1)


@fault("every element is read one place too late", OUTSIDE)
def matrix_shifted(plan: Plan) -> Plan:
    return moved(plan, "a", lambda index: index + 1)


@fault("every element is read one place too early", OUTSIDE)
def matrix_shifted_back(plan: Plan) -> Plan:
    return moved(plan, "a", lambda index: index - 1)


def _diagonal_statements(plan: Plan, change: Callable[[Statement], Statements]) -> Plan:
    """Changes the statements outside the loops over elements that add up something of ``a``."""

    def outside(body: Statements, strips: bool) -> Statements:
        result: list[Statement] = []
        bound: set[str] = set()
        for one in body:
            if isinstance(one, For):
                deeper = strips or is_strips(one)
                inner = one if is_inner(one) else replace(one, body=outside(one.body, deeper))
                result.append(inner)
                continue
            names = {
                leaf.name for v in values(one) for leaf in leaves(v) if isinstance(leaf, Local)
            }
            loads = any(
                isinstance(leaf, Load) and leaf.array == "a"
                for v in values(one)
                for leaf in leaves(v)
            )
            if isinstance(one, Declare) and loads:
                bound.add(one.name)
                result.append(one)
            elif isinstance(one, Assign | Store) and (loads or names & bound) and strips:
                result.extend(change(one))
            else:
                result.append(one)
        return tuple(result)

    return with_body(plan, outside(plan.routine.body, False))


@fault("the diagonal is never used", ANY)
def diagonal_never(plan: Plan) -> Plan:
    if plan.spec.arithmetic.compensated:
        return plan
    return _diagonal_statements(plan, lambda one: ())


@fault("the diagonal counts twice", ANY)
def diagonal_twice(plan: Plan) -> Plan:
    if plan.spec.arithmetic.compensated:
        return plan
    return _diagonal_statements(plan, lambda one: (one, one))


@fault("the imaginary part of a Hermitian diagonal is read", OUTSIDE)
def diagonal_imaginary_read(plan: Plan) -> Plan:
    def read(one: Statement) -> Statements:
        if not isinstance(one, Assign):
            return (one,)
        found = [v for v in leaves(one.value) if isinstance(v, Load) and v.array == "a"]
        if not found:
            return (one,)
        return (
            replace(one, value=Binary("+", one.value, replace(found[0], part=1), one.value.type)),
        )

    if not plan.spec.layout.hermitian or plan.spec.arithmetic.sums != plan.spec.arithmetic.real:
        return plan
    return _diagonal_statements(plan, _bound_reads(plan, read))


def _bound_reads(
    plan: Plan, read: Callable[[Statement], Statements]
) -> Callable[[Statement], Statements]:
    """``read`` for statements whose diagonal element was bound to a local first."""
    bound = {
        one.name: one.value
        for one in walk(plan.routine.body)
        if isinstance(one, Declare) and isinstance(one.value, Load) and one.value.array == "a"
    }

    def change(one: Statement) -> Statements:
        if isinstance(one, Assign):
            for leaf in leaves(one.value):
                if isinstance(leaf, Local) and leaf.name.startswith("akk") and leaf.name in bound:
                    extra = replace(bound[leaf.name], part=1)
                    return (replace(one, value=Binary("+", one.value, extra, one.value.type)),)
        return read(one)

    return change
