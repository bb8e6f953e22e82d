"""Inputs for a kernel: sizes, scalars, values, and arrays in which everything unused is poison.

A problem holds several cases (lanes) of the same sizes and scalars. Its buffers are numpy arrays
of the real type with the axes element, part and lane, with ``PAD`` elements of poison before and
after what the routine may touch. Poison is a signalling NaN with a bit pattern of our own, or
for integers a large number of a like pattern.
"""

from __future__ import annotations

from collections.abc import Callable, Iterator
from dataclasses import dataclass, field, replace
from typing import Any

import numpy as np
import numpy.typing as npt

from demilune.dtypes import REALS
from demilune.keys import RUNTIME
from demilune.plan.build import Plan
from demilune.plan.tree import Parameter
from demilune.storage import indices

Lanes = npt.NDArray[Any]
Draw = Callable[[np.random.Generator, tuple[int, ...], str], Lanes]
"""Draws real numbers of some shape for ``A``, ``x`` or ``y``; lanes are the last axis."""

PAD = 8
SIGNALLING = {4: 0x7FA5A5A5, 8: 0x7FF5A5A5A5A5A5A5}
POISON: dict[str, Any] = {
    real.name: np.dtype(f"uint{8 * real.size}").type(
        int.from_bytes(b"\x5a" * real.size) if real.integer else SIGNALLING[real.size]
    )
    for real in REALS.values()
}
BITS: dict[str, np.dtype[Any]] = {name: value.dtype for name, value in POISON.items()}


@dataclass(frozen=True)
class Setting:
    """Sizes and scalars of one call; what the specification fixes is in here too."""

    sizes: dict[str, Any]
    scalars: dict[str, complex]

    @property
    def n(self) -> int:
        return int(self.sizes["n"])

    def __str__(self) -> str:
        shown = {k: v for k, v in self.sizes.items() if not isinstance(v, np.ndarray)}
        parts = [f"{name} = {value}" for name, value in {**shown, **self.scalars}.items()]
        return ", ".join(parts)


@dataclass
class Problem:
    """Values for several cases, and where they lie."""

    plan: Plan
    setting: Setting
    matrix: Lanes
    """The whole matrix: row, column, part, lane."""
    vectors: dict[str, Lanes]
    """x and y: index, part, lane."""
    buffers: dict[str, Lanes] = field(default_factory=dict)
    readable: dict[str, Lanes] = field(default_factory=dict)
    """Which elements and parts may be read."""
    writable: dict[str, Lanes] = field(default_factory=dict)
    """Which elements and parts are results."""
    scratch: dict[str, Lanes] = field(default_factory=dict)
    """Which elements and parts may hold anything afterwards."""

    @property
    def lanes(self) -> int:
        return int(self.matrix.shape[-1])

    def inside(self, name: str, buffers: dict[str, Lanes]) -> Lanes:
        """The buffer without its padding before the first element."""
        return buffers[name][PAD:]


def extent_of(one: Parameter, sizes: dict[str, Any]) -> int:
    """Elements that the routine may touch."""
    assert one.extent is not None
    fixed = one.name != "a" and one.extent.constant is not None
    return max(0, one.extent.value(sizes)) if sizes["n"] > 0 or fixed else 0


def places(n: int, step: int) -> npt.NDArray[np.intp]:
    """Where the elements of a vector with a stride lie (BLAS standard)."""
    start = (1 - n) * step if step < 0 else 0
    return start + step * np.arange(n, dtype=np.intp)


def stored(plan: Plan, sizes: dict[str, Any]) -> Iterator[tuple[Any, Any, Any]]:
    """The strips as index arrays: rows and columns of A, and places in the array."""
    return indices(plan.spec.layout, sizes)


def make_problem(
    plan: Plan, setting: Setting, draw: Draw, generator: np.random.Generator, lanes: int
) -> Problem:
    """Draws a matrix and vectors, and lays them out in poisoned buffers."""
    n, parts = setting.n, plan.spec.arithmetic.type.parts
    real, result = plan.spec.arithmetic.real, plan.spec.arithmetic.result
    drawn = draw(generator, (n, n, parts, lanes), "A").astype(real)
    rows, columns = np.tril_indices(n, -1)
    drawn[rows, columns] = drawn[columns, rows]
    if plan.spec.layout.hermitian:
        with np.errstate(all="ignore"):
            drawn[rows, columns, 1] = -drawn[columns, rows, 1]
        drawn[np.arange(n), np.arange(n), 1] = 0
    mask = np.zeros((n, n), dtype=bool)
    for i, j, _ in stored(plan, setting.sizes):
        mask[i, j] = mask[j, i] = True
    drawn[~mask] = 0
    vectors = {
        "x": draw(generator, (n, parts, lanes), "x").astype(real),
        "y": draw(generator, (n, parts, lanes), "y").astype(result),
    }
    problem = Problem(plan, setting, drawn, vectors)
    for one in plan.arrays.values():
        _lay_out(problem, one)
    return problem


