"""Kernels, libraries and limits, measured by turns."""

from __future__ import annotations

import os
import platform
from collections.abc import Callable, Iterable, Mapping, Sequence
from dataclasses import dataclass, field
from typing import Any

import numpy as np
import numpy.typing as npt

from demilune.dtypes import REAL_SIZE
from demilune.errors import InputError
from demilune.isa import INSTRUCTION_SETS, native
from demilune.keys import RUNTIME
from demilune.plan.build import Plan, make_plan
from demilune.race.driver import (
    Contestant,
    Driver,
    full_product,
    kernel_contestant,
    library_contestant,
    limit_contestant,
)
from demilune.race.peers import Library, routine_for, stored_for_fortran
from demilune.render import render
from demilune.spec import Spec
from demilune.toolchain.build import compiled
from demilune.toolchain.compilers import Compiler, find_compiler

Array = npt.NDArray[Any]
ALIGNMENT = 64
ROUNDS, SLICE = 11, 0.002
SCALARS = {"alpha": 0.75, "beta": 0.0}
"""The scalars of kernels that are told them when called."""


@dataclass(frozen=True)
class Entry:
    """One contestant at one size: the seconds of a call, round by round."""

    label: str
    kind: str
    """``kernel``, ``library``, ``sum`` (the stored half summed) or ``full`` (a library's product
    with the whole matrix)."""
    n: int
    seconds: tuple[float, ...]

    @property
    def median(self) -> float:
        return float(np.median(self.seconds))

    @property
    def spread(self) -> float:
        """The interquartile range as a part of the median."""
        low, high = np.percentile(self.seconds, [25, 75])
        return float((high - low) / self.median)


@dataclass
class Race:
    """What was measured, and where."""

    machine: dict[str, Any]
    entries: list[Entry] = field(default_factory=list)
    flops: dict[tuple[str, int], int] = field(default_factory=dict)
    """Useful operations of a kernel at a size: the least that the job needs."""
    peers: dict[tuple[str, int], dict[str, str]] = field(default_factory=dict)
    """For each kernel and size, the label of its contestant by kind and library."""

    def entry(self, label: str, n: int) -> Entry | None:
        return next((e for e in self.entries if e.label == label and e.n == n), None)

    def ratio(self, label: str, against: str, n: int) -> float:
        """The time of ``against`` divided by that of ``label``."""
        one, other = self.entry(label, n), self.entry(against, n)
        assert one is not None
        assert other is not None
        return other.median / one.median


def race(
    specs: Iterable[Spec],
    sizes: Sequence[int],
    libraries: Sequence[Library],
    *,
    shape: Mapping[str, Any] | None = None,
    rounds: int = ROUNDS,
    slice_seconds: float = SLICE,
    full: bool = False,
    progress: Callable[[str, int, int], None] = lambda what, done, total: None,
) -> Race:
    """Measures kernels against libraries and limits at each size, all by turns.

    ``shape`` gives sizes beside n (``kd``, ``ld``); kernels of a fixed n run at that n alone.
    With ``full`` a library's product with the whole matrix runs too.
    """
    plans = [make_plan(spec) for spec in specs]
    paths = [_compiled(plan) for plan in plans]
    found = Race(machine_of(libraries))
    wanted = sorted({*sizes, *(int(p.spec.layout.n) for p in plans if p.spec.layout.n != RUNTIME)})
    for one in libraries:
        one.one_thread()
    for done, n in enumerate(wanted):
        progress(f"n = {n}", done, len(wanted))
        here = [
            (plan, path) for plan, path in zip(plans, paths, strict=True)
            if plan.spec.layout.n == n or (plan.spec.layout.n == RUNTIME and n in sizes)
        ]  # fmt: skip
        _at(found, here, n, libraries, shape or {}, rounds, slice_seconds, full)
    progress("done", len(wanted), len(wanted))
    return found


def _compiled(plan: Plan) -> Any:
    files = render([plan], plan.spec.file, plan.spec.language)
    if plan.spec.language != "c":
        raise InputError(
            f'{plan.spec.name}: only kernels in C are raced, not in "{plan.spec.language}"'
        )
    return compiled(find_compiler(), [plan], files)


def _at(
    found: Race,
    kernels: list[tuple[Plan, Any]],
    n: int,
    libraries: Sequence[Library],
    shape: Mapping[str, Any],
    rounds: int,
    slice_seconds: float,
    full: bool,
) -> None:
    contestants: dict[str, tuple[str, Contestant]] = {}
    shared: dict[Any, Array] = {}
    for plan, path in kernels:
        spec = plan.spec
        values = values_for(plan, n, shape, shared)
        label = spec.name
        contestants[label] = ("kernel", kernel_contestant(label, plan, path, values))
        peers = found.peers.setdefault((label, n), {})
        for one in libraries:
            routine = routine_for(spec)
            peer = f"{one.name} {routine} {stored_for_fortran(spec)}"
            if peer not in contestants:
                other = library_contestant(peer, one, spec, values)
                if other is not None:
                    contestants[peer] = ("library", other)
            if peer in contestants:
                peers[one.name] = peer
            if full and spec.operation.name == "matvec" and spec.layout.whole:
                whole = f"{one.name} full {spec.arithmetic.dtype}"
                if whole not in contestants:
                    dtype = spec.arithmetic.dtype
                    matrix = _random(shared, ("whole", dtype), n * n, dtype)
                    entry = full_product(whole, one, dtype, {**values, "whole": matrix})
                    if entry is not None:
                        contestants[whole] = ("full", entry)
                peers[f"{one.name} full"] = whole
        real = spec.arithmetic.real
        count = stored(plan, values) * spec.arithmetic.type.parts
        limit = f"sum of {count} {real}"
        if limit not in contestants and not spec.arithmetic.type.integer:
            name = f"sum_{native().name}_{real}"
            array = _random(shared, ("sum", real), count, real)
            contestants[limit] = ("sum", limit_contestant(limit, name, array, count))
        peers["sum"] = limit
        found.flops[label, n] = useful(plan, values)
    driver = Driver(one for _, one in contestants.values())
    seconds = driver.interleaved(rounds, slice_seconds)
    for place, (label, (kind, _)) in enumerate(contestants.items()):
        found.entries.append(Entry(label, kind, n, tuple(map(float, seconds[:, place]))))


