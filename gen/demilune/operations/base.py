"""What an operation tells: its parameters, and what is done with each strip and element.

The plan visits strips and elements in the order that the schedule asks for and calls the
operation at each: :meth:`Operation.open` and :meth:`Operation.close` around a strip,
:meth:`Operation.element` for the elements that meet index m, :meth:`Operation.diagonal`.
An operation never sees an index formula and never decides an order.
"""

from __future__ import annotations

from collections.abc import Callable, Iterator, Mapping
from dataclasses import dataclass, field, replace
from math import isfinite
from typing import Any, ClassVar

import numpy as np

from demilune.arithmetic import Arithmetic, conjugate, convert, negate, spread
from demilune.dtypes import REAL_SIZE, with_lanes
from demilune.index import Compare, Expr, Term, choice, expr, quotient, symbol
from demilune.keys import RUNTIME, key
from demilune.layouts import Layout
from demilune.plan.tree import (
    ONE,
    Active,
    Constant,
    Fold,
    Load,
    Local,
    Number,
    Pack,
    Parameter,
    Where,
)
from demilune.plan.writer import PARTS, Writer
from demilune.schedules import LOOP_ORDERS, LoopOrder

Scalar = float | int | str
"""A number, or ``"runtime"``."""


@dataclass
class Strip:
    """A strip that is being worked on: its index and the locals that belong to it."""

    k: Expr
    factor: Number = ()
    """What the elements of the strip are multiplied with, or several such numbers."""
    sum: Number = ()
    sum_from: Number = ()
    """What the sum starts at."""
    diagonal: Number = ()
    active: Active = None
    """The lanes of a step in which the strip has elements; None is all that the step has."""


@dataclass(frozen=True)
class Vector:
    """A vector with a stride: element i lies at start + i*stride (BLAS standard)."""

    array: str
    start: Expr
    stride: Expr
    type: str
    complex: bool

    @property
    def parts(self) -> int:
        return 2 if self.complex else 1

    def at(self, i: Term) -> Expr:
        return self.start + expr(i) * self.stride


