"""Cuts strips into panels: ranges of moving indices, so that a piece of x and y stays in cache.

A panel meets two groups of strips: those that pass through all of it, and those whose diagonal
lies in it.
"""

from __future__ import annotations

from dataclasses import replace

from demilune.index import Expr, expr, minimum, quotient, symbol
from demilune.layouts import Diagonal, Group, Piece, Range

BEGIN, END = "from_m", "to_m"


def can_be_cut(groups: tuple[Group, ...]) -> bool:
    """Whether the strips are those of one whole triangle."""
    if len(groups) != 1 or groups[0].around:
        return False
    pieces = [one for one in groups[0].own if isinstance(one, Piece)]
    k = symbol("k")
    return len(pieces) == 1 and (
        "k" not in pieces[0].low(k).names or "k" not in pieces[0].high(k).names
    )


def in_panels(group: Group, size: int) -> tuple[Range, tuple[Group, ...]]:
    """The loop over panels of ``size`` indices, and the groups of strips that one meets."""
    (piece,) = (one for one in group.own if isinstance(one, Piece))
    (diagonal,) = (one for one in group.own if isinstance(one, Diagonal))
    grows = group.own[-1] is diagonal
    low, high = group.low, group.high
    begin, end = symbol(BEGIN), symbol(END)
    count = quotient(high - low + size - 1, divisor=size)
    start = low + size * symbol("panel")
    panel = Range(
        "panel", expr(0), count, ((BEGIN, start), (END, minimum(high, symbol(BEGIN) + size)))
    )

    def rows(first: Expr, last: Expr) -> Piece:
        return replace(piece, low=lambda k: first, high=lambda k: last)

    across = rows(begin, end)
    if grows:
        inside = replace(piece, low=lambda k: begin, high=lambda k: k)
        return panel, (Group(begin, end, (inside, diagonal)), Group(end, high, (across,)))
    inside = replace(piece, low=lambda k: k + 1, high=lambda k: end)
    return panel, (Group(low, begin, (across,)), Group(begin, end, (diagonal, inside)))
