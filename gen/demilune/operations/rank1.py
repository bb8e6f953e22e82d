"""A := alpha*x*x^T + A, or alpha*x*x^H + A for a Hermitian matrix."""

from __future__ import annotations

from collections.abc import Iterator, Mapping
from dataclasses import dataclass, replace
from math import isqrt
from typing import Any, ClassVar

import numpy as np

from demilune.arithmetic import Arithmetic, conjugate, convert
from demilune.index import Expr
from demilune.keys import RUNTIME, key
from demilune.layouts import Layout
from demilune.operations.base import Context, Operation, Scalar, Strip, factor_text, is_unit, scaled
from demilune.plan.tree import Constant, Number, Parameter
from demilune.schedules import LoopOrder


@dataclass(frozen=True)
class RankOne(Operation):
    """The update of the stored half with the outer product of a vector."""

    name: ClassVar[str] = "rank1"
    rank: ClassVar[int] = 2
    summary: ClassVar[str] = "update with the outer product of a vector"
    formula: ClassVar[str] = "A := alpha*x*x^T + A (x*x^H if Hermitian)"
    result: ClassVar[str] = "a"
    unread: ClassVar[tuple[str, ...]] = ("x",)
    why: ClassVar[str] = "an update changes each stored element once, and there is no sum to gather"
    sums: ClassVar[bool] = False
    mirrored: ClassVar[bool] = False

    alpha: Scalar = key(1, "factor of x*x^T", words=(RUNTIME,), number=True)

    @classmethod
    def accepts(cls, order: LoopOrder) -> bool:
        return order.scatter and not order.gather

    def problems(self, arithmetic: Arithmetic) -> Iterator[tuple[str, str]]:
        yield from super().problems(arithmetic)
        if self.alpha == 0:
            yield "alpha", "alpha = 0 leaves no update to do; use another number"
        if arithmetic.compensated:
            yield "accumulator", "an update has no sum whose errors could be compensated"

    def parameters(
        self,
        matrix: Parameter,
        layout: Layout,
        arithmetic: Arithmetic,
        order: LoopOrder,
        threads: int,
    ) -> tuple[Parameter, ...]:
        complex = arithmetic.type.complex
        alpha = self.scalar_parameter(
            "alpha", "factor of the update", arithmetic, complex and not layout.hermitian
        )
        return (
            *alpha,
            *self.vector_parameters("x", "the vector x", layout, arithmetic.real, complex, "in"),
            replace(matrix, use="inout"),
            *layout.after(),
        )

    def _alpha(self, c: Context) -> Number:
        return self.scalar(c, "alpha", c.parts == 2 and not c.layout.hermitian)

    def prologue(self, c: Context) -> None:
        self.name_vector(c, "x", c.arithmetic.real)
        if self.alpha == RUNTIME:
            c.w.when_equal(self._alpha(c), 0, c.w.finish)

    def _columns(self, c: Context) -> bool:
        return c.layout.order == "column-major"

    def open(self, c: Context, k: Expr) -> Strip:
        # Of a Hermitian matrix, A(m,k) += x(m) * (alpha*conj(x(k))) where strips are columns,
        # and A(k,m) += conj(x(m)) * (alpha*x(k)) where they are rows.
        x = c.term("x", k)
        alpha = self._alpha(c)
        if c.parts > 1 and not is_unit(alpha):
            x = c.w.bind("xk", x)
        if c.layout.hermitian and self._columns(c):
            x = conjugate(x)
        return Strip(k, factor=c.w.bind("t", scaled(c, alpha, x)))

    def element(self, c: Context, m: Expr, strips: list[tuple[Strip, Expr]], own: bool) -> None:
        x = c.term("x", m)
        if len(strips) > 1 or c.reused:
            x = c.w.bind("xm", x)
        if c.layout.hermitian and not self._columns(c):
            x = conjugate(x)
        for strip, place in strips:
            old = c.matrix(place, strip.active)
            c.put_matrix(strip, place, c.arithmetic.multiply_add(old, x, strip.factor))

    def diagonal(self, c: Context, strip: Strip, *places: Expr) -> None:
        (place,) = places
        x = c.term("x", strip.k)
        x = c.w.bind("xk", x) if c.parts > 1 else x
        if c.layout.hermitian and not self._columns(c):
            x = conjugate(x)
        total = c.arithmetic.multiply_add(c.on_diagonal(place), x, strip.factor)
        stored = convert(total, c.arithmetic.real)
        if c.layout.hermitian:  # the imaginary part is not read, and set to zero
            stored = (*stored, Constant(0.0, c.arithmetic.real))
        c.w.store("a", place, stored)

    def statement(self, c: Context, backward: bool, block: int) -> tuple[str, ...]:
        if c.layout.hermitian:
            product = "x(i)*(alpha*conj(x(j)))" if self._columns(c) else "conj(x(j))*(alpha*x(i))"
        else:
            product = "x(i)*(alpha*x(j))" if self._columns(c) else "x(j)*(alpha*x(i))"
        lines = [f"Each stored element becomes A(i,j) + {product}, with alpha*x rounded first."]
        if c.layout.hermitian:
            lines.append(
                "The imaginary part of the diagonal is not read and becomes 0; alpha is real."
            )
        return tuple(lines)

    def described(self, layout: Layout) -> str:
        right = "x^H" if layout.hermitian else "x^T"
        return f"A := {factor_text(self.alpha, 'alpha')}x*{right} + A"

    def reference(self, a: Any, x: Any, y: Any, alpha: Any, beta: Any, hermitian: bool) -> Any:
        return a + alpha * np.outer(x, x.conj() if hermitian else x)

    def roundings(self, n: int, parts: int) -> int:
        return 3 * parts

    def limit(self, n: int, digits: int, scalars: Mapping[str, int]) -> int:
        # alpha*M^2 + M <= 2^digits - 1
        alpha = scalars.get("alpha", 1)
        return (isqrt(1 + 4 * alpha * (2**digits - 1)) - 1) // (2 * alpha)

    def limit_rule(self, digits: int) -> str:
        alpha = "|alpha|*" if self.alpha == RUNTIME else f"{abs(int(self.alpha))}*"
        return f"{alpha.removeprefix('1*')}M^2 + M <= 2^{digits} - 1"

    def narrowest(self, arithmetic: Arithmetic) -> str:
        return arithmetic.real
