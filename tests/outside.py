"""What tests against other people's libraries and data share."""

from __future__ import annotations

from dataclasses import dataclass
from fractions import Fraction
from itertools import product
from typing import Any

import numpy as np
import pytest
import tools
from scipy.linalg import blas, lapack
from threadpoolctl import threadpool_limits

from demilune import kernel
from demilune.errors import MissingError
from demilune.kernel import Kernel
from demilune.layouts import LAYOUTS
from demilune.render import render
from demilune.toolchain.build import Unit, build_units
from demilune.toolchain.compilers import find_compiler

TRIANGLES = ({"triangle": "upper"}, {"triangle": "lower"})
DTYPES = {"s": "float32", "d": "float64", "c": "complex64", "z": "complex128"}


@pytest.fixture(autouse=True)
def _surroundings():
    """A compiler, and a BLAS that starts no threads for small matrices."""
    try:
        find_compiler()
    except MissingError:
        tools.need("gcc")
    with threadpool_limits(1):
        yield


def kernels(*axes: Any) -> list[Kernel]:
    """Every combination of the axes, each a sequence of keys and values; compiled as one file."""
    specs = [{k: v for one in choice for k, v in one.items()} for choice in product(*axes)]
    made = [kernel(f"kernel{number}", **spec) for number, spec in enumerate(specs)]
    plans = [one.plan for one in made]
    unit = Unit("together", "c", plans, render(plans, "together", "c"))
    build_units([unit])
    if unit.error is not None:
        raise unit.error
    for one, executable in zip(made, unit.executables, strict=True):
        one.executable = executable
    return made


def gamma(m: int, dtype: Any) -> Fraction:
    """What m roundings do at most, relatively: Higham, Accuracy and Stability of Numerical
    Algorithms, 2nd ed. (SIAM, 2002), lemma 3.1 (from memory)."""
    share = m * Fraction(float(np.finfo(dtype).eps)) / 2
    return share / (1 - share)


def size(values: Any) -> np.ndarray:
    """|Re| + |Im| in double precision: no real product inside a complex one is larger."""
    wide = np.asarray(values, dtype=complex)
    return np.abs(wide.real) + np.abs(wide.imag)


@dataclass(frozen=True)
class Standard:
    """A routine of the standard for one triangle, given whole matrices."""

    stem: str
    letter: str
    triangle: str

    def half(self, whole, kd):
        """The array that BLAS takes, made without this project."""
        n, upper = len(whole), self.triangle == "upper"
        named = np.triu(whole) if upper else np.tril(whole)
        if self.stem[1] == "p":
            return getattr(lapack, self.letter + "trttp")(named, uplo="LU"[upper])[0]
        if self.stem[1] != "b":
            return np.asfortranarray(named)
        rows = np.zeros((kd + 1, n), dtype=whole.dtype, order="F")
        for off in range(min(kd, n - 1) + 1):
            if upper:
                rows[kd - off, off:] = np.diagonal(whole, off)
            else:
                rows[off, : n - off] = np.diagonal(whole, -off)
        return rows

    def product(self, whole, kd, x, y, alpha, beta, incx, incy):
        """The elements of y."""
        call = getattr(blas, self.letter + self.stem, None)
        if call is None:
            return alpha * (whole @ taken(x, incx)) + beta * taken(y, incy)
        sizes = {"p": (len(whole),), "b": (kd,)}.get(self.stem[1], ())
        strides = {"incx": incx, "incy": incy, "lower": self.triangle == "lower"}
        half = self.half(whole, kd)
        return taken(call(*sizes, alpha, half, x, beta=beta, y=y, **strides), incy)

    def update(self, whole, x, alpha, incx):
        """The triangle of A."""
        call, n, half = getattr(blas, self.letter + self.stem), len(whole), self.half(whole, 0)
        if self.letter + self.stem in ("cspr", "zspr"):  # OpenBLAS mistakes negative strides
            x, incx = taken(x, incx).copy(), 1
        lower = self.triangle == "lower"
        if half.ndim == 2:
            return call(alpha, x, n=n, a=half, incx=incx, lower=lower)
        packed = call(n, alpha, x, half, incx=incx, lower=lower)
        return getattr(lapack, self.letter + "tpttr")(n, packed, uplo="UL"[lower])[0]


def taken(array: np.ndarray, stride: int) -> np.ndarray:
    return array[:: abs(stride)][:: 1 if stride > 0 else -1]


def ways(layout: str) -> list[dict[str, Any]]:
    """The ways in which a layout's memory can run, with tiles that do not fit evenly."""
    if layout == "rfp":
        return [{"transposed": False}, {"transposed": True}]
    tile = {"tile": 3} if layout == "tiled" else {}
    return [{"order": order, **tile} for order in LAYOUTS[layout].orders]


def run(made: Kernel, matrix: np.ndarray, *vectors: np.ndarray) -> Any:
    """What the kernel makes of the vectors, one after another, with all of the matrix stored."""
    n, layout = len(matrix), made.spec.layout
    lengths = [n - k if layout.tail else k + 1 for k in range(n)]
    sizes: dict[str, Any] = {
        "full": {"ld": n},
        "band": {"kd": n - 1, "ld": n},
        "skyline": {"diagonal": profile(lengths, layout.tail)},
    }.get(layout.name, {})
    half = made.to_half(matrix, **sizes)
    for x in vectors:
        result = made(half, x, **sizes)
    return made.to_full(half, n, **sizes) if made.spec.operation.name == "rank1" else result


def profile(lengths: list[int], tail: bool) -> np.ndarray:
    """Places of the diagonal elements, which begin (tail) or end strips of these lengths."""
    ends = np.cumsum([0, *lengths])
    return (ends if tail else ends[1:] - 1).astype(np.intp)
