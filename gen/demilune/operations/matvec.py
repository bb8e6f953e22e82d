"""y := alpha*A*x + beta*y."""

from __future__ import annotations

from collections.abc import Iterator, Mapping
from dataclasses import dataclass
from math import isqrt
from typing import Any, ClassVar

from demilune.arithmetic import Arithmetic, add, convert
from demilune.index import Expr, expr
from demilune.keys import RUNTIME, key
from demilune.layouts import Layout
from demilune.operations.base import (
    Context,
    Operation,
    Scalar,
    Strip,
    Vector,
    factor_text,
    is_unit,
    scaled,
    sizes,
)
from demilune.plan.tree import Number, Parameter
from demilune.schedules import LoopOrder


@dataclass(frozen=True)
class MatVec(Operation):
    """The product of the matrix with a vector."""

    name: ClassVar[str] = "matvec"
    rank: ClassVar[int] = 1
    summary: ClassVar[str] = "matrix times vector, added to a vector"
    formula: ClassVar[str] = "y := alpha*A*x + beta*y"
    result: ClassVar[str] = "y"
    scattered: ClassVar[str] = "y"
    unread: ClassVar[tuple[str, ...]] = ("a", "x")
    why: ClassVar[str] = "a product can be had in every loop order"

    alpha: Scalar = key(1, "factor of A*x", words=(RUNTIME,), number=True)
    beta: Scalar = key(0, "factor of y; 0 never reads y", words=(RUNTIME,), number=True)
    incy: int | str = key(
        1, "stride of y", words=(RUNTIME,), whole=True, nonzero=True, minimum=-1024, maximum=1024
    )

    def problems(self, arithmetic: Arithmetic) -> Iterator[tuple[str, str]]:
        yield from super().problems(arithmetic)
        if self.alpha == 0:
            yield "alpha", "alpha = 0 leaves no product to compute; use another number"

    # --- parameters ------------------------------------------------------------------------

    def _workspace(self, arithmetic: Arithmetic, order: LoopOrder) -> bool:
        """Whether sums that y cannot hold must be kept for all of y at once."""
        return order.scatter and not arithmetic.in_place

    def parameters(
        self,
        matrix: Parameter,
        layout: Layout,
        arithmetic: Arithmetic,
        order: LoopOrder,
        threads: int,
    ) -> tuple[Parameter, ...]:
        complex = arithmetic.type.complex
        use = "out" if self.beta == 0 else "inout"
        work: tuple[Parameter, ...] = ()
        if self._workspace(arithmetic, order) or (threads > 1 and order.scatter):
            extent = layout.size * (threads if threads > 1 else arithmetic.cells)
            meaning = "workspace of the caller; its contents do not matter"
            work = (
                Parameter("work", "array", meaning, arithmetic.sums, complex, extent, "scratch"),
            )
        return (
            *self.scalar_parameter("alpha", "factor of A*x", arithmetic, complex),
            matrix,
            *layout.after(),
            *self.vector_parameters("x", "the vector x", layout, arithmetic.real, complex, "in"),
            *self.scalar_parameter("beta", "factor of y", arithmetic, complex),
            *self.vector_parameters("y", "the vector y", layout, arithmetic.result, complex, use),
            *work,
        )

    # --- sums in y or in the workspace --------------------------------------------------------

    def _cell(self, c: Context, i: Expr) -> Number:
        if c.arithmetic.in_place:
            return c.vector("y", i)
        kinds = [i, c.n + i][: c.arithmetic.cells]
        type, complex = c.arithmetic.sums, c.parts == 2
        return tuple(part for at in kinds for part in c.load("work", at, type, complex))

    def _keep(self, c: Context, i: Expr, number: Number) -> None:
        if c.arithmetic.in_place:
            c.put("y", i, number)
            return
        for kind, at in enumerate([i, c.n + i][: c.arithmetic.cells]):
            c.w.store("work", at, number[kind * c.parts : (kind + 1) * c.parts])

    def _add_to(self, c: Context, i: Expr, left: Number, right: Number) -> None:
        """Adds ``left * right`` to the sum of element i."""
        cell = self._cell(c, i)
        if c.arithmetic.compensated:
            cell = c.w.bind("cell", cell, c.parts)
        self._keep(c, i, c.arithmetic.accumulate(c.w, cell, left, right))

    # --- the visits ------------------------------------------------------------------------

    def prologue(self, c: Context) -> None:
        a, w = c.arithmetic, c.w
        self.name_vector(c, "x", a.real)
        self.name_vector(c, "y", a.result)
        if self.alpha == RUNTIME:

            def scale_only() -> None:
                self._scale(c)
                w.finish()

            w.when_equal(self.scalar(c, "alpha", c.parts == 2), 0, scale_only)
        if not c.order.scatter:
            return
        if a.in_place:
            self._scale(c)
        else:
            w.comment("sums are kept in the workspace")
            zero = a.zero(c.parts)
            w.loop("i", 0, c.n, lambda i: self._keep(c, i, zero))

    def _scale(self, c: Context) -> None:
        """y := beta*y, without reading y where beta is 0."""
        beta = self.scalar(c, "beta", c.parts == 2)
        y = "y"
        nought = convert(c.arithmetic.zero(c.parts)[: c.parts], c.vectors["y"].type)

        def clear() -> None:
            c.each(0, c.n, lambda c, i: c.put(y, i, c.spread(nought)))

        def multiply() -> None:
            def one(c: Context, i: Expr) -> None:
                c.put(y, i, scaled(c, beta, self._term(c, i)))

            c.each(0, c.n, one)

        def unless_one() -> None:
            c.w.when_equal(beta, 1, lambda: None, multiply)

        c.w.when_equal(beta, 0, clear, unless_one)

    def _term(self, c: Context, i: Expr) -> Number:
        """Element i of y, in the type of the sums."""
        term = c.term("y", i)
        return c.w.bind("old", term) if c.parts > 1 else term

    joined: ClassVar[str] = (
        "; where they scatter, each adds to a vector of its own in work, which starts at 0, and in "
        "the end y(i) adds these in their order"
    )

    def begin_part(self, c: Context, part: Expr) -> None:
        if not c.order.scatter:
            return
        own = Vector("work", part * c.n, expr(1), c.arithmetic.sums, c.parts == 2)
        c.vectors["whole y"], c.vectors["y"] = c.vectors["y"], own
        zero = c.arithmetic.zero(c.parts)
        c.each(0, c.n, lambda c, i: c.put("y", i, c.spread(zero)))

    def end_part(self, c: Context, part: Expr) -> None:
        if c.order.scatter:
            c.vectors["y"] = c.vectors.pop("whole y")

    def join_parts(self, c: Context, count: int) -> None:
        if not c.order.scatter:
            return

        def one(c: Context, i: Expr) -> None:
            total = c.vector("y", i)
            for part in range(count):
                total = add(total, c.load("work", part * c.n + i, c.arithmetic.sums, c.parts == 2))
            c.put("y", i, total)

        c.each(0, c.n, one)

    def open(self, c: Context, k: Expr) -> Strip:
        strip = Strip(k)
        if c.order.scatter:
            x = c.term("x", k)
            if c.arithmetic.in_place:
                alpha = self.scalar(c, "alpha", c.parts == 2)
                if c.parts > 1 and not is_unit(alpha):
                    x = c.w.bind("xk", x)
                x = scaled(c, alpha, x)
            strip.factor = c.w.bind("t", x)
        if c.order.gather:
            strip.sum_from = c.arithmetic.zero(c.parts)
            strip.sum = c.sum_from_zero()
        return strip

    def element(self, c: Context, m: Expr, strips: list[tuple[Strip, Expr]], own: bool) -> None:
        a, w, order = c.arithmetic, c.w, c.order
        several = len(strips) > 1 or c.reused
        if order.gather:
            x = c.term("x", m)
            x = w.bind("xm", x) if several else x
        apart = c.lanes > 1 and len(strips) > 1  # y need not wait for one strip after the other
        if order.scatter and several:
            start = c.spread(a.zero(c.parts)) if apart else self._cell(c, m)
            cell = w.running("cell", start, c.parts)
        for strip, place in strips:
            stored = c.matrix(place, strip.active)
            if c.reused or (order.gather and order.scatter):
                stored = w.bind("akm", stored)
            if order.scatter:
                column = c.in_column(stored, own)
                if several:
                    added = a.accumulate(w, cell, column, strip.factor)
                    w.assign(cell, c.where(strip, added, cell))
                else:
                    self._add_to(c, m, column, strip.factor)
            if order.gather:
                added = a.accumulate(w, strip.sum, c.in_row(stored, own), x)
                c.set_sum(strip, c.where(strip, added, strip.sum))
        if order.scatter and several:
            self._keep(c, m, add(self._cell(c, m), cell) if apart else cell)

    def diagonal(self, c: Context, strip: Strip, *places: Expr) -> None:
        d = c.on_diagonal(*places)
        if c.reused:
            d = c.w.bind("akk", d)
        if c.order.gather:
            x = c.term("x", strip.k)
            x = c.w.bind("xk", x) if c.reused else x
            c.set_sum(strip, c.arithmetic.accumulate(c.w, strip.sum, d, x))
        else:
            self._add_to(c, strip.k, d, strip.factor)

    def close(self, c: Context, strip: Strip) -> None:
        a, w = c.arithmetic, c.w
        if not c.order.gather:
            return
        if not c.order.scatter:
            self._result(c, strip.k, w.bind("total", a.total(strip.sum)))
        elif a.in_place:
            alpha = self.scalar(c, "alpha", c.parts == 2)
            y = c.vector("y", strip.k)
            if is_unit(alpha):
                c.put("y", strip.k, add(y, scaled(c, alpha, strip.sum)))
            else:
                c.put("y", strip.k, a.multiply_add(y, alpha, strip.sum))
        elif a.compensated:
            cell = w.bind("cell", self._cell(c, strip.k), c.parts)
            self._keep(c, strip.k, a.merge(w, cell, strip.sum))
        else:
            self._keep(c, strip.k, add(self._cell(c, strip.k), strip.sum))

    def epilogue(self, c: Context) -> None:
        if not self._workspace(c.arithmetic, c.order):
            return

        def one(i: Expr) -> None:
            cell = c.w.bind("cell", self._cell(c, i), c.parts)
            self._result(c, i, c.w.bind("total", c.arithmetic.total(cell)))

        c.w.loop("i", 0, c.n, one)

    def _result(self, c: Context, i: Expr, total: Number) -> None:
        """y(i) := alpha*total + beta*y(i), without reading y where beta is 0."""
        a = c.arithmetic
        alpha = self.scalar(c, "alpha", c.parts == 2)
        beta = self.scalar(c, "beta", c.parts == 2)

        def alone() -> None:
            c.put("y", i, scaled(c, alpha, total))

        def both() -> None:
            y = self._term(c, i)
            if is_unit(beta):
                y = scaled(c, beta, y)
                if is_unit(alpha):
                    c.put("y", i, add(y, scaled(c, alpha, total)))
                else:
                    c.put("y", i, a.multiply_add(y, alpha, total))
            elif is_unit(alpha):
                c.put("y", i, a.multiply_add(scaled(c, alpha, total), beta, y))
            else:
                scaled_y = (
                    c.w.bind("scaled", a.multiply(beta, y))
                    if c.parts > 1
                    else (a.multiply(beta, y))
                )
                c.put("y", i, a.multiply_add(scaled_y, alpha, total))

        c.w.when_equal(beta, 0, alone, both)

    # --- words -----------------------------------------------------------------------------

    def statement(self, c: Context, backward: bool, block: int) -> tuple[str, ...]:
        way = "descending" if backward else "ascending"
        in_place = c.arithmetic.in_place
        alpha, beta = factor_text(self.alpha, "alpha"), factor_text(self.beta, "beta")
        old = "" if self.beta == 0 else f" + {beta}y(i)"
        end = f"y(i) is {alpha}sum{old}".replace("+ -", "- ")
        start = ("0" if self.beta == 0 else f"{beta}y(i)") if in_place else "0"
        factor = f"({alpha}x(k))" if in_place and alpha else "x(k)"
        lines = []
        if not c.order.scatter:
            return (
                f"The sum of row i starts at 0 and adds A(i,m)*x(m) in {way} order of m; then "
                f"{end}.",
            )
        lines = [f"The sum of y(i) is kept in {'y(i) itself' if in_place else 'work'}; it starts "
                 f"at {start}."]  # fmt: skip
        if not c.order.gather:
            lines.append(f"It adds A(i,k)*{factor} in {way} order of k.")
            if block > 1:
                first, last = ("k < i", "k > i") if backward else ("k > i", "k < i")
                lines.append(
                    f"{block} columns are worked on at a time; within such a block y(i) receives "
                    f"first from {first}, then from k = i, then from {last}, each in {way} order."
                )
        else:
            together = f", {block} at a time" if block > 1 else ""
            lines.append(
                f"Strips k are visited in {way} order{together}, each in {way} order of its "
                f"index m. An element adds A(k,m)*x(m) to the sum of its strip, which starts at "
                f"0, and A(m,k)*{factor} to the sum of y(m); the diagonal's adds to the strip's."
            )
            lines.append(
                f"At the end of a {'block' if block > 1 else 'strip'} "
                f"{f'{alpha[:-1]} times ' if in_place and alpha[:-1] else ''}the sum of the strip "
                f"is {'subtracted from' if in_place and alpha == '-' else 'added to'} that of y(k)."
            )
        if not in_place:
            lines.append(f"At the end {end}.")
        return tuple(lines)

    def statement_in_lanes(self, c: Context) -> tuple[str, ...]:
        alpha, beta = factor_text(self.alpha, "alpha"), factor_text(self.beta, "beta")
        start = "0" if self.beta == 0 else f"{beta}y(i)"
        factor = f" In these sums x(k) stands for ({alpha}x(k))." if alpha else ""
        times = f"{alpha[:-1]} times " if alpha[:-1] else "minus " if alpha else ""
        return (
            f"The sum of y(i) is kept in y(i) itself and starts at {start}.{factor}",
            f"Then A(k,k)*x(k) is added to the strip's sum, and {times}that to y(k).",
        )

    def described(self, layout: Layout) -> str:
        product = f"{factor_text(self.alpha, 'alpha')}A*x"
        if self.beta == 0:
            return f"y := {product}"
        return f"y := {product} + {factor_text(self.beta, 'beta')}y".replace("+ -", "- ")

    def reference(self, a: Any, x: Any, y: Any, alpha: Any, beta: Any, hermitian: bool) -> Any:
        product = alpha * (a @ x)
        return product if beta == 0 else product + beta * y

    def last_terms(self, exact: Any, a: Any, x: Any, y: Any, alpha: Any, beta: Any) -> Any:
        product = sizes(alpha) * sizes(a @ x)
        return product if beta == 0 else product + sizes(beta) * sizes(y)

    def limit(self, n: int, digits: int, scalars: Mapping[str, int]) -> int:
        # alpha*n*M^2 + beta*M <= 2^digits - 1
        alpha, beta = scalars.get("alpha", 1), scalars.get("beta", 1)
        top = 2**digits - 1
        return (isqrt(beta * beta + 4 * alpha * n * top) - beta) // (2 * alpha * n)

    def limit_rule(self, digits: int) -> str:
        factors = []
        for value, name in ((self.alpha, "|alpha|"), (self.beta, "|beta|")):
            factor = name if value == RUNTIME else str(abs(int(value)))
            factors.append("" if factor == "1" else f"{factor}*")
        tail = "" if self.beta == 0 else f" + {factors[1]}M"
        return f"{factors[0]}n*M^2{tail} <= 2^{digits} - 1"
