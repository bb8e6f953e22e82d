"""The arguments of a call at a size, in memory that all contestants share."""

from __future__ import annotations

import os
from collections.abc import Iterable, Mapping
from typing import Any

import numpy as np
import numpy.typing as npt

from demilune.call import dtype_of
from demilune.errors import InputError
from demilune.keys import RUNTIME
from demilune.plan.build import Plan
from demilune.plan.tree import Parameter
from demilune.spec import Spec
from demilune.storage import sizes_for

Array = npt.NDArray[Any]
ALIGNMENT = 64
"""Bytes: the widest vector register, and a line of the usual caches."""
CHUNK = 1 << 16
SCALARS = {"alpha": 0.75, "beta": 0.0}
"""The scalars of kernels that are told them when called."""


def open_sizes(spec: Spec) -> set[str]:
    """The sizes beside n that are told when the kernel is called."""
    layout = spec.layout
    return {one.name for one in (*layout.sizes(), *layout.after()) if one.kind == "size"}


def sizes_at(spec: Spec, n: int, shape: Mapping[str, int]) -> dict[str, Any]:
    """Every size of a kernel at ``n``: those of ``shape`` that it leaves open, else the plainest.

    Raises :class:`InputError` for a size that the layout refuses.
    """
    layout = spec.layout
    if layout.diagonals is None:  # before arrays of places are made for it
        enough(n, n * (n + 1) // 2 * spec.arithmetic.type.size)
    allowed = {one.name for one in (*layout.sizes(), *layout.after())}
    plain = {name: value for name, value in layout.sample(n).items() if name in allowed - {"ld"}}
    given = {name: value for name, value in shape.items() if name in allowed}
    try:
        sizes = sizes_for(layout, n, {**plain, **given})
    except InputError as error:
        raise InputError(f"{spec.name} at n = {n}: {error}") from error
    if layout.two_dimensional:
        sizes["ld"] = layout.leading.value(sizes)
    if hasattr(layout, "kd"):
        sizes["kd"] = layout.kd if layout.kd != RUNTIME else sizes["kd"]
    for name in ("incx", "incy"):
        fixed = getattr(spec.operation, name, 1)
        sizes[name] = 1 if fixed == RUNTIME else int(fixed)
    return sizes


def elements(one: Parameter, sizes: Mapping[str, Any]) -> int:
    """Elements of an array parameter."""
    assert one.extent is not None
    return max(1, one.extent.value(sizes))


def enough(n: int, needed: int) -> None:
    """Raises :class:`InputError` if the machine has not so many bytes of memory for size n."""
    there = os.sysconf("SC_PHYS_PAGES") * os.sysconf("SC_PAGE_SIZE")
    if needed > there * 3 // 4:
        raise InputError(
            f"n = {n} takes {needed / 2**30:.0f} GiB of arrays, "
            f"and this machine has {there / 2**30:.0f}"
        )


class Memory:
    """Arrays of small random numbers by what they are for: all contestants read the same bytes."""

    def __init__(self) -> None:
        self._wanted: dict[tuple[str, np.dtype[Any]], int] = {}
        self._arrays: dict[tuple[str, np.dtype[Any]], Array] = {}

    def reserve(self, name: str, dtype: npt.DTypeLike, count: int) -> None:
        """Says what will be asked for, before anything is."""
        key = (name, np.dtype(dtype))
        self._wanted[key] = max(count, self._wanted.get(key, 0))

    def reserve_for(self, plan: Plan, sizes: Mapping[str, Any]) -> None:
        """Room for every array of a kernel."""
        for one in plan.arrays.values():
            self.reserve(one.name, dtype_of(one), elements(one, sizes))

    def check(self, n: int) -> None:
        """Raises :class:`InputError` if the machine has not so much memory."""
        enough(n, sum(count * key[1].itemsize for key, count in self._wanted.items()))

    def array(self, name: str, dtype: npt.DTypeLike) -> Array:
        """The array for ``name``, as large as was ever wanted."""
        key = (name, np.dtype(dtype))
        if key not in self._arrays:
            self._arrays[key] = _random(key[1], self._wanted[key])
        return self._arrays[key]


def _random(dtype: np.dtype[Any], count: int) -> Array:
    """Small numbers, so that no sum of many calls overflows, from a multiple of 64 bytes on."""
    raw = np.empty(count * dtype.itemsize + ALIGNMENT, dtype=np.uint8)
    offset = -raw.__array_interface__["data"][0] % ALIGNMENT
    array: Array = raw[offset : offset + count * dtype.itemsize].view(dtype)
    real = array.view(dtype.type(0).real.dtype)
    generator = np.random.default_rng(1)
    size = min(len(real), CHUNK - 1)  # odd: columns of a power of two are not alike
    chunk = (
        generator.integers(-3, 4, size)
        if dtype.kind == "i"
        else generator.standard_normal(size) * 2.0**-10
    )
    for start in range(0, len(real), size):
        real[start : start + size] = chunk[: len(real) - start]
    return array


def values_for(plan: Plan, sizes: Mapping[str, Any], memory: Memory) -> dict[str, Any]:
    """A value for every parameter of a kernel, and for what the specification fixes."""
    values = dict(sizes)
    whole = plan.spec.arithmetic.type.integer
    for name, number in SCALARS.items():
        fixed = getattr(plan.spec.operation, name, RUNTIME)
        values[name] = (round(number) if whole else number) if fixed == RUNTIME else fixed
    for one in plan.parameters:
        if one.kind == "array":
            values[one.name] = memory.array(one.name, dtype_of(one))[: elements(one, sizes)]
        elif one.kind == "places":
            values[one.name] = np.ascontiguousarray(sizes[one.name], dtype=np.intp)
    return values


def stored(plan: Plan, sizes: Mapping[str, Any]) -> int:
    """The elements of the stored half."""
    layout, n = plan.spec.layout, int(sizes["n"])
    if layout.whole:
        return n * (n + 1) // 2
    if "kd" in sizes:
        kd = min(int(sizes["kd"]), n - 1)
        return n * (kd + 1) - kd * (kd + 1) // 2
    return layout.extent.value(sizes)


def useful(plan: Plan, sizes: Mapping[str, Any]) -> int:
    """The operations that the job needs: a multiplication and an addition for each use.

    A product uses an off-diagonal element for two places; an update and a quadratic form use it
    once. A complex multiply-add counts as four real ones.
    """
    spec, n = plan.spec, int(sizes["n"])
    half = stored(plan, sizes)
    uses = {"rank1": half, "quadform": half + n}.get(spec.operation.name, 2 * half - n)
    return 2 * (4 if spec.arithmetic.type.complex else 1) * uses


def shaped(specs: Iterable[Spec], shape: Mapping[str, int]) -> None:
    """Raises :class:`InputError` for a size that none of the kernels leaves open."""
    known = set[str]().union(*(open_sizes(spec) for spec in specs))
    for name in shape:
        if name not in known:
            raise InputError(f"no kernel leaves {name} open; it cannot be told for the race")
