"""Full storage with a leading dimension: strip k starts at k*ld."""

from __future__ import annotations

from collections.abc import Iterator, Mapping
from dataclasses import dataclass
from typing import Any, ClassVar

import numpy as np

from demilune.index import Compare, Environment, Expr, expr, maximum, symbol
from demilune.keys import RUNTIME, key
from demilune.layouts.base import Group, Layout, Size, plain_group
from demilune.plan.tree import Parameter

LD = symbol("ld")


@dataclass(frozen=True)
class Full(Layout):
    """The half of a two-dimensional array; the other half is never touched."""

    name: ClassVar[str] = "full"
    rank: ClassVar[int] = 1
    summary: ClassVar[str] = "a two-dimensional array with a leading dimension"
    source: ClassVar[str] = "BLAS Technical Forum Standard (2001), chapter 2: full storage"

    ld: Size | None = key(
        None, "leading dimension in elements; n if n is fixed",
        words=(RUNTIME,), whole=True, minimum=1, maximum=2**20,
    )  # fmt: skip

    @property
    def leading(self) -> Expr:
        """The leading dimension."""
        if self.ld is None:
            return LD if self.n == RUNTIME else self.size
        return LD if self.ld == RUNTIME else expr(int(self.ld))

    def groups(self) -> tuple[Group, ...]:
        return (plain_group(lambda k, m: k * self.leading + m, self.tail, self.size),)

    @property
    def extent(self) -> Expr:
        return (self.size - 1) * self.leading + self.size

    @property
    def formula(self) -> tuple[str, ...]:
        ld = "ld" if self.leading.constant is None else str(self.leading.constant)
        first, second = ("i", "j") if self.order == "column-major" else ("j", "i")
        return (f"A(i,j) is a[{first} + {second}*{ld}]",)

    def after(self) -> tuple[Parameter, ...]:
        if self.leading.constant is not None:
            return ()
        return (Parameter("ld", "size", "leading dimension of a, in elements"),)

    def rules(self) -> Iterator[tuple[Compare, str, str]]:
        if self.leading.constant is None:
            lowest = maximum(1, self.size)
            yield Compare(self.leading, "<", lowest), "ld", "at least max(1, n)"

    def problems(self) -> Iterator[tuple[str, str]]:
        yield from super().problems()
        if self.ld not in (None, RUNTIME):
            if self.n == RUNTIME:
                yield "ld", 'a fixed leading dimension needs a fixed n; use ld = "runtime"'
            elif int(self.ld or 0) < int(self.n):
                yield "ld", f"the leading dimension {self.ld} is less than n = {self.n}"

    two_dimensional: ClassVar[bool] = True

    @property
    def rows(self) -> Expr:
        return self.size

    def complete(self, sizes: Mapping[str, Any]) -> dict[str, Any]:
        known = dict(sizes)
        if self.leading.constant is None:
            known.setdefault("ld", max(1, known["n"]))
        return known

    def shape(self, env: Environment) -> tuple[int, ...]:
        n, ld = self.size.value(env), self.leading.value(env)
        return (ld, n) if self.order == "column-major" else (n, ld)

    def sample(self, n: int, generator: np.random.Generator | None = None) -> dict[str, Any]:
        sizes: dict[str, Any] = {"n": n}
        if self.leading.constant is None:
            extra = 0 if generator is None else int(generator.integers(0, 4))
            sizes["ld"] = max(1, n) + extra
        return sizes
