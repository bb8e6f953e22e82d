"""Skyline (profile) storage: each strip cut where its first or last nonzero stands."""

from __future__ import annotations

from collections.abc import Iterator, Mapping
from dataclasses import dataclass
from typing import Any, ClassVar

import numpy as np
import numpy.typing as npt

from demilune.index import Compare, Environment, Expr, choice, element, expr
from demilune.layouts.base import Diagonal, Group, Layout, Piece, from_to
from demilune.plan.tree import Parameter

DIAGONAL = "diagonal"


@dataclass(frozen=True)
class Skyline(Layout):
    """The strips one behind the other, with an array of the diagonal elements' places.

    Strips that end with the diagonal need n places; strips that begin with it need one more,
    the length of the storage.
    """

    name: ClassVar[str] = "skyline"
    whole: ClassVar[bool] = False
    rank: ClassVar[int] = 6
    summary: ClassVar[str] = "a profile: strips of any length and the places of the diagonal"
    source: ClassVar[str] = (
        "common practice in finite elements; Jennings, The Computer Journal 9(3), 1966"
    )

    def _low(self, k: Expr) -> Expr:
        """The first index of strip k, where strips end with the diagonal."""
        here, last = element(DIAGONAL, k), element(DIAGONAL, k - 1)
        return choice(Compare(k, "==", expr(0)), 0, k + 1 + last - here)

    def _high(self, k: Expr) -> Expr:
        """One past the last index of strip k, where strips begin with the diagonal."""
        return k + element(DIAGONAL, k + 1) - element(DIAGONAL, k)

    def groups(self) -> tuple[Group, ...]:
        n = self.size

        def place(k: Expr, m: Expr) -> Expr:
            return element(DIAGONAL, k) - k + m

        before, after = from_to(lambda k: 0, lambda k: k), from_to(lambda k: k + 1, lambda k: n)
        diagonal = Diagonal(lambda k: element(DIAGONAL, k))
        if self.tail:
            row: tuple[Piece | Diagonal, ...] = (
                Piece(
                    False,
                    place=place,
                    when=lambda k, m: Compare(k, "<", self._high(m)),
                    **before,
                ),
                diagonal,
                Piece(True, place=place, **from_to(lambda k: k + 1, self._high)),
            )
        else:
            row = (
                Piece(True, place=place, **from_to(self._low, lambda k: k)),
                diagonal,
                Piece(
                    False,
                    place=place,
                    when=lambda k, m: Compare(self._low(m), "<=", k),
                    **after,
                ),
            )
        return (Group(expr(0), n, row),)

    @property
    def extent(self) -> Expr:
        if self.tail:
            return element(DIAGONAL, self.size)
        return element(DIAGONAL, self.size - 1) + 1

    @property
    def known_shape(self) -> bool:
        return False

    @property
    def assumes(self) -> str:
        return "the full profile"

    @property
    def formula(self) -> tuple[str, ...]:
        moving, fixed = ("i", "j") if self.order == "column-major" else ("j", "i")
        if self.tail:
            length = f"diagonal[{fixed} + 1] - diagonal[{fixed}]"
            return (
                f"A(i,j) with 0 <= {moving} - {fixed} < {length} is a[diagonal[{fixed}] + "
                f"{moving} - {fixed}]",
                "diagonal[n] is the number of stored elements",
            )
        length = f"diagonal[{fixed}] - diagonal[{fixed} - 1]"
        return (
            f"A(i,j) with 0 <= {fixed} - {moving} < {length} is a[diagonal[{fixed}] + "
            f"{moving} - {fixed}]",
            "strip 0 is the diagonal element alone: diagonal[0] = 0",
        )

    def after(self) -> tuple[Parameter, ...]:
        return (
            Parameter(
                DIAGONAL,
                "places",
                "places of the diagonal elements in a, ascending",
                extent=self.size + 1 if self.tail else self.size,
            ),
        )

    def shape(self, env: Environment) -> tuple[int, ...]:
        return (self.extent.value(env) if self.size.value(env) > 0 else 0,)

    def sample(self, n: int, generator: np.random.Generator | None = None) -> dict[str, Any]:
        if self.tail:
            lengths = [n - k for k in range(n)]
        else:
            lengths = [k + 1 for k in range(n)]
        if generator is not None:
            lengths = [int(generator.integers(1, length + 1)) for length in lengths]
        return {"n": n, DIAGONAL: self.places(lengths)}

    def sizes_of_matrix(self, matrix: npt.NDArray[Any]) -> dict[str, Any]:
        n = matrix.shape[0]
        lengths = []
        for k in range(n):
            strip = matrix[:, k] if self.order == "column-major" else matrix[k]
            stored = np.flatnonzero(strip)
            far = [i for i in stored if (i >= k) == self.tail]
            lengths.append(1 + max((abs(int(i) - k) for i in far), default=0))
        return {DIAGONAL: self.places(lengths)}

    def argument_problems(self, sizes: Mapping[str, Any]) -> Iterator[str]:
        n, places = sizes["n"], sizes[DIAGONAL]
        needed = n + 1 if self.tail and n else n
        if not isinstance(places, np.ndarray) or places.dtype != np.intp or places.ndim != 1:
            yield "diagonal must be a one-dimensional array of numpy.intp"
        elif not places.flags.c_contiguous or not places.flags.aligned or places.size < needed:
            yield f"diagonal must hold {needed} contiguous places"
        elif n:
            steps = np.diff(places[:needed])
            limit = np.arange(n, 0, -1) if self.tail else np.arange(2, n + 1)
            if places[0] != 0 or np.any(steps < 1) or np.any(steps > limit):
                yield "diagonal must begin with 0 and ascend, each strip within its triangle"

    def places(self, lengths: list[int]) -> np.ndarray[Any, np.dtype[np.intp]]:
        """The array of the diagonal's places for strips of these lengths (elements)."""
        ends = np.concatenate([[0], np.cumsum(np.asarray(lengths, dtype=np.intp))])
        return (ends if self.tail else ends[1:] - 1).astype(np.intp)
