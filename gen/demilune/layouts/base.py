"""What a layout tells: which strips it has, and where each element of a row is stored.

A half-stored matrix is a set of strips: contiguous runs of elements that share one index, the
fixed index ``k``, while the other, the moving index, goes from a low to a high end. Stored
column by column the fixed index is the column; row by row it is the row. So column-major upper
and row-major lower are one family in memory (each strip *ends* with its diagonal element),
and column-major lower and row-major upper the other (each strip *begins* with it).
"""

from __future__ import annotations

from collections.abc import Callable, Iterator, Mapping
from dataclasses import dataclass, replace
from typing import Any, ClassVar, TypeAlias

import numpy as np
import numpy.typing as npt

from demilune.index import Compare, Environment, Expr, Substitution, Term, expr, symbol
from demilune.keys import RUNTIME, key
from demilune.plan.tree import Parameter

Size: TypeAlias = int | str
"""A whole number, or ``"runtime"``."""

Place: TypeAlias = Callable[[Expr, Expr], Expr]
"""The storage index of an element, from its fixed and its moving index."""

LARGEST_N = 512
"""Fixed sizes above this gain nothing over ``n = "runtime"``, and cannot be verified soon."""


@dataclass(frozen=True)
class Range:
    """A loop around others: ``variable`` goes from ``low`` to ``high`` - 1.

    ``integers`` are named at the start of each pass, each with its value.
    """

    variable: str
    low: Expr
    high: Expr
    integers: tuple[tuple[str, Expr], ...] = ()

    def substitute(self, by: Substitution) -> Range:
        return Range(
            self.variable,
            self.low.substitute(by),
            self.high.substitute(by),
            tuple((name, value.substitute(by)) for name, value in self.integers),
        )


@dataclass(frozen=True)
class Piece:
    """A run of off-diagonal elements of row ``k`` of the symmetric matrix.

    ``own`` pieces lie in strip k, one behind the other; the others are the mirrored ones:
    element k of strip m, for each m of the piece. Bounds are functions of k, as blocks of
    neighbouring strips need them for several k. ``around`` are loops outside the one over m;
    an element is there only ``when`` the condition holds.
    """

    own: bool
    low: Callable[[Expr], Expr]
    high: Callable[[Expr], Expr]
    place: Place
    around: tuple[Range, ...] = ()
    when: Callable[[Expr, Expr], Compare] | None = None

    def at(self, k: Expr, m: Expr) -> Expr:
        """The storage index of the element in row k that meets index m."""
        return self.place(k, m) if self.own else self.place(m, k)

    def substitute(self, by: Substitution) -> Piece:
        """The piece with the loop variables around it replaced."""
        when = self.when
        return replace(
            self,
            low=lambda k: self.low(k).substitute(by),
            high=lambda k: self.high(k).substitute(by),
            place=lambda k, m: self.place(k, m).substitute(by),
            around=tuple(one.substitute(by) for one in self.around),
            when=None if when is None else lambda k, m: when(k, m).substitute(by),
        )


@dataclass(frozen=True)
class Diagonal:
    """The diagonal element of strip k."""

    place: Callable[[Expr], Expr]

    def substitute(self, by: Substitution) -> Diagonal:
        return Diagonal(lambda k: self.place(k).substitute(by))


@dataclass(frozen=True)
class Group:
    """Neighbouring strips with k from ``low`` to ``high`` - 1 that are stored alike.

    ``row`` lists the pieces of row k and the diagonal in ascending order of the moving index.
    ``around`` are loops outside the one over k.
    """

    low: Expr
    high: Expr
    row: tuple[Piece | Diagonal, ...]
    around: tuple[Range, ...] = ()

    def substitute(self, by: Substitution) -> Group:
        """The group with integers or loop variables around it replaced."""
        return Group(
            self.low.substitute(by),
            self.high.substitute(by),
            tuple(one.substitute(by) for one in self.row),
            tuple(one.substitute(by) for one in self.around),
        )

    @property
    def own(self) -> tuple[Piece | Diagonal, ...]:
        """The strip alone: each stored element once."""
        return tuple(one for one in self.row if isinstance(one, Diagonal) or one.own)


N = symbol("n")