@dataclass
class Context:
    """Where an operation writes, and what the other choices are."""

    w: Writer
    layout: Layout
    arithmetic: Arithmetic
    order: LoopOrder
    vectors: dict[str, Vector] = field(default_factory=dict)
    totals: Number = ()
    """A running sum over all strips, of an operation that has one."""
    outer: tuple[Number, Number] = ((), ())
    """The sums over all strips while those of a part stand in their place."""
    lane_totals: Number = ()
    """The same, a sum a lane."""
    holds: bool = False
    """Whether all elements of vectors are kept in locals, of a routine without loops."""
    scattered: str = ""
    """The vector that strips add to, if they scatter."""
    held: dict[tuple[str, Expr], Number] = field(default_factory=dict)
    """Elements of vectors that are in locals for a while, by vector and first index."""
    lanes: int = 1
    """How many neighbouring elements are worked on at a time, from the index that is named."""
    active: Active = None
    """The lanes that have an element; None is all."""
    stride: Expr = ONE
    """From the stored element of one lane to that of the next."""
    dense: bool = False
    """Whether all that lies between those elements belongs to the matrix."""

    @property
    def n(self) -> Expr:
        return self.layout.size

    @property
    def parts(self) -> int:
        return self.arithmetic.type.parts

    def sum_from_zero(self) -> Number:
        """A new sum of a strip; in a routine without loops it begins with its first product."""
        zero = self.spread(self.arithmetic.zero(self.parts))
        return zero if self.begins else self.w.running("acc", zero, self.parts)

    def set_sum(self, strip: Strip, number: Number) -> None:
        """Gives the sum of a strip a new value."""
        if all(isinstance(one, Constant) for one in strip.sum):
            strip.sum = self.w.running("acc", number, self.parts)
        else:
            self.w.assign(strip.sum, number)

    @property
    def begins(self) -> bool:
        """Whether sums begin with their first product, and not with 0."""
        return self.holds and not self.arithmetic.compensated

    def wide(self, active: Active = None) -> Context:
        """The context in which a step works on all lanes, or on the ``active`` ones."""
        return replace(self, lanes=self.arithmetic.lanes, active=active)

    def each(
        self,
        low: Term,
        high: Term,
        body: Callable[[Context, Expr], None],
        *,
        name: str = "i",
        steps: int = 1,
        backward: bool = False,
        fills: bool = False,
    ) -> None:
        """``body`` for every index: lanes at a time, ``steps`` written out in one pass.

        What is left at the end is one step with the lanes that are left; where the range
        ``fills`` all lanes nothing is.
        """
        w, lanes = self.w, self.arithmetic.lanes
        low, high = expr(low), expr(high)
        here = self.wide() if lanes > 1 else self
        for count in (steps, 1) if steps > 1 else (1,):
            size = count * lanes

            def some(i: Expr, count: int = count) -> None:
                for step in range(count):
                    body(here, i + step * lanes)

            exact = size == 1 or (fills and count == 1)
            whole = high if exact else low + size * quotient(high - low, divisor=size)
            whole = whole if whole.constant is not None else w.integer("whole", whole)
            w.loop(name, low, whole, some, step=size, backward=backward)
            low = whole
        if lanes > 1 and not fills:
            rest = self.wide((expr(0), high - low))
            w.when_known(Compare(low, "<", high), lambda: body(rest, low))

    def spread(self, number: Number) -> Number:
        """The number in every lane of a step."""
        return tuple(spread(one, with_lanes(one.type, self.lanes)) for one in number)

    def folded(self, *sums: Number) -> Number:
        """The sums over all lanes: of one number, or of several as one a lane."""
        real = self.arithmetic.sums
        type = real if len(sums) == 1 else with_lanes(real, self.arithmetic.lanes)
        return tuple(Fold(parts, type) for parts in zip(*sums, strict=True))

    def load(
        self,
        array: str,
        index: Expr,
        type: str,
        complex: bool,
        stride: Expr = ONE,
        active: Active = None,
    ) -> Number:
        """The element of an array, as a number; in a wide context those from ``index`` on."""
        parts = (0, 1) if complex else (None,)
        if self.lanes == 1:
            return tuple(Load(array, index, type, part) for part in parts)
        type, active = with_lanes(type, self.lanes), active or self.active
        return tuple(Load(array, index, type, part, stride, active) for part in parts)

    def matrix(self, index: Expr, active: Active = None) -> Number:
        """The stored element at ``index``, in the type of the sums."""
        a = self.arithmetic
        number = self.load("a", index, a.real, a.type.complex, self.stride, active)
        if self.dense:
            number = tuple(replace(one, dense=True) for one in number if isinstance(one, Load))
        return convert(number, a.sums)

    def put_matrix(self, strip: Strip, index: Expr, number: Number) -> None:
        """Writes the stored element at ``index``, or those of a step that the strip has."""
        active = strip.active or self.active
        self.w.store("a", index, convert(number, self.arithmetic.real), active=active)

    def on_diagonal(self, *places: Expr) -> Number:
        """The diagonal element at a place; of a Hermitian matrix only its real part is read.

        Several places give an element a lane.
        """
        parts = 1 if self.layout.hermitian else self.parts
        if len(places) == 1:
            return self.matrix(places[0])[:parts]
        narrow = replace(self, lanes=1, active=None)
        numbers = [narrow.matrix(place) for place in places]
        type = with_lanes(self.arithmetic.sums, self.lanes)
        packed = (Pack(tuple(n[part] for n in numbers), type) for part in range(parts))
        if self.active is None or self.active[1].constant is not None:
            return tuple(packed)
        nought = self.spread(self.arithmetic.zero(1))[0]  # not the last element again and again
        return tuple(Where(self.active, one, nought, type) for one in packed)

    def vector(self, name: str, i: Term) -> Number:
        """Element ``i`` of a vector, in its own type."""
        v, key = self.vectors[name], (name, expr(i))
        if key in self.held and (self.lanes > 1 or self.holds):
            return self.held[key]
        number = self.load(v.array, v.at(i), v.type, v.complex, v.stride)
        if self.holds and self.w.outermost:
            local = f"{name}_{key[1].constant}"
            self.held[key] = self.w.declare(local, number, self._kept(name), v.parts)
            return self.held[key]
        return number

    def _kept(self, name: str) -> bool:
        """Whether elements of a vector change in locals, and are written at the end."""
        return self.holds and name == self.scattered

    def release(self) -> None:
        """Writes what was kept in locals, and forgets them."""
        for (name, i), number in self.held.items():
            if self._kept(name):
                self.w.store(name, self.vectors[name].at(i), number)
        self.held.clear()

    def term(self, name: str, i: Term) -> Number:
        """Element ``i`` of a vector, in the type of the sums."""
        return convert(self.vector(name, i), self.arithmetic.sums)

    def where(self, strip: Strip, number: Number, otherwise: Number) -> Number:
        """``number`` in the lanes in which the strip has elements, else ``otherwise``."""
        if strip.active is None:
            return number
        pairs = zip(number, otherwise, strict=True)
        return tuple(Where(strip.active, one, other, one.type) for one, other in pairs)

    def put(self, name: str, i: Term, number: Number) -> None:
        """Writes element ``i`` of a vector, rounded to its type."""
        v = self.vectors[name]
        number = convert(number, v.type)
        if self._kept(name) and self.w.outermost:
            key = (name, expr(i))
            known = key in self.held
            if self.begins and all(isinstance(one, Constant) for one in number):
                self.held[key] = number
            elif known and not all(isinstance(one, Constant) for one in self.held[key]):
                self.w.assign(self.held[key], number)
            else:
                local = f"{name}_{key[1].constant}"
                self.held[key] = self.w.declare(local, number, True, v.parts)
        elif self.lanes == 1:
            self.w.store(v.array, v.at(i), number)
        elif (name, expr(i)) in self.held:
            self.w.assign(self.held[name, expr(i)], number)
        else:
            self.w.store(v.array, v.at(i), number, v.stride, self.active)

    def in_row(self, number: Number, own: bool) -> Number:
        """A(k,m) from the element that is stored for it; ``own`` if it lies in strip k."""
        return conjugate(number) if self._stored_for_column(own) else number

    def in_column(self, number: Number, own: bool) -> Number:
        """A(m,k) from the element that is stored for it; ``own`` if it lies in strip k."""
        hermitian = self.layout.hermitian
        return conjugate(number) if hermitian and not self._stored_for_column(own) else number

    def _stored_for_column(self, own: bool) -> bool:
        # Stored column by column, an element of strip k at index m is A(m,k).
        return self.layout.hermitian and own == (self.layout.order == "column-major")

    @property
    def reused(self) -> bool:
        """Whether a number is used more than once in one step, and so belongs in a local."""
        return self.parts > 1 or self.arithmetic.compensated or self.lanes > 1


