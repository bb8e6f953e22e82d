"""Band storage: the strips cut at the half-bandwidth kd, each in its own column of an array."""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass
from typing import Any, ClassVar

import numpy as np
import numpy.typing as npt

from demilune.index import Compare, Expr, expr, maximum, minimum, symbol
from demilune.keys import RUNTIME, key
from demilune.layouts.base import Diagonal, Group, Piece, Rectangular, Size, from_to
from demilune.plan.tree import Parameter

KD, LD = symbol("kd"), symbol("ld")


@dataclass(frozen=True)
class Band(Rectangular):
    """kd off-diagonals and the diagonal; the corners of the array are never touched."""

    name: ClassVar[str] = "band"
    whole: ClassVar[bool] = False
    rank: ClassVar[int] = 3
    summary: ClassVar[str] = "kd off-diagonals and the diagonal, ld >= kd + 1 elements a strip"
    source: ClassVar[str] = "LAPACK Users' Guide, 3rd ed. (1999), Band Storage"

    kd: Size = key(
        RUNTIME, "half-bandwidth: off-diagonals that are stored",
        words=(RUNTIME,), whole=True, minimum=0, maximum=2**20,
    )  # fmt: skip
    ld: Size | None = key(
        None, "leading dimension in elements; kd + 1 if kd is fixed",
        words=(RUNTIME,), whole=True, minimum=1, maximum=2**20,
    )  # fmt: skip

    @property
    def width(self) -> Expr:
        """kd, as a constant where it is fixed."""
        return KD if self.kd == RUNTIME else expr(int(self.kd))

    @property
    def leading(self) -> Expr:
        """The leading dimension."""
        if self.ld is None:
            return LD if self.kd == RUNTIME else self.width + 1
        return LD if self.ld == RUNTIME else expr(int(self.ld))

    def groups(self) -> tuple[Group, ...]:
        n, kd, ld = self.size, self.width, self.leading

        def place(k: Expr, m: Expr) -> Expr:
            return k * ld + m - k if self.tail else k * ld + kd + m - k

        low = from_to(lambda k: maximum(0, k - kd), lambda k: k)
        high = from_to(lambda k: k + 1, lambda k: minimum(n, k + kd + 1))
        row = (
            Piece(not self.tail, place=place, **low),
            Diagonal(lambda k: place(k, k)),
            Piece(self.tail, place=place, **high),
        )
        return (Group(expr(0), n, row),)

    @property
    def extent(self) -> Expr:
        last = 1 if self.tail else self.width + 1
        return (self.size - 1) * self.leading + last

    @property
    def diagonals(self) -> Expr:
        return self.width

    @property
    def known_shape(self) -> bool:
        return self.width.constant is not None

    @property
    def assumes(self) -> str:
        return "kd = 2" if self.width.constant is None else ""

    @property
    def formula(self) -> tuple[str, ...]:
        ld = "ld" if self.leading.constant is None else str(self.leading.constant)
        kd = "kd" if self.width.constant is None else str(self.width.constant)
        first, second = ("i", "j") if self.order == "column-major" else ("j", "i")
        where = f"0 <= j - i <= {kd}" if self.triangle == "upper" else f"0 <= i - j <= {kd}"
        offset = "" if self.tail else f"{kd} + "
        return (f"A(i,j) with {where} is a[{offset}{first} - {second} + {second}*{ld}]",)

    def sizes(self) -> tuple[Parameter, ...]:
        if self.width.constant is not None:
            return ()
        return (Parameter("kd", "size", "half-bandwidth: off-diagonals that are stored"),)

    def rules(self) -> Iterator[tuple[Compare, str, str]]:
        if self.width.constant is None:
            yield Compare(self.width, "<", expr(0)), "kd", "at least 0"
        if self.leading.constant is None:
            yield Compare(self.leading, "<", self.width + 1), "ld", "at least kd + 1"

    def problems(self) -> Iterator[tuple[str, str]]:
        yield from super().problems()
        if self.kd != RUNTIME and self.n != RUNTIME and int(self.kd) >= int(self.n):
            yield (
                "kd",
                (
                    f"a matrix with n = {self.n} has at most {int(self.n) - 1} off-diagonals, "
                    f"not {self.kd}"
                ),
            )
        if self.ld not in (None, RUNTIME):
            if self.kd == RUNTIME:
                yield "ld", 'a fixed leading dimension needs a fixed kd; use ld = "runtime"'
            elif int(self.ld or 0) < int(self.kd) + 1:
                yield (
                    "ld",
                    f"the leading dimension {self.ld} is less than kd + 1 = {int(self.kd) + 1}",
                )

    @property
    def rows(self) -> Expr:
        return self.width + 1

    def sizes_of_array(self, rows: int) -> dict[str, Any]:
        return {"kd": rows - 1} if self.width.constant is None else {}

    def sizes_of_matrix(self, matrix: npt.NDArray[Any]) -> dict[str, Any]:
        if self.width.constant is not None:
            return {}
        i, j = np.nonzero(matrix)
        distance = j - i if self.triangle == "upper" else i - j
        return {"kd": int(distance.max(initial=0))}

    def sample_width(self, n: int, generator: np.random.Generator | None) -> dict[str, Any]:
        if self.width.constant is not None:
            return {}
        widest = max(0, n - 1)
        if generator is None:
            return {"kd": min(2, widest)}
        return {"kd": int(generator.integers(0, widest + 2))}
