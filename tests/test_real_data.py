"""Matrices that others measured or computed: covariances and a stiffness matrix."""

from __future__ import annotations

import os
from dataclasses import dataclass
from fractions import Fraction
from functools import cache, cached_property
from pathlib import Path
from typing import Any

import numpy as np
import pytest
from outside import (
    TRIANGLES,
    Standard,
    _surroundings,  # noqa: F401 - a fixture for every test here
    gamma,
    kernels,
    profile,
    run,
    ways,
)
from scipy.io import mmread
from sklearn import datasets

from demilune.layouts import LAYOUTS

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