@dataclass(frozen=True)
class Operation:
    """What is computed."""

    name: ClassVar[str]
    rank: ClassVar[int] = 9
    summary: ClassVar[str]
    formula: ClassVar[str]
    result: ClassVar[str]
    """The parameter that holds the result: ``a``, a vector, or a single number."""
    unread: ClassVar[tuple[str, ...]] = ()
    """Arrays that are not read where alpha is passed as 0."""
    why: ClassVar[str]
    """Why some loop orders make no sense."""
    sums: ClassVar[bool] = True
    """Whether there are sums, which an accumulator keeps."""
    scattered: ClassVar[str] = ""
    """The vector that a scattering order adds to."""
    mirrored: ClassVar[bool] = True
    """Whether mirrored elements matter (else each stored element is visited once)."""

    incx: int | str = key(
        1, "stride of x", words=(RUNTIME,), whole=True, nonzero=True, minimum=-1024, maximum=1024
    )

    @classmethod
    def accepts(cls, order: LoopOrder) -> bool:
        """Whether the operation can be done in this loop order."""
        return True

    @classmethod
    def loops(cls) -> tuple[str, ...]:
        """The loop orders that make sense; the default first: it reads each element once."""
        accepted = [one for one in LOOP_ORDERS.values() if cls.accepts(one)]
        return tuple(one.name for one in sorted(accepted, key=lambda one: one.mirrored))

    # --- to be told by each operation ---------------------------------------------------------

    def parameters(
        self,
        matrix: Parameter,
        layout: Layout,
        arithmetic: Arithmetic,
        order: LoopOrder,
        threads: int,
    ) -> tuple[Parameter, ...]:
        """All parameters, in order; ``matrix`` is the array of the half."""
        raise NotImplementedError

    def prologue(self, c: Context) -> None:
        """What is done before the first strip."""

    joined: ClassVar[str] = ""
    """How what parts have added is put together, as the end of a sentence."""

    def begin_part(self, c: Context, part: Expr) -> None:
        """What is done before the strips of a part that may run beside others."""

    def end_part(self, c: Context, part: Expr) -> None:
        """What is done behind them."""

    def join_parts(self, c: Context, count: int) -> None:
        """What is done when all parts have ended."""

    def open(self, c: Context, k: Expr) -> Strip:
        """Starts strip k."""
        raise NotImplementedError

    def element(self, c: Context, m: Expr, strips: list[tuple[Strip, Expr]], own: bool) -> None:
        """The off-diagonal elements of some rows that meet index m, each with its place."""
        raise NotImplementedError

    def diagonal(self, c: Context, strip: Strip, *places: Expr) -> None:
        """The diagonal element of a strip; in a wide context those of the strips from it on."""
        raise NotImplementedError

    def close(self, c: Context, strip: Strip) -> None:
        """Ends a strip."""

    def epilogue(self, c: Context) -> None:
        """What is done after the last strip."""

    def statement(self, c: Context, backward: bool, block: int) -> tuple[str, ...]:
        """The order of the sums in sentences, for the header."""
        raise NotImplementedError

    def reference(self, a: Any, x: Any, y: Any, alpha: Any, beta: Any, hermitian: bool) -> Any:
        """The result from the whole matrix, for arrays of any numbers, exact ones included."""
        raise NotImplementedError

    def last_terms(self, exact: Any, a: Any, x: Any, y: Any, alpha: Any, beta: Any) -> Any:
        """Magnitudes of what the last few operations add up, given exact rationals.

        The error of a compensated sum is relative to these.
        """
        return sizes(exact)

    def roundings(self, n: int, parts: int) -> int:
        """How many roundings a term of a result can go through, at most."""
        return 2 * parts * n + 8

    def statement_in_lanes(self, c: Context) -> tuple[str, ...]:
        """How a strip ends whose lanes have been added up, in sentences."""
        return ()

    def described(self, layout: Layout) -> str:
        """The formula with the scalars that the specification fixes."""
        return self.formula

    def limit(self, n: int, digits: int, scalars: Mapping[str, int]) -> int:
        """The largest magnitude of integer inputs that cannot overflow ``digits`` bits.

        ``scalars`` holds the magnitudes of alpha and beta.
        """
        raise NotImplementedError

    def limit_rule(self, digits: int) -> str:
        """The same as an inequality in n and the magnitude M of all elements."""
        raise NotImplementedError

    def narrowest(self, arithmetic: Arithmetic) -> str:
        """The integer type that results and sums must fit into."""
        return arithmetic.sums

    def problems(self, arithmetic: Arithmetic) -> Iterator[tuple[str, str]]:
        """Pairs of a key and why its value cannot be."""
        for name in ("alpha", "beta"):
            value = getattr(self, name, RUNTIME)
            if value == RUNTIME:
                continue
            if not arithmetic.type.integer:
                if not isfinite(rounded(value, arithmetic.real)):
                    yield name, f"{value} is too large for {arithmetic.real}"
                elif value != 0 and rounded(value, arithmetic.real) == 0:
                    yield name, f"{value} is too small for {arithmetic.real}: it becomes 0"
            elif value != int(value):
                yield name, f"{value} is no whole number, and {arithmetic.dtype} holds no other"
            elif abs(value) >= 2 ** (8 * REAL_SIZE[arithmetic.result] - 1):
                yield name, f"{value} does not fit into {arithmetic.result}"

    # --- shared ------------------------------------------------------------------------------

    def scalar_parameter(
        self, name: str, meaning: str, arithmetic: Arithmetic, complex: bool
    ) -> tuple[Parameter, ...]:
        """The parameter for a scalar that is passed at run time, if it is."""
        if getattr(self, name) != RUNTIME:
            return ()
        return (Parameter(name, "scalar", meaning, arithmetic.result, complex),)

    def scalar(self, c: Context, name: str, complex: bool) -> Number:
        """The scalar as a number in the type of the sums."""
        value, real = getattr(self, name), c.arithmetic.result
        if value != RUNTIME:
            exact = int(value) if c.arithmetic.type.integer else rounded(value, real)
            return convert((Constant(exact, real),), c.arithmetic.sums)
        if not complex:
            return convert((Local(name, real),), c.arithmetic.sums)
        return convert(tuple(Local(name + part, real) for part in PARTS), c.arithmetic.sums)

    def vector_parameters(
        self, name: str, meaning: str, layout: Layout, type: str, complex: bool, use: str
    ) -> tuple[Parameter, ...]:
        """The parameters of a vector: the array, and its stride where that is passed."""
        stride = getattr(self, f"inc{name}")
        step = symbol(f"inc{name}") if stride == RUNTIME else expr(int(stride))
        size = choice(Compare(step, "<", expr(0)), -step, step)
        extent = 1 + (layout.size - 1) * size
        array = Parameter(name, "array", meaning, type, complex, extent, use)
        if stride != RUNTIME:
            return (array,)
        return array, Parameter(f"inc{name}", "size", f"stride of {name}, in elements")

    def name_vector(self, c: Context, name: str, type: str) -> None:
        """Makes a vector known to ``c``, with the start that its stride has."""
        stride = getattr(self, f"inc{name}")
        step = symbol(f"inc{name}") if stride == RUNTIME else expr(int(stride))
        back = choice(Compare(step, "<", expr(0)), (1 - c.n) * step, 0)
        start = c.w.integer(f"start_{name}", back)
        c.vectors[name] = Vector(name, start, step, type, c.parts == 2)

    def all_parameters(
        self, layout: Layout, arithmetic: Arithmetic, order: LoopOrder, threads: int = 1
    ) -> tuple[Parameter, ...]:
        """The parameters of the routine: sizes, then what the operation needs."""
        size: tuple[Parameter, ...] = ()
        if layout.n == RUNTIME:
            size = (Parameter("n", "size", "rows and columns of A"),)
        extent = layout.extent.substitute(dict(layout.integers))
        matrix = Parameter(
            "a", "array", "the stored half of A", arithmetic.real, arithmetic.type.complex,
            extent, "in",
        )  # fmt: skip
        return (
            *size,
            *layout.sizes(),
            *self.parameters(matrix, layout, arithmetic, order, threads),
        )

    def stride_rules(self) -> Iterator[tuple[Compare, str, str]]:
        """Conditions under which a stride is refused."""
        for name in ("incx", "incy"):
            if getattr(self, name, 1) == RUNTIME:
                yield Compare(symbol(name), "==", expr(0)), name, "other than 0"


def rounded(value: float | str, real: str) -> float:
    """The number rounded to a floating-point type; infinite if it is too large."""
    with np.errstate(over="ignore"):
        return float(np.dtype(real).type(value))


def sizes(numbers: Any) -> Any:
    """Magnitudes of exact numbers: |re| + |im|, at least as large as |z|."""
    return np.vectorize(lambda one: abs(one.real) + abs(one.imag), otypes=[object])(numbers)


def factor_text(value: Scalar, name: str) -> str:
    """A scalar as the left factor of a formula; nothing if it is 1."""
    if value == RUNTIME:
        return f"{name}*"
    return "" if value == 1 else "-" if value == -1 else f"{value}*"


def scaled(c: Context, factor: Number, number: Number) -> Number:
    """``factor * number``; a factor of 1 or -1 costs no product."""
    first = factor[0]
    if len(factor) == 1 and isinstance(first, Constant) and first.value in (1, -1):
        return number if first.value == 1 else negate(number)
    return c.arithmetic.multiply(factor, number)


def is_unit(factor: Number) -> bool:
    """Whether the factor is a constant 1 or -1."""
    first = factor[0]
    return len(factor) == 1 and isinstance(first, Constant) and first.value in (1, -1)
