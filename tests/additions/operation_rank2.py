"""A := alpha*x*y^T + alpha*y*x^T + A."""

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
from demilune.operations.base import Context, Operation, Scalar, Strip, scaled
from demilune.plan.tree import Constant, Number, Parameter
from demilune.schedules import LoopOrder


@dataclass(frozen=True)
class RankTwo(Operation):
    """The update of the stored half with the outer products of two vectors."""

    name: ClassVar[str] = "rank2"
    rank: ClassVar[int] = 4
    summary: ClassVar[str] = "update with the outer products of two vectors"
    formula: ClassVar[str] = "A := alpha*x*y^T + alpha*y*x^T + A (Hermitian: x*y^H + y*x^H)"
    result: ClassVar[str] = "a"
    unread: ClassVar[tuple[str, ...]] = ("x", "y")
    why: ClassVar[str] = "an update changes each stored element once, and there is no sum to gather"
    sums: ClassVar[bool] = False
    mirrored: ClassVar[bool] = False

    alpha: Scalar = key(1, "factor of the update; real", words=(RUNTIME,), number=True)
    incy: int | str = key(
        1, "stride of y", words=(RUNTIME,), whole=True, nonzero=True, minimum=-1024, maximum=1024
    )

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
        complex, real = arithmetic.type.complex, arithmetic.real
        return (
            *self.scalar_parameter("alpha", "factor of the update", arithmetic, False),
            *self.vector_parameters("x", "the vector x", layout, real, complex, "in"),
            *self.vector_parameters("y", "the vector y", layout, real, complex, "in"),
            replace(matrix, use="inout"),
            *layout.after(),
        )

    def prologue(self, c: Context) -> None:
        self.name_vector(c, "x", c.arithmetic.real)
        self.name_vector(c, "y", c.arithmetic.real)
        if self.alpha == RUNTIME:
            c.w.when_equal(self.scalar(c, "alpha", False), 0, c.w.finish)

    def _pair(self, c: Context, i: Expr, name: str) -> tuple[Number, Number]:
        """x(i) and y(i), in locals if they are used more than once."""
        x, y = c.term("x", i), c.term("y", i)
        return (c.w.bind(f"x{name}", x), c.w.bind(f"y{name}", y)) if c.parts > 1 else (x, y)

    def open(self, c: Context, k: Expr) -> Strip:
        # Where strips are columns A(m,k) += x(m)*conj(alpha*y(k)) + y(m)*conj(alpha*x(k));
        # where they are rows the conjugates stand on the other side.
        x, y = self._pair(c, k, "k")
        if c.layout.hermitian and c.layout.order == "column-major":
            x, y = conjugate(x), conjugate(y)
        alpha = self.scalar(c, "alpha", False)
        t, u = c.w.bind("t", scaled(c, alpha, y)), c.w.bind("u", scaled(c, alpha, x))
        return Strip(k, factor=(*t, *u))

    def _updated(self, c: Context, strip: Strip, old: Number, x: Number, y: Number) -> Number:
        if c.layout.hermitian and c.layout.order == "row-major":
            x, y = conjugate(x), conjugate(y)
        t, u = strip.factor[: c.parts], strip.factor[c.parts :]
        first = c.arithmetic.multiply_add(old, x, t)
        return convert(c.arithmetic.multiply_add(first, y, u), c.arithmetic.real)

    def element(self, c: Context, m: Expr, strips: list[tuple[Strip, Expr]], own: bool) -> None:
        x, y = self._pair(c, m, "m")
        for strip, place in strips:
            old = c.matrix(place, strip.active)
            c.put_matrix(strip, place, self._updated(c, strip, old, x, y))

    def diagonal(self, c: Context, strip: Strip, *places: Expr) -> None:
        (place,) = places
        x, y = self._pair(c, strip.k, "k")
        stored = self._updated(c, strip, c.on_diagonal(place), x, y)
        if c.layout.hermitian:  # the imaginary part is not read, and set to zero
            stored = (*stored[:1], Constant(0.0, c.arithmetic.real))
        c.w.store("a", place, stored)

    def statement(self, c: Context, backward: bool, block: int) -> tuple[str, ...]:
        i, j = ("i", "j") if c.layout.order == "column-major" else ("j", "i")
        bar = "conj" if c.layout.hermitian else ""
        return (
            f"Each stored element becomes (A(i,j) + x({i})*(alpha*{bar}(y({j})))) + "
            f"y({i})*(alpha*{bar}(x({j}))), with alpha*x and alpha*y rounded first.",
        )

    def reference(self, a: Any, x: Any, y: Any, alpha: Any, beta: Any, hermitian: bool) -> Any:
        p, q = (x.conj(), y.conj()) if hermitian else (x, y)
        return a + alpha * np.outer(x, q) + alpha * np.outer(y, p)

    def roundings(self, n: int, parts: int) -> int:
        return 6 * parts

    def limit(self, n: int, digits: int, scalars: Mapping[str, int]) -> int:
        # 2*alpha*M^2 + M <= 2^digits - 1
        alpha = scalars.get("alpha", 1)
        return (isqrt(1 + 8 * alpha * (2**digits - 1)) - 1) // (4 * alpha)

    def limit_rule(self, digits: int) -> str:
        alpha = "|alpha|*" if self.alpha == RUNTIME else f"{abs(int(self.alpha))}*"
        return f"2*{alpha.removeprefix('1*')}M^2 + M <= 2^{digits} - 1"

    def narrowest(self, arithmetic: Arithmetic) -> str:
        return arithmetic.real
