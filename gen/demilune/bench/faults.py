"""Planted faults: mistakes that a kernel could have, and that the bench must catch.

A fault changes the plan of a kernel; what is emitted and run is the changed plan, while the bench
goes on to check against the right one. A fault that changes nothing (there is no diagonal loop to
cut, no stride to ignore) does not apply. Every other one must be caught.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, replace

from demilune.index import Compare, Expr, choice, expr, symbol
from demilune.layouts import Piece
from demilune.plan.build import Plan, make_plan
from demilune.plan.rewrite import Rewriter, Statements
from demilune.plan.tree import (
    Assign,
    Binary,
    Constant,
    Convert,
    Declare,
    Equals,
    Fma,
    For,
    If,
    Integer,
    Load,
    Local,
    Negate,
    Number,
    Parameter,
    Reject,
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

    def apply(self, plan: Plan) -> Plan | None:
        """The plan with the fault, or None if it does not apply to it."""
        changed = self.change(plan)
        return None if changed.routine.body == plan.routine.body else changed


FAULTS: dict[str, Fault] = {}
ANY = ("exact", "faithful")
OUTSIDE = ("exact", "faithful", "untouched", "calling")


def fault(meaning: str, levels: tuple[str, ...] = ANY) -> Callable[[Change], Change]:
    """Enters a change into the catalogue under the name of its function."""

    def enter(change: Change) -> Change:
        name = change.__name__.strip("_")
        FAULTS[name] = Fault(name, meaning, levels, change)
        return change

    return enter


def _with(plan: Plan, body: Statements) -> Plan:
    return replace(plan, routine=replace(plan.routine, body=body))


def _rewritten(
    plan: Plan,
    *,
    statement: Callable[[Statement], Statements] = lambda one: (one,),
    value: Callable[[Value], Value] = lambda one: one,
    integer: Callable[[Expr], Expr] = lambda one: one,
) -> Plan:
    return _with(plan, Rewriter(statement, value, integer).body(plan.routine.body))


def _from_spec(plan: Plan, spec: Spec) -> Plan:
    """The plan of another specification with the parameters of this one."""
    other = make_plan(spec)
    return _with(plan, other.routine.body)


# --- which loops are which -----------------------------------------------------------------------


def _has_matrix(statement: Statement) -> bool:
    """Whether a statement, or one inside it, touches the matrix."""
    found = list(walk((statement,)))
    loads = [leaf for one in found for v in values(one) for leaf in leaves(v)]
    stores = any(isinstance(one, Store) and one.array == "a" for one in found)
    return stores or any(isinstance(leaf, Load) and leaf.array == "a" for leaf in loads)


def _inner(one: Statement) -> bool:
    """Whether it is an innermost loop over elements of the matrix."""
    nested = isinstance(one, For) and any(isinstance(x, For) for x in walk(one.body))
    return isinstance(one, For) and not nested and _has_matrix(one) and one.variable[0] in "ij"


def _strips(one: Statement) -> bool:
    """Whether it is a loop over strips."""
    return isinstance(one, For) and one.variable[0] == "k"


def _bounds(plan: Plan, which: Callable[[Statement], bool], low: int, high: int) -> Plan:
    """The plan with the bounds of some loops moved."""

    def move(one: Statement) -> Statements:
        if isinstance(one, For) and which(one):
            step = one.step
            return (replace(one, low=one.low + low * step, high=one.high + high * step),)
        return (one,)

    return _rewritten(plan, statement=move)


@fault("loops over elements begin one late", ANY)
def inner_loop_short_at_start(plan: Plan) -> Plan:
    return _bounds(plan, _inner, 1, 0)


@fault("loops over elements end one early", ANY)
def inner_loop_short_at_end(plan: Plan) -> Plan:
    return _bounds(plan, _inner, 0, -1)


@fault("loops over elements begin one early", OUTSIDE)
def inner_loop_long_at_start(plan: Plan) -> Plan:
    return _bounds(plan, _inner, -1, 0)


@fault("loops over elements end one late", OUTSIDE)
def inner_loop_long_at_end(plan: Plan) -> Plan:
    return _bounds(plan, _inner, 0, 1)


@fault("the first strip is left out", ANY)
def first_strip_left_out(plan: Plan) -> Plan:
    return _bounds(plan, _strips, 1, 0)


@fault("the last strip is left out", ANY)
def last_strip_left_out(plan: Plan) -> Plan:
    return _bounds(plan, _strips, 0, -1)


@fault("one strip too many at the end", OUTSIDE)
def one_strip_too_many(plan: Plan) -> Plan:
    return _bounds(plan, _strips, 0, 1)


@fault("loops over elements stop at index 14: a fault at larger sizes only", ANY)
def long_strips_cut(plan: Plan) -> Plan:
    def cut(one: Statement) -> Statements:
        if isinstance(one, For) and _inner(one):
            late = Compare(expr(14), "<", one.high)
            return (replace(one, high=choice(late, 14, one.high)),)
        return (one,)

    return plan if isinstance(plan.spec.layout.n, int) else _rewritten(plan, statement=cut)


@fault("the result is wrong for one size alone, n = 5", ANY)
def wrong_at_one_size(plan: Plan) -> Plan:
    def skip(one: Statement) -> Statements:
        if isinstance(one, For) and _strips(one):
            at = Compare(symbol("n"), "==", expr(5))
            return (replace(one, high=choice(at, one.high - one.step, one.high)),)
        return (one,)

    return _rewritten(plan, statement=skip) if plan.spec.layout.n == "runtime" else plan


@fault("strips that are left over after the blocks are dropped", ANY)
def left_over_dropped(plan: Plan) -> Plan:
    def drop(one: Statement) -> Statements:
        return () if isinstance(one, For) and _strips(one) and one.step == 1 else (one,)

    return _rewritten(plan, statement=drop) if plan.spec.schedule.block > 1 else plan


@fault("strips that are left over are dropped where n is at least 16", ANY)
def left_over_dropped_when_large(plan: Plan) -> Plan:
    def drop(one: Statement) -> Statements:
        if isinstance(one, For) and _strips(one) and one.step == 1:
            large = Compare(expr(16), "<=", symbol("n"))
            return (replace(one, high=choice(large, one.low, one.high)),)
        return (one,)

    blocks = plan.spec.schedule.block > 1 and plan.spec.layout.n == "runtime"
    return _rewritten(plan, statement=drop) if blocks else plan


# --- triangle and storage ------------------------------------------------------------------------


def _places(plan: Plan, array: str, move: Callable[[Expr], Expr]) -> Plan:
    """The plan with every index into ``array`` moved."""

    def value(one: Value) -> Value:
        if isinstance(one, Load) and one.array == array:
            return replace(one, index=move(one.index))
        return one

    def statement(one: Statement) -> Statements:
        if isinstance(one, Store) and one.array == array:
            return (replace(one, index=move(one.index)),)
        return (one,)

    return _rewritten(plan, value=value, statement=statement)


@fault("the other triangle is used", OUTSIDE)
def wrong_triangle(plan: Plan) -> Plan:
    layout = plan.spec.layout
    other = "lower" if layout.triangle == "upper" else "upper"
    return _from_spec(plan, replace(plan.spec, layout=replace(layout, triangle=other)))


@fault("rows and columns of the storage are exchanged", OUTSIDE)
def wrong_order(plan: Plan) -> Plan:
    layout = plan.spec.layout
    if len(layout.orders) == 1:
        return plan
    other = "row-major" if layout.order == "column-major" else "column-major"
    return _from_spec(plan, replace(plan.spec, layout=replace(layout, order=other)))


def _replaced(plan: Plan, name: str, by: Expr) -> Plan:
    """The plan with an integer symbol replaced in every index."""

    return _rewritten(plan, integer=lambda one: one.substitute({name: by}))


@fault("the leading dimension is one too large", OUTSIDE)
def leading_dimension_plus_one(plan: Plan) -> Plan:
    return _replaced(plan, "ld", symbol("ld") + 1)


@fault("the leading dimension is one too small", OUTSIDE)
def leading_dimension_minus_one(plan: Plan) -> Plan:
    return _replaced(plan, "ld", symbol("ld") - 1)


@fault("the leading dimension is taken to be n", OUTSIDE)
def leading_dimension_ignored(plan: Plan) -> Plan:
    band = hasattr(plan.spec.layout, "kd")
    return plan if band else _replaced(plan, "ld", plan.spec.layout.size)


@fault("the half-bandwidth is one too large", OUTSIDE)
def bandwidth_plus_one(plan: Plan) -> Plan:
    return _replaced(plan, "kd", symbol("kd") + 1)


@fault("every element is read one place too late", OUTSIDE)
def matrix_shifted(plan: Plan) -> Plan:
    return _places(plan, "a", lambda index: index + 1)


@fault("every element is read one place too early", OUTSIDE)
def matrix_shifted_back(plan: Plan) -> Plan:
    return _places(plan, "a", lambda index: index - 1)


# --- the diagonal --------------------------------------------------------------------------------


def _diagonal_statements(plan: Plan, change: Callable[[Statement], Statements]) -> Plan:
    """Changes the statements outside the loops over elements that add up something of ``a``."""

    def outside(body: Statements, strips: bool) -> Statements:
        result: list[Statement] = []
        bound: set[str] = set()
        for one in body:
            if isinstance(one, For):
                deeper = strips or _strips(one)
                inner = one if _inner(one) else replace(one, body=outside(one.body, deeper))
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

    return _with(plan, outside(plan.routine.body, False))


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


# --- conjugation ---------------------------------------------------------------------------------


@fault("nothing is conjugated", ANY)
def conjugation_missing(plan: Plan) -> Plan:
    layout = plan.spec.layout
    if not layout.hermitian:
        return plan
    spec = replace(plan.spec, layout=replace(layout, structure="symmetric"))
    changed = make_plan(spec)
    same = [p.name for p in changed.parameters] == [p.name for p in plan.parameters]
    one_part = plan.spec.operation.result != "y"
    return plan if not same or one_part else _with(plan, changed.routine.body)


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

    return _rewritten(plan, value=value)


# --- scalars -------------------------------------------------------------------------------------


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

    return _rewritten(plan, value=value)


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

    return _rewritten(plan, statement=statement)


@fault("beta = 0 is done as 0*y", ("exact", "faithful", "untouched", "calling"))
def beta_zero_multiplied(plan: Plan) -> Plan:
    return _without_test(plan, "beta", 0, False) if not plan.spec.arithmetic.type.integer else plan


@fault("beta is always taken to be 0", ANY)
def beta_always_zero(plan: Plan) -> Plan:
    return _without_test(plan, "beta", 0, True)


@fault("alpha = 0 still reads A and x", ("untouched", "calling"))
def alpha_zero_reads(plan: Plan) -> Plan:
    return _without_test(plan, "alpha", 0, False) if not plan.spec.arithmetic.type.integer else plan


# --- strides -------------------------------------------------------------------------------------


@fault("the stride of x is ignored", OUTSIDE)
def stride_of_x_ignored(plan: Plan) -> Plan:
    return _replaced(plan, "incx", expr(1))


@fault("the stride of y is ignored", OUTSIDE)
def stride_of_y_ignored(plan: Plan) -> Plan:
    return _replaced(plan, "incy", expr(1))


@fault("a negative stride does not begin at the far end", OUTSIDE)
def stride_sign_ignored(plan: Plan) -> Plan:
    def statement(one: Statement) -> Statements:
        if isinstance(one, Integer) and one.name.startswith("start_"):
            return (replace(one, value=expr(0)),)
        return (one,)

    return _rewritten(plan, statement=statement)


@fault("the strides of x and y are swapped", OUTSIDE)
def strides_swapped(plan: Plan) -> Plan:
    names = {one.name for one in plan.parameters}
    if not {"incx", "incy"} <= names:
        return plan
    swap = {"incx": symbol("incy"), "incy": symbol("incx")}
    return _rewritten(plan, integer=lambda one: one.substitute(swap))


# --- junk ----------------------------------------------------------------------------------------


def _unused_place(plan: Plan) -> Expr:
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
    junk = Load("a", _unused_place(plan), number.real)
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
    return _restoring(plan, _unused_place(plan), Compare(expr(0), "<", size))


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


# --- the order of arithmetic ---------------------------------------------------------------------


@fault("sums are taken in the other direction", ("faithful",))
def order_reversed(plan: Plan) -> Plan:
    schedule = plan.spec.schedule
    other = "forward" if schedule.backward else "backward"
    if plan.spec.arithmetic.type.integer or not plan.spec.operation.sums:
        return plan
    spec = replace(plan.spec, schedule=replace(schedule, direction=other))
    return _from_spec(plan, spec)


@fault("another loop order is used", ("faithful",))
def another_loop_order(plan: Plan) -> Plan:
    spec, operation = plan.spec, plan.spec.operation
    others = [loop for loop in operation.loops() if loop != spec.schedule.loop]
    if not others or spec.arithmetic.type.integer or not spec.arithmetic.in_place:
        return plan
    return _from_spec(plan, replace(spec, schedule=replace(spec.schedule, loop=others[0])))


@fault("products are contracted into fused multiply-adds", ("faithful",))
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
    return _from_spec(plan, spec)


@fault("fused multiply-adds are rounded twice", ("faithful",))
def rounded_twice(plan: Plan) -> Plan:
    def value(one: Value) -> Value:
        if isinstance(one, Fma):
            product = Binary("*", one.left, one.right, one.type)
            return Binary("+", product, one.addend, one.type)
        return one

    if plan.spec.arithmetic.accumulator == "wide":
        return plan
    return _rewritten(plan, value=value)


@fault("float is promoted to double", ("faithful",))
def promoted_to_double(plan: Plan) -> Plan:
    arithmetic = plan.spec.arithmetic
    if arithmetic.real != "float32" or arithmetic.accumulator != "plain":
        return plan
    spec = replace(plan.spec, arithmetic=replace(arithmetic, accumulator="wide"))
    changed = make_plan(spec)
    same = [p.name for p in changed.parameters] == [p.name for p in plan.parameters]
    return _with(plan, changed.routine.body) if same else plan


@fault("errors of the compensated sum are dropped", ("bound", "faithful"))
def compensation_dropped(plan: Plan) -> Plan:
    def statement(one: Statement) -> Statements:
        dropped = isinstance(one, Assign) and "_err" in one.name
        return () if dropped else (one,)

    return _rewritten(plan, statement=statement)


@fault("an accumulator is not reset for the next strip", ANY)
def accumulator_not_reset(plan: Plan) -> Plan:
    def statement(one: Statement) -> Statements:
        if isinstance(one, For) and _strips(one):
            resets = [
                inner
                for inner in one.body
                if isinstance(inner, Declare) and inner.name.startswith("acc") and inner.changes
            ]
            if resets:
                rest = tuple(inner for inner in one.body if inner not in resets)
                return (*resets, replace(one, body=rest))
        return (one,)

    if plan.spec.schedule.block > 1:  # two loops over strips would declare the names twice
        return plan
    return _rewritten(plan, statement=statement)


@fault("the sum of a strip is added to the result with the wrong sign", ANY)
def sum_subtracted(plan: Plan) -> Plan:
    def value(one: Value) -> Value:
        right = isinstance(one, Binary) and one.operator == "+" and isinstance(one.right, Local)
        if right and isinstance(one, Binary) and isinstance(one.right, Local):
            if one.right.name.startswith(("acc", "total")):
                return Binary("-", one.left, one.right, one.type)
        return one

    return _rewritten(plan, value=value)


@fault("x is read one element too late", OUTSIDE)
def x_shifted(plan: Plan) -> Plan:
    return _places(plan, "x", lambda index: index + 1)


@fault("nothing is computed", ANY)
def nothing_done(plan: Plan) -> Plan:
    def drop(one: Statement) -> Statements:
        return () if isinstance(one, For) and _has_matrix(one) else (one,)

    return _rewritten(plan, statement=drop)


def _without_refusal(plan: Plan, of_n: bool) -> Plan:
    def drop(one: Statement) -> Statements:
        return () if isinstance(one, Reject) and (one.argument == "n") == of_n else (one,)

    return _rewritten(plan, statement=drop)


@fault("bad arguments other than n are not refused", ("calling",))
def nothing_refused(plan: Plan) -> Plan:
    return _without_refusal(plan, of_n=False)


@fault("a negative n is not refused", ("calling",))
def negative_n_accepted(plan: Plan) -> Plan:
    return _without_refusal(plan, of_n=True)
