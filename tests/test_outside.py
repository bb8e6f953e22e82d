"""Whole jobs against what others computed or measured: BLAS, numpy, rationals, real matrices."""

from __future__ import annotations

import os
from dataclasses import dataclass
from fractions import Fraction
from functools import cache, cached_property
from itertools import product
from pathlib import Path
from typing import Any

import numpy as np
import pytest
import tools
from scipy.io import mmread
from scipy.linalg import blas, lapack
from sklearn import datasets
from threadpoolctl import threadpool_limits

from demilune import kernel
from demilune.kernel import Kernel
from demilune.layouts import LAYOUTS
from demilune.operations import OPERATIONS
from demilune.render import render
from demilune.toolchain.build import Unit, build_units
from demilune.toolchain.compilers import all_compilers

TRIANGLES = ("upper", "lower")
DTYPES = {"s": "float32", "d": "float64", "c": "complex64", "z": "complex128"}


@pytest.fixture(autouse=True)
def _surroundings():
    """A compiler, and a BLAS that starts no threads for small matrices."""
    if not all_compilers():
        tools.need("gcc")
    with threadpool_limits(1):
        yield


def kernels(*specs: dict[str, Any]) -> list[Kernel]:
    """Kernels that are compiled together, as one file."""
    made = [kernel(f"kernel{number}", **spec) for number, spec in enumerate(specs)]
    plans = [one.plan for one in made]
    unit = Unit("together", "c", plans, render(plans, "together", "c"))
    build_units([unit])
    if unit.error is not None:
        raise unit.error
    for one, executable in zip(made, unit.executables, strict=True):
        one.executable = executable
    return made


def gamma(m: int, dtype: Any) -> float:
    """m*u/(1 - m*u), what m roundings do at most: Higham, Accuracy and Stability of Numerical
    Algorithms, 2nd ed. (SIAM, 2002), lemma 3.1."""
    u = float(np.finfo(dtype).eps) / 2
    return m * u / (1 - m * u)


def size(values: Any) -> np.ndarray:
    """|Re| + |Im| in double precision: no real product inside a complex one is larger."""
    wide = np.asarray(values, dtype=complex)
    return np.abs(wide.real) + np.abs(wide.imag)


# --- the routines of the standard ----------------------------------------------------------------

# The symmetric and Hermitian routines of level 2 of the BLAS standard (BLAS Technical Forum
# Standard, 2001; Dongarra, Du Croz, Hammarling, Hanson, ACM TOMS 14(1), 1988), as scipy has them,
# and the complex symmetric ones that LAPACK adds. csymv, zsymv, csbmv and zsbmv are in no
# library here: their reference is numpy.

PRODUCTS = {"symv": "full", "hemv": "full", "spmv": "packed", "hpmv": "packed",
            "sbmv": "band", "hbmv": "band"}  # fmt: skip
UPDATES = {"syr": "full", "her": "full", "spr": "packed", "hpr": "packed"}


def routines(stems):
    return [
        pytest.param(stem, letter, id=letter + stem)
        for stem in stems
        for letter in ("cz" if stem.startswith("h") else "sdcz")
    ]


SCHEDULES = (
    {"loop": "fused"},
    {"loop": "dot", "block": 3, "order": "row-major"},
    {"loop": "axpy", "block": 4, "direction": "backward"},
)
STRIDES = ((1, 1), (2, 3), (-1, 1), (1, -2), (-3, -2))
BANDWIDTH = {1: 0, 2: 3, 7: 2, 19: 5}