@dataclass(frozen=True)
class Layout:
    """Where the half of a symmetric or Hermitian matrix lies."""

    name: ClassVar[str]
    rank: ClassVar[int] = 9
    """Its place in lists: the most usual first."""
    summary: ClassVar[str]
    source: ClassVar[str]
    """The published source of the storage scheme."""
    orders: ClassVar[tuple[str, ...]] = ("column-major", "row-major")
    whole: ClassVar[bool] = True
    """Whether every element of the triangle is stored."""
    grouped: ClassVar[bool] = False
    """Whether strips come in groups of ``period``, which a block of strips cannot leave."""

    n: Size = key(
        RUNTIME, "rows and columns of the matrix",
        words=(RUNTIME,), whole=True, minimum=1, maximum=LARGEST_N,
    )  # fmt: skip
    structure: str = key(
        "symmetric", "A = A^T, or A = A^H with a real diagonal", words=("symmetric", "hermitian")
    )
    triangle: str = key("upper", "the triangle that is stored", words=("upper", "lower"))
    order: str = key(
        "column-major", "whether strips are columns or rows", words=("column-major", "row-major")
    )

    # --- what a layout tells ---------------------------------------------------------------

    def groups(self) -> tuple[Group, ...]:
        """All strips, in the order in which they are stored, for the indices 0..n-1."""
        raise NotImplementedError

    @property
    def extent(self) -> Expr:
        """Elements from the first to the last that may be touched, for n >= 1."""
        raise NotImplementedError

    @property
    def extent_words(self) -> str:
        """The extent in the words of ``formula``, where it is too long as an expression."""
        return ""

    @property
    def integers(self) -> tuple[tuple[str, Expr], ...]:
        """Integers that the indices use, each with its name."""
        return ()

    @property
    def formula(self) -> tuple[str, ...]:
        """The place of an element in words and symbols, for the header of a file."""
        raise NotImplementedError

    def sizes(self) -> tuple[Parameter, ...]:
        """Parameters for the shape, before the matrix."""
        return ()

    def after(self) -> tuple[Parameter, ...]:
        """Parameters that follow the matrix."""
        return ()

    def rules(self) -> Iterator[tuple[Compare, str, str]]:
        """Conditions under which an argument is refused: condition, argument, rule."""
        return iter(())

    def problems(self) -> Iterator[tuple[str, str]]:
        """Pairs of a key and why its value cannot be."""
        if self.order not in self.orders:
            yield "order", f'layout "{self.name}" is only ever {" or ".join(self.orders)}'

    @property
    def known_shape(self) -> bool:
        """Whether all bounds are known once n is."""
        return True

    @property
    def period(self) -> int:
        """Strips after which the storage repeats itself: the rows of a tile, else 1."""
        return 1

    @property
    def diagonals(self) -> Expr | None:
        """Off-diagonals on either side, where the elements of one lie at a fixed stride."""
        return None

    @property
    def assumes(self) -> str:
        """What is assumed of sizes that neither n nor the specification tells."""
        return ""

    # --- arrays ----------------------------------------------------------------------------

    two_dimensional: ClassVar[bool] = False
    """Whether numpy users know the half as a two-dimensional array, a strip in each column
    (column-major) or row; then the layout has ``rows`` and ``leading``."""

    @property
    def rows(self) -> Expr:
        """Elements of a strip's column in a two-dimensional array."""
        raise NotImplementedError

    @property
    def leading(self) -> Expr:
        """Elements from one column of a two-dimensional array to the next."""
        raise NotImplementedError

    def sizes_of_array(self, rows: int) -> dict[str, Any]:
        """Sizes that follow from a two-dimensional array with so many rows."""
        return {}

    def sizes_of_matrix(self, matrix: npt.NDArray[Any]) -> dict[str, Any]:
        """The smallest sizes with which the whole ``matrix`` can be stored."""
        return {}

    def complete(self, sizes: Mapping[str, Any]) -> dict[str, Any]:
        """``sizes`` with those that follow from the others."""
        return dict(sizes)

    def argument_problems(self, sizes: Mapping[str, Any]) -> Iterator[str]:
        """What is wrong with arrays of sizes, which a routine itself does not check."""
        return iter(())

    def shape(self, env: Environment) -> tuple[int, ...]:
        """The shape of a numpy array that holds the half."""
        return (max(0, self.extent.value(env)),)

    def sample(self, n: int, generator: np.random.Generator | None = None) -> dict[str, Any]:
        """Sizes that make sense for ``n``, for pictures, counts and checks.

        With a ``generator`` they are drawn, without one they are the plainest.
        """
        return {"n": n}

    # --- what follows from it --------------------------------------------------------------

    @property
    def hermitian(self) -> bool:
        return self.structure == "hermitian"

    @property
    def tail(self) -> bool:
        """Whether strips begin with their diagonal element (else they end with it)."""
        return (self.triangle == "lower") == (self.order == "column-major")

    @property
    def size(self) -> Expr:
        """n, as a constant where it is fixed."""
        return N if self.n == RUNTIME else expr(int(self.n))

    def fixed_sizes(self) -> dict[str, int]:
        """The sizes that the specification fixes."""
        return {} if self.n == RUNTIME else {"n": int(self.n)}

    def environment(self, sizes: Mapping[str, Any]) -> dict[str, Any]:
        """``sizes`` and the layout's own integers."""
        env = {**self.fixed_sizes(), **sizes}
        for name, value in self.integers:
            env[name] = value.value(env)
        return env

    def strips(self, sizes: Mapping[str, Any]) -> Iterator[tuple[int, int, int, int]]:
        """Every run of stored elements as (k, low, high, storage index of ``low``)."""
        env = self.environment(sizes)
        k, m = symbol("k"), symbol("m")
        for group in self.groups():
            for outer in _every(group.around, env):
                for fixed in range(group.low.value(outer), group.high.value(outer)):
                    here = {**outer, "k": fixed}
                    for one in group.own:
                        if isinstance(one, Diagonal):
                            yield fixed, fixed, fixed + 1, one.place(k).value(here)
                            continue
                        for inner in _every(one.around, here):
                            low, high = one.low(k).value(inner), one.high(k).value(inner)
                            if low < high:
                                first = one.at(k, m).value({**inner, "m": low})
                                yield fixed, low, high, first


