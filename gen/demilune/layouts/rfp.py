"""Rectangular full packed storage: the triangle folded into a rectangle without gaps.

Two families of strips share one rectangle: those of the half of the triangle that keeps its
shape, and those of the small triangle that is folded beside it. With ``half`` and ``even`` one
formula serves odd and even n.
"""

from __future__ import annotations

from dataclasses import dataclass, replace
from typing import ClassVar

from demilune.index import Expr, expr, quotient, symbol
from demilune.keys import key
from demilune.layouts.base import Group, Layout, Piece, Place, from_to, plain_group

COLUMNS, EVEN, ROWS, CUT = (symbol(name) for name in ("columns", "even", "rows", "cut"))


@dataclass(frozen=True)
class RectangularFullPacked(Layout):
    """n(n+1)/2 elements in a rectangle; normal or transposed."""

    name: ClassVar[str] = "rfp"
    rank: ClassVar[int] = 4
    summary: ClassVar[str] = "rectangular full packed: the triangle folded into a rectangle"
    source: ClassVar[str] = (
        "Gustavson, Wasniewski, Dongarra, Langou, ACM TOMS 37(2), 2010: rectangular full packed"
    )
    orders: ClassVar[tuple[str, ...]] = ("column-major",)

    transposed: bool = key(False, "whether the rectangle is stored transposed", flag=True)

    @property
    def integers(self) -> tuple[tuple[str, Expr], ...]:
        # `even` is 1 for even n and 0 for odd n. `cut` is the index at which the triangle is
        # folded: the large part of the rectangle holds its columns in their old shape, the small
        # part is the triangle that is laid beside it.
        lower = self.triangle == "lower"
        return (
            ("columns", quotient(self.size + 1, divisor=2)),
            ("even", self.size + 1 - 2 * COLUMNS),
            ("rows", self.size + EVEN),
            ("cut", COLUMNS if lower else COLUMNS - 1 + EVEN),
        )

    def _index(self, row: Expr, column: Expr) -> Expr:
        if self.transposed:
            return column + row * COLUMNS
        return row + column * ROWS

    def _large(self, column: Expr, row: Expr) -> Expr:
        """The place of element (row, column) of the triangle in the large part."""
        if self.triangle == "lower":
            return self._index(row + EVEN, column)
        return self._index(row, column - CUT)

    def _small(self, outer: Expr, inner: Expr) -> Expr:
        """The place of an element of the small part; ``outer`` counts the rectangle's columns."""
        if self.triangle == "lower":
            return self._index(inner - CUT, outer - CUT + 1 - EVEN)
        return self._index(inner + CUT + 1, outer)

    def groups(self) -> tuple[Group, ...]:
        cut, n = CUT, self.size
        large: Place = self._large
        small: Place = self._small
        if self.transposed:  # the runs are the rectangle's rows, so the two indices change places
            large, small = _swapped(large), _swapped(small)
        low = from_to(lambda k: 0, lambda k: cut)
        high = from_to(lambda k: cut, lambda k: n)
        # Strips of the large part end (upper) or begin (lower) with the diagonal, those of the
        # small part the other way round; transposing swaps both.
        tail = (self.triangle == "lower") != self.transposed
        if self.triangle == "lower":
            across = Piece(self.transposed, place=large, **low)
            inner = plain_group(small, not tail, n, cut)
            below_cut = from_to(lambda k: cut, lambda k: k)
            first, diagonal, last = inner.row
            assert isinstance(first, Piece)
            return (
                plain_group(large, tail, n, 0, cut),
                Group(cut, n, (across, replace(first, **below_cut), diagonal, last)),
            )
        across = Piece(self.transposed, place=large, **high)
        inner = plain_group(small, not tail, cut)
        return (
            Group(expr(0), cut, (*inner.row, across)),
            plain_group(large, tail, n, cut, n),
        )

    @property
    def extent(self) -> Expr:
        return quotient(self.size, self.size + 1, divisor=2)

    @property
    def formula(self) -> tuple[str, ...]:
        n = "n" if self.size.constant is None else str(self.size.constant)
        place = "column + row*columns" if self.transposed else f"row + column*({n} + even)"
        lines = [
            f"columns = ({n} + 1)/2 rounded down; even = 1 if {n} is even, else 0",
            f"the rectangle's element (row, column) is a[{place}]",
        ]
        bar = "conj " if self.hermitian else ""
        if self.triangle == "lower":
            lines += [
                "A(i,j) with i >= j and j < columns is at (i + even, j)",
                f"{bar}A(i,j) with i >= j >= columns is at (j - columns, i - columns + 1 - even)",
            ]
        else:
            lines += [
                "cut = columns - 1 + even",
                "A(i,j) with i <= j and j >= cut is at (i, j - cut)",
                f"{bar}A(i,j) with i <= j < cut is at (j + cut + 1, i)",
            ]
        if self.transposed and self.hermitian:
            lines.append("and every element is stored conjugated, as the rectangle is transposed")
        return tuple(lines)


def _swapped(place: Place) -> Place:
    return lambda k, m: place(m, k)
