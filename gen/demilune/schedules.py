"""In which order: loop orders, blocks of strips, direction and unrolling.

A loop order is which elements a strip visits and what each element is used for. To *gather* is
to add A(k,m)*x(m) to row k's sum; to *scatter* is to add A(m,k)*x(k) to element m of the
result. An operation says what it can do with either; it knows nothing of the order.
"""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass

from demilune.keys import key
from demilune.layouts import Diagonal, Group, Layout, Piece
from demilune.plan.panels import can_be_cut

LARGEST_BLOCK = 16
LARGEST_UNROLLED = 32
LARGEST_STEPS = 8
ALL = "all"
MOST_THREADS = 16


@dataclass(frozen=True)
class LoopOrder:
    """What a loop order does with the elements of row k.

    ``mirrored`` tells whether the pieces that lie in other strips are visited too, so that
    each stored off-diagonal element is read twice.
    """

    name: str
    mirrored: bool
    gather: bool
    scatter: bool
    meaning: str
    remark: str = ""
    """What the header adds where a strip's elements are not visited in ascending order."""

    def visits(self, group: Group, mirrored: bool) -> tuple[Piece | Diagonal, ...]:
        """What of a row is visited, in order; the mirrored pieces only if they matter."""
        return group.row if self.mirrored and mirrored else group.own


LOOP_ORDERS: dict[str, LoopOrder] = {
    one.name: one
    for one in (
        LoopOrder(
            "dot", True, True, False,
            "each result is gathered by the dot product of a whole row with x",
        ),
        LoopOrder(
            "axpy", True, False, True,
            "each element of x is scattered by an update with a whole column",
        ),
        LoopOrder(
            "fused", False, True, True,
            "each stored element is read once and used for both of its places",
        ),
    )
}  # fmt: skip


@dataclass(frozen=True)
class Schedule:
    """The order in which strips and their elements are visited."""

    loop: str | None = key(None, "loop order", words=tuple(LOOP_ORDERS))
    block: int = key(
        1, "strips that are worked on at a time", whole=True, minimum=1, maximum=LARGEST_BLOCK
    )
    direction: str = key(
        "forward", "from the first strip to the last, or back", words=("forward", "backward")
    )
    panel: int = key(
        0, "indices of x and y that are worked on at a time, in whole strips if 0; for caches",
        whole=True, minimum=0, maximum=2**20,
    )  # fmt: skip
    threads: int = key(
        1, "parts that may run at the same time (OpenMP); the same bits whatever runs them",
        whole=True, minimum=1, maximum=MOST_THREADS,
    )  # fmt: skip
    unroll: int | str = key(
        1, 'steps of an innermost loop written out in one pass; "all" writes out a small fixed n',
        words=(ALL,), whole=True, minimum=1, maximum=LARGEST_STEPS,
    )  # fmt: skip

    @property
    def order(self) -> LoopOrder:
        assert self.loop is not None, "the operation's default has been filled in"
        return LOOP_ORDERS[self.loop]

    @property
    def backward(self) -> bool:
        return self.direction == "backward"

    @property
    def written_out(self) -> bool:
        """Whether the routine is written out without loops."""
        return self.unroll == ALL

    @property
    def steps(self) -> int:
        """Steps of an innermost loop in one pass."""
        return 1 if self.unroll == ALL else int(self.unroll)

    def problems(
        self,
        layout: Layout,
        operation: str,
        allowed: tuple[str, ...],
        why: str,
        lanes: int,
        mirrored: bool,
        in_place: bool,
    ) -> Iterator[tuple[str, str]]:
        """Pairs of a key and why its value cannot be, given the loop orders ``allowed``."""
        n, period = layout.n, layout.period
        if self.loop not in allowed:
            words = " or ".join(f'"{word}"' for word in allowed)
            yield (
                "loop",
                (f'operation "{operation}" has no loop order "{self.loop}": {why}; use {words}'),
            )
        if isinstance(n, int) and self.block > n:
            yield "block", f"a block of {self.block} strips is more than the matrix has, n = {n}"
        elif layout.grouped and self.block > period:
            yield "block", f"a block of {self.block} strips is more than a tile has, {period}"
        if self.written_out and not (isinstance(n, int) and n <= LARGEST_UNROLLED):
            found = f"{n}" if isinstance(n, int) else f'"{n}"'
            yield (
                "unroll",
                (f"only a fixed n of at most {LARGEST_UNROLLED} is unrolled, not n = {found}"),
            )
        elif self.written_out and not layout.known_shape:
            yield (
                "unroll",
                (
                    "the bounds of the strips are known only when the routine is called; leave "
                    "unroll at a number"
                ),
            )
        if lanes > 1 and self.backward:
            yield "lanes", 'lanes go forward along a strip; use direction = "forward"'
        rows = self.loop == "dot" and layout.diagonals is not None
        if lanes > 1 and self.loop in allowed and self.order.mirrored and mirrored and not rows:
            yield (
                "lanes",
                f'the loop order "{self.loop}" visits mirrored elements, which do not lie side by '
                'side; use loop = "fused"',
            )
        if self.threads > 1:
            yield from self._thread_problems(layout, lanes, in_place)
        if self.panel:
            yield from self._panel_problems(layout, mirrored)
        if self.steps > 1 and self.backward:
            yield "unroll", 'steps are written out with direction = "forward" only'

    def _panel_problems(self, layout: Layout, mirrored: bool) -> Iterator[tuple[str, str]]:
        if not can_be_cut(layout.groups()):
            yield "panel", f'the strips of layout "{layout.name}" do not all reach to one end'
        elif self.order.mirrored and mirrored:
            yield "panel", f'the loop order "{self.loop}" ends each sum at once; use "fused"'
        if self.panel % self.block:
            yield "panel", f"a panel of {self.panel} is no multiple of the block, {self.block}"
        if self.threads > 1 or self.backward:
            yield "panel", "panels go with one thread, and forward"

    def _thread_problems(
        self, layout: Layout, lanes: int, in_place: bool
    ) -> Iterator[tuple[str, str]]:
        if len(layout.groups()) > 1 or any(group.around for group in layout.groups()):
            yield "threads", f'the strips of layout "{layout.name}" are not one run to be parted'
        elif layout.diagonals is not None and self.loop == "dot" and lanes > 1:
            yield "threads", "rows side by side are too little work for threads; leave it at 1"
        if not in_place:
            yield "threads", 'parts of a sum are kept plainly; use accumulator = "plain"'
        if self.backward:
            yield "threads", 'parts go forward; use direction = "forward"'
        if self.written_out:
            yield "threads", "a small fixed n is too little work for threads; leave it at 1"