@dataclass(frozen=True)
class Numbers:
    """Small whole numbers, for which every order of summation is exact, or any numbers."""

    dtype: str
    exact: bool

    @property
    def complex(self) -> bool:
        return self.dtype.startswith("complex")

    def draw(self, seed: int, *shape: int) -> np.ndarray:
        generator = np.random.default_rng(seed)
        parts = generator.integers(-4, 5, (2, *shape)).astype(float)
        if not self.exact:
            parts = generator.standard_normal((2, *shape)) * 10.0**parts
        return (parts[0] + 1j * parts[1] if self.complex else parts[0]).astype(self.dtype)

    @property
    def scalars(self) -> tuple[tuple[Any, Any], ...]:
        """Pairs of alpha and beta, which every element type holds exactly; complex ones last."""
        if self.exact:
            pairs: tuple[tuple[Any, Any], ...] = ((1, 0), (-1, 1), (3, -2), (0, 2))
            odd = (2 - 1j, -1 + 3j)
        else:
            pairs, odd = ((2.5, -0.625), (1, 0), (-1, 1)), (0.5 - 1.25j, 0.75j)
        return (*pairs, odd) if self.complex else pairs

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


def standard_half(whole: np.ndarray, layout: str, triangle: str, kd: int) -> np.ndarray:
    """The array that BLAS takes, made without this project."""
    n = len(whole)
    named = np.triu(whole) if triangle == "upper" else np.tril(whole)
    if layout == "packed":
        letter = {v: k for k, v in DTYPES.items()}[str(whole.dtype)]
        return getattr(lapack, letter + "trttp")(named, uplo=triangle[0].upper())[0]
    if layout == "full":
        return np.asfortranarray(named)
    rows = np.zeros((kd + 1, n), dtype=whole.dtype, order="F")
    for off in range(min(kd, n - 1) + 1):
        if triangle == "upper":
            rows[kd - off, off:] = np.diagonal(whole, off)
        else:
            rows[off, : n - off] = np.diagonal(whole, -off)
    return rows


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


def taken(array: np.ndarray, stride: int) -> np.ndarray:
    return array[:: abs(stride)][:: 1 if stride > 0 else -1]


def standard_product(stem: str, letter: str, half: np.ndarray, triangle: str, kd: int, whole: Any,
                     alpha: Any, x: np.ndarray, incx: int, beta: Any, y: np.ndarray,
                     incy: int) -> np.ndarray:  # fmt: skip
    """y of the standard's routine, all of the array."""
    call = getattr(blas, letter + stem, None)
    options = {"incx": incx, "beta": beta, "y": y, "incy": incy, "lower": triangle == "lower"}
    if call is None:
        result = y.copy()
        rest = beta * taken(y, incy) if beta != 0 else 0
        taken(result, incy)[:] = alpha * (whole @ taken(x, incx)) + rest
        return result
    if stem[1:] == "pmv":
        return call(len(whole), alpha, half, x, **options)
    if stem[1:] == "bmv":
        return call(kd, alpha, half, x, **options)
    return call(alpha, half, x, **options)


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
    for made in kernels(*(
        {**common, "triangle": triangle, **schedule}
        for triangle, schedule in product(TRIANGLES, SCHEDULES)
    )):  # fmt: skip
        triangle = made.spec.layout.triangle
        for n, exact in product(BANDWIDTH, (True, False)):
            numbers, sizes = Numbers(dtype, exact), sizes_of(layout, n)
            kd = sizes.get("kd", n)
            whole = matrix_for(numbers, n, kd, hermitian)
            half = Places(made, n, sizes).poisoned(whole)
            reference = standard_half(whole, layout, triangle, kd)
            for (incx, incy), (alpha, beta) in numbers.settings:
                x = spread(numbers.draw(1, n), incx)
                start = numbers.draw(2, n)
                y = spread(start * np.nan if beta == 0 else start, incy)
                clean = spread(start, incy)
                expected = standard_product(stem, letter, reference, triangle, kd, whole, alpha, x,
                                            incx, beta, clean, incy)  # fmt: skip
                given = {"alpha": alpha, "beta": beta, "incx": incx, "incy": incy}
                made(half, x, y, **given, **({"kd": kd} if layout == "band" else {}))
                # A complex sum of n products is a real one of 2n; alpha and beta add a few.
                bound = gamma(2 * n + 8, dtype) * (
                    size(alpha) * (size(whole) @ size(taken(x, incx))) + size(beta) * size(start)
                )
                check_near(taken(y, incy), taken(expected, incy), bound, exact)
                gaps = np.isnan(y)
                assert gaps.sum() == len(y) - n, "an element between the strides was written"


