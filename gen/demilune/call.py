"""One call of a kernel from Python: checks every argument, and finds those that follow."""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

import numpy as np
import numpy.typing as npt

from demilune.errors import InputError
from demilune.keys import RUNTIME
from demilune.plan.tree import Parameter
from demilune.storage import sizes_for, whole_number

if TYPE_CHECKING:
    from demilune.kernel import Kernel

Array = npt.NDArray[Any]


def dtype_of(one: Parameter) -> np.dtype[Any]:
    """The element type of an array parameter."""
    if not one.complex:
        return np.dtype(one.type)
    return np.dtype("complex64" if one.type == "float32" else "complex128")


class Call:
    """The arguments of one call; raises :class:`InputError` for the first that is wrong."""

    def __init__(self, made: Kernel, a: Any, x: Any, y: Any, given: dict[str, Any]) -> None:
        self.made, self.plan, self.spec = made, made.plan, made.spec
        self.known = {one.name: one for one in self.plan.parameters}
        allowed = [n for n in self.known if n not in ("a", "x", "y", "s")]
        for name in given:
            if name not in (*allowed, "n"):
                raise InputError(
                    f"{made.spec.name} takes no argument {name} "
                    f"(it takes: {', '.join(allowed) or 'none beside the arrays'})"
                )
        self.given = {name: value for name, value in given.items() if value is not None}
        self.values: dict[str, Any] = {}
        self._strides()
        self._array("x", x)
        self.values["n"] = self._find_n(x)
        self._array("a", a)
        self.flat = self._matrix(a)
        self._scalars()
        self._results(y)
        for one in self.plan.arrays.values():
            array = self.flat if one.name == "a" else self.values[one.name]
            if array.size < self._extent(one):
                raise InputError(
                    f"{one.name} has {array.size} elements; {self._extent(one)} are needed"
                )
        self._no_overlap()

    @property
    def result(self) -> Any:
        """The array that holds the result, or the number if it is one."""
        name = self.spec.operation.result
        return self.values[name][0] if name == "s" else self.values[name]

    def run(self) -> None:
        """Calls the routine."""
        refused = self.made.executable({**self.values, "a": self.flat})
        if refused is not None:
            raise InputError(f"{self.spec.name} refuses {refused} = {self.values.get(refused)}")

    # --- arrays ----------------------------------------------------------------------------

    def _array(self, name: str, value: Any) -> None:
        one = self.known[name]
        if not isinstance(value, np.ndarray) or isinstance(value, np.ma.MaskedArray):
            raise InputError(f"{name} is a {type(value).__name__}; a plain numpy array is needed")
        if value.dtype != dtype_of(one):
            raise InputError(f"{name} holds {value.dtype}; {dtype_of(one)} is needed")
        if one.use != "in" and not value.flags.writeable:
            raise InputError(f"{name} is read-only, and {self.spec.name} writes to it")
        if not value.flags.aligned:
            raise InputError(f"{name} is not aligned to its elements in memory")
        if name != "a" and (value.ndim != 1 or not value.flags.c_contiguous):
            raise InputError(
                f"{name} must be a contiguous one-dimensional array, not of shape {value.shape} "
                f"with strides {value.strides}; strides are told by inc{name}"
            )
        self.values[name] = value

    def _extent(self, one: Parameter) -> int:
        """Elements that the routine may touch."""
        assert one.extent is not None
        if self.values["n"] == 0:
            return 0
        return max(0, one.extent.value(self.spec.layout.environment(self.values)))

    def _strides(self) -> None:
        for name in ("incx", "incy"):
            fixed = getattr(self.spec.operation, name, 1)
            step = whole_number(name, self.given.get(name, 1)) if fixed == RUNTIME else int(fixed)
            if step == 0:
                raise InputError(f"{name} = 0; a stride is other than 0")
            self.values[name] = step

    def _find_n(self, x: Array) -> int:
        fixed = self.spec.layout.n
        if fixed != RUNTIME or "n" in self.given:
            n = whole_number("n", self.given.get("n", fixed))
            if n < 0:
                raise InputError(f"n = {n}; at least 0 is needed")
            if fixed not in (RUNTIME, n):
                raise InputError(f"n = {n}; the specification has n = {fixed}")
            return n
        step = abs(self.values["incx"])
        return 0 if x.size == 0 else 1 + (x.size - 1) // step

    def _matrix(self, a: Array) -> Array:
        """The half as a one-dimensional array; its sizes go to the values."""
        layout = self.spec.layout
        sizes = [one.name for one in (*layout.sizes(), *layout.after())]
        given = {name: self.given[name] for name in sizes if name in self.given}
        if a.ndim == 2 and layout.two_dimensional:
            return self._two_dimensional(a, given)
        if a.ndim != 1 or not a.flags.c_contiguous:
            kind = "one- or two-dimensional" if layout.two_dimensional else "one-dimensional"
            raise InputError(
                f"a must be a contiguous {kind} array, not of shape {a.shape} with strides "
                f"{a.strides}"
            )
        if "ld" in sizes and "ld" not in given:
            raise InputError("a is one-dimensional: ld must be passed")
        self.values |= sizes_for(layout, self.values["n"], given)
        return a

    def _two_dimensional(self, a: Array, given: dict[str, Any]) -> Array:
        layout, n = self.spec.layout, self.values["n"]
        columns = layout.order == "column-major"
        near, far = (0, 1) if columns else (1, 0)
        rows, count, step = a.shape[near], a.shape[far], a.strides[far]
        close = rows <= 1 or a.strides[near] == a.itemsize
        apart = count <= 1 or (step % a.itemsize == 0 and step >= rows * a.itemsize)
        if a.size and not (close and apart):
            maker = "numpy.asfortranarray" if columns else "numpy.ascontiguousarray"
            raise InputError(
                f"a must be {layout.order}: contiguous along its {'columns' if columns else 'rows'}"
                f" (see {maker}); its strides are {a.strides} bytes"
            )
        if count != n:
            raise InputError(f"a has the shape {a.shape}, and n is {n}")
        leading = step // a.itemsize if count > 1 else max(1, rows)
        told = layout.sizes_of_array(rows)
        ld = whole_number("ld", given.pop("ld", leading))
        if ld != leading:
            raise InputError(f"ld = {ld}, and a has {leading}")
        sizes = sizes_for(layout, n, {**told, **given})
        needed = layout.rows.value(sizes)
        if rows < needed and n:
            raise InputError(f"a has the shape {a.shape}: {needed} are needed along its strips")
        if any(one.name == "ld" for one in layout.after()):
            sizes["ld"] = leading
        fixed = layout.leading.value(sizes)
        if fixed != leading and count > 1:
            raise InputError(f"a has the leading dimension {leading}; {fixed} is needed")
        self.values |= sizes
        span = (count - 1) * leading + rows if a.size else 0
        return np.lib.stride_tricks.as_strided(a, (span,), (a.itemsize,))

    # --- scalars and results -----------------------------------------------------------------

    def _scalars(self) -> None:
        for one in self.plan.parameters:
            if one.kind != "scalar":
                continue
            if one.name not in self.given:
                raise InputError(f"{one.name} must be passed: the specification leaves it open")
            self.values[one.name] = _scalar(one, self.given[one.name])

    def _results(self, y: Any) -> None:
        if "y" in self.known and self.known["y"].use == "in":
            self._array("y", y)
        elif "y" in self.known:
            beta = self.values.get("beta", getattr(self.spec.operation, "beta", 0))
            if y is None:
                if beta != 0:
                    raise InputError(f"beta = {beta} reads y, and no y is passed")
                y = np.zeros(self._extent(self.known["y"]), dtype=dtype_of(self.known["y"]))
            self._array("y", y)
        elif y is not None:
            raise InputError(f"{self.spec.operation.name} has no y")
        if "s" in self.known:
            self.values["s"] = np.zeros(1, dtype=dtype_of(self.known["s"]))
        if "work" in self.known:
            work = self.known["work"]
            made = np.empty(self._extent(work), dtype=dtype_of(work))
            self._array("work", self.given.get("work", made))

    def _no_overlap(self) -> None:
        names = [one.name for one in self.plan.parameters if one.kind in ("array", "places")]
        arrays = {name: self.flat if name == "a" else self.values[name] for name in names}
        for place, first in enumerate(names):
            for second in names[place + 1 :]:
                written = {self.known[first].use, self.known[second].use} != {"in"}
                if written and np.may_share_memory(arrays[first], arrays[second]):
                    raise InputError(f"{first} and {second} overlap in memory")


def _scalar(one: Parameter, value: Any) -> Any:
    """A scalar argument as a number that the parameter holds."""
    if one.type.startswith("int"):
        number = whole_number(one.name, value)
        top = int(np.iinfo(one.type).max)
        if not -top - 1 <= number <= top:
            raise InputError(f"{one.name} = {number} does not fit into {one.type}")
        return number
    if isinstance(value, bool | np.bool_) or not isinstance(
        value, int | float | complex | np.number
    ):
        raise InputError(f"{one.name} is a {type(value).__name__}; a number is needed")
    try:
        exact = complex(value)
    except OverflowError as error:
        raise InputError(f"{one.name} is too large for {one.type}") from error
    if not one.complex and exact.imag != 0:
        raise InputError(f"{one.name} = {value}; a real number is needed")
    return exact if one.complex else exact.real
