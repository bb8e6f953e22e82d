"""Results from outside the plan: numpy products of the whole matrix, and exact rationals."""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass
from fractions import Fraction
from typing import Any

import numpy as np

from demilune.arithmetic import REAL_DIGITS
from demilune.bench.problem import PAD, Lanes, Problem, places, stored


def numpy_product(problem: Problem) -> dict[str, Lanes]:
    """The buffers after the call, from numpy products of the whole symmetric matrix.

    Exact where every partial sum is representable, in whatever order numpy takes them.
    """
    spec, n = problem.plan.spec, problem.setting.n
    after = {name: buffer.copy() for name, buffer in problem.buffers.items()}
    integer = spec.arithmetic.type.integer
    for lane in range(problem.lanes):
        matrix = _whole(problem.matrix[..., lane], integer)
        vectors = {name: _whole(v[..., lane], integer) for name, v in problem.vectors.items()}
        alpha = problem.setting.scalars.get("alpha", 1)
        beta = problem.setting.scalars.get("beta", 0)
        x, y = vectors["x"], vectors["y"]
        if spec.operation.name == "matvec":
            at = PAD + places(n, int(problem.setting.sizes["incy"]))
            result = alpha * (matrix @ x) + (beta * y if beta != 0 else 0)
            _put(after["y"], at, lane, result)
        elif spec.operation.name == "quadform":
            left = x.conj() if spec.layout.hermitian else x
            _put(after["s"], np.array([PAD]), lane, np.array([left @ (matrix @ x)]))
        else:
            right = x.conj() if spec.layout.hermitian else x
            updated = matrix + alpha * np.outer(x, right)
            if alpha == 0:
                continue
            for i, j, place in stored(problem.plan, problem.setting.sizes):
                _put(after["a"], PAD + place, lane, updated[i, j])
                if spec.layout.hermitian:
                    after["a"][PAD + place[i == j], 1, lane] = 0
    return after


def _whole(parts: Lanes, integer: bool) -> Lanes:
    """Numbers from their parts, in a type that holds them exactly."""
    if parts.shape[-1] == 2:
        return np.asarray(parts[..., 0].astype(np.float64) + 1j * parts[..., 1])
    return parts[..., 0].astype(np.int64 if integer else np.float64)


def _put(buffer: Lanes, at: Any, lane: int, result: Lanes) -> None:
    buffer[at, 0, lane] = result.real
    if buffer.shape[1] == 2:
        buffer[at, 1, lane] = result.imag


Pair = tuple[Fraction, Fraction]


# --- error bounds ------------------------------------------------------------------------------


@dataclass(frozen=True)
class Result:
    """One exact result, what bounds its error, and what was found."""

    exact: Pair
    outer: Fraction
    """The sum of the magnitudes of what the last few operations add up."""
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
        for got, exact in zip(result.found, result.exact, strict=False):
            if not np.isfinite(got):
                return float("inf"), float("inf")
            error = abs(Fraction(float(got)) - exact)
            if error:
                worst = max(worst, float(error / bound) if bound else float("inf"))
                ulps = max(ulps, float(error / Fraction(float(np.spacing(np.abs(got))))))
    return worst, ulps


def _results(problem: Problem, found: dict[str, Lanes], lane: int) -> Iterator[Result]:
    spec, n = problem.plan.spec, problem.setting.n
    operation, parts = spec.operation.name, spec.arithmetic.type.parts
    matrix = _exact(problem.matrix[..., lane])
    x, y = (_exact(problem.vectors[name][..., lane]) for name in ("x", "y"))
    alpha = _scalar(problem.setting.scalars.get("alpha", 1), spec.arithmetic.real)
    beta = _scalar(problem.setting.scalars.get("beta", 0), spec.arithmetic.real)
    rows = [_sum(_times(matrix[i][m], x[m]) for m in range(n)) for i in range(n)]
    sizes = [sum(_size(matrix[i][m]) * _size(x[m]) for m in range(n)) for i in range(n)]
    if operation == "matvec":
        at = PAD + places(n, int(problem.setting.sizes["incy"]))
        for i in range(n):
            exact = _plus(_times(alpha, rows[i]), _times(beta, y[i]))
            rest = _size(beta) * _size(y[i])
            outer = _size(alpha) * _size(rows[i]) + rest
            inner = _size(alpha) * sizes[i] + rest
            yield Result(exact, outer, inner, 2 * parts * n + 8, found["y"][at[i]])
    elif operation == "quadform":
        left = [_conjugate(v) if spec.layout.hermitian else v for v in x]
        exact = _sum(_times(left[i], rows[i]) for i in range(n))
        size = sum((_size(x[i]) * sizes[i] for i in range(n)), Fraction(0))
        yield Result(exact, size, size, 2 * parts * n + 8, found["s"][PAD])
    else:
        for i, j, place in stored(problem.plan, problem.setting.sizes):
            for r, c, p in zip(i, j, place, strict=True):
                right = _conjugate(x[c]) if spec.layout.hermitian else x[c]
                exact = _plus(matrix[r][c], _times(alpha, _times(x[r], right)))
                size = _size(matrix[r][c]) + _size(alpha) * _size(x[r]) * _size(x[c])
                yield Result(exact, size, size, 3 * parts, found["a"][PAD + p])


def _bound(problem: Problem, result: Result) -> Fraction:
    arithmetic = problem.plan.spec.arithmetic
    u = Fraction(1, 2 ** REAL_DIGITS[arithmetic.real])
    few = _gamma(4 * arithmetic.type.parts, u)
    if arithmetic.compensated:
        return few * result.outer + 2 * _gamma(result.roundings, u) ** 2 * result.inner
    if arithmetic.sums != arithmetic.real:
        wide = _gamma(result.roundings, Fraction(1, 2 ** REAL_DIGITS[arithmetic.sums]))
        return u * _size(result.exact) + 2 * wide * result.inner
    return _gamma(result.roundings, u) * result.inner


def _gamma(m: int, u: Fraction) -> Fraction:
    return m * u / (1 - m * u)


def _exact(parts: Lanes) -> Any:
    """Nested lists of pairs of rationals."""
    if parts.ndim == 1:
        values = [Fraction(float(v)) for v in parts]
        return (values[0], values[1] if len(values) > 1 else Fraction(0))
    return [_exact(one) for one in parts]


def _scalar(value: complex, real: str) -> Pair:
    kind = np.dtype(real).type
    return Fraction(float(kind(value.real))), Fraction(float(kind(value.imag)))


def _times(p: Pair, q: Pair) -> Pair:
    return p[0] * q[0] - p[1] * q[1], p[0] * q[1] + p[1] * q[0]


def _plus(p: Pair, q: Pair) -> Pair:
    return p[0] + q[0], p[1] + q[1]


def _sum(items: Any) -> Pair:
    total = (Fraction(0), Fraction(0))
    for item in items:
        total = _plus(total, item)
    return total


def _conjugate(p: Pair) -> Pair:
    return p[0], -p[1]


def _size(p: Pair) -> Fraction:
    return abs(p[0]) + abs(p[1])
