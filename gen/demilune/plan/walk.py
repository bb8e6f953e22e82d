"""Visits the strips of a layout in the order of a schedule."""

from __future__ import annotations

from collections.abc import Callable
from functools import partial
from typing import TYPE_CHECKING, TypeVar

from demilune.index import Compare, Expr, Extreme, expr, maximum, minimum, quotient, symbol
from demilune.keys import RUNTIME
from demilune.layouts import Diagonal, Group, Piece, Range
from demilune.operations import Context, Strip
from demilune.plan.panels import in_panels
from demilune.plan.parts import in_parts

if TYPE_CHECKING:
    from demilune.spec import Spec

T = TypeVar("T")

Named = tuple[Strip, Callable[[Expr], Expr]]
"""A strip with the place of its element at an index."""


class Walk:
    """Visits the strips of a layout in the order of a schedule."""

    whole_last = False
    """Whether the strips that fill no block come before those that do, and not behind."""

    def __init__(self, spec: Spec, context: Context) -> None:
        self.spec, self.c, self.w = spec, context, context.w
        self.operation, self.layout = spec.operation, spec.layout
        self.backward, self.block = spec.schedule.backward, spec.schedule.block
        self.steps = spec.schedule.steps

    def statement(self) -> tuple[str, ...]:
        """The order of the sums in sentences."""
        sentences = self.operation.statement(self.c, self.backward, self.block) + self.in_parts
        if self.c.begins and self.operation.sums:
            return (*sentences, "A sum that starts at 0 begins with its first product.")
        return sentences

    @property
    def in_parts(self) -> tuple[str, ...]:
        """How the strips are parted or cut, in sentences."""
        threads, panel = self.spec.schedule.threads, self.spec.schedule.panel
        if panel:
            return (
                f"Indices m are cut into panels of {panel}, and one panel is done after the other: "
                "a strip begins and ends anew in each panel that it meets, its diagonal belongs "
                "to one.",
            )
        if threads == 1:
            return ()
        return (
            f"The strips are parted into {threads} runs of about equal work, which may run at the "
            f"same time{self.operation.joined}. The parts depend on n alone, so the bits are the "
            "same for every number of threads.",
        )

    def all(self) -> None:
        self._refuse()
        self.operation.prologue(self.c)
        named: dict[str, Expr] = {}
        for name, value in self.layout.integers:
            named[name] = self.w.integer(name, value.substitute(named))
        groups = [group.substitute(named) for group in self.layout.groups()]
        threads = self.spec.schedule.threads
        for group in self._turned(groups):
            if threads > 1:
                in_parts(self, group, threads)
                continue
            if self.spec.schedule.panel:
                panel, both = in_panels(group, self.spec.schedule.panel)
                self._nest((panel,), partial(self._groups, both))
                continue
            self._nest(group.around, partial(self._group, group))
        self.operation.epilogue(self.c)
        self.c.release()

    def _groups(self, groups: tuple[Group, ...], by: dict[str, Expr]) -> None:
        for group in groups:
            self._group(group, by)

    def _refuse(self) -> None:
        if self.layout.n == RUNTIME:
            self.w.reject(Compare(symbol("n"), "<", expr(0)), "n", "at least 0")
        for rule in (*self.layout.rules(), *self.operation.stride_rules()):
            self.w.reject(*rule)

    def _turned(self, items: list[T]) -> list[T]:
        return items[::-1] if self.backward else items

    def _nest(self, around: tuple[Range, ...], body: Callable[[dict[str, Expr]], None]) -> None:
        """``body`` inside the loops ``around``, told what their variables are."""
        if not around:
            body({})
            return
        first, rest = around[0], around[1:]

        def one(value: Expr) -> None:
            by = {first.variable: value}
            for name, meaning in first.integers:
                by[name] = self.w.integer(name, meaning.substitute(by))
            inner = tuple(one.substitute(by) for one in rest)
            self._nest(inner, lambda more: body({**by, **more}))

        self.w.loop(first.variable, first.low, first.high, one, backward=self.backward)

    # --- strips ----------------------------------------------------------------------------

    def _group(self, group: Group, by: dict[str, Expr]) -> None:
        group = group.substitute(by)
        w, b = self.w, self.block
        low, high = group.low, group.high
        if b == 1:
            self._single(group, low, high)
            return
        count = b * quotient(high - low, divisor=b)
        whole = high - count if self.whole_last else low + count
        whole = whole if whole.constant is not None else w.integer("whole", whole)

        blocks, single = partial(self._blocks, group), partial(self._single, group)
        parts = (single, blocks) if self.whole_last else (blocks, single)
        for part in self._turned([partial(parts[0], low, whole), partial(parts[1], whole, high)]):
            part()

    def _blocks(self, group: Group, low: Expr, high: Expr) -> None:
        """The strips from low to high, which fill whole blocks."""
        self.w.loop(
            "k", low, high, lambda k: self._strips(group, [k + c for c in range(self.block)]),
            step=self.block, backward=self.backward,
        )  # fmt: skip

    def _single(self, group: Group, low: Expr, high: Expr) -> None:
        """The strips from low to high, fewer than a block has."""
        self.w.loop("k", low, high, lambda k: self._strips(group, [k]), backward=self.backward)

    def _strips(self, group: Group, ks: list[Expr]) -> None:
        """Some neighbouring strips at a time."""
        operation, c = self.operation, self.c
        ks = self._turned(ks)
        strips = [operation.open(c, k) for k in ks]
        for one in self._turned(list(c.order.visits(group, operation.mirrored))):
            if isinstance(one, Diagonal):
                for strip in strips:
                    operation.diagonal(c, strip, one.place(strip.k))
            else:
                self._nest(one.around, partial(self._piece, one, strips))
        for strip in strips:
            operation.close(c, strip)

    # --- elements --------------------------------------------------------------------------

    def _piece(self, piece: Piece, strips: list[Strip], by: dict[str, Expr]) -> None:
        """The elements of one piece for some strips: what they share together, the rest apart."""
        piece = piece.substitute(by)
        w = self.w
        lows = [piece.low(strip.k) for strip in strips]
        highs = [piece.high(strip.k) for strip in strips]
        named = [self._named(piece, strip) for strip in strips]
        if len(strips) == 1:
            self._run(piece, lows[0], highs[0], named)
            return
        apart = (apart_by(lows), apart_by(highs))
        first, last = maximum(*lows), minimum(*highs)
        lows = [w.integer("low", low) if _long(low) else low for low in lows]
        highs = [w.integer("high", high) if _long(high) else high for high in highs]
        if len(_items(first)) > 2:
            first = maximum(*lows)
        if len(_items(last)) > 2:
            last = minimum(*highs)
        # Every strip has low <= high, so where all start or all end together they overlap.
        together = len(set(lows)) == 1 or len(set(highs)) == 1
        first = w.integer("first", first) if _long(first) else first
        last = last if together else maximum(first, last)
        last = w.integer("last", last) if _long(last) else last

        def leading() -> None:
            ends = [first if together else minimum(first, high) for high in highs]
            self._apart(piece, list(zip(named, lows, ends, strict=True)), apart[0])

        def shared() -> None:
            self._run(piece, first, last, named)

        def trailing() -> None:
            self._apart(piece, [(n, last, h) for n, h in zip(named, highs, strict=True)], apart[1])

        for part in self._parts([leading, shared, trailing], piece):
            part()

    def _parts(self, parts: list[T], piece: Piece) -> list[T]:
        """What all strips share, and before and behind it what only some have, in order."""
        return self._turned(parts)

    def _apart(self, piece: Piece, runs: list[tuple[Named, Expr, Expr]], reach: int | None) -> None:
        """The elements that only some of neighbouring strips have, each from low to high.

        All runs together reach over at most so many indices, if that is known.
        """
        for one, low, high in runs:
            # A run may be empty and end before it begins; several steps a pass need its length.
            end = maximum(low, high) if self.steps > 1 else high
            if (end - low).constant != 0:
                self._run(piece, low, end, [one])

    def _named(self, piece: Piece, strip: Strip) -> Named:
        """The strip with the place of its element at index m, its constant part named."""
        m = symbol("m")
        place = piece.at(strip.k, m)
        rest = place - m
        if "m" not in rest.names:
            base = self.w.integer("base", rest) if _long(rest) else rest
            return strip, lambda m: base + m
        return strip, lambda m: place.substitute({"m": m})

    def _run(
        self,
        piece: Piece,
        low: Expr,
        high: Expr,
        strips: list[Named],
    ) -> None:
        """The loop over the moving index, for elements that exist for all ``strips``."""

        def one(c: Context, m: Expr) -> None:
            together = [(strip, place(m)) for strip, place in strips]
            if piece.when is None:
                self.operation.element(c, m, together, piece.own)
                return
            for strip, at in together:
                visit = partial(self.operation.element, c, m, [(strip, at)], piece.own)
                self.w.when(piece.when(strip.k, m), visit)

        name = "i" if piece.own else "j"
        self.c.each(low, high, one, name=name, steps=self.steps, backward=self.backward)


def apart_by(bounds: list[Expr]) -> int | None:
    """How far bounds lie apart at most, if that can be told.

    The least of several numbers moves no further than the one of them that moves most.
    """
    items = [_items(one) for one in bounds]
    if len({len(one) for one in items}) > 1:
        return None
    most = 0
    for same in zip(*items, strict=True):
        moves = [(one - same[0]).constant for one in same]
        known = [move for move in moves if move is not None]
        if known != moves:
            return None
        most = max(most, max(known) - min(known))
    return most


def _items(value: Expr) -> tuple[Expr, ...]:
    """What a least or greatest is taken of."""
    return value.atom.items if isinstance(value.atom, Extreme) else (value,)


def _long(value: Expr) -> bool:
    """Whether an integer is worth a name: more than a symbol and a constant."""
    return value.constant is None and (
        len(value.terms) > 2
        or any(len(monomial) > 1 or abs(factor) > 1 for monomial, factor in value.terms if monomial)
        or any(atom.names != {getattr(atom, "name", "")} for m, _ in value.terms for atom in m)
    )
