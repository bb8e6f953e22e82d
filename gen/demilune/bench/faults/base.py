"""What a planted fault is, and how the tree of a plan is changed."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, replace

import numpy as np

from demilune.bench.evaluator import Evaluator
from demilune.bench.problem import all_magnitudes, draw_setting, make_problem, sizes_to_try
from demilune.bench.run import foretell
from demilune.index import Expr
from demilune.plan.build import Plan, make_plan
from demilune.plan.rewrite import Rewriter, Statements
from demilune.plan.tree import (
    For,
    Load,
    Statement,
    Store,
    Value,
    leaves,
    values,
    walk,
)
from demilune.spec import Spec

Change = Callable[[Plan], Plan]


@dataclass(frozen=True)
class Fault:
    """A planted fault: its name, what it is, and the levels of which one should catch it."""

    name: str
    meaning: str
    levels: tuple[str, ...]
    change: Change
    order: bool = False
    """Whether it changes nothing but the order or rounding of sums, so that for some kernels it
    may change nothing at all."""

    def apply(self, plan: Plan) -> Plan | None:
        """The plan with the fault, or None if it does not apply to it."""
        changed = self.change(plan)
        if changed.routine.body == plan.routine.body:
            return None
        return None if self.order and equivalent(plan, changed) else changed


FAULTS: dict[str, Fault] = {}
ANY = ("exact", "faithful")
OUTSIDE = ("exact", "faithful", "untouched", "calling")


def fault(
    meaning: str, levels: tuple[str, ...] = ANY, order: bool = False
) -> Callable[[Change], Change]:
    """Enters a change into the catalogue under the name of its function."""

    def enter(change: Change) -> Change:
        name = change.__name__.strip("_")
        FAULTS[name] = Fault(name, meaning, levels, change, order)
        return change

    return enter


def equivalent(plan: Plan, changed: Plan) -> bool:
    """Whether two plans give the same bits on many inputs of their own, not those of the bench."""
    generator = np.random.default_rng([2, 7, 1, 8])
    evaluators = Evaluator(plan), Evaluator(changed)
    for n in sizes_to_try(plan)[-3:]:
        setting = draw_setting(plan, n, generator, (0.7, -1.9, 3.3))
        problem = make_problem(
            plan, setting, all_magnitudes(plan.spec.arithmetic.real), generator, 70
        )
        first, second = (foretell(evaluator, problem) for evaluator in evaluators)
        for name, found in first.items():
            results = problem.writable[name]
            if found[results].tobytes() != second[name][results].tobytes():
                return False
    return True


def with_body(plan: Plan, body: Statements) -> Plan:
    return replace(plan, routine=replace(plan.routine, body=body))


def rewritten(
    plan: Plan,
    *,
    statement: Callable[[Statement], Statements] = lambda one: (one,),
    value: Callable[[Value], Value] = lambda one: one,
    integer: Callable[[Expr], Expr] = lambda one: one,
) -> Plan:
    return with_body(plan, Rewriter(statement, value, integer).body(plan.routine.body))


def from_spec(plan: Plan, spec: Spec) -> Plan:
    """The plan of another specification with the parameters of this one."""
    other = make_plan(spec)
    return with_body(plan, other.routine.body)


def touches_matrix(statement: Statement) -> bool:
    """Whether a statement, or one inside it, touches the matrix."""
    found = list(walk((statement,)))
    loads = [leaf for one in found for v in values(one) for leaf in leaves(v)]
    stores = any(isinstance(one, Store) and one.array == "a" for one in found)
    return stores or any(isinstance(leaf, Load) and leaf.array == "a" for leaf in loads)


def is_inner(one: Statement) -> bool:
    """Whether it is an innermost loop over elements of the matrix."""
    nested = isinstance(one, For) and any(isinstance(x, For) for x in walk(one.body))
    return isinstance(one, For) and not nested and touches_matrix(one) and one.variable[0] in "ij"


def is_strips(one: Statement) -> bool:
    """Whether it is a loop over strips."""
    return isinstance(one, For) and one.variable[0] == "k"


def moved(plan: Plan, array: str, move: Callable[[Expr], Expr]) -> Plan:
    """The plan with every index into ``array`` moved."""

    def value(one: Value) -> Value:
        if isinstance(one, Load) and one.array == array:
            return replace(one, index=move(one.index))
        return one

    def statement(one: Statement) -> Statements:
        if isinstance(one, Store) and one.array == array:
            return (replace(one, index=move(one.index)),)
        return (one,)

    return rewritten(plan, value=value, statement=statement)


def with_integer(plan: Plan, name: str, by: Expr) -> Plan:
    """The plan with an integer symbol replaced in every index."""

    return rewritten(plan, integer=lambda one: one.substitute({name: by}))
