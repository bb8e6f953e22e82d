"""Visits the strips in parts of about equal work that may run at the same time.

The parts are fixed by the specification, and what they add to the result is summed in a fixed
order at the end: the same bits whether one thread runs all parts or each its own.
"""

from __future__ import annotations

from dataclasses import replace
from math import sqrt
from typing import TYPE_CHECKING

from demilune.index import Compare, Expr, choice, expr, quotient, symbol
from demilune.layouts import Diagonal, Group, Piece

if TYPE_CHECKING:
    from demilune.plan.walk import Walk

SCALE = 4096
"""Bounds of parts are so many parts of n, rounded down."""


def in_parts(walk: Walk, group: Group, count: int) -> None:
    """Visits ``group`` in ``count`` parts."""
    operation, w = walk.operation, walk.w

    def one(part: Expr) -> None:
        low = w.integer("begin", _bound(group, part, count, walk.block))
        high = w.integer("end", _bound(group, part + 1, count, walk.block))
        operation.begin_part(walk.c, part)
        walk._group(replace(group, low=low, high=high), {})
        operation.end_part(walk.c, part)

    w.comment(f"{count} parts that may run at the same time")
    w.loop("part", 0, count, one, parallel=True)
    operation.join_parts(walk.c, count)


def _bound(group: Group, part: Expr, count: int, block: int) -> Expr:
    """Where a part begins: a multiple of the block from the end that blocks are counted from."""
    pieces = [one for one in group.own if isinstance(one, Piece)]
    grows = isinstance(group.own[-1], Diagonal)
    whole = bool(pieces) and _reaches_end(pieces[0], grows)
    size = group.high - group.low
    value: Expr = group.high
    for one in reversed(range(count)):
        share = one / count
        if whole:
            share = sqrt(share) if grows else 1 - sqrt(1 - share)
        bound = _share(group, size, share, block, grows)
        here = group.low if one == 0 else bound
        value = choice(Compare(part, "==", expr(one)), here, value)
    return value


def _share(group: Group, size: Expr, share: float, block: int, grows: bool) -> Expr:
    if grows:
        rest = round(SCALE * (1 - share))
        return group.high - block * quotient(size, rest, divisor=SCALE * block)
    return group.low + block * quotient(size, round(SCALE * share), divisor=SCALE * block)


def _reaches_end(piece: Piece, grows: bool) -> bool:
    """Whether all strips reach to the same end of the matrix, as those of a whole triangle do."""
    k = symbol("k")
    return "k" not in (piece.low(k) if grows else piece.high(k)).names