def with_other_junk(problem: Problem) -> Problem:
    """The same problem with an ordinary number of a pattern of our own where poison was.

    What is read and then multiplied or compared away can depend on what is there.
    """
    buffers = {name: buffer.copy() for name, buffer in problem.buffers.items()}
    for name, one in problem.plan.arrays.items():
        bits = buffers[name].view(BITS[one.type])
        bits[bits == POISON[one.type]] = int.from_bytes(b"\x2d" * BITS[one.type].itemsize)
    return replace(problem, buffers=buffers)


def _lay_out(problem: Problem, one: Parameter) -> None:
    plan, setting = problem.plan, problem.setting
    sizes = plan.spec.layout.environment(setting.sizes)
    length = extent_of(one, sizes) + 2 * PAD
    shape = (length, one.parts, problem.lanes)
    buffer = np.empty(shape, dtype=one.type)
    buffer.view(BITS[one.type])[...] = POISON[one.type]
    readable, writable, scratch = (np.zeros(shape[:2], dtype=bool) for _ in range(3))
    if one.name == "a":
        for i, j, at in stored(plan, setting.sizes):
            buffer[PAD + at] = problem.matrix[i, j]
            readable[PAD + at] = True
            if plan.spec.layout.hermitian and len(i) and np.any(i == j):
                here = PAD + at[i == j]
                buffer.view(BITS[one.type])[here, 1] = POISON[one.type]
                readable[here, 1] = False
        writable = readable.copy()
        if plan.spec.layout.hermitian:
            for i, j, at in stored(plan, setting.sizes):
                writable[PAD + at[i == j], 1] = True
    elif one.name in problem.vectors:
        at = PAD + places(setting.n, int(setting.sizes[f"inc{one.name}"]))
        buffer[at] = problem.vectors[one.name]
        readable[at] = True
        writable[at] = True
    elif one.use == "out":
        writable[PAD:-PAD] = True
    else:
        scratch[PAD:-PAD] = True
    problem.buffers[one.name] = buffer
    problem.readable[one.name] = readable if one.use in ("in", "inout") else readable & False
    results = one.use in ("out", "inout")
    problem.writable[one.name] = writable if results else writable & False
    problem.scratch[one.name] = scratch


# --- settings ----------------------------------------------------------------------------------


def draw_setting(
    plan: Plan, n: int, generator: np.random.Generator, scalars: tuple[float, ...]
) -> Setting:
    """Sizes, strides and scalars for ``n``; what is not fixed is drawn."""
    operation, arithmetic = plan.spec.operation, plan.spec.arithmetic
    sizes = dict(plan.spec.layout.sample(n, generator))
    for name in ("incx", "incy"):
        if hasattr(operation, name):
            fixed = getattr(operation, name)
            drawn = int(generator.choice([1, 2, 3, -1, -2, -3]))
            sizes[name] = drawn if fixed == RUNTIME else int(fixed)
    passed = {one.name: one for one in plan.parameters if one.kind == "scalar"}
    given: dict[str, complex] = {}
    for name in ("alpha", "beta"):
        if not hasattr(operation, name):
            continue
        if name in passed:
            value: complex = scalars[int(generator.integers(len(scalars)))]
            if arithmetic.type.integer:
                value = int(value.real)
            elif passed[name].complex:
                value = complex(value, scalars[int(generator.integers(len(scalars)))])
            given[name] = value
        else:
            given[name] = getattr(operation, name)
    return Setting(sizes, given)


def sizes_to_try(plan: Plan) -> list[int]:
    """The n to try: around the block and the tile, and a few more; n itself if fixed."""
    spec = plan.spec
    if spec.layout.n != RUNTIME:
        return [int(spec.layout.n)] * (3 if int(spec.layout.n) <= 64 else 1)
    block, tile = spec.schedule.block, spec.layout.period
    around = {1, 2, 3, 5, 8, block, block + 1, 2 * block + 1}
    if 1 < tile <= 16:
        around |= {tile, tile + 1, 2 * tile + 1}
    around = {n for n in around if 0 < n <= 33}
    # One that is larger than 16 and leaves something over in every block and tile.
    ragged = (n for n in range(17, 40) if all(n % size for size in (block, tile) if size > 1))
    return sorted(around | {next(ragged, 17)})


# --- values ------------------------------------------------------------------------------------


def lattice(largest: int, exponent: int = 0) -> Draw:
    """Whole numbers from -largest to largest, zero left out, times a power of two."""

    def draw(generator: np.random.Generator, shape: tuple[int, ...], name: str) -> Lanes:
        size = generator.integers(1, largest, size=shape, endpoint=True)
        return np.asarray(size * generator.choice([-1, 1], size=shape) * 2.0**exponent)

    return draw


MOST_STRUCTURES = 20


