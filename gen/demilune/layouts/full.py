"""Full storage with a leading dimension: strip k starts at k*ld."""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass
from typing import ClassVar

from demilune.index import Compare, Expr, expr, maximum, symbol
from demilune.keys import RUNTIME, key
from demilune.layouts.base import Group, Rectangular, Size, plain_group

LD = symbol("ld")


@dataclass(frozen=True)
class Full(Rectangular):
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

    @property
    def rows(self) -> Expr:
        return self.size
