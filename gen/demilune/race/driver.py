"""Times contestants from C: calls at their addresses, no Python in between."""

from __future__ import annotations

from collections.abc import Callable, Iterable, Mapping
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

import cffi
import numpy as np
import numpy.typing as npt

from demilune.expressions import syntax, templates
from demilune.plan.build import Plan
from demilune.plan.tree import Parameter
from demilune.race.peers import Library, routine_for, stored_for_fortran
from demilune.render import prototype
from demilune.spec import Spec
from demilune.toolchain.cache import library
from demilune.toolchain.compilers import CONTRACT_FLAGS, find_compiler

Array = npt.NDArray[Any]
SLOTS = 12
FLAGS = (*CONTRACT_FLAGS[1:], "-std=gnu99", "-O2", "-fPIC", "-shared", "-Wno-psabi")
LIMITS = Path(__file__).with_name("limits.c")
DECLARATIONS = """
void set_pointer(int, int, void *); void set_size(int, int, int64_t);
void set_scalar(int, int, double, double); void set_routine(int, void *);
double seconds(int, int64_t);
"""


@dataclass
class Contestant:
    """A routine with the text of its call; ``{e}`` in the texts is its number."""

    label: str
    address: int
    declared: str
    call: str
    arguments: list[tuple[str, Any]]
    """Kind (``pointer``, ``size`` or ``scalar``) and value of each slot."""
    keep: list[Any] = field(default_factory=list)
    """What must live as long: arrays, and the library that holds the routine."""


def kernel_contestant(label: str, plan: Plan, path: Path, values: Mapping[str, Any]) -> Contestant:
    """A compiled kernel with the values of its parameters."""
    ffi = cffi.FFI()
    ffi.cdef(prototype(plan) + ";")
    code = ffi.dlopen(str(path))
    address = int(ffi.cast("intptr_t", ffi.addressof(code, plan.spec.name)))
    texts, arguments = [], []
    for slot, one in enumerate(plan.parameters):
        kind, text, value = _kernel_argument(one, slot, values[one.name])
        texts.append(text)
        arguments.append((kind, value))
    declared = prototype(plan).replace(f" {plan.spec.name}(", " (*routine_{e})(", 1)
    return Contestant(
        label, address, declared, f"routine_{{e}}({', '.join(texts)})", arguments,
        [code, list(values.values())],
    )  # fmt: skip


def _kernel_argument(one: Parameter, slot: int, value: Any) -> tuple[str, str, Any]:
    if one.kind == "size":
        return "size", f"(ptrdiff_t)sizes[{{e}}][{slot}]", value
    if one.kind == "scalar":
        store = "floats" if one.type == "float32" else "doubles"
        texts = [f"{store}[{{e}}][{slot}][{part}]" for part in range(one.parts)]
        return "scalar", ", ".join(texts), value
    kind = syntax("c")["c_type"]("size" if one.kind == "places" else one.type)
    return "pointer", f"({kind} *)pointers[{{e}}][{slot}]", value


def library_contestant(
    label: str, where: Library, spec: Spec, values: Mapping[str, Any]
) -> Contestant | None:
    """The standard's routine of a library, called as the kernel is."""
    routine = routine_for(spec)
    address = None if routine is None else where.address(routine)
    if routine is None or address is None:
        return None
    triangle = np.frombuffer(stored_for_fortran(spec).encode() + b"\0", dtype=np.uint8)
    matrix: list[tuple[str, Any]] = [("pointer", values["a"])]
    if spec.layout.two_dimensional:
        matrix.append(("size", values["ld"]))
    x, y = [("pointer", values["x"]), ("size", 1)], [("pointer", values.get("y")), ("size", 1)]
    if spec.operation.name == "matvec":
        ends = [*x, ("scalar", values["beta"]), *y]
        rest = [("scalar", values["alpha"]), *matrix, *ends]
    else:
        rest = [("scalar", values["alpha"]), *x, *matrix]
    width = [("size", values["kd"])] if spec.layout.name == "band" else []
    arguments = [("pointer", triangle), ("size", values["n"]), *width, *rest]
    return fortran(label, address, where.bits, spec.arithmetic.real, arguments, [values])