@pytest.mark.parametrize(("stem", "letter"), routines(UPDATES))
def test_update_is_the_standards(stem, letter):
    layout, dtype, hermitian = UPDATES[stem], DTYPES[letter], stem.startswith("h")
    structure = "hermitian" if hermitian else "symmetric"
    orders = ({"block": 3, "direction": "backward"}, {"order": "row-major"})
    common = {"operation": "rank1", "layout": layout, "structure": structure, "dtype": dtype,
              "alpha": "runtime", "incx": "runtime"}  # fmt: skip
    for made in kernels(*(
        {**common, "triangle": triangle, **schedule}
        for triangle, schedule in product(TRIANGLES, orders)
    )):  # fmt: skip
        triangle = made.spec.layout.triangle
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
                expected = standard_update(stem, letter, whole, layout, triangle, alpha, x, incx)
                squares = np.outer(size(values), size(values))
                bound = gamma(8, dtype) * (size(whole) + size(alpha) * squares)
                at = np.unravel_index(places.elements, whole.shape)
                check_near(half[places.used], expected[at], bound[at], exact)
                assert np.isnan(half[~places.used]).all(), "the other triangle was written"
                if hermitian and alpha != 0:
                    assert (half.imag[places.diagonal] == 0).all()


def standard_update(stem: str, letter: str, whole: np.ndarray, layout: str, triangle: str,
                    alpha: Any, x: np.ndarray, incx: int) -> np.ndarray:  # fmt: skip
    """The triangle that the standard's routine gives."""
    call, n = getattr(blas, letter + stem), len(whole)
    if letter + stem in ("cspr", "zspr"):  # OpenBLAS starts a negative stride at the wrong end
        x, incx = taken(x, incx).copy(), 1
    options = {"incx": incx, "lower": triangle == "lower"}
    half = standard_half(whole, layout, triangle, n)
    if layout == "full":
        return call(alpha, x, n=n, a=half, **options)
    packed = call(n, alpha, x, half, **options)
    return getattr(lapack, letter + "tpttr")(n, packed, uplo=triangle[0].upper())[0]


# Layouts that the standard does not have are held against the same routines on the whole array.


def ways(layout: str) -> list[dict[str, Any]]:
    """The ways in which a layout's memory can run, with tiles that do not fit evenly."""
    if layout == "rfp":
        return [{"transposed": False}, {"transposed": True}]
    tile = {"tile": 3} if layout == "tiled" else {}
    return [{"order": order, **tile} for order in LAYOUTS[layout].orders]


@pytest.mark.parametrize("operation", OPERATIONS)
@pytest.mark.parametrize("layout", sorted(LAYOUTS))
def test_complex_matrices_in_every_layout(layout, operation):
    loops = OPERATIONS[operation].loops
    choices = product(TRIANGLES, ways(layout), ("symmetric", "hermitian"))
    numbers = Numbers("complex128", True)
    for made in kernels(*(
        {"operation": operation, "layout": layout, "dtype": numbers.dtype, "triangle": triangle,
         "structure": structure, "loop": loops[number % len(loops)], **way}
        for number, (triangle, way, structure) in enumerate(choices)
    )):  # fmt: skip
        hermitian = made.spec.layout.hermitian
        for n in (7, 10):
            whole, x = matrix_for(numbers, n, n, hermitian), numbers.draw(1, n)
            by_blas = blas.zhemv(1, whole, x) if hermitian else whole @ x
            left = x.conj() if hermitian else x
            sizes = everything(layout, n, made.spec.layout.tail)
            half = made.to_half(whole, **sizes)
            found = made(half, x, **passed(sizes))
            if operation == "rank1":
                found, expected = made.to_full(half, n, **sizes), whole + np.outer(x, left)
            else:
                expected = by_blas if operation == "matvec" else left @ by_blas
            assert np.array_equal(found, expected), made.spec.stated