@dataclass(frozen=True)
class Rectangular(Layout):
    """A layout that lies in a two-dimensional array, a strip in each column, ``ld`` apart."""

    two_dimensional: ClassVar[bool] = True

    def after(self) -> tuple[Parameter, ...]:
        if self.leading.constant is not None:
            return ()
        return (Parameter("ld", "size", "leading dimension of a, in elements"),)

    def complete(self, sizes: Mapping[str, Any]) -> dict[str, Any]:
        known = dict(sizes)
        if self.leading.constant is None:
            known.setdefault("ld", max(1, self.rows.value(known)))
        return known

    def shape(self, env: Environment) -> tuple[int, ...]:
        n, ld = self.size.value(env), self.leading.value(env)
        return (ld, n) if self.order == "column-major" else (n, ld)

    def sample(self, n: int, generator: np.random.Generator | None = None) -> dict[str, Any]:
        sizes = self.complete(super().sample(n, generator) | self.sample_width(n, generator))
        if self.leading.constant is None and generator is not None:
            sizes["ld"] += int(generator.integers(0, 4))
        return sizes

    def sample_width(self, n: int, generator: np.random.Generator | None) -> dict[str, Any]:
        """A width of the strips that makes sense, where it is not told by n."""
        return {}


def _every(ranges: tuple[Range, ...], env: Mapping[str, Any]) -> Iterator[dict[str, Any]]:
    """The environments of the nested loops ``ranges``."""
    if not ranges:
        yield dict(env)
        return
    first, rest = ranges[0], ranges[1:]
    for value in range(first.low.value(env), first.high.value(env)):
        here = {**env, first.variable: value}
        for name, meaning in first.integers:
            here[name] = meaning.value(here)
        yield from _every(rest, here)


def from_to(low: Callable[[Expr], Term], high: Callable[[Expr], Term]) -> dict[str, Any]:
    """The bounds of a piece."""
    return {"low": lambda k: expr(low(k)), "high": lambda k: expr(high(k))}


def plain_group(
    place: Place, tail: bool, size: Expr, low: Term = 0, high: Term | None = None
) -> Group:
    """Strips k in [``low``, ``high``) of a triangle of ``size`` rows that is not cut.

    Each reaches from its diagonal element to the end if ``tail``, else from the start to it.
    """
    first, last = from_to(lambda k: 0, lambda k: k), from_to(lambda k: k + 1, lambda k: size)
    row = (
        Piece(not tail, place=place, **first),
        Diagonal(lambda k: place(k, k)),
        Piece(tail, place=place, **last),
    )
    return Group(expr(low), size if high is None else expr(high), row)
