"""What is timed: a kernel, a library's routine, or a limit, each with the text of its call in C."""

from __future__ import annotations

import ctypes
from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass, field
from functools import cache
from pathlib import Path
from typing import Any

import cffi
import numpy as np
import numpy.typing as npt

from demilune.expressions import syntax
from demilune.isa import native
from demilune.plan.build import Plan
from demilune.plan.tree import Parameter
from demilune.race.peers import LETTERS, Library, routine_for, triangle_for_fortran
from demilune.render import prototype
from demilune.spec import Spec
from demilune.toolchain.cache import library
from demilune.toolchain.compilers import find_compiler

Array = npt.NDArray[Any]
Argument = tuple[str, Any]
"""Kind (``pointer``, ``size`` or ``scalar``) and value."""
LIMITS = Path(__file__).with_name("limits.c")
LIMIT_FLAGS = (
    "-std=gnu11", "-O2", "-ffp-contract=fast", "-fassociative-math", "-fno-signed-zeros",
    "-fno-trapping-math", "-fPIC", "-shared", "-Wno-psabi",
)  # fmt: skip
"""Not ``-ffast-math``: a library that is linked so turns subnormals off in the whole process."""
CHAINS = 12
"""Independent chains of multiply-adds in the loop that measures the peak; see limits.c."""
PASSES = 1000


@dataclass
class Contestant:
    """A routine with the text of its call; ``{e}`` in the texts is its number."""

    label: str
    address: int
    declared: str
    call: str
    arguments: list[Argument]
    result: Array | None = None
    """The array that a call changes."""
    prepare: Callable[[], None] = lambda: None
    """What is done before each slice: tells how many threads there may be."""
    keep: list[Any] = field(default_factory=list)
    """What must live as long, such as the library that holds the routine."""

    @property
    def plain_arguments(self) -> tuple[Any, ...]:
        """Sizes, scalars and addresses: two calls with the same ones do the same."""
        return tuple(
            value if kind != "pointer" else _address(value) for kind, value in self.arguments
        )


def _address(array: Array | None) -> int:
    return 0 if array is None else int(array.__array_interface__["data"][0])


def kernel_contestant(plan: Plan, path: Path, values: Mapping[str, Any]) -> Contestant:
    """A compiled kernel in the library at ``path`` with the values of its parameters."""
    name, threads = plan.spec.name, plan.spec.schedule.threads
    ffi = cffi.FFI()
    ffi.cdef(prototype(plan) + ";")
    code = ffi.dlopen(str(path))
    texts, arguments = [], []
    for slot, one in enumerate(plan.parameters):
        kind, text = _kernel_argument(one, slot)
        texts.append(text)
        arguments.append((kind, values[one.name]))
    return Contestant(
        label=name,
        address=int(ffi.cast("intptr_t", ffi.addressof(code, name))),
        declared=prototype(plan).replace(f" {name}(", " (*routine_{e})(", 1),
        call=f"routine_{{e}}({', '.join(texts)})",
        arguments=arguments,
        result=values[plan.spec.operation.result],
        prepare=(lambda: set_team(path, threads)) if threads > 1 else (lambda: None),
        keep=[code],
    )


def set_team(path: Path, threads: int) -> None:
    """Gives the parts of a kernel so many threads, where its library has OpenMP."""
    function = getattr(ctypes.CDLL(str(path)), "omp_set_num_threads", None)
    if function is not None:
        function(threads)


def _kernel_argument(one: Parameter, slot: int) -> tuple[str, str]:
    if one.kind == "size":
        return "size", f"(ptrdiff_t)sizes[{{e}}][{slot}]"
    if one.kind == "scalar":
        store = "floats" if one.type == "float32" else "doubles"
        return "scalar", ", ".join(f"{store}[{{e}}][{slot}][{part}]" for part in range(one.parts))
    kind = syntax("c")["c_type"]("size" if one.kind == "places" else one.type)
    return "pointer", f"({kind} *)pointers[{{e}}][{slot}]"


