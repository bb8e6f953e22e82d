"""The five choices meet: from a specification to a plan."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from functools import cached_property, partial
from typing import TYPE_CHECKING, TypeVar

from demilune.index import Compare, Expr, Extreme, expr, maximum, minimum, quotient, symbol
from demilune.keys import RUNTIME
from demilune.layouts import Diagonal, Group, Piece, Range
from demilune.operations import Context, Strip
from demilune.plan.prune import pruned
from demilune.plan.tree import Parameter, Routine
from demilune.plan.writer import PARTS, Writer

if TYPE_CHECKING:
    from demilune.spec import Spec


T = TypeVar("T")


@dataclass(frozen=True)
class Plan:
    """What a kernel does, step by step, in no language.

    From it come the sources, the order of arithmetic, the counts and the pseudo-code.
    """

    spec: Spec
    routine: Routine
    order: tuple[str, ...]
    """The order of arithmetic in sentences."""

    @property
    def parameters(self) -> tuple[Parameter, ...]:
        return self.routine.parameters

    @cached_property
    def arrays(self) -> dict[str, Parameter]:
        """The parameters that are arrays of numbers."""
        return {one.name: one for one in self.parameters if one.kind == "array"}


def make_plan(spec: Spec) -> Plan:
    """The plan of a specification that has been checked."""
    order = spec.schedule.order
    parameters = spec.operation.all_parameters(spec.layout, spec.arithmetic, order)
    names = [one.name for one in parameters if one.kind != "scalar" or not one.complex]
    names += [one.name + part for one in parameters if one.complex for part in PARTS]
    w = Writer((*names, spec.name), unroll=spec.schedule.unroll)
    c = Context(w, spec.layout, spec.arithmetic, order)
    _Walk(spec, c).all()
    sentences = spec.operation.statement(c, spec.schedule.backward, spec.schedule.block)
    functions = tuple(w.functions.values())
    return Plan(
        spec,
        Routine(spec.name, parameters, pruned(w.body), functions),
        (*spec.arithmetic.statement, *sentences, *([order.remark] if order.remark else [])),
    )


class _Walk:
    """Visits the strips of a layout in the order of a schedule."""

    def __init__(self, spec: Spec, context: Context) -> None:
        self.spec, self.c, self.w = spec, context, context.w
        self.operation, self.layout = spec.operation, spec.layout
        self.backward, self.block = spec.schedule.backward, spec.schedule.block

    def all(self) -> None:
        self._refuse()
        self.operation.prologue(self.c)
        named: dict[str, Expr] = {}
        for name, value in self.layout.integers:
            named[name] = self.w.integer(name, value.substitute(named))
        groups = [group.substitute(named) for group in self.layout.groups()]
        for group in self._turned(groups):
            self._nest(group.around, partial(self._group, group))
        self.operation.epilogue(self.c)

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
        w, b, back = self.w, self.block, self.backward
        low, high = group.low, group.high
        if b == 1:
            w.loop("k", low, high, lambda k: self._strips(group, [k]), backward=back)
            return
        whole = low + b * quotient(high - low, divisor=b)
        if whole.constant is None:
            whole = w.integer("whole", whole)

        def blocks() -> None:
            w.loop(
                "k", low, whole, lambda k: self._strips(group, [k + c for c in range(b)]),
                step=b, backward=back,
            )  # fmt: skip

        def left_over() -> None:
            w.loop("k", whole, high, lambda k: self._strips(group, [k]), backward=back)

        for part in self._turned([blocks, left_over]):
            part()

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
            for one, low, high in zip(named, lows, highs, strict=True):
                if low != first:
                    self._run(piece, low, first if together else minimum(first, high), [one])

        def shared() -> None:
            self._run(piece, first, last, named)

        def trailing() -> None:
            for one, high in zip(named, highs, strict=True):
                self._run(piece, last, high, [one])

        for part in self._turned([leading, shared, trailing]):
            part()

    def _named(self, piece: Piece, strip: Strip) -> tuple[Strip, Callable[[Expr], Expr]]:
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
        strips: list[tuple[Strip, Callable[[Expr], Expr]]],
    ) -> None:
        """The loop over the moving index, for elements that exist for all ``strips``."""

        def one(m: Expr) -> None:
            together = [(strip, place(m)) for strip, place in strips]
            if piece.when is None:
                self.operation.element(self.c, m, together, piece.own)
                return
            for strip, at in together:
                visit = partial(self.operation.element, self.c, m, [(strip, at)], piece.own)
                self.w.when(piece.when(strip.k, m), visit)

        name = "i" if piece.own else "j"
        self.w.loop(name, low, high, one, backward=self.backward)


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
