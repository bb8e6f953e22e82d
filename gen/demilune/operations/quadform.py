"""s := x^T*A*x, or x^H*A*x for a Hermitian matrix, which is real."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any, ClassVar

import numpy as np

from demilune.arithmetic import Arithmetic, add, conjugate, convert
from demilune.index import Expr, expr
from demilune.layouts import Layout
from demilune.operations.base import Context, Operation, Strip
from demilune.plan.tree import Number, Parameter
from demilune.schedules import LoopOrder


@dataclass(frozen=True)
class QuadForm(Operation):
    """The quadratic form of the matrix."""

    name: ClassVar[str] = "quadform"
    rank: ClassVar[int] = 3
    summary: ClassVar[str] = "quadratic form"
    formula: ClassVar[str] = "s := x^T*A*x (x^H*A*x, a real number, if Hermitian)"
    result: ClassVar[str] = "s"
    why: ClassVar[str] = "its result is one number, and axpy scatters into a vector"

    @classmethod
    def accepts(cls, order: LoopOrder) -> bool:
        return order.gather

    def parameters(
        self,
        matrix: Parameter,
        layout: Layout,
        arithmetic: Arithmetic,
        order: LoopOrder,
        threads: int,
    ) -> tuple[Parameter, ...]:
        complex = arithmetic.type.complex
        result = Parameter(
            "s", "array", "the result, one element", arithmetic.result,
            complex and not layout.hermitian, expr(1), "out",
        )  # fmt: skip
        return (
            matrix,
            *layout.after(),
            *self.vector_parameters("x", "the vector x", layout, arithmetic.real, complex, "in"),
            result,
            *self._workspace(arithmetic, complex and not layout.hermitian, threads),
        )

    def _workspace(
        self, arithmetic: Arithmetic, complex: bool, threads: int
    ) -> tuple[Parameter, ...]:
        meaning = "workspace of the caller, a number a part; its contents do not matter"
        work = Parameter(
            "work", "array", meaning, arithmetic.sums, complex, expr(threads), "scratch"
        )
        return (work,) if threads > 1 else ()

    def _parts(self, c: Context) -> int:
        return 1 if c.layout.hermitian else c.parts

    joined: ClassVar[str] = (
        ", each with an s of its own, which it leaves in work; in the end s adds these in their "
        "order"
    )

    def prologue(self, c: Context) -> None:
        self.name_vector(c, "x", c.arithmetic.real)
        self._start(c)

    def begin_part(self, c: Context, part: Expr) -> None:
        c.outer = (c.totals, c.lane_totals)
        self._start(c)

    def end_part(self, c: Context, part: Expr) -> None:
        c.w.store("work", part, self._total(c))
        c.totals, c.lane_totals = c.outer

    def join_parts(self, c: Context, count: int) -> None:
        for part in range(count):
            number = c.load("work", expr(part), c.arithmetic.sums, self._parts(c) == 2)
            c.w.assign(c.totals, add(c.totals, number))

    def _start(self, c: Context) -> None:
        """The sum over all strips, at 0."""
        parts = self._parts(c)
        zero = c.arithmetic.zero(parts)
        c.totals = c.w.running("sum", zero, parts)
        if c.arithmetic.lanes > 1:
            c.lane_totals = c.w.running("sums", c.wide().spread(zero), parts)

    def open(self, c: Context, k: Expr) -> Strip:
        zero = c.arithmetic.zero(c.parts)
        return Strip(k, sum=c.sum_from_zero(), sum_from=zero)

    def element(self, c: Context, m: Expr, strips: list[tuple[Strip, Expr]], own: bool) -> None:
        x = c.term("x", m)
        x = c.w.bind("xm", x) if len(strips) > 1 or c.reused else x
        for strip, place in strips:
            stored = c.matrix(place, strip.active)
            stored = c.w.bind("akm", stored) if c.reused else stored
            row = c.in_row(stored, own)
            added = c.arithmetic.accumulate(c.w, strip.sum, row, x)
            c.set_sum(strip, c.where(strip, added, strip.sum))

    def diagonal(self, c: Context, strip: Strip, *places: Expr) -> None:
        d = c.w.bind("akk", c.on_diagonal(*places))
        if not c.order.mirrored:
            strip.diagonal = d
            return
        x = c.term("x", strip.k)
        x = c.w.bind("xk", x) if c.reused else x
        c.set_sum(strip, c.arithmetic.accumulate(c.w, strip.sum, d, x))

    def close(self, c: Context, strip: Strip) -> None:
        a, w = c.arithmetic, c.w
        x = w.bind("xk", c.term("x", strip.k))
        row = strip.sum
        if not c.order.mirrored:
            twice = w.bind("twice", a.doubled(row), c.parts)
            row = twice
            if strip.diagonal:
                row = w.bind("row", a.accumulate(w, twice, strip.diagonal, x), c.parts)
        left = conjugate(x) if c.layout.hermitian else x
        totals = c.lane_totals if c.lanes > 1 else c.totals
        w.assign(totals, a.accumulate_sum(w, totals, left, row))

    def _total(self, c: Context) -> Number:
        total = convert(c.arithmetic.total(c.totals), c.arithmetic.result)
        return add(c.folded(c.lane_totals), total) if c.arithmetic.lanes > 1 else total

    def epilogue(self, c: Context) -> None:
        total = self._total(c)
        c.w.store("s", expr(0), total)

    def statement(self, c: Context, backward: bool, block: int) -> tuple[str, ...]:
        way = "descending" if backward else "ascending"
        left = "conj(x(k))" if c.layout.hermitian else "x(k)"
        real = ", of which only the real part is computed" if c.layout.hermitian else ""
        carried = (
            (f"Times {left}, the errors of the row's sum are added to the errors of s.",)
            if c.arithmetic.compensated
            else ()
        )
        if c.order.mirrored:
            return (
                f"The sum of row k starts at 0 and adds A(k,m)*x(m) in {way} order of m; then "
                f"s, which starts at 0, adds {left}*sum in {way} order of k{real}.",
                *carried,
            )
        return (
            f"Strips k are visited in {way} order, each in {way} order of its index m. The sum of "
            "a strip starts at 0 and adds A(k,m)*x(m) for its off-diagonal elements; then row is "
            f"(sum + sum) + A(k,k)*x(k), and s, which starts at 0, adds {left}*row in {way} order "
            f"of k{real}.",
            *carried,
        )

    def statement_in_lanes(self, c: Context) -> tuple[str, ...]:
        left = "conj(x(k))" if c.layout.hermitian else "x(k)"
        real = ", of which only the real part is computed" if c.layout.hermitian else ""
        return (
            f"Then row is (sum + sum) + A(k,k)*x(k), and {left}*row is added to s{real}. Of strips "
            "that end together each adds to an s of its own lane; at the end these are added by "
            "halves, and then the s of the strips that ended alone.",
        )

    def described(self, layout: Layout) -> str:
        return "s := x^H*A*x, a real number" if layout.hermitian else "s := x^T*A*x"

    def reference(self, a: Any, x: Any, y: Any, alpha: Any, beta: Any, hermitian: bool) -> Any:
        return np.array([(x.conj() if hermitian else x) @ (a @ x)])

    def limit(self, n: int, digits: int, scalars: Mapping[str, int]) -> int:
        # n^2*M^3 <= 2^digits - 1
        limit = int(((2**digits - 1) / (n * n)) ** (1 / 3)) + 2
        while n * n * limit**3 > 2**digits - 1:
            limit -= 1
        return limit

    def limit_rule(self, digits: int) -> str:
        return f"n^2*M^3 <= 2^{digits} - 1"
