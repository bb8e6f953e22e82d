"""Packed storage: the strips one behind the other, without gaps."""

from __future__ import annotations

from dataclasses import dataclass
from typing import ClassVar

from demilune.index import Expr, quotient
from demilune.layouts.base import Group, Layout, plain_group


@dataclass(frozen=True)
class Packed(Layout):
    """n(n+1)/2 elements, nothing else."""

    name: ClassVar[str] = "packed"
    rank: ClassVar[int] = 2
    summary: ClassVar[str] = "the strips one behind the other, n(n+1)/2 elements"
    source: ClassVar[str] = "LAPACK Users' Guide, 3rd ed. (1999), Packed Storage"

    def place(self, k: Expr, m: Expr) -> Expr:
        n = self.size
        if self.tail:
            return quotient(k, 2 * n - 1 - k, divisor=2) + m
        return quotient(k, k + 1, divisor=2) + m

    def groups(self) -> tuple[Group, ...]:
        return (plain_group(self.place, self.tail, self.size),)

    @property
    def extent(self) -> Expr:
        return quotient(self.size, self.size + 1, divisor=2)

    @property
    def formula(self) -> tuple[str, ...]:
        first, second = ("i", "j") if self.order == "column-major" else ("j", "i")
        n = "n" if self.size.constant is None else str(self.size.constant)
        where = "i <= j" if self.triangle == "upper" else "i >= j"
        start = f"{second}*(2*{n} - {second} - 1)/2" if self.tail else f"{second}*({second} + 1)/2"
        return (f"A(i,j) with {where} is a[{first} + {start}]",)
