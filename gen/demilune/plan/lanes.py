"""Visits strips with lanes: neighbouring elements of a strip side by side.

Each strip has a sum in every lane. At its end they are folded to one, and the diagonal element
is added last. Blocks of strips are closed together, one strip a lane.
"""

from __future__ import annotations

from dataclasses import dataclass, replace
from functools import partial
from typing import TypeVar

from demilune.index import Compare, Expr, choice, expr, maximum, minimum, quotient, symbol
from demilune.layouts import Diagonal, Group, Piece
from demilune.operations import Context, Strip
from demilune.plan.walk import Named, Walk

T = TypeVar("T")


@dataclass(frozen=True)
class Edge:
    """The indices at the end that all strips share which do not fill the lanes of a step."""

    start: Expr
    count: Expr


class LaneWalk(Walk):
    """The walk over strips whose elements are worked on lanes at a time, always forward."""

    edge: Edge | None = None
    """The lanes that are left at the end that all strips share, while blocks are visited."""

    def statement(self) -> tuple[str, ...]:
        lanes, block = self.c.arithmetic.lanes, self.block
        if not self.operation.sums:
            return super().statement()
        scatter = bool(self.operation.scattered) and self.c.order.scatter
        more = f", and {self.operation.scattered}(m) receives A(m,k)*x(k)" if scatter else ""
        lines = [
            f"A strip has {lanes} sums, one a lane, which start at 0. A step takes {lanes} "
            f"neighbouring indices m, the first for lane 0; lane by lane the sum adds "
            f"A(k,m)*x(m){more}. What fills no step is one of fewer lanes.",
        ]
        if block > 1:
            first = (
                f" What they add to {self.operation.scattered}(m) in a step is summed first, from "
                "0 in ascending order of k."
                if scatter
                else ""
            )
            lines.append(
                f"{block} strips are worked on at a time, and those left over like a block.{first} "
                "The steps outside the square of a block's own indices come before those inside."
            )
        lines.append(
            "At the end of a strip its lanes are added by halves, lane l and lane l + "
            f"{lanes // 2} first, until one sum is left."
        )
        return (*lines, *self.operation.statement_in_lanes(self.c), *self.in_parts)

    def _group(self, group: Group, by: dict[str, Expr]) -> None:
        # Where strips grow, those that fill no block come first, when they are short.
        self.whole_last = len(group.own) > 1 and isinstance(group.own[-1], Diagonal)
        super()._group(group, by)

    def _blocks(self, group: Group, low: Expr, high: Expr) -> None:
        edge = partial(self._beside_edge, group, low, high)
        self.w.when_known(Compare(low, "<", high), edge)

    def _beside_edge(self, group: Group, low: Expr, high: Expr) -> None:
        """The blocks, while what fills no lanes at the end of the result is held in a local."""
        w, c, vector = self.w, self.c, self.operation.scattered
        edge = self._edge_of(group, low)
        if edge is None:
            super()._blocks(group, low, high)
            return
        self.edge = edge
        step = c.wide((expr(0), edge.count))
        held = bool(vector) and c.order.scatter
        if held:
            w.comment(f"what fills no lanes at the end of {vector} is held in a register")
            start = step.vector(vector, edge.start)
            c.held[vector, edge.start] = w.running("edge", start, c.parts)
        super()._blocks(group, low, high)
        self.edge = None
        if held:
            step.put(vector, edge.start, c.held.pop((vector, edge.start)))

    def _edge_of(self, group: Group, low: Expr) -> Edge | None:
        """What is left of all blocks from strip ``low`` on, if that is the same for all."""
        lanes, k = self.c.arithmetic.lanes, symbol("k")
        pieces = [one for one in group.own if isinstance(one, Piece)]
        if len(pieces) != 1 or self.block % lanes or pieces[0].around:
            return None
        (piece,) = pieces
        last = low + self.block - 1
        if self.whole_last and "k" not in piece.low(k).names:
            start, span = piece.low(k), piece.high(low) - piece.low(low)
        elif not self.whole_last and "k" not in piece.high(k).names:
            span = piece.high(last) - piece.low(last)
            start = piece.high(k) - (span - lanes * quotient(span, divisor=lanes))
        else:
            return None
        count = span - lanes * quotient(span, divisor=lanes)
        if count.constant == 0:
            return None
        return Edge(self.w.integer("start", start), self.w.integer("left", count))

    def _run(self, piece: Piece, low: Expr, high: Expr, strips: list[Named]) -> None:
        edge = self.edge
        if len(strips) > 1 and (high - low).constant != 0:
            self.w.comment(f"what all {len(strips)} strips have")
        if edge is None or len(strips) < self.block:
            super()._run(piece, low, high, strips)
            return

        def one(c: Context, m: Expr) -> None:
            self.operation.element(c, m, [(strip, place(m)) for strip, place in strips], piece.own)

        def at_edge() -> None:
            one(self.c.wide((expr(0), edge.count)), edge.start)

        def rest() -> None:
            if self.whole_last:
                self.c.each(low + edge.count, high, one, steps=self.steps, fills=True)
            else:
                self.c.each(low, edge.start, one, steps=self.steps, fills=True)

        some = partial(self.w.when_known, Compare(expr(0), "<", edge.count), at_edge)
        for part in (some, rest) if self.whole_last else (rest, some):
            part()

    def _single(self, group: Group, low: Expr, high: Expr) -> None:
        pieces = [one for one in group.own if isinstance(one, Piece)]
        lanes, k = self.c.arithmetic.lanes, symbol("k")
        corner = 1 < self.block <= lanes and len(pieces) == 1 and not pieces[0].around
        if self.whole_last:
            corner = corner and pieces[0].low(k) == group.low and pieces[0].high(k) == k
        else:
            corner = corner and pieces[0].high(k) == high and pieces[0].low(k) == k + 1
        if not corner or not self.c.order.gather:
            super()._single(group, low, high)
            return
        self.w.when_known(Compare(low, "<", high), lambda: self._corner(group, low, high))

    def _corner(self, group: Group, low: Expr, high: Expr) -> None:
        """A triangle of fewer strips than a block has, as a block whose last strips are empty."""
        (piece,) = (one for one in group.own if isinstance(one, Piece))
        (diagonal,) = (one for one in group.own if isinstance(one, Diagonal))
        left = self.w.integer("left", high - low)
        size = left.constant or self.block - (left.constant is None)
        ks = [low] + [self.w.integer("k", minimum(low + c, high - 1)) for c in range(1, size)]
        strips = [self.operation.open(self.c, k) for k in ks]
        wide = [self._widened(strip) for strip in strips]
        here = []
        for place, strip in enumerate(wide):
            if self.whole_last:
                end = choice(Compare(expr(place), "<", left), place, 0)
                active = (expr(0), end)
            else:
                active = (expr(place + 1), left)
            if (active[1] - active[0]).constant != 0:
                here.append((replace(strip, active=active), self._named(piece, strip)[1](low)))
        step = self.c.wide((expr(0), left))
        self.operation.element(step, low, here, piece.own)
        self._close(strips, wide, diagonal, left)

    def _strips(self, group: Group, ks: list[Expr]) -> None:
        strips = [self.operation.open(self.c, k) for k in ks]
        wide = [self._widened(strip) for strip in strips]
        diagonal = None
        for one in group.own:
            if isinstance(one, Diagonal):
                diagonal = one
            else:
                self._nest(one.around, partial(self._piece, one, wide))
        size = min(len(ks), self.c.arithmetic.lanes)
        if not self.c.order.gather or len(ks) == 1 or len(ks) % size or size & (size - 1):
            size = 1
        for start in range(0, len(ks), size):
            self._close(strips[start : start + size], wide[start : start + size], diagonal)

    def _widened(self, strip: Strip) -> Strip:
        """The strip as its lanes see it: its factor in all of them, and a sum in each."""
        w, wide, parts = self.w, self.c.wide(), self.c.parts
        factors = [strip.factor[i : i + parts] for i in range(0, len(strip.factor), parts)]
        factor = tuple(part for one in factors for part in w.bind("tk", wide.spread(one)))
        total = w.running("sum", wide.spread(strip.sum_from), parts) if strip.sum else ()
        return Strip(strip.k, factor=factor, sum=total)

    def _close(
        self,
        strips: list[Strip],
        wide: list[Strip],
        diagonal: Diagonal | None,
        count: Expr | None = None,
    ) -> None:
        """Ends some strips, or the first ``count``: one alone, or several with one in each lane."""
        size, lanes = len(strips), self.c.arithmetic.lanes
        c, strip = self.c, strips[0]
        if size > 1:
            some = expr(size) if count is None else count
            c = self.c.wide(None if some.constant == lanes else (expr(0), some))
            strip = Strip(strip.k)
        if wide[0].sum:
            if size > 1:
                self.w.comment("the sums of the strips, one a lane")
            total = self.c.folded(*(one.sum for one in wide))
            strip = replace(strip, sum=self.w.running("acc", total, self.c.parts))
        if diagonal is not None:
            self.operation.diagonal(c, strip, *(diagonal.place(one.k) for one in strips))
        self.operation.close(c, strip)

    def _parts(self, parts: list[T], piece: Piece) -> list[T]:
        # The square on the diagonal comes last, so that its results stay in registers until the
        # strips are closed.
        return parts if self.whole_last else [parts[1], parts[2], parts[0]]

    def _apart(self, piece: Piece, runs: list[tuple[Named, Expr, Expr]], reach: int | None) -> None:
        lanes = self.c.arithmetic.lanes
        if reach is None or reach > 2 * lanes:
            runs = [(one, low, maximum(low, high)) for one, low, high in runs]
            super()._apart(piece, runs, reach)
            return
        base = runs[0][0][0].k
        square = all(
            (low - base).constant_or(-1) >= 0 and 0 <= (high - base).constant_or(-1) <= len(runs)
            for _, low, high in runs
        )
        if square:
            reach = len(runs)
        else:
            base = min(
                (low for _, low, _ in runs), key=lambda low: (low - runs[0][1]).constant or 0
            )
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
            if square:
                self.w.comment("the square on the diagonal, of which each strip has its own part")
            ends = [strip.active[1] for strip, _ in here if strip.active]
            most = expr(min(lanes, reach - start)) if square else maximum(*ends)
            step = self.c.wide(None if most.constant == lanes else (expr(0), most))
            self.operation.element(step, m, here, piece.own)