def values_for(
    plan: Plan, n: int, shape: Mapping[str, Any], shared: dict[Any, Array]
) -> dict[str, Any]:
    """Values for every parameter of a kernel at size n; arrays are aligned and shared."""
    layout = plan.spec.layout
    sizes = {**layout.fixed_sizes(), **layout.sample(n)}
    if shape:
        sizes = layout.complete({**{k: v for k, v in sizes.items() if k != "ld"}, **shape})
    values: dict[str, Any] = {"incx": 1, "incy": 1, **sizes}
    env = layout.environment(values)
    for one in plan.parameters:
        if one.kind == "scalar":
            values[one.name] = SCALARS[one.name]
        elif one.kind == "array":
            assert one.extent is not None
            count = max(1, one.extent.value({"incx": 1, "incy": 1, **env}))
            dtype = plan.spec.arithmetic.dtype if one.name in "axys" else one.type
            key = (one.name, dtype, layout.name if one.name == "a" else "")
            values[one.name] = _random(
                shared, key, count * (one.parts if one.name == "work" else 1), dtype
            )
        elif one.kind == "places":
            values[one.name] = np.ascontiguousarray(sizes[one.name], dtype=np.intp)
    for name in ("alpha", "beta"):
        fixed = getattr(plan.spec.operation, name, None)
        values.setdefault(name, 1.0 if fixed is None else fixed)
    if "ld" not in values and layout.two_dimensional:
        values["ld"] = layout.leading.value(env)
    if "kd" not in values and hasattr(layout, "kd"):
        values["kd"] = layout.kd
    values.setdefault("n", n)
    return values


def _random(shared: dict[Any, Array], key: Any, count: int, dtype: str) -> Array:
    """An array of small random numbers, at a multiple of 64 bytes, shared by its key."""
    if key in shared and len(shared[key]) >= count:
        return shared[key]
    size = np.dtype(dtype).itemsize
    raw = np.empty(count * size + ALIGNMENT, dtype=np.uint8)
    offset = -raw.__array_interface__["data"][0] % ALIGNMENT
    array = raw[offset : offset + count * size].view(dtype)
    generator = np.random.default_rng(1)
    real = array.view(np.dtype(dtype).type(0).real.dtype)
    chunk = generator.standard_normal(min(len(real), 1 << 16)) * 2.0**-10
    for start in range(0, len(real), len(chunk)):
        real[start : start + len(chunk)] = chunk[: len(real) - start]
    shared[key] = array
    return array


def stored(plan: Plan, values: Mapping[str, Any]) -> int:
    """The elements of the stored half."""
    layout, n = plan.spec.layout, int(values["n"])
    if layout.whole:
        return n * (n + 1) // 2
    if "kd" in values:
        kd = min(int(values["kd"]), n - 1)
        return n * (kd + 1) - kd * (kd + 1) // 2
    return sum(high - low for _, low, high, _ in layout.strips(values))


def useful(plan: Plan, values: Mapping[str, Any]) -> int:
    """The operations that the job needs: two for each use of a stored element."""
    spec, n = plan.spec, values["n"]
    half = stored(plan, values)
    factor = 4 if spec.arithmetic.type.complex else 1
    uses = half if spec.operation.name == "rank1" else 2 * half - n
    return 2 * factor * uses


def machine_of(libraries: Sequence[Library]) -> dict[str, Any]:
    """What was measured on: processor, caches, compiler, libraries."""
    compiler: Compiler = find_compiler()
    return {
        "processor": _processor(),
        "machine": platform.machine(),
        "cores": os.cpu_count(),
        "instructions": native().name,
        "can run": [name for name, one in INSTRUCTION_SETS.items() if one.here],
        "caches": _caches(),
        "compiler": compiler.version,
        "libraries": {one.name: one.configuration for one in libraries},
        "bytes of elements": dict(REAL_SIZE),
    }


def _processor() -> str:
    try:
        with open("/proc/cpuinfo", encoding="ascii", errors="ignore") as lines:  # noqa: PTH123
            names = [
                line.partition(":")[2].strip() for line in lines if line.startswith("model name")
            ]
    except OSError:
        names = []
    return names[0] if names else platform.processor() or "unknown"


def _caches() -> dict[str, str]:
    from pathlib import Path

    found = {}
    for index in sorted(Path("/sys/devices/system/cpu/cpu0/cache").glob("index*")):
        try:
            kind = (index / "type").read_text().strip()
            level, size = (
                (index / "level").read_text().strip(),
                (index / "size").read_text().strip(),
            )
        except OSError:
            continue
        if kind != "Instruction":
            found[f"level {level}"] = size
    return found
