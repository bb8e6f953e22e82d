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


def ways(layout: str) -> list[dict[str, Any]]:
    """The ways in which a layout's memory can run, with tiles that do not fit evenly."""
    if layout == "rfp":
        return [{"transposed": False}, {"transposed": True}]
    tile = {"tile": 3} if layout == "tiled" else {}
    return [{"order": order, **tile} for order in LAYOUTS[layout].orders]


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


# --- covariances of real data --------------------------------------------------------------------

# The data sets that scikit-learn bundles: breast_cancer (UCI, Wolberg and others, 1995), wine (UCI,
# Forina and others), diabetes (Efron, Hastie, Johnstone, Tibshirani, Annals of Statistics 32(2),
# 2004), digits (UCI, Alpaydin and Kaynak, 1998); these origins from memory.

DATA = ("breast_cancer", "wine", "diabetes", "digits")


@cache
def samples(name: str) -> np.ndarray:
    return getattr(datasets, f"load_{name}")().data


def rational(matrix: np.ndarray, x: np.ndarray) -> list[Fraction]:
    """The exact product."""
    factors = rational_of(x)
    return [
        sum((Fraction(float(a)) * b for a, b in zip(row, factors, strict=True) if a), Fraction())
        for row in matrix
    ]


@dataclass(frozen=True)
class Real:
    """A real matrix and a vector."""

    matrix: np.ndarray
    x: np.ndarray

    @cached_property
    def products(self) -> tuple[list[Fraction], list[Fraction]]:
        """A*x exactly, and |A|*|x| which bounds are relative to."""
        return rational(self.matrix, self.x), rational(abs(self.matrix), abs(self.x))

    @cached_property
    def form(self) -> tuple[Fraction, Fraction]:
        """x^T*A*x, and the same of absolute values."""
        exact, absolute = (np.array(one) for one in self.products)
        x = np.array(rational_of(self.x))
        return x @ exact, abs(x) @ absolute


@cache
def covariance(name: str, dtype: str) -> Real:
    """The covariance of the data, and how its first sample deviates from the mean."""
    data = samples(name)
    return Real(
        np.cov(data, rowvar=False).astype(dtype), (data[0] - data.mean(axis=0)).astype(dtype)
    )


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


def rational_of(values: Any) -> list[Fraction]:
    return [Fraction(float(value)) for value in values]


def within(found: Any, reference: list[Fraction], bound: list[Fraction]) -> bool:
    pairs = zip(rational_of(found), reference, bound, strict=True)
    return all(abs(value - other) <= most for value, other, most in pairs)


def product_bound(accumulator: str, dtype: str, n: int, exact: Fraction,
                  absolute: Fraction) -> Fraction:  # fmt: skip
    """How far a sum of n products may be from the exact one, in whatever order it is taken."""
    if accumulator == "compensated":  # Ogita, Rump, Oishi 2005, proposition 5.5, two merges more
        return gamma(1, dtype) * abs(exact) + 2 * gamma(n + 3, dtype) ** 2 * absolute
    if accumulator == "wide":  # summed in double precision, rounded once
        return gamma(1, dtype) * abs(exact) + 2 * gamma(n, "float64") * absolute
    return gamma(n, dtype) * absolute  # Higham 2002, section 3.1


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
    for made in kernels([{"layout": layout, "loop": loop}], ARITHMETICS):
        dtype, accumulator = made.spec.arithmetic.dtype, made.spec.arithmetic.accumulator
        for name in DATA:
            real = covariance(name, dtype)
            n, y = len(real.matrix), run(made, real.matrix, real.x)
            exact, absolute = real.products
            bound = [
                product_bound(accumulator, dtype, n, e, a)
                for e, a in zip(exact, absolute, strict=True)
            ]
            assert within(y, exact, bound), (name, made.spec.stated)
            by_numpy = real.matrix @ real.x
            assert within(y, rational_of(by_numpy), [2 * gamma(n, dtype) * a for a in absolute])


@pytest.mark.parametrize("layout", sorted(LAYOUTS))
def test_variances_along_a_direction(layout):
    """x^T*C*x with each covariance; the digits' has constant pixels, rows of zeros."""
    common = {"operation": "quadform", "layout": layout}
    for made in kernels([common], TRIANGLES, [{"loop": "dot"}, {"loop": "fused"}]):
        for name in DATA:
            real = covariance(name, "float64")
            n, s = len(real.matrix), run(made, real.matrix, real.x)
            exact, absolute = real.form
            by_numpy, bound = real.x @ real.matrix @ real.x, gamma(2 * n + 1, "d") * absolute
            assert within([s], [exact], [bound]), name
            assert within([s], rational_of([by_numpy]), [2 * bound]), name


@pytest.mark.parametrize("layout", sorted(LAYOUTS))
def test_moments_built_from_updates(layout):
    """Rank-1 updates, one a sample, add up to what numpy computes of all samples at once.

    The pixels are 0 to 16: sums of their products are exact even in single precision.
    """
    wine, pixels = samples("wine"), samples("digits")[:200].astype(np.float32)
    deviations, share = wine - wine.mean(axis=0), 1 / (len(wine) - 1)
    squares = np.abs(deviations).T @ np.abs(deviations) * share
    limit = 2 * float(gamma(2 * len(wine), "d")) * squares
    common = {"operation": "rank1", "layout": layout}
    for made in kernels([{**common, "alpha": share}], TRIANGLES):
        found = run(made, np.zeros((13, 13)), *deviations)
        assert (np.abs(found - np.cov(deviations, rowvar=False)) <= limit).all()
    for made in kernels([{**common, "dtype": "float32"}], TRIANGLES):
        found = run(made, np.zeros((64, 64)), *pixels)
        assert np.array_equal(found, pixels.astype(int).T @ pixels.astype(int))


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
    for made in kernels([{"layout": layout, "loop": loop}], TRIANGLES, ways(layout)):
        if layout == "band":
            sizes: dict[str, Any] = {"kd": 23, "ld": 24}
        else:
            lengths = strip_lengths(real.matrix, made.spec.layout.tail)
            assert sum(lengths) < 24 * n
            sizes = {"diagonal": profile(lengths, made.spec.layout.tail)}
        half = made.to_half(real.matrix, **sizes)
        assert np.array_equal(made.to_full(half, n, **sizes), real.matrix)
        y = made(half, real.x, **sizes)
        bound = [gamma(terms, "d") * a for a in absolute]
        assert within(y, exact, bound)
        standard = Standard("sbmv", "d", made.spec.layout.triangle)
        by_blas = standard.product(real.matrix, 23, real.x, np.zeros(n), 1, 0, 1, 1)
        assert within(y, rational_of(by_blas), [2 * b for b in bound])


def strip_lengths(matrix: np.ndarray, tail: bool) -> list[int]:
    """From the diagonal to the last nonzero of each column (tail), or from the first to it."""
    rows = [np.flatnonzero(column) for column in matrix.T]
    return [int(at[-1]) - k + 1 if tail else k - int(at[0]) + 1 for k, at in enumerate(rows)]
