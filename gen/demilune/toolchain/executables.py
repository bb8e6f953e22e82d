"""Kernels that can be called: a C routine through cffi, or a Python function."""

from __future__ import annotations

import linecache
from collections.abc import Callable, Mapping
from contextlib import suppress
from pathlib import Path
from typing import Any, Protocol

import cffi
import numpy as np

from demilune.errors import InputError
from demilune.expressions import syntax
from demilune.plan.build import Plan
from demilune.plan.tree import Parameter
from demilune.render import argument_position, prototype


class Executable(Protocol):
    """A kernel that can be called with arrays of numpy; no argument is checked here."""

    plan: Plan

    def __call__(self, arguments: Mapping[str, Any]) -> str | None:
        """Runs it; gives the name of the argument that it refused, or None.

        Sizes are ints, scalars numbers, arrays one-dimensional numpy arrays of the element type
        (or a view of one that starts at element 0), places arrays of ``numpy.intp``.
        """


class CExecutable:
    """A C routine in a shared library."""

    def __init__(self, plan: Plan, library: Path) -> None:
        self.plan = plan
        self._path = str(library)
        self._ffi = cffi.FFI()
        self._ffi.cdef(prototype(plan) + ";")
        self._library = self._ffi.dlopen(str(library))
        self._call: Callable[..., int | None] = getattr(self._library, plan.spec.name)
        self._positions = {argument_position(plan, p.name): p.name for p in plan.parameters}

    def one_thread(self) -> None:
        """Keeps the parts of the routine to one thread of this process, where it has OpenMP."""
        ffi = cffi.FFI()
        ffi.cdef("void omp_set_num_threads(int);")
        with suppress(AttributeError):
            ffi.dlopen(self._path).omp_set_num_threads(1)

    def __call__(self, arguments: Mapping[str, Any]) -> str | None:
        passed: list[Any] = []
        for one in self.plan.parameters:
            passed.extend(self._passed(one, arguments[one.name]))
        status = self._call(*passed)
        return self._positions[status] if status else None

    def _passed(self, one: Parameter, value: Any) -> list[Any]:
        if one.kind == "size":
            return [int(value)]
        if one.kind == "scalar":
            if one.complex:
                return [float(complex(value).real), float(complex(value).imag)]
            return [int(value) if one.type.startswith("int") else float(value)]
        address = value.__array_interface__["data"][0]
        kind = syntax("c")["c_type"]("size" if one.kind == "places" else one.type)
        return [self._ffi.cast(f"{kind} *", address)]


class PythonExecutable:
    """A Python routine; its source is known to tracebacks and to :mod:`inspect`."""

    def __init__(self, plan: Plan, source: str) -> None:
        self.plan = plan
        self.function = load_function(source, plan.spec.name)

    def __call__(self, arguments: Mapping[str, Any]) -> str | None:
        passed = []
        for one in self.plan.parameters:
            value = arguments[one.name]
            passed.append(self._scalar(one, value) if one.kind == "scalar" else value)
        try:
            self.function(*passed)
        except ValueError as error:
            refused = str(error).split(" ", 1)[0]
            if refused in {one.name for one in self.plan.parameters}:
                return refused
            raise
        return None

    def _scalar(self, one: Parameter, value: Any) -> Any:
        if one.type.startswith("int"):
            return int(value)
        rounded = (
            np.dtype("complex64" if one.complex else one.type).type(value)
            if (one.type == "float32")
            else value
        )
        return complex(rounded) if one.complex else float(rounded)


def load_function(source: str, name: str) -> Callable[..., None]:
    """The function called ``name`` of a Python source that is known to :mod:`inspect`."""
    filename = f"<demilune {name} {abs(hash(source)):x}>"
    linecache.cache[filename] = (len(source), None, source.splitlines(keepends=True), filename)
    space: dict[str, Any] = {"__name__": f"demilune.made.{name}", "__file__": filename}
    exec(compile(source, filename, "exec"), space)  # noqa: S102 - emitted by this program
    function = space.get(name)
    if not callable(function):
        raise InputError(f"the source defines no function {name}")
    return function  # type: ignore[no-any-return]
