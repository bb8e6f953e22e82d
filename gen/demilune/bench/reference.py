"""Results from outside the plan: numpy products of the whole matrix, and exact rationals.

Both use the operation's formula on the whole matrix; nothing of layouts, loops or templates.
"""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass
from fractions import Fraction
from typing import Any

import numpy as np

from demilune.bench.problem import PAD, Lanes, Problem, places, stored
from demilune.dtypes import REAL_DIGITS
from demilune.operations.base import sizes


def result_places(problem: Problem) -> Iterator[tuple[Any, Any]]:
    """Where the result lies: index arrays into the whole result, and places in its buffer."""
    name = problem.plan.spec.operation.result
    if name == "a":
        for i, j, at in stored(problem.plan, problem.setting.sizes):
            yield (i, j), PAD + at
    elif name in problem.vectors:
        n, step = problem.setting.n, int(problem.setting.sizes[f"inc{name}"])
        yield (np.arange(n),), PAD + places(n, step)
    else:
        yield (np.array([0]),), np.array([PAD])


def numpy_product(problem: Problem) -> dict[str, Lanes]:
    """The buffers after the call, from numpy products of the whole symmetric matrix.

    Exact where every partial sum is representable, in whatever order numpy takes them.
    """
    spec = problem.plan.spec
    operation, hermitian = spec.operation, spec.layout.hermitian
    after = {name: buffer.copy() for name, buffer in problem.buffers.items()}
    alpha = problem.setting.scalars.get("alpha", 1)
    beta = problem.setting.scalars.get("beta", 0)
    if alpha == 0 and operation.result == "a":
        return after
    integer = spec.arithmetic.type.integer
    buffer = after[operation.result]
    for lane in range(problem.lanes):
        matrix = _whole(problem.matrix[..., lane], integer)
        x, y = (_whole(problem.vectors[name][..., lane], integer) for name in ("x", "y"))
        result = operation.reference(matrix, x, y, alpha, beta, hermitian)
        for index, at in result_places(problem):
            buffer[at, 0, lane] = result[index].real
            if buffer.shape[1] == 2:
                buffer[at, 1, lane] = result[index].imag
    return after


def _whole(parts: Lanes, integer: bool) -> Lanes:
    """Numbers from their parts, in a type that holds them exactly."""
    if parts.shape[-1] == 2:
        return np.asarray(parts[..., 0].astype(np.float64) + 1j * parts[..., 1])
    return parts[..., 0].astype(np.int64 if integer else np.float64)


# --- error bounds --------------------------------------------------------------------------------


@dataclass(frozen=True)
class Exact:
    """A complex number with rational parts; arrays of these work with numpy's products."""

    real: Fraction
    imag: Fraction = Fraction(0)

    def __add__(self, other: Any) -> Exact:
        return Exact(self.real + other.real, self.imag + other.imag)

    __radd__ = __add__

    def __mul__(self, other: Any) -> Any:
        if isinstance(other, np.ndarray):
            return NotImplemented
        return Exact(
            self.real * other.real - self.imag * other.imag,
            self.real * other.imag + self.imag * other.real,
        )

    __rmul__ = __mul__

    def conjugate(self) -> Exact:
        return Exact(self.real, -self.imag)


@dataclass(frozen=True)
class Result:
    """One exact result, what bounds its error, and what was found."""

    exact: Exact
    outer: Fraction
    """Magnitudes of what the last few operations add up."""
    inner: Fraction
    """The same product of absolute values: what the error of a plain sum is relative to."""
    roundings: int
    """How many roundings a term can go through."""
    found: Lanes


def errors(problem: Problem, found: dict[str, Lanes], lane: int) -> tuple[float, float]:
    """The largest error of the results in units of the published bound, and in ulps.

    The exact result is computed with rationals. The bound is componentwise, with gamma(m) =
    m*u/(1 - m*u), m the roundings that a term can go through and G the same product of absolute
    values: gamma(m)*G for plain sums in every order (Higham, Accuracy and Stability of
    Numerical Algorithms, 2nd ed., 2002, sections 3.1 and 3.6); for compensated ones a few
    roundings of the result and gamma(m)^2*G (Ogita, Rump, Oishi 2005, proposition 5.5).
    """
    worst, ulps = 0.0, 0.0
    for result in _results(problem, found, lane):
        bound = _bound(problem, result)
        for got, exact in zip(result.found, (result.exact.real, result.exact.imag), strict=False):
            if not np.isfinite(got):
                return float("inf"), float("inf")
            error = abs(Fraction(float(got)) - exact)
            if error:
                worst = max(worst, _ratio(error, bound))
                ulps = max(ulps, _ratio(error, Fraction(float(np.spacing(np.abs(got))))))
    return worst, ulps


def _ratio(above: Fraction, below: Fraction) -> float:
    try:
        return float(above / below)
    except (OverflowError, ZeroDivisionError):
        return float("inf")


def _results(problem: Problem, found: dict[str, Lanes], lane: int) -> Iterator[Result]:
    spec, n = problem.plan.spec, problem.setting.n
    operation, hermitian = spec.operation, spec.layout.hermitian
    matrix = _exact(problem.matrix[..., lane])
    x, y = (_exact(problem.vectors[name][..., lane]) for name in ("x", "y"))
    alpha = _scalar(problem.setting.scalars.get("alpha", 1), spec.arithmetic.real)
    beta = _scalar(problem.setting.scalars.get("beta", 0), spec.arithmetic.real)
    exact = operation.reference(matrix, x, y, alpha, beta, hermitian)
    outer = operation.last_terms(exact, matrix, x, y, alpha, beta)
    sized = [sizes(one) for one in (matrix, x, y)]
    scalars = sizes(alpha)[()], sizes(beta)[()]
    inner = operation.reference(sized[0], sized[1], sized[2], scalars[0], scalars[1], hermitian)
    roundings = operation.roundings(n, spec.arithmetic.type.parts)
    for index, at in result_places(problem):
        each = zip(exact[index], outer[index], inner[index], at, strict=True)
        for value, last, size, place in each:
            yield Result(value, last, size, roundings, found[operation.result][place])


def _bound(problem: Problem, result: Result) -> Fraction:
    arithmetic = problem.plan.spec.arithmetic
    u = Fraction(1, 2 ** REAL_DIGITS[arithmetic.real])
    few = _gamma(4 * arithmetic.type.parts, u)
    if arithmetic.compensated:
        return few * result.outer + 2 * _gamma(result.roundings, u) ** 2 * result.inner
    if arithmetic.sums != arithmetic.real:
        wide = _gamma(result.roundings, Fraction(1, 2 ** REAL_DIGITS[arithmetic.sums]))
        size = abs(result.exact.real) + abs(result.exact.imag)
        return u * size + 2 * wide * result.inner
    return _gamma(result.roundings, u) * result.inner


def _gamma(m: int, u: Fraction) -> Fraction:
    return m * u / (1 - m * u)


def _exact(parts: Lanes) -> Lanes:
    """An array of exact numbers from an array whose last axis holds the parts."""
    result = np.empty(parts.shape[:-1], dtype=object)
    for index in np.ndindex(result.shape):
        result[index] = Exact(*(Fraction(float(part)) for part in parts[index]))
    return result


def _scalar(value: complex, real: str) -> Exact:
    kind = np.dtype(real).type
    return Exact(Fraction(float(kind(value.real))), Fraction(float(kind(value.imag))))
