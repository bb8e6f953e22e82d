"""Visits the strips of a band with lanes: every step of a block at a multiple of the lanes.

A block of strips is a slanted stripe. Steps lie on a grid that begins at the block's first row, so
that what one block stores in the result the next one loads again just as it is; at both ends of
the stripe each strip has only some of a step's lanes. Blocks whose steps would reach beyond the
matrix are visited as those of other layouts are.
"""

from __future__ import annotations

from dataclasses import replace
from functools import partial

from demilune.index import Compare, Expr, expr, maximum, minimum, quotient
from demilune.layouts import Group, Piece
from demilune.operations import Context, Strip
from demilune.plan.lanes import LaneWalk


class BandWalk(LaneWalk):
    """The walk over the strips of a band."""

    inside = False
    """Whether the steps of the block that is visited all lie within the matrix."""

    @property
    def width(self) -> Expr:
        """The half-bandwidth."""
        width = self.layout.diagonals
        assert width is not None
        return width

    def _blocks(self, group: Group, low: Expr, high: Expr) -> None:
        w, lanes, b = self.w, self.c.arithmetic.lanes, self.block
        if b % lanes:
            super()._blocks(group, low, high)
            return
        reach = w.integer("reach", lanes * quotient(self.width + lanes - 1, divisor=lanes))
        if self.whole_last:
            beyond = b * quotient(maximum(0, reach - low) + b - 1, divisor=b)
            middle = w.integer("middle", minimum(high, low + beyond))
        else:
            middle = low + b * quotient(maximum(0, group.high - reach - low), divisor=b)
            middle = w.integer("middle", middle)
        if self.whole_last:
            super()._blocks(group, low, middle)
        self.inside = True
        first, last = (middle, high) if self.whole_last else (low, middle)
        super()._blocks(group, first, last)
        self.inside = False
        if not self.whole_last:
            super()._blocks(group, middle, high)

    def _piece(self, piece: Piece, strips: list[Strip], by: dict[str, Expr]) -> None:
        if not self.inside:
            super()._piece(piece, strips, by)
            return
        w, lanes, b, kd = self.w, self.c.arithmetic.lanes, self.block, self.width
        k = strips[0].k
        named = [self._named(piece, strip) for strip in strips]

        def step(c: Context, m: Expr, offset: Expr) -> None:
            here = []
            for count, (strip, place) in enumerate(named):
                low, high = self._rows(count)
                begin = maximum(0, minimum(lanes, low - offset))
                end = maximum(0, minimum(lanes, high - offset))
                active = None if (begin.constant, end.constant) == (0, lanes) else (begin, end)
                if (end - begin).constant is None or (end - begin).constant_or(0) > 0:
                    here.append((replace(strip, active=active), place(m)))
            if here:
                self.operation.element(c, m, here, piece.own)

        def ragged(offset: Expr) -> None:
            step(self.c.wide(), k + offset, offset)

        def full(c: Context, m: Expr) -> None:
            self.operation.element(c, m, [(strip, place(m)) for strip, place in named], piece.own)

        # In strip c the offsets from k that have elements: lower c + 1 to c + kd, upper c - kd to
        # c - 1. All strips have those between b and kd, or -kd + b - 1 and 0.
        count = quotient(maximum(0, kd + 1 - b), divisor=lanes)
        span = w.integer("span", lanes * count) if count.constant is None else lanes * count
        if self.whole_last:
            far = [-span - lanes * (i + 1) for i in reversed(range(-(-(b + lanes - 2) // lanes)))]
            low, high = k - span, k
        else:
            far = [span + b + lanes * i for i in range(-(-(b + lanes - 2) // lanes))]
            low, high = k + b, k + b + span
        w.comment("the slanted end of the stripe, of which each strip has its own part")
        for offset in far:
            edge = self._rows(b - 1)[1] if not self.whole_last else -self._rows(0)[0]
            near = offset if not self.whole_last else -(offset + lanes)
            self.w.when_known(Compare(near, "<", edge), partial(ragged, offset))
        if (high - low).constant != 0:
            w.comment(f"what all {b} strips have")
        self.c.each(low, high, full, steps=self.steps, fills=True)
        w.comment("the square on the diagonal, of which each strip has its own part")
        for start in range(0, b, lanes):
            ragged(expr(start))

    def _rows(self, count: int) -> tuple[Expr, Expr]:
        """From the first row of a block: where strip ``count`` of it begins and ends."""
        if self.whole_last:
            return count - self.width, expr(count)
        return expr(count + 1), count + 1 + self.width
