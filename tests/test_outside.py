"""The routines of the BLAS standard as scipy has them, numpy where it has none."""

from __future__ import annotations

from dataclasses import dataclass
from itertools import product
from typing import Any

import numpy as np
import pytest
from outside import (
    DTYPES,
    TRIANGLES,
    Standard,
    _surroundings,  # noqa: F401 - a fixture for every test here
    gamma,
    kernels,
    run,
    size,
    taken,
    ways,
)
from scipy.linalg import blas

from demilune.kernel import Kernel
from demilune.layouts import LAYOUTS

# --- the routines of the standard ----------------------------------------------------------------

# The symmetric and Hermitian routines of level 2 of the BLAS standard (BLAS Technical Forum
# Standard, 2001; Dongarra, Du Croz, Hammarling, Hanson, ACM TOMS 14(1), 1988), as scipy has them,
# and the complex symmetric ones that LAPACK adds. csymv, zsymv, csbmv and zsbmv are in no
# library here: their reference is numpy.

PRODUCTS = {"symv": "full", "hemv": "full", "spmv": "packed", "hpmv": "packed",
            "sbmv": "band", "hbmv": "band"}  # fmt: skip
UPDATES = {"syr": "full", "her": "full", "spr": "packed", "hpr": "packed"}


def routines(stems):
    return [(stem, c) for stem in stems for c in ("cz" if stem.startswith("h") else "sdcz")]


SCHEDULES = (
    {"loop": "fused"},
    {"loop": "dot", "block": 3, "order": "row-major"},
    {"loop": "axpy", "block": 4, "direction": "backward"},
)
STRIDES = ((1, 1), (2, 3), (-1, 1), (1, -2), (-3, -2))
# Pairs of alpha and beta, which every element type holds exactly; the last is complex.
WHOLE = ((1, 0), (-1, 1), (3, -2), (0, 2), (2 - 1j, -1 + 3j))
ANY = ((2.5, -0.625), (1, 0), (-1, 1), (0.5 - 1.25j, 0.75j))
BANDWIDTH = {1: 0, 2: 3, 7: 2, 19: 5}


@dataclass(frozen=True)
class Numbers:
    """Small whole numbers, for which every order of summation is exact, or any numbers."""

    dtype: str
    exact: bool

    def draw(self, seed: int, *shape: int) -> np.ndarray:
        generator = np.random.default_rng(seed)
        parts = generator.integers(-4, 5, (2, *shape)).astype(float)
        if not self.exact:
            parts = generator.standard_normal((2, *shape)) * 10.0**parts
        complex_too = self.dtype.startswith("complex")
        return (parts[0] + 1j * parts[1] if complex_too else parts[0]).astype(self.dtype)

    @property
    def scalars(self) -> tuple[tuple[Any, Any], ...]:
        pairs = WHOLE if self.exact else ANY
        return pairs if self.dtype.startswith("complex") else pairs[:-1]

    @property
    def settings(self) -> list[tuple[tuple[int, int], tuple[Any, Any]]]:
        """Strides with scalars: all of them where the numbers are whole, else each a few times."""
        if self.exact:
            return list(product(STRIDES, self.scalars))
        return [(s, self.scalars[i % len(self.scalars)]) for i, s in enumerate(STRIDES)]


def matrix_for(numbers: Numbers, n: int, kd: int, hermitian: bool) -> np.ndarray:
    half = np.tril(numbers.draw(n, n, n), -1)
    diagonal = numbers.draw(n + 1, n)
    whole = half + (half.conj().T if hermitian else half.T)
    np.fill_diagonal(whole, diagonal.real if hermitian else diagonal)
    i, j = np.indices(whole.shape)
    whole[np.abs(i - j) > kd] = 0
    return whole


class Places:
    """Where a kernel's half holds which element: numbers of elements, row by row."""

    def __init__(self, made: Kernel, n: int, sizes: dict[str, int]) -> None:
        self.made, self.sizes = made, sizes
        numbers = np.arange(1, n * n + 1).reshape(n, n)
        half = made.to_half(numbers, **sizes).real.astype(int)
        self.used = half > 0
        self.elements = half[self.used] - 1
        self.diagonal = (half % (n + 1) == 1) & self.used

    def poisoned(self, whole: np.ndarray) -> np.ndarray:
        """The half, with NaN wherever the standard says that nothing is read."""
        half = self.made.to_half(whole, **self.sizes)
        half[~self.used] = np.nan
        if self.made.spec.layout.hermitian:
            half.imag[self.diagonal] = np.nan
        return half


def sizes_of(layout: str, n: int) -> dict[str, int]:
    """The sizes of a case; arrays are taller than need be for some n."""
    more = n % 3
    if layout == "packed":
        return {}
    kd = BANDWIDTH[n]
    return {"ld": n + more} if layout == "full" else {"kd": kd, "ld": kd + 1 + more}


def spread(values: np.ndarray, stride: int) -> np.ndarray:
    """The vector with a stride as the standard has it, NaN between its elements."""
    array = np.full(1 + (len(values) - 1) * abs(stride), np.nan, dtype=values.dtype)
    taken(array, stride)[:] = values
    return array