def library_contestant(where: Library, spec: Spec, values: Mapping[str, Any]) -> Contestant | None:
    """The standard's routine of a library, called on what the kernel is called on, if it has it."""
    routine = routine_for(spec)
    if routine is None:
        return None
    matrix: list[Argument] = [("pointer", values["a"])]
    if spec.layout.two_dimensional:
        matrix.append(("size", values["ld"]))
    x: list[Argument] = [("pointer", values["x"]), ("size", values["incx"])]
    alpha: Argument = ("scalar", values["alpha"])
    if spec.operation.name == "matvec":
        y: list[Argument] = [("pointer", values["y"]), ("size", values["incy"])]
        rest = [alpha, *matrix, *x, ("scalar", values["beta"]), *y]
    else:
        rest = [alpha, *x, *matrix]
    width: list[Argument] = [("size", values["kd"])] if spec.layout.name == "band" else []
    told = ["kd"] if width else []
    told += [name for name in ("incx", "incy") if values[name] != 1]
    return _fortran(
        where,
        [routine, triangle_for_fortran(spec), *(f"{name}={values[name]}" for name in told)],
        spec.arithmetic.real,
        [("size", values["n"]), *width, *rest],
        values[spec.operation.result],
        spec.schedule.threads,
    )


def whole_contestant(where: Library, spec: Spec, values: Mapping[str, Any]) -> Contestant | None:
    """The library's product with an array that holds all n*n elements, column by column."""
    n: Argument = ("size", values["n"])
    arguments: list[Argument] = [
        n, n, ("scalar", 1.0), ("pointer", values["whole"]), n, ("pointer", values["x"]),
        ("size", 1), ("scalar", 0.0), ("pointer", values["y"]), ("size", 1),
    ]  # fmt: skip
    words = [LETTERS[spec.arithmetic.dtype] + "gemv", "N"]
    threads, real = spec.schedule.threads, spec.arithmetic.real
    return _fortran(where, words, real, arguments, values["y"], threads)


def _fortran(
    where: Library,
    words: Sequence[str],
    real: str,
    rest: Sequence[Argument],
    result: Array,
    threads: int,
) -> Contestant | None:
    """A routine that takes everything by address, and last the length of its first argument.

    ``words`` are its name, its option letter, and what else tells it from others.
    """
    address = where.address(words[0])
    if address is None:
        return None
    team = [f"threads={threads}"] if threads > 1 else []
    option = np.frombuffer(words[1].encode() + b"\0", dtype=np.uint8)
    arguments: list[Argument] = [("pointer", option), *rest]
    sizes = "sizes" if where.bits == 64 else "short_sizes"
    stores = {
        "pointer": "pointers[{e}][SLOT]",
        "size": f"&{sizes}[{{e}}][SLOT]",
        "scalar": ("floats" if real == "float32" else "doubles") + "[{e}][SLOT]",
    }
    texts = [stores[kind].replace("SLOT", str(slot)) for slot, (kind, _) in enumerate(arguments)]
    return Contestant(
        label=" ".join([where.name, *words, *team]),
        address=address,
        declared="void (*routine_{e})()",
        call=f"routine_{{e}}({', '.join(texts)}, (size_t)1)",
        arguments=arguments,
        result=result,
        prepare=lambda: where.set_threads(threads),
    )


def sum_contestant(real: str, array: Array, count: int) -> Contestant:
    """Sums ``count`` numbers from memory, as fast as loads go."""
    return _limit(f"sum of {count} {real}", "sum", real, array, count)


def peak_contestant(real: str) -> tuple[Contestant, int]:
    """Multiply-adds in registers, and the operations of one call."""
    label = f"peak of {real}"
    lanes = native().widths(real)[-1:] or [16 // np.dtype(real).itemsize]
    array = np.array([0.5, 0.25], dtype=real)
    return _limit(label, "peak", real, array, PASSES), 2 * CHAINS * lanes[0] * PASSES


def _limit(label: str, what: str, real: str, array: Array, count: int) -> Contestant:
    kind = "float" if real == "float32" else "double"
    code = _limits()
    names = [f"{what}_{isa}_{real}" for isa in (native().name, "portable")]
    name = next(one for one in names if hasattr(code, one))
    return Contestant(
        label=label,
        address=int(ctypes.cast(getattr(code, name), ctypes.c_void_p).value or 0),
        declared=f"double (*routine_{{e}})(const {kind} *, int64_t)",
        call="sink = routine_{e}(pointers[{e}][0], sizes[{e}][1])",
        arguments=[("pointer", array), ("size", count)],
        keep=[code],
    )


@cache
def _limits() -> ctypes.CDLL:
    source = {LIMITS.name: LIMITS.read_text(encoding="utf-8")}
    return ctypes.CDLL(str(library(find_compiler(), LIMIT_FLAGS, source)))