# --- covariances of real data --------------------------------------------------------------------

# The data sets that scikit-learn bundles: breast_cancer (UCI, Wolberg and others, 1995), wine (UCI,
# Forina and others), diabetes (Efron, Hastie, Johnstone, Tibshirani, Annals of Statistics 32(2),
# 2004), digits (UCI, Alpaydin and Kaynak, 1998). Their sources as scikit-learn names them.

DATA = ("breast_cancer", "wine", "diabetes", "digits")


@cache
def samples(name: str) -> np.ndarray:
    return getattr(datasets, f"load_{name}")().data


@dataclass(frozen=True)
class Real:
    """A real matrix and a vector, and what is exactly true of them in rational numbers."""

    matrix: np.ndarray
    x: np.ndarray

    @property
    def rationals(self) -> tuple[list[list[tuple[int, Fraction]]], list[Fraction]]:
        rows = [
            [(int(m), Fraction(float(row[m]))) for m in np.flatnonzero(row)] for row in self.matrix
        ]
        return rows, [Fraction(float(value)) for value in self.x]

    @cached_property
    def products(self) -> tuple[list[Fraction], list[Fraction]]:
        """A*x, and |A|*|x| which bounds are relative to."""
        rows, x = self.rationals
        terms = [[value * x[m] for m, value in row] for row in rows]
        return [sum(row, Fraction()) for row in terms], [
            sum(map(abs, row), Fraction()) for row in terms
        ]

    @cached_property
    def form(self) -> tuple[Fraction, Fraction]:
        """x^T*A*x, and the same of absolute values."""
        (exact, absolute), (_, x) = self.products, self.rationals
        return (
            sum((v * w for v, w in zip(x, exact, strict=True)), Fraction()),
            sum((abs(v) * w for v, w in zip(x, absolute, strict=True)), Fraction()),
        )


@cache
def covariance(name: str, dtype: str) -> Real:
    """The covariance of the data, and how its first sample deviates from the mean."""
    data = samples(name)
    return Real(
        np.cov(data, rowvar=False).astype(dtype), (data[0] - data.mean(axis=0)).astype(dtype)
    )


def everything(layout: str, n: int, tail: bool) -> dict[str, Any]:
    """Sizes of a layout that leave out no element."""
    if layout == "full":
        return {"ld": n}
    if layout == "band":
        return {"kd": n - 1, "ld": n}
    if layout == "skyline":
        return {"diagonal": profile([n - k if tail else k + 1 for k in range(n)], tail)}
    return {}


def profile(lengths: list[int], tail: bool) -> np.ndarray:
    """Places of the diagonal elements, which begin (tail) or end strips of these lengths."""
    ends = np.cumsum([0, *lengths])
    return (ends if tail else ends[1:] - 1).astype(np.intp)


def passed(sizes: dict[str, Any]) -> dict[str, Any]:
    """Those sizes that a call cannot see in its arrays."""
    return {name: value for name, value in sizes.items() if name in ("kd", "diagonal")}


def within(found: np.ndarray, exact: list[Fraction], bound: list[Fraction]) -> bool:
    return all(
        abs(Fraction(float(f)) - e) <= b for f, e, b in zip(found, exact, bound, strict=True)
    )


def g(m: int, digits: int) -> Fraction:
    """gamma(m) for numbers of so many bits, exactly."""
    return Fraction(m, 2**digits) / (1 - Fraction(m, 2**digits))


