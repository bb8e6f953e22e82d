"""Kernels for people: from keywords to a callable that takes numpy arrays."""

from __future__ import annotations

from functools import cached_property
from typing import Any

import numpy as np
import numpy.typing as npt

from demilune import storage
from demilune.bench.levels import Verdict, verify
from demilune.errors import CheckError, InputError
from demilune.keys import RUNTIME
from demilune.plan.build import Plan, make_plan
from demilune.plan.counts import flat as flat_counts
from demilune.plan.tree import Parameter
from demilune.render import pseudo_code, render
from demilune.spec import Spec, make_spec
from demilune.toolchain.build import executable_of
from demilune.toolchain.executables import PythonExecutable

Array = npt.NDArray[Any]


def kernel(name: str = "kernel", **values: Any) -> Kernel:
    """A kernel from the keys of a specification, ready to be called.

    Raises :class:`~demilune.errors.SpecError` with every problem of the specification, and
    :class:`~demilune.errors.MissingError` if it is to be C and there is no compiler.
    """
    return Kernel(make_spec(name, **values))


class Kernel:
    """One kernel: its specification, plan, source, evidence, and the routine itself.

    Calling it checks every array (type, shape, order, writability, overlap) and copies none.
    """

    def __init__(self, spec: Spec) -> None:
        self.spec = spec
        self.plan: Plan = make_plan(spec)

    @cached_property
    def files(self) -> dict[str, str]:
        """The emitted files, by name."""
        return render([self.plan], self.spec.file, self.spec.language)

    @property
    def source(self) -> str:
        """The source of the routine."""
        return next(iter(self.files.values()))

    @property
    def pseudo_code(self) -> str:
        """The plan as pseudo-code."""
        return pseudo_code(self.plan)

    @property
    def picture(self) -> str:
        """The storage index of each element, for a small matrix."""
        return "\n".join(storage.picture(self.spec.layout))

    @cached_property
    def executable(self) -> Any:
        """The routine itself, which checks nothing."""
        return executable_of(self.plan, self.files)

    @property
    def function(self) -> Any:
        """The Python function, for :func:`inspect.getsource`; only if the language is Python."""
        if not isinstance(self.executable, PythonExecutable):
            raise InputError(f"the kernel {self.spec.name} is written in {self.spec.language}")
        return self.executable.function

    def counts(self, n: int | None = None) -> dict[str, int]:
        """Operations, loads, stores and bytes of one call; ``n`` where it is not fixed."""
        fixed = self.spec.layout.n
        if n is None and fixed == RUNTIME:
            raise InputError("n is passed at run time: say for which n to count")
        size = int(fixed) if fixed != RUNTIME else int(n or 0)
        if n is not None and n != size:
            raise InputError(f"the specification has n = {fixed}, not {n}")
        return flat_counts(self.plan, self.spec.layout.sample(size))

    def verify(self, seed: int = 1) -> Verdict:
        """What the bench finds; the same seed gives the same inputs."""
        return verify(self.plan, self.executable, seed)

    def to_half(self, matrix: npt.ArrayLike, **sizes: Any) -> Array:
        """The stored half of ``matrix`` in the kernel's element type (see :mod:`storage`)."""
        return storage.to_half(np.asarray(matrix, dtype=self.spec.arithmetic.dtype),
                               self.spec.layout, **sizes)  # fmt: skip

    def to_full(self, half: npt.ArrayLike, n: int, **sizes: Any) -> Array:
        """The whole matrix of ``n`` rows from its stored half."""
        return storage.to_full(half, self.spec.layout, n, **sizes)

    # --- calls -----------------------------------------------------------------------------

    def __call__(self, a: Array, x: Array, y: Array | None = None, **given: Any) -> Any:
        """Computes what the specification says.

        ``matvec`` gives y, which is made if it is not passed (then beta must be 0); ``rank1``
        changes ``a`` and gives it; ``quadform`` gives the number. Further arguments are those
        that the specification leaves to run time: ``alpha``, ``beta``, ``incx``, ``incy``,
        ``kd``, ``diagonal``, ``work``. Sizes are taken from the arrays.
        """
        call = _Call(self, a, x, y, given)
        call.run()
        return call.result


