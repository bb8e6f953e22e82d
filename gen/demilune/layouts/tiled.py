"""Tiled storage: the tiles of the triangle one behind the other, the last ones ragged."""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass
from typing import ClassVar

from demilune.index import Expr, Term, expr, minimum, quotient, symbol
from demilune.keys import key
from demilune.layouts.base import Diagonal, Group, Layout, Piece, Place, Range, from_to

P, Q = symbol("p"), symbol("q")


@dataclass(frozen=True)
class Tiled(Layout):
    """Square tiles in the order of their strips; a diagonal tile keeps its unused half.

    Tile (p, q) holds the strips with fixed index in tile q, cut to the moving indices of
    tile p; within a tile the strips lie one behind the other.
    """

    name: ClassVar[str] = "tiled"
    grouped: ClassVar[bool] = True
    rank: ClassVar[int] = 5
    summary: ClassVar[str] = "square tiles one behind the other, the last ones ragged"
    source: ClassVar[str] = "our own; tile storage is common practice in dense linear algebra"

    tile: int = key(8, "rows and columns of a tile", whole=True, minimum=1, maximum=4096)

    @property
    def count(self) -> Expr:
        """Tiles in a row."""
        return quotient(self.size + self.tile - 1, divisor=self.tile)

    @property
    def integers(self) -> tuple[tuple[str, Expr], ...]:
        return (("tiles", self.count),)

    def width(self, tile: Expr) -> Expr:
        """Rows of tile row ``tile``: the last one may be ragged."""
        return minimum(self.tile, self.size - tile * self.tile)

    def start(self, p: Expr, q: Expr, width: Expr) -> Expr:
        """The storage index of the first element of tile (p, q), whose strips ``width`` counts."""
        b = self.tile
        if self.tail:
            whole = q * (b * self.size) - b * b * quotient(q, q - 1, divisor=2)
            return whole + (p - q) * b * width
        return b * b * quotient(q, q + 1, divisor=2) + p * b * width

    def groups(self) -> tuple[Group, ...]:
        b, tiles, tail = self.tile, symbol("tiles"), self.tail
        width, start = symbol("width"), symbol("start")  # of the diagonal tile
        height, other = symbol("height"), symbol("other")  # of tile p and of the tile off it
        edge = Q * b + width

        def inside(first: Expr, rows: Term, p: Expr, q: Expr) -> Place:
            """Element (k, m) of the tile (p, q) that begins at ``first``."""
            return lambda k, m: first + (k - q * b) * expr(rows) + m - p * b

        def off(own: bool, low: Expr, high: Expr, tile: tuple[Expr, Expr], rows: Term) -> Piece:
            """The pieces in the tiles p from ``low`` to ``high`` - 1, each tile ``rows`` high."""
            strips = width if own else height if not tail else expr(b)
            integers = (("height", self.width(P)), ("other", self.start(*tile, strips)))
            return Piece(
                own,
                place=inside(other, rows, *tile),
                around=(Range("p", low, high, integers),),
                **from_to(lambda k: P * b, lambda k: P * b + height),
            )

        diagonal = inside(start, width, Q, Q)
        if tail:
            before = off(False, expr(0), Q, (Q, P), width)
            after = off(True, Q + 1, tiles, (P, Q), height)
        else:
            before = off(True, expr(0), Q, (P, Q), b)
            after = off(False, Q + 1, tiles, (Q, P), b)
        row = (
            before,
            Piece(not tail, place=diagonal, **from_to(lambda k: Q * b, lambda k: k)),
            Diagonal(lambda k: diagonal(k, k)),
            Piece(tail, place=diagonal, **from_to(lambda k: k + 1, lambda k: edge)),
            after,
        )
        integers = (("width", self.width(Q)), ("start", self.start(Q, Q, width)))
        return (Group(Q * b, edge, row, (Range("q", expr(0), tiles, integers),)),)

    @property
    def extent(self) -> Expr:
        last = symbol("tiles") - 1
        return self.start(last, last, self.width(last)) + self.width(last) * self.width(last)

    @property
    def extent_words(self) -> str:
        return f"start(t,t) + w(t)^2, with t = (n - 1)/{self.tile} (rounded down),"

    @property
    def period(self) -> int:
        return self.tile

    @property
    def formula(self) -> tuple[str, ...]:
        b = self.tile
        n = "n" if self.size.constant is None else str(self.size.constant)
        moving, fixed = ("i", "j") if self.order == "column-major" else ("j", "i")
        if self.tail:
            start = f"{b}*{n}*q - {b * b}*q*(q - 1)/2 + (p - q)*{b}*w(q)"
        else:
            start = f"{b * b}*q*(q + 1)/2 + p*{b}*w(q)"
        where = "i <= j" if self.triangle == "upper" else "i >= j"
        return (
            f"w(t) = min({b}, {n} - {b}*t) is the width of tile t",
            f"A(i,j) with {where}, in tile p = {moving}/{b}, q = {fixed}/{b} (rounded down), is",
            f"a[start(p,q) + ({fixed} - {b}*q)*w(p) + {moving} - {b}*p]",
            f"start(p,q) = {start}",
        )

    def problems(self) -> Iterator[tuple[str, str]]:
        yield from super().problems()
        if self.n != "runtime" and self.tile > int(self.n):
            yield "tile", f"a tile of {self.tile} is larger than the matrix, n = {self.n}"