def check_near(found: np.ndarray, reference: np.ndarray, bound: np.ndarray, exact: bool) -> None:
    """Equal, or each part no further than both results may be from the exact one."""
    if exact:
        assert np.array_equal(found, reference)  # only the sign of a zero depends on the order
        return
    wide = found.astype(complex) - reference
    assert (np.abs(wide.real) <= 2 * bound).all()
    assert (np.abs(wide.imag) <= 2 * bound).all()


@pytest.mark.parametrize(("stem", "letter"), routines(PRODUCTS))
def test_product_is_the_standards(stem, letter):
    layout, dtype, hermitian = PRODUCTS[stem], DTYPES[letter], stem.startswith("h")
    runtime = dict.fromkeys(("alpha", "beta", "incx", "incy"), "runtime")
    structure = "hermitian" if hermitian else "symmetric"
    common = {"layout": layout, "structure": structure, "dtype": dtype, **runtime}
    for made in kernels([common], TRIANGLES, SCHEDULES):
        standard = Standard(stem, letter, made.spec.layout.triangle)
        for n, exact in product(BANDWIDTH, (True, False)):
            numbers, sizes = Numbers(dtype, exact), sizes_of(layout, n)
            kd = sizes.get("kd", n)
            whole = matrix_for(numbers, n, kd, hermitian)
            half = Places(made, n, sizes).poisoned(whole)
            for (incx, incy), (alpha, beta) in numbers.settings:
                x = spread(numbers.draw(1, n), incx)
                start = numbers.draw(2, n)
                y = spread(start * np.nan if beta == 0 else start, incy)
                given = {"alpha": alpha, "beta": beta, "incx": incx, "incy": incy}
                expected = standard.product(whole, kd, x, spread(start, incy), **given)
                made(half, x, y, **given, **sizes)
                # A complex sum of n products is a real one of 2n; alpha and beta add a few.
                bound = float(gamma(2 * n + 8, dtype)) * (
                    size(alpha) * (size(whole) @ size(taken(x, incx))) + size(beta) * size(start)
                )
                check_near(taken(y, incy), expected, bound, exact)
                assert np.isnan(y).sum() == len(y) - n, "an element between the strides was written"


@pytest.mark.parametrize(("stem", "letter"), routines(UPDATES))
def test_update_is_the_standards(stem, letter):
    layout, dtype, hermitian = UPDATES[stem], DTYPES[letter], stem.startswith("h")
    structure = "hermitian" if hermitian else "symmetric"
    orders = ({"block": 3, "direction": "backward"}, {"order": "row-major"})
    common = {"operation": "rank1", "layout": layout, "structure": structure, "dtype": dtype,
              "alpha": "runtime", "incx": "runtime"}  # fmt: skip
    for made in kernels([common], TRIANGLES, orders):
        standard = Standard(stem, letter, made.spec.layout.triangle)
        for n, exact in product(BANDWIDTH, (True, False)):
            numbers = Numbers(dtype, exact)
            places = Places(made, n, sizes_of(layout, n))
            whole = matrix_for(numbers, n, n, hermitian)
            before = places.poisoned(whole)
            real_only = numbers.scalars[: 3 if hermitian else None]
            for incx, (alpha, _) in product((1, 2, -3), real_only):
                values = numbers.draw(1, n)
                x, half = spread(values, incx), before.copy(order="K")
                made(half, x, alpha=alpha, incx=incx)
                expected = standard.update(whole, x, alpha, incx)
                squares = np.outer(size(values), size(values))
                bound = float(gamma(8, dtype)) * (size(whole) + size(alpha) * squares)
                at = np.unravel_index(places.elements, whole.shape)
                check_near(half[places.used], expected[at], bound[at], exact)
                assert np.isnan(half[~places.used]).all(), "the other triangle was written"
                if hermitian and alpha != 0:
                    assert (half.imag[places.diagonal] == 0).all()


# Layouts that the standard does not have are held against the same routines on the whole array.


@pytest.mark.parametrize(
    ("operation", "loops"),
    [("matvec", ("axpy", "fused")), ("quadform", ("dot", "fused")), ("rank1", ("axpy", "axpy"))],
)
@pytest.mark.parametrize("layout", sorted(LAYOUTS))
def test_complex_matrices_in_every_layout(layout, operation, loops):
    numbers = Numbers("complex128", True)
    common = {"operation": operation, "layout": layout, "dtype": numbers.dtype}
    structures = [
        {"structure": "symmetric", "loop": loops[0], "direction": "backward"},
        {"structure": "hermitian", "loop": loops[1], "block": 2},
    ]
    for made in kernels([common], TRIANGLES, ways(layout), structures):
        hermitian = made.spec.layout.hermitian
        for n in (7, 10):
            whole, x = matrix_for(numbers, n, n, hermitian), numbers.draw(1, n)
            image = blas.zhemv(1, whole, x) if hermitian else whole @ x
            left = x.conj() if hermitian else x
            expected = {"matvec": image, "quadform": left @ image,
                        "rank1": whole + np.outer(x, left)}  # fmt: skip
            assert np.array_equal(run(made, whole, x), expected[operation]), made.spec.stated
