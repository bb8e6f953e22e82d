"""Visits strips with lanes: neighbouring elements of a strip side by side.

Each strip has a sum in every lane. At its end they are folded to one, and the diagonal element
is added last. Blocks of strips are closed together, one strip a lane.
"""

from __future__ import annotations

from dataclasses import replace
from typing import TypeVar

from demilune.index import Expr, expr, maximum, minimum
from demilune.layouts import Diagonal, Group, Piece
from demilune.operations import Strip
from demilune.plan.walk import Named, Walk

T = TypeVar("T")


class LaneWalk(Walk):
    """The walk over strips whose elements are worked on lanes at a time, always forward."""

    def _group(self, group: Group, by: dict[str, Expr]) -> None:
        own = group.own
        # Where strips grow, those that fill no block come first, when they are short.
        self.whole_last = len(own) > 1 and isinstance(own[-1], Diagonal)
        super()._group(group, by)

    def _strips(self, group: Group, ks: list[Expr]) -> None:
        strips = [self.operation.open(self.c, k) for k in ks]
        wide = [self._widened(strip) for strip in strips]
        diagonal = None
        for one in group.own:
            if isinstance(one, Diagonal):
                diagonal = one
            else:
                self._nest(one.around, lambda by, one=one: self._piece(one, wide, by))
        size = min(len(ks), self.c.arithmetic.lanes)
        if not self.c.order.gather or len(ks) == 1 or len(ks) % size or size & (size - 1):
            size = 1
        for start in range(0, len(ks), size):
            self._close(strips[start : start + size], wide[start : start + size], diagonal)

    def _widened(self, strip: Strip) -> Strip:
        """The strip as its lanes see it: its factor in all of them, and a sum in each."""
        w, wide, parts = self.w, self.c.wide(), self.c.parts
        factor = w.bind("tk", wide.spread(strip.factor), parts) if strip.factor else ()
        total = w.running("sum", wide.spread(strip.sum_from), parts) if strip.sum else ()
        return Strip(strip.k, factor=factor, sum=total)

    def _close(self, strips: list[Strip], wide: list[Strip], diagonal: Diagonal | None) -> None:
        """Ends some strips: one alone, or several with one in each lane."""
        size, lanes = len(strips), self.c.arithmetic.lanes
        c, strip = self.c, strips[0]
        if size > 1:
            c = self.c.wide((expr(0), expr(size)) if size < lanes else None)
            strip = Strip(strip.k)
        if wide[0].sum:
            total = self.c.folded(*(one.sum for one in wide))
            strip = replace(strip, sum=self.w.running("acc", total, self.c.parts))
        if diagonal is not None:
            self.operation.diagonal(c, strip, *(diagonal.place(one.k) for one in strips))
        self.operation.close(c, strip)

    def _parts(self, parts: list[T], piece: Piece) -> list[T]:
        # The square on the diagonal comes last, so that its results stay in registers until the
        # strips are closed.
        return parts if self.whole_last else [parts[1], parts[2], parts[0]]

    def _apart(
        self, piece: Piece, runs: list[tuple[Named, Expr, Expr]], reach: int | None
    ) -> None:
        lanes = self.c.arithmetic.lanes
        if reach is None or reach > 2 * lanes:
            super()._apart(piece, runs, reach)
            return
        base = runs[0][0][0].k
        square = all(
            (low - base).constant is not None and 0 <= (high - base).constant_or(-1) <= len(runs)
            for _, low, high in runs
        )
        if square:
            reach = len(runs)
        else:
            base = min((low for _, low, _ in runs), key=lambda low: (low - runs[0][1]).constant or 0)
        for start in range(0, reach, lanes):
            m = base + start
            here = []
            for (strip, place), low, high in runs:
                begin = maximum(0, minimum(lanes, low - m))
                end = high - m if reach <= lanes else minimum(lanes, high - m)
                end = maximum(0, end)
                if (end - begin).constant is None or (end - begin).constant_or(0) > 0:
                    here.append((replace(strip, active=(begin, end)), place(m)))
            if not here:
                continue
            ends = [strip.active[1] for strip, _ in here if strip.active]
            most = expr(min(lanes, reach - start)) if square else maximum(*ends)
            step = self.c.wide(None if most.constant == lanes else (expr(0), most))
            self.operation.element(step, m, here, piece.own)