class _Call:
    """One call: checks the arguments, and finds those that follow from others."""

    def __init__(self, made: Kernel, a: Any, x: Any, y: Any, given: dict[str, Any]) -> None:
        self.made, self.plan = made, made.plan
        self.spec = made.spec
        self.known = {one.name: one for one in self.plan.parameters}
        names = {n for n in given if given[n] is not None}
        unknown = names - self.known.keys() - {"n"}
        if unknown:
            allowed = ", ".join(n for n in self.known if n not in ("a", "x", "y", "s"))
            raise InputError(
                f"{made.spec.name} takes no argument {sorted(unknown)[0]} "
                f"(it takes: {allowed or 'none beside the arrays'})"
            )
        self.values: dict[str, Any] = {n: given[n] for n in names}
        self._array("x", x)
        self.n = self._find_n(x)
        self.values["n"] = self.n
        self._matrix(a)
        self._scalars()
        if "y" in self.known:
            self._result_vector(y)
        elif y is not None:
            raise InputError(f"{self.spec.operation.name} has no y")
        if "s" in self.known:
            self.values["s"] = np.zeros(1, dtype=self._dtype(self.known["s"]))
        if "work" in self.known and "work" not in self.values:
            extent = self._extent(self.known["work"])
            self.values["work"] = np.empty(extent, dtype=self._dtype(self.known["work"]))
        for name in ("a", "x", "y", "work"):
            if name in self.known:
                self._long_enough(self.known[name])
        self._no_overlap()

    @property
    def result(self) -> Any:
        operation = self.spec.operation.name
        if operation == "quadform":
            return self.values["s"][0]
        return self.original if operation == "rank1" else self.values["y"]

    def run(self) -> None:
        arrays = {
            one.name: self.values[one.name] for one in self.plan.parameters if one.kind == "array"
        }
        arguments = {n: self.values[n] for n in self.known if n not in arrays} | arrays
        arguments["a"] = self.flat
        refused = self.made.executable(arguments)
        if refused is not None:
            raise InputError(f"{self.spec.name} refuses {refused} = {self.values.get(refused)}")

    # --- checks ----------------------------------------------------------------------------

    @staticmethod
    def _dtype(one: Parameter) -> np.dtype[Any]:
        if not one.complex:
            return np.dtype(one.type)
        return np.dtype("complex64" if one.type == "float32" else "complex128")

    def _array(self, name: str, value: Any) -> None:
        one = self.known[name]
        if not isinstance(value, np.ndarray):
            raise InputError(f"{name} is a {type(value).__name__}; a numpy array is needed")
        if value.dtype != self._dtype(one):
            raise InputError(f"{name} holds {value.dtype}; {self._dtype(one)} is needed")
        if one.use != "in" and not value.flags.writeable:
            raise InputError(f"{name} is read-only, and {self.spec.name} writes to it")
        if name != "a" and (value.ndim != 1 or not value.flags.c_contiguous):
            raise InputError(
                f"{name} must be a contiguous one-dimensional array, not of shape {value.shape} "
                f"with strides {value.strides}; strides are told by inc{name}"
            )
        self.values[name] = value

    def _stride(self, name: str) -> int:
        fixed = getattr(self.spec.operation, name)
        step = int(self.values.setdefault(name, 1)) if fixed == RUNTIME else int(fixed)
        if step == 0:
            raise InputError(f"{name} = 0; a stride is other than 0")
        return step

    def _find_n(self, x: Array) -> int:
        if self.spec.layout.n != RUNTIME:
            n = int(self.spec.layout.n)
            if self.values.get("n", n) != n:
                raise InputError(f"n = {self.values['n']}; the specification has n = {n}")
            return n
        if "n" in self.values:
            n = int(self.values["n"])
            if n < 0:
                raise InputError(f"n = {n}; at least 0 is needed")
            return n
        step = abs(self._stride("incx"))
        return 0 if x.size == 0 else 1 + (x.size - 1) // step

    def _extent(self, one: Parameter) -> int:
        assert one.extent is not None
        env = self.spec.layout.environment(self.values)
        return max(0, one.extent.value(env)) if self.n > 0 else 0

    def _matrix(self, a: Any) -> None:
        self._array("a", a)
        self.original = a
        layout = self.spec.layout
        two = len(layout.shape(layout.environment(layout.sample(max(1, self.n))))) == 2
        if "diagonal" in self.known:
            self._diagonal()
        if a.ndim == 2 and two:
            self._leading(a)
        elif a.ndim != 1 or not a.flags.c_contiguous:
            kind = "one- or two-dimensional" if two else "contiguous one-dimensional"
            raise InputError(f"a must be a {kind} array, not of shape {a.shape}, {a.strides}")
        else:
            self.flat = a
            for name in ("kd", "ld"):
                if name in self.known and name not in self.values:
                    raise InputError(f"a is one-dimensional: {name} must be passed")

    def _diagonal(self) -> None:
        places = self.values.get("diagonal")
        extent = self._extent_of_places()
        if not isinstance(places, np.ndarray) or places.dtype != np.intp or places.ndim != 1:
            raise InputError("diagonal must be passed as a one-dimensional array of numpy.intp")
        if not places.flags.c_contiguous or places.size < extent:
            raise InputError(f"diagonal must hold {extent} contiguous places")
        steps = np.diff(places[:extent])
        first = places[0] if extent else 0
        limit = np.arange(self.n, 0, -1) if self.spec.layout.tail else np.arange(2, self.n + 1)
        if first != 0 or np.any(steps < 1) or np.any(steps > limit[: steps.size]):
            raise InputError(
                "diagonal must begin with 0 and ascend, each strip within its triangle"
            )

    def _extent_of_places(self) -> int:
        one = self.known["diagonal"]
        assert one.extent is not None
        return one.extent.value(self.values) if self.n > 0 else 0

    def _leading(self, a: Array) -> None:
        """The leading dimension and the half-bandwidth from a two-dimensional array."""
        layout = self.spec.layout
        columns = layout.order == "column-major"
        near, far = (0, 1) if columns else (1, 0)
        rows, count = a.shape[near], a.shape[far]
        step = a.strides[far] // a.itemsize
        if a.size and ((rows > 1 and a.strides[near] != a.itemsize) or (step < rows and count > 1)):
            raise InputError(
                f"a must be contiguous along its {'columns' if columns else 'rows'} "
                f"({layout.order}), its strides are {a.strides} bytes"
            )
        if count != self.n:
            raise InputError(f"a has the shape {a.shape}, and n is {self.n}")
        leading = step if count > 1 else max(1, rows)
        if "kd" in self.known:
            self.values.setdefault("kd", rows - 1)
        elif layout.name == "full" and rows < self.n:
            raise InputError(f"a has the shape {a.shape}, and n is {self.n}")
        fixed = layout.leading.value(  # type: ignore[attr-defined]
            layout.environment({**layout.sample(self.n), **self.values, "ld": leading})
        )
        if "ld" in self.known:
            if self.values.setdefault("ld", leading) != leading:
                raise InputError(f"ld = {self.values['ld']}, and a has {leading}")
        elif fixed != leading and count > 1:
            raise InputError(f"a has the leading dimension {leading}; {fixed} is needed")
        span = (a.shape[far] - 1) * step + rows if a.size else 0
        self.flat = np.lib.stride_tricks.as_strided(a, (span,), (a.itemsize,))

    def _scalars(self) -> None:
        for one in self.plan.parameters:
            if one.kind != "scalar":
                continue
            if one.name not in self.values:
                raise InputError(f"{one.name} must be passed: the specification leaves it open")
            value = self.values[one.name]
            if not isinstance(value, int | float | complex | np.number):
                raise InputError(f"{one.name} is a {type(value).__name__}; a number is needed")
            if not one.complex and complex(value).imag != 0:
                raise InputError(f"{one.name} = {value}; a real number is needed")

    def _result_vector(self, y: Any) -> None:
        step = self._stride("incy")
        beta = self.values.get("beta", getattr(self.spec.operation, "beta", 0))
        if y is None:
            if beta != 0:
                raise InputError(f"beta = {beta} reads y, and no y is passed")
            length = 1 + (self.n - 1) * abs(step) if self.n else 0
            y = np.zeros(length, dtype=self._dtype(self.known["y"]))
        self._array("y", y)

    def _long_enough(self, one: Parameter) -> None:
        if one.name == "x":
            self._stride("incx")
        array = self.flat if one.name == "a" else self.values[one.name]
        if one.name == "work":
            self._array("work", array)
        need = self._extent(one)
        if array.size < need:
            raise InputError(f"{one.name} has {array.size} elements; {need} are needed")

    def _no_overlap(self) -> None:
        names = [one.name for one in self.plan.parameters if one.kind == "array"]
        for place, first in enumerate(names):
            for second in names[place + 1 :]:
                p, q = (self.flat if n == "a" else self.values[n] for n in (first, second))
                if np.may_share_memory(p, q):
                    raise InputError(f"{first} and {second} overlap in memory")


def checked(made: Kernel, seed: int = 1) -> Kernel:
    """The kernel, if the bench verifies it; raises :class:`CheckError` with what failed."""
    verdict = made.verify(seed)
    if not verdict.verified:
        messages = [m for level in verdict.levels for m in level.failures]
        raise CheckError(f"{made.spec.name} is not verified: " + "; ".join(messages[:3]))
    return made
