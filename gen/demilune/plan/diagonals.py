"""Visits rows with lanes: neighbouring rows side by side, where diagonals lie at a fixed stride.

Each lane is a row with one sum, in the order that the row alone would have: the results are those
of the same loop order without lanes, bit for bit. Rows at both ends, whose neighbours are cut off,
are visited one by one.
"""

from __future__ import annotations

from dataclasses import replace
from typing import TYPE_CHECKING

from demilune.index import Expr, expr, maximum, minimum, quotient, symbol
from demilune.layouts import Diagonal, Group, Piece
from demilune.operations import Context, Strip
from demilune.plan.walk import Walk

if TYPE_CHECKING:
    from demilune.spec import Spec

WRITTEN_OUT = 8
"""Diagonals on either side up to which their visits are written one behind the other."""


class DiagonalWalk(Walk):
    """The walk over the rows of a band, lanes of them at a time, always forward."""

    def __init__(self, spec: Spec, context: Context) -> None:
        super().__init__(spec, context)
        self.alone = replace(context, arithmetic=replace(context.arithmetic, lanes=1))

    def statement(self) -> tuple[str, ...]:
        lanes = self.c.arithmetic.lanes
        return (
            *super().statement(),
            f"{lanes} rows are worked on side by side, each in the order that it would have alone: "
            "the results are those without lanes, bit for bit.",
        )

    def _group(self, group: Group, by: dict[str, Expr]) -> None:
        group = group.substitute(by)
        width = self.layout.diagonals
        assert width is not None
        w, lanes, n = self.w, self.c.arithmetic.lanes, group.high
        size = lanes * self.block
        begin = w.integer("begin", minimum(width, n))
        inside = maximum(0, n - 2 * width)
        end = w.integer("end", begin + size * quotient(inside, divisor=size))
        self._each_alone(group, expr(0), begin)
        w.loop("k", begin, end, lambda k: self._rows(group, k), step=size)
        self._each_alone(group, end, n)

    def _each_alone(self, group: Group, low: Expr, high: Expr) -> None:
        wide, self.c = self.c, self.alone
        self.c.totals = wide.totals
        self._single(group, low, high)
        self.c = wide

    def _rows(self, group: Group, k: Expr) -> None:
        """Rows k to k + lanes * block - 1."""
        width, lanes = self.layout.diagonals, self.c.arithmetic.lanes
        assert width is not None
        first = symbol("k")
        rows = [self.operation.open(self.c.wide(), k + lanes * b) for b in range(self.block)]
        for one in self._row(group):
            if isinstance(one, Diagonal):
                place = one.place(first)
                apart = place.substitute({"k": first + 1}) - place
                step = replace(self.c.wide(), stride=apart, dense=apart == width + 1)
                for row in rows:
                    self.operation.diagonal(step, row, one.place(row.k))
                continue
            # The whole row, not cut off: width elements before or behind the diagonal.
            ahead = one.high(first) == first
            self._neighbours(one, rows, width, ahead)
        for row in rows:
            self.operation.close(self.c.wide(), row)

    def _row(self, group: Group) -> tuple[Piece | Diagonal, ...]:
        return self.c.order.visits(group, self.operation.mirrored)

    def _neighbours(self, piece: Piece, rows: list[Strip], width: Expr, ahead: bool) -> None:
        first, far = symbol("k"), symbol("d")
        step = piece.at(first + 1, first + 1 + far) - piece.at(first, first + far)
        context = replace(self.c.wide(), stride=step, dense=step == width + 1)

        def one(d: Expr) -> None:
            away = d - width if ahead else d + 1
            for row in rows:
                m = row.k + away
                here = [(row, piece.at(row.k, m))]
                self.operation.element(context, m, here, piece.own)

        if width.constant is not None and width.constant <= WRITTEN_OUT:
            for d in range(width.constant):
                one(expr(d))
        else:
            self.w.loop("d", expr(0), width, one)
