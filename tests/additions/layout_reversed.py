"""Packed storage with the last strip first, as programs that grow a matrix from its end keep it."""

from __future__ import annotations

from dataclasses import dataclass
from typing import ClassVar

from demilune.index import Expr, quotient
from demilune.layouts.base import Group, Layout, plain_group


@dataclass(frozen=True)
class ReversedPacked(Layout):
    """n(n+1)/2 elements; strip n-1 comes first, strip 0 last."""

    name: ClassVar[str] = "reversed"
    rank: ClassVar[int] = 7
    summary: ClassVar[str] = "the strips one behind the other, the last strip first"
    source: ClassVar[str] = "our own"

    def start(self, k: Expr) -> Expr:
        """The storage index of the first element of strip k."""
        n = self.size
        if self.tail:
            return quotient(n - k, n - k - 1, divisor=2)
        return self.extent - quotient(k + 1, k + 2, divisor=2)

    def groups(self) -> tuple[Group, ...]:
        def place(k: Expr, m: Expr) -> Expr:
            return self.start(k) + (m - k if self.tail else m)

        return (plain_group(place, self.tail, self.size),)

    @property
    def extent(self) -> Expr:
        return quotient(self.size, self.size + 1, divisor=2)

    @property
    def formula(self) -> tuple[str, ...]:
        first, second = ("i", "j") if self.order == "column-major" else ("j", "i")
        n = "n" if self.size.constant is None else str(self.size.constant)
        where = "i <= j" if self.triangle == "upper" else "i >= j"
        if self.tail:
            index = f"({n} - {second})*({n} - {second} - 1)/2 + {first} - {second}"
        else:
            index = f"{n}*({n} + 1)/2 - ({second} + 1)*({second} + 2)/2 + {first}"
        return (f"A(i,j) with {where} is a[{index}]",)