def product_bound(accumulator: str, digits: int, n: int, exact: Fraction,
                  absolute: Fraction) -> Fraction:  # fmt: skip
    """How far a sum of n products may be from the exact one, in whatever order it is taken."""
    u = Fraction(1, 2**digits)
    if accumulator == "compensated":  # Ogita, Rump, Oishi 2005, proposition 5.5, two merges more
        return u * abs(exact) + 2 * g(n + 3, digits) ** 2 * absolute
    if accumulator == "wide":  # summed in double precision, rounded once
        return u * abs(exact) + 2 * g(n, 53) * absolute
    return g(n, digits) * absolute  # Higham 2002, section 3.1


ARITHMETICS = [
    {"dtype": "float64", "accumulator": "plain", "triangle": "upper"},
    {"dtype": "float64", "accumulator": "plain", "triangle": "lower"},
    {"dtype": "float64", "accumulator": "compensated", "triangle": "lower"},
    {"dtype": "float32", "accumulator": "plain", "triangle": "upper"},
    {"dtype": "float32", "accumulator": "wide", "triangle": "lower"},
    {"dtype": "float32", "accumulator": "compensated", "triangle": "upper"},
]


@pytest.mark.parametrize("loop", ["dot", "axpy", "fused"])
@pytest.mark.parametrize("layout", sorted(LAYOUTS))
def test_products_with_covariances(layout, loop):
    for made in kernels(*({"layout": layout, "loop": loop, **one} for one in ARITHMETICS)):
        arithmetic = made.spec.arithmetic
        dtype, digits = arithmetic.dtype, arithmetic.type.digits
        for name in DATA:
            real = covariance(name, dtype)
            n = len(real.matrix)
            sizes = everything(layout, n, made.spec.layout.tail)
            half = made.to_half(real.matrix, **sizes)
            y = made(half, real.x, **passed(sizes))
            exact, absolute = real.products
            bound = [
                product_bound(arithmetic.accumulator, digits, n, e, a)
                for e, a in zip(exact, absolute, strict=True)
            ]
            assert within(y, exact, bound), (name, made.spec.stated)
            by_numpy = real.matrix @ real.x
            limit = 2 * gamma(n, dtype) * np.array([float(a) for a in absolute])
            assert (np.abs(y.astype(float) - by_numpy) <= limit).all(), name


@pytest.mark.parametrize("layout", sorted(LAYOUTS))
def test_variances_along_a_direction(layout):
    """x^T*C*x with each covariance; the digits' has constant pixels, rows of zeros."""
    common = {"operation": "quadform", "layout": layout}
    for made in kernels(*(
        {**common, "triangle": triangle, "loop": loop}
        for triangle, loop in product(TRIANGLES, ("dot", "fused"))
    )):  # fmt: skip
        for name in DATA:
            real = covariance(name, "float64")
            n = len(real.matrix)
            sizes = everything(layout, n, made.spec.layout.tail)
            s = made(made.to_half(real.matrix, **sizes), real.x, **passed(sizes))
            exact, absolute = real.form
            assert within(np.array([s]), [exact], [g(2 * n + 1, 53) * absolute]), name
            assert abs(s - real.x @ real.matrix @ real.x) <= 2 * gamma(2 * n + 1, "d") * absolute


@pytest.mark.parametrize("layout", sorted(LAYOUTS))
def test_covariance_built_from_updates(layout):
    """Rank-1 updates, one a sample, add up to the covariance that numpy computes."""
    data = samples("wine")
    deviations = data - data.mean(axis=0)
    count, n = deviations.shape
    expected = np.cov(deviations, rowvar=False)
    limit = 2 * gamma(2 * count, "d") * (np.abs(deviations).T @ np.abs(deviations)) / (count - 1)
    common = {"operation": "rank1", "layout": layout, "alpha": 1 / (count - 1)}
    for made in kernels(*({**common, "triangle": triangle} for triangle in TRIANGLES)):
        sizes = everything(layout, n, made.spec.layout.tail)
        half = made.to_half(np.zeros((n, n)), **sizes)
        for x in deviations:
            made(half, x, **passed(sizes))
        assert (np.abs(made.to_full(half, n, **sizes) - expected) <= limit).all()