def full_product(
    label: str, where: Library, dtype: str, values: Mapping[str, Any]
) -> Contestant | None:
    """The library's product with a full matrix that is stored whole."""
    letter = {"float32": "s", "float64": "d", "complex64": "c", "complex128": "z"}[dtype]
    address = where.address(f"{letter}gemv")
    if address is None:
        return None
    no = np.frombuffer(b"N\0", dtype=np.uint8)
    n = ("size", values["n"])
    arguments = [
        ("pointer", no), n, n, ("scalar", 1.0), ("pointer", values["whole"]), n,
        ("pointer", values["x"]), ("size", 1), ("scalar", 0.0), ("pointer", values["y"]),
        ("size", 1),
    ]  # fmt: skip
    real = "float32" if letter in "sc" else "float64"
    return fortran(label, address, where.bits, real, arguments, [values])


def fortran(
    label: str,
    address: int,
    bits: int,
    real: str,
    arguments: list[tuple[str, Any]],
    keep: list[Any],
) -> Contestant:
    """A routine that takes everything by address, and the length of its first argument last."""
    sizes = "sizes" if bits == 64 else "short_sizes"
    store = "floats" if real == "float32" else "doubles"
    texts = []
    for slot, (kind, _) in enumerate(arguments):
        form = {
            "pointer": f"pointers[{{e}}][{slot}]", "size": f"&{sizes}[{{e}}][{slot}]",
            "scalar": f"{store}[{{e}}][{slot}]",
        }[kind]  # fmt: skip
        texts.append(form)
    call = f"routine_{{e}}({', '.join(texts)}, (size_t)1)"
    return Contestant(label, address, "void (*routine_{e})()", call, arguments, keep)


def limit_contestant(label: str, name: str, array: Array, count: int) -> Contestant:
    """One of the limits: a function of an array and a count."""
    ffi, code = _limits()
    kind = "float" if name.endswith("float32") else "double"
    ffi.cdef(f"double {name}(const {kind} *, int64_t);", override=True)
    address = int(ffi.cast("intptr_t", ffi.addressof(code, name)))
    call = "sink = routine_{e}(pointers[{e}][0], sizes[{e}][1])"
    declared = f"double (*routine_{{e}})(const {kind} *, int64_t)"
    return Contestant(label, address, declared, call, [("pointer", array), ("size", count)], [code])


def _limits() -> tuple[Any, Any]:
    source = {LIMITS.name: LIMITS.read_text(encoding="utf-8")}
    flags = ("-std=gnu11", "-O2", "-ffast-math", "-fPIC", "-shared", "-Wno-psabi")
    ffi = cffi.FFI()
    return ffi, ffi.dlopen(str(library(find_compiler(), flags, source)))


class Driver:
    """All contestants in one compiled driver."""

    def __init__(self, contestants: Iterable[Contestant]) -> None:
        self.contestants = list(contestants)
        entries = [
            {"label": c.label, "declared": c.declared.format(e=e), "call": c.call.format(e=e)}
            for e, c in enumerate(self.contestants)
        ]
        template = templates().get_template("race/driver.c.j2")
        text = template.render(entries=entries, slots=SLOTS)
        self._ffi = cffi.FFI()
        self._ffi.cdef(DECLARATIONS)
        path = library(find_compiler(), FLAGS, {"driver.c": text})
        self._code = self._ffi.dlopen(str(path))
        for entry, one in enumerate(self.contestants):
            self._place(entry, one)

    def _place(self, entry: int, one: Contestant) -> None:
        self._code.set_routine(entry, self._ffi.cast("void *", one.address))
        for slot, (kind, value) in enumerate(one.arguments):
            if kind == "size":
                self._code.set_size(entry, slot, int(value))
            elif kind == "scalar":
                number = complex(value)
                self._code.set_scalar(entry, slot, number.real, number.imag)
            else:
                address = 0 if value is None else value.__array_interface__["data"][0]
                self._code.set_pointer(entry, slot, self._ffi.cast("void *", address))

    def seconds(self, entry: int, calls: int) -> float:
        """The seconds that so many calls take."""
        return float(self._code.seconds(entry, calls))

    def interleaved(
        self, rounds: int, slice_seconds: float, told: Callable[[int], None] = lambda done: None
    ) -> Array:
        """Seconds of one call, by round and contestant; each round runs every one in turn."""
        calls = [self._calls(entry, slice_seconds) for entry in range(len(self.contestants))]
        found = np.empty((rounds, len(calls)))
        for turn in range(rounds):
            for entry, count in enumerate(calls):
                found[turn, entry] = self.seconds(entry, count) / count
            told(turn + 1)
        return found

    def _calls(self, entry: int, slice_seconds: float) -> int:
        """How many calls fill a slice; also warms up."""
        calls = 1
        while (took := self.seconds(entry, calls)) < slice_seconds / 4:
            calls *= 4 if took < slice_seconds / 40 else 2
        return max(1, round(calls * slice_seconds / took))
