"""Between a whole symmetric matrix and its stored half, and the picture of the half.

Arrays of the layouts ``full`` and ``band`` are two-dimensional, as BLAS and LAPACK users know
them; all others are one-dimensional.
"""

from __future__ import annotations

import operator
from collections.abc import Iterator, Mapping
from typing import Any

import numpy as np
import numpy.typing as npt

from demilune.errors import InputError
from demilune.layouts import Layout

Array = npt.NDArray[Any]


def indices(layout: Layout, sizes: dict[str, Any]) -> Iterator[tuple[Array, Array, Array]]:
    """Row, column and place of every stored element, strip by strip.

    Rows and columns are those of the named triangle; a layout that stores an element of the
    other triangle (rectangular full packed does) is told by row and column exchanged.
    """
    column_major = layout.order == "column-major"
    for k, low, high, first in layout.strips(sizes):
        moving = np.arange(low, high, dtype=np.intp)
        fixed = np.full_like(moving, k)
        at = first + np.arange(high - low, dtype=np.intp)
        yield (moving, fixed, at) if column_major else (fixed, moving, at)


def whole_number(name: str, value: Any) -> int:
    """``value`` as an int; raises :class:`InputError` if it is none."""
    if isinstance(value, bool | np.bool_):
        raise InputError(f"{name} is {value!r}; a whole number is needed")
    try:
        return operator.index(value)
    except TypeError as error:
        raise InputError(f"{name} is {value!r}; a whole number is needed") from error


def sizes_for(
    layout: Layout, n: int, given: Mapping[str, Any], matrix: Array | None = None
) -> dict[str, Any]:
    """All sizes of a matrix of ``n`` rows, checked; open ones are those that ``matrix`` needs."""
    if n < 0:
        raise InputError(f"n = {n}; at least 0 is needed")
    if layout.n not in ("runtime", n):
        raise InputError(f"the specification has n = {layout.n}, the matrix has {n} rows")
    allowed = {one.name: one for one in (*layout.sizes(), *layout.after())}
    sizes: dict[str, Any] = {"n": n}
    for name, value in given.items():
        if name not in allowed:
            raise InputError(
                f'layout "{layout.name}" as specified has no size "{name}" '
                f"(allowed: {', '.join(allowed) or 'none'})"
            )
        if value is not None:
            places = allowed[name].kind == "places"
            sizes[name] = value if places else whole_number(name, value)
    if matrix is not None:
        sizes = {**layout.sizes_of_matrix(matrix), **sizes}
    for name in allowed:
        if name not in sizes and name != "ld":
            raise InputError(f"{name} must be passed: the specification leaves it open")
    problems = list(layout.argument_problems(sizes))
    sizes = layout.environment(layout.complete(sizes))
    for condition, name, rule in layout.rules():
        if condition.holds(sizes):
            problems.append(f"{name} = {sizes[name]}; it must be {rule}")
    if problems:
        raise InputError(problems[0])
    return sizes


def empty_half(layout: Layout, sizes: dict[str, Any], dtype: npt.DTypeLike, fill: Any = 0) -> Array:
    """An array of the layout's shape, filled with ``fill``."""
    shape = layout.shape(sizes)
    fortran = len(shape) == 2 and layout.order == "column-major"
    return np.full(shape, fill, dtype=dtype, order="F" if fortran else "C")


def flat(layout: Layout, half: Array) -> Array:
    """The array's elements in the order in which they are stored, as a view."""
    columns = half.ndim == 2 and layout.order == "column-major"
    view: Array = (half.T if columns else half).reshape(-1)
    if not np.shares_memory(view, half) and half.size:
        raise InputError("the array is not contiguous in the layout's order")
    return view


def to_half(matrix: npt.ArrayLike, layout: Layout, **sizes: Any) -> Array:
    """The stored half of a square ``matrix``, of which only the layout's triangle is read.

    ``sizes`` are those that the specification leaves open (``ld``, ``kd``, ``diagonal``); what is
    not passed is as small as the matrix allows. Elements outside a band or profile that is
    passed are left out; the unused places of the array are zero.
    """
    whole = np.asarray(matrix)
    if whole.ndim != 2 or whole.shape[0] != whole.shape[1]:
        raise InputError(f"a square matrix is needed, not an array of shape {whole.shape}")
    if whole.dtype.kind not in "iufc":
        raise InputError(f"the matrix holds {whole.dtype}; numbers are needed")
    known = sizes_for(layout, whole.shape[0], sizes, whole)
    half = empty_half(layout, known, whole.dtype)
    target = flat(layout, half)
    upper = layout.triangle == "upper"
    for i, j, at in indices(layout, known):
        inside = (i <= j) if upper else (i >= j)
        values = np.where(inside, whole[i, j], whole[j, i])
        if layout.hermitian:
            values = np.where(inside, values, values.conj())
        target[at] = values
    return half


def to_full(half: npt.ArrayLike, layout: Layout, n: int, **sizes: Any) -> Array:
    """The whole matrix of ``n`` rows from its stored half; zero where nothing is stored.

    Sizes that a two-dimensional array tells (``ld``, ``kd``) need not be passed.
    """
    stored = np.asarray(half)
    given = dict(sizes)
    if stored.ndim == 2 and layout.two_dimensional:
        rows = stored.shape[0 if layout.order == "column-major" else 1]
        told = layout.sizes_of_array(rows)
        if any(one.name == "ld" for one in layout.after()):
            told["ld"] = rows
        given = {**told, **given}
    known = sizes_for(layout, whole_number("n", n), given)
    source = flat(layout, stored)
    needed = max(0, layout.extent.value(known)) if n > 0 else 0
    if source.size < needed:
        raise InputError(f"the half of n = {n} has {needed} elements, not {source.size}")
    whole = np.zeros((n, n), dtype=stored.dtype)
    for i, j, at in indices(layout, known):
        whole[i, j] = source[at]
        whole[j, i] = source[at].conj() if layout.hermitian else source[at]
    if layout.hermitian:
        whole[np.arange(n), np.arange(n)] = whole.diagonal().real
    return whole


LARGEST_PICTURE = 16


def picture(layout: Layout) -> list[str]:
    """The matrix as a table of storage indices, ``.`` where nothing is stored."""
    n = min(int(layout.n) if layout.n != "runtime" else 6, LARGEST_PICTURE)
    if layout.n != "runtime" and n < int(layout.n):
        return [f"(no picture: n = {layout.n} is more than {LARGEST_PICTURE})"]
    sizes = layout.environment(layout.sample(n))
    places = np.full((n, n), -1, dtype=np.intp)
    triangle = layout.triangle == "upper"
    for i, j, at in indices(layout, sizes):
        inside = (i <= j) if triangle else (i >= j)
        places[np.where(inside, i, j), np.where(inside, j, i)] = at
    width = len(str(places.max()))
    return [
        " ".join((str(place) if place >= 0 else ".").rjust(width) for place in row)
        for row in places
    ]
