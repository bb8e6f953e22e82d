"""Arithmetic that pure Python lacks: binary32 and the fused multiply-add.

Python's float is binary64. Routines emitted in Python carry the source of those of these
functions that they use, so that they need nothing but :mod:`math`.
"""

# ruff: noqa: ANN001, ANN202 - the source goes into files for people, without annotations
# mypy: ignore-errors
import math


def _single(value):
    """The binary64 number rounded to binary32, to nearest, ties to even."""
    if value == 0.0 or not math.isfinite(value):
        return value
    if abs(value) >= 2.0**128:
        return math.copysign(math.inf, value)
    # Adding and taking away a number whose last bit is worth as much as that of the
    # result rounds there; below 2**-126 the last bit is worth 2**-149.
    unit = math.ldexp(1.5, max(math.frexp(value)[1], -125) + 28)
    rounded = value + unit - unit
    if abs(rounded) >= 2.0**128:
        rounded = math.inf
    return math.copysign(rounded, value)


def _exact(a, b, c):
    """a * b + c for finite a, b and c as a quotient of whole numbers."""
    p, q = a.as_integer_ratio()
    r, s = b.as_integer_ratio()
    t, u = c.as_integer_ratio()
    return p * r * u + t * q * s, q * s * u


def _fma(a, b, c):
    """a * b + c, rounded once to binary64."""
    if not (math.isfinite(a) and math.isfinite(b)):
        return a * b + c
    if not math.isfinite(c):
        return c
    above, below = _exact(a, b, c)
    if above == 0:
        return a * b + c
    try:
        return above / below  # Python rounds a quotient of whole numbers once
    except OverflowError:
        return math.inf if above > 0 else -math.inf


def _fma_single(a, b, c):
    """a * b + c for binary32 numbers, rounded once to binary32.

    An inexact binary64 result is made odd before it is rounded again, so that the second
    rounding goes where one alone would have gone (Boldo, Melquiond, IEEE Transactions on
    Computers 57(4), 2008).
    """
    near = _fma(a, b, c)
    if near == 0.0 or not math.isfinite(near) or not math.isfinite(c):
        return near
    above, below = _exact(a, b, c)
    p, q = near.as_integer_ratio()
    even = int(math.ldexp(abs(math.frexp(near)[0]), 53)) % 2 == 0
    if even and p * below != above * q:
        near = math.nextafter(near, math.inf if above * q > p * below else -math.inf)
    return _single(near)
