"""Faults in bounds: too short, too long, at one size alone."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import replace

from demilune.bench.faults.base import (
    ANY,
    OUTSIDE,
    fault,
    is_inner,
    is_strips,
    rewritten,
)
from demilune.index import Compare, choice, expr, symbol
from demilune.plan.build import Plan
from demilune.plan.rewrite import Statements
from demilune.plan.tree import (
    For,
    Statement,
)


def _bounds(plan: Plan, which: Callable[[Statement], bool], low: int, high: int) -> Plan:
    """The plan with the bounds of some loops moved."""

    def move(one: Statement) -> Statements:
        if isinstance(one, For) and which(one):
            step = one.step
            return (replace(one, low=one.low + low * step, high=one.high + high * step),)
        return (one,)

    return rewritten(plan, statement=move)


@fault("loops over elements begin one late", ANY)
def inner_loop_short_at_start(plan: Plan) -> Plan:
    return _bounds(plan, is_inner, 1, 0)


@fault("loops over elements end one early", ANY)
def inner_loop_short_at_end(plan: Plan) -> Plan:
    return _bounds(plan, is_inner, 0, -1)


@fault("loops over elements begin one early", OUTSIDE)
def inner_loop_long_at_start(plan: Plan) -> Plan:
    return _bounds(plan, is_inner, -1, 0)


@fault("loops over elements end one late", OUTSIDE)
def inner_loop_long_at_end(plan: Plan) -> Plan:
    return _bounds(plan, is_inner, 0, 1)


@fault("the first strip is left out", ANY)
def first_strip_left_out(plan: Plan) -> Plan:
    return _bounds(plan, is_strips, 1, 0)


@fault("the last strip is left out", ANY)
def last_strip_left_out(plan: Plan) -> Plan:
    return _bounds(plan, is_strips, 0, -1)


@fault("one strip too many at the end", OUTSIDE)
def one_strip_too_many(plan: Plan) -> Plan:
    return _bounds(plan, is_strips, 0, 1)


@fault("loops over elements stop at index 14: a fault at larger sizes only", ANY)
def long_strips_cut(plan: Plan) -> Plan:
    def cut(one: Statement) -> Statements:
        if isinstance(one, For) and is_inner(one):
            late = Compare(expr(14), "<", one.high)
            return (replace(one, high=choice(late, 14, one.high)),)
        return (one,)

    return plan if isinstance(plan.spec.layout.n, int) else rewritten(plan, statement=cut)


@fault("the result is wrong for one size alone, n = 5", ANY)
def wrong_at_one_size(plan: Plan) -> Plan:
    def skip(one: Statement) -> Statements:
        if isinstance(one, For) and is_strips(one):
            at = Compare(symbol("n"), "==", expr(5))
            return (replace(one, high=choice(at, one.high - one.step, one.high)),)
        return (one,)

    return rewritten(plan, statement=skip) if plan.spec.layout.n == "runtime" else plan


@fault("strips that are left over after the blocks are dropped", ANY)
def left_over_dropped(plan: Plan) -> Plan:
    def drop(one: Statement) -> Statements:
        return () if isinstance(one, For) and is_strips(one) and one.step == 1 else (one,)

    return rewritten(plan, statement=drop) if plan.spec.schedule.block > 1 else plan


@fault("strips that are left over are dropped where n is at least 16", ANY)
def left_over_dropped_when_large(plan: Plan) -> Plan:
    def drop(one: Statement) -> Statements:
        if isinstance(one, For) and is_strips(one) and one.step == 1:
            large = Compare(expr(16), "<=", symbol("n"))
            return (replace(one, high=choice(large, one.low, one.high)),)
        return (one,)

    blocks = plan.spec.schedule.block > 1 and plan.spec.layout.n == "runtime"
    return rewritten(plan, statement=drop) if blocks else plan
