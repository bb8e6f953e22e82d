"""Arithmetic that pure Python lacks: binary32 and the fused multiply-add.

Python's float is binary64. Routines emitted in Python carry the source of those of these
functions that they use, so that they need nothing but :mod:`math`.
"""

# ruff: noqa: ANN001, ANN202, B905, E741 - the source goes into files for people, without annotations
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


# --- numbers side by side: tuples, one number a lane ----------------------------------------


def _take(lanes, a, index, stride=1, low=0, high=None, part="real"):
    """Neighbouring elements; 0 in the lanes before low and from high on."""
    last = lanes if high is None else high
    return tuple(
        float(getattr(a[index + l * stride], part)) if low <= l < last else 0.0
        for l in range(lanes)
    )


def _put(a, index, re, im=None, stride=1, low=0, high=None):
    """Writes lanes to neighbouring elements."""
    for l in range(low, len(re) if high is None else high):
        a[index + l * stride] = re[l] if im is None else complex(re[l], im[l])


def _pack_lanes(lanes, numbers):
    """One number a lane, and 0 in those that are left."""
    return (*numbers, *(0.0 for _ in range(lanes - len(numbers))))


def _where_lanes(low, high, a, b):
    """The lanes of a from low to before high, else those of b."""
    return tuple(p if low <= l < high else q for l, (p, q) in enumerate(zip(a, b)))


def _negate_lanes(a):
    return tuple(-p for p in a)


def _add_lanes(a, b):
    return tuple(p + q for p, q in zip(a, b))


def _sub_lanes(a, b):
    return tuple(p - q for p, q in zip(a, b))


def _mul_lanes(a, b):
    return tuple(p * q for p, q in zip(a, b))


def _fma_lanes(a, b, c):
    return tuple(_fma(p, q, r) for p, q, r in zip(a, b, c))


def _fold_lanes(a):
    """The sum over the lanes, by halves."""
    while len(a) > 1:
        half = len(a) // 2
        a = tuple(p + q for p, q in zip(a[:half], a[half:]))
    return a[0]


def _add_single_lanes(a, b):
    return tuple(_single(p + q) for p, q in zip(a, b))


def _sub_single_lanes(a, b):
    return tuple(_single(p - q) for p, q in zip(a, b))


def _mul_single_lanes(a, b):
    return tuple(_single(p * q) for p, q in zip(a, b))


def _fma_single_lanes(a, b, c):
    return tuple(_fma_single(p, q, r) for p, q, r in zip(a, b, c))


def _fold_single_lanes(a):
    """The sum over the lanes, by halves, rounded to binary32."""
    while len(a) > 1:
        half = len(a) // 2
        a = tuple(_single(p + q) for p, q in zip(a[:half], a[half:]))
    return a[0]