@pytest.mark.parametrize("layout", sorted(LAYOUTS))
def test_moments_of_whole_numbers_are_exact(layout):
    """The pixels are 0 to 16: sums of their products are exact even in single precision."""
    pixels = samples("digits")[:200].astype(np.float32)
    expected = pixels.astype(np.int64).T @ pixels.astype(np.int64)
    common = {"operation": "rank1", "layout": layout, "dtype": "float32"}
    for made in kernels(*({**common, "triangle": triangle} for triangle in TRIANGLES)):
        sizes = everything(layout, 64, made.spec.layout.tail)
        half = made.to_half(np.zeros((64, 64)), **sizes)
        for x in pixels:
            made(half, x, **passed(sizes))
        assert np.array_equal(made.to_full(half, 64, **sizes), expected)


# --- a stiffness matrix from outside -------------------------------------------------------------

# lund_a of the Harwell-Boeing collection (Duff, Grimes, Lewis, ACM TOMS 15(1), 1989), as Debian
# ships it with its package r-cran-matrix.

LUND_A = "/usr/lib/R/library/Matrix/external/lund_a.mtx"


@cache
def lund() -> Real:
    path = Path(os.environ.get("DEMILUNE_LUND_A", LUND_A))
    if not path.is_file():
        message = (
            "lund_a.mtx is not on this machine: it is in Debian's package r-cran-matrix, and "
            "DEMILUNE_LUND_A names the file"
        )
        (pytest.fail if os.environ.get("CI") == "true" else pytest.skip)(message)
    matrix = mmread(path).toarray()
    return Real(matrix, matrix.diagonal() / matrix.diagonal().max())


def test_lund_is_what_it_is_said_to_be():
    """n = 147, half-bandwidth 23, positive definite: so that the tests below have a band."""
    matrix = lund().matrix
    i, j = np.nonzero(matrix)
    assert matrix.shape == (147, 147)
    assert np.abs(i - j).max() == 23
    assert np.array_equal(matrix, matrix.T)
    assert np.linalg.eigvalsh(matrix).min() > 0


@pytest.mark.parametrize("loop", ["dot", "axpy", "fused"])
@pytest.mark.parametrize("layout", ["band", "skyline"])
def test_products_with_a_stiffness_matrix(layout, loop):
    real = lund()
    n, (exact, absolute) = 147, real.products
    terms = 2 * 23 + 1  # a row of the band; the others add exact zeros
    for made in kernels(*(
        {"layout": layout, "loop": loop, "triangle": triangle, "order": order}
        for triangle, order in product(TRIANGLES, ("column-major", "row-major"))
    )):  # fmt: skip
        triangle = made.spec.layout.triangle
        if layout == "band":
            sizes: dict[str, Any] = {"kd": 23, "ld": 24}
        else:
            lengths = strip_lengths(real.matrix, made.spec.layout.tail)
            assert sum(lengths) < 24 * n
            sizes = {"diagonal": profile(lengths, made.spec.layout.tail)}
        half = made.to_half(real.matrix, **sizes)
        assert np.array_equal(made.to_full(half, n, **sizes), real.matrix)
        y = made(half, real.x, **passed(sizes))
        assert within(y, exact, [g(terms, 53) * a for a in absolute])
        reference = standard_half(real.matrix, "band", triangle, 23)
        by_blas = blas.dsbmv(23, 1.0, reference, real.x, lower=triangle == "lower")
        limit = 2 * gamma(terms, "d") * np.array([float(a) for a in absolute])
        assert (np.abs(y - by_blas) <= limit).all()


def strip_lengths(matrix: np.ndarray, tail: bool) -> list[int]:
    """From the diagonal to the last nonzero of each column (tail), or from the first to it."""
    rows = [np.flatnonzero(column) for column in matrix.T]
    return [int(at[-1]) - k + 1 if tail else k - int(at[0]) + 1 for k, at in enumerate(rows)]