def structures(n: int) -> list[str | tuple[int, int]]:
    """Kinds of matrices whose structure shows faults; a pair is the place of a lone element."""
    pairs: list[str | tuple[int, int]] = [(i, j) for j in range(n) for i in range(j + 1)]
    step = max(1, -(-len(pairs) // MOST_STRUCTURES))
    return ["identity", "signs", "equal", "graded", *pairs[::step]]


def structured(kinds: list[str | tuple[int, int]]) -> Draw:
    """One lane for each kind of matrix, with small whole vectors."""

    def draw(generator: np.random.Generator, shape: tuple[int, ...], name: str) -> Lanes:
        if name != "A":
            return lattice(7)(generator, shape, name)
        n, values = shape[0], np.zeros(shape)
        i, j = np.arange(n)[:, None], np.arange(n)[None, :]
        for lane, kind in enumerate(kinds):
            if isinstance(kind, tuple):
                values[kind[0], kind[1], :, lane] = np.arange(1, shape[2] + 1)
                continue
            whole = {
                "identity": i == j,
                "signs": (-1) ** i * (i + j == n - 1),  # a permutation with signs
                "equal": 0 * i + 0 * j + 2,
                "graded": 1 + (i + j) % 3,
            }[kind]
            values[:, :, 0, lane] = whole
            values[:, :, -1, lane] = whole
        return values

    return draw


def uniform(generator: np.random.Generator, shape: tuple[int, ...], name: str) -> Lanes:
    """Numbers of magnitude 1/8 to 1: no error bound is disturbed by underflow."""
    signs = generator.choice([-1.0, 1.0], size=shape)
    return np.asarray(generator.uniform(0.125, 1, size=shape) * signs)


KINDS = 7
"""Kinds of values; further lanes are of the last kind, in which sums cancel."""


def all_magnitudes(real: str) -> Draw:
    """Ordinary numbers, every exponent, and specials, lane by lane in turn."""
    info = np.finfo(real)
    specials = np.array(
        [
            *(0.0, -0.0, np.inf, -np.inf, np.nan, 1.0, -1.0, 1.0 + float(info.eps)),
            *(info.max, -info.max, info.tiny),
            *(info.smallest_subnormal, -info.smallest_subnormal),
        ]
    )

    def draw(generator: np.random.Generator, shape: tuple[int, ...], name: str) -> Lanes:
        values = generator.uniform(-1, 1, size=shape)
        exponents = generator.integers(info.minexp - info.nmant, info.maxexp, size=shape)
        chosen = generator.choice(specials, size=shape)
        near_one = 1.0 + generator.integers(-3, 4, size=shape) * float(info.eps)
        signs = generator.choice([-1.0, 1.0], size=shape)
        picked = generator.random(size=shape)
        for lane in range(shape[-1]):
            kind, at = min(lane, KINDS - 1), (..., lane)
            if kind == 1:  # half the range of exponents: products do not overflow
                values[at] = np.ldexp(values[at], exponents[at] // 2)
            elif kind == 2:  # every exponent
                with np.errstate(all="ignore"):
                    values[at] = np.ldexp(values[at], exponents[at])
            elif kind == 3:  # now and then a special
                values[at] = np.where(picked[at] < 0.05, chosen[at], values[at])
            elif kind == 4:  # cancellation
                values[at] = near_one[at] * signs[at]
            elif kind == 5:  # around the smallest numbers, and signed zeros
                tiny = np.ldexp(values[at], info.minexp // 2 - 8)
                values[at] = np.where(picked[at] < 0.3, 0.0 * signs[at], tiny)
            elif kind == 6:
                values[at] = _cancelling(
                    values[at], name, generator, float(info.eps), lane % 2 == 1
                )
        return values

    return draw


def _cancelling(
    values: Lanes, name: str, generator: np.random.Generator, eps: float, near: bool
) -> Lanes:
    """Rows whose sums cancel to a few units of the last place, so that every order shows.

    Each column is repeated once, and the elements of x that meet the two are nearly opposite:
    half the matrix apart, or ``near`` each other so that a narrow band has them too.
    """
    size = values.shape[0]
    half = max(1, size // 2)
    place = np.arange(size)
    first = place // 2 * 2 if near else place % half
    if name == "A":
        return np.asarray(values[np.ix_(first, first)])
    if name == "y":
        return values * eps
    x = values[first]
    second = place % 2 == 1 if near else place >= half
    x[second] *= -(1 + eps * generator.integers(1, 9, size=x[second].shape))
    if size % 2:
        x[-1] *= eps  # the one that has no partner
    return np.asarray(x)


def integers(largest: int) -> Draw:
    """Whole numbers of at most ``largest`` in magnitude, the ends and zero often."""

    def draw(generator: np.random.Generator, shape: tuple[int, ...], name: str) -> Lanes:
        values = generator.integers(-largest, largest, size=shape, endpoint=True)
        ends = generator.choice([-largest, 0, largest], size=shape)
        return np.where(generator.random(size=shape) < 0.3, ends, values)

    return draw
