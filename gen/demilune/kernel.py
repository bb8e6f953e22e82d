"""Kernels for people: from keywords to a callable that takes numpy arrays."""

from __future__ import annotations

from functools import cached_property
from typing import Any

import numpy as np
import numpy.typing as npt

from demilune import storage
from demilune.bench.levels import Verdict, verify
from demilune.call import Call
from demilune.errors import CheckError, InputError
from demilune.keys import RUNTIME
from demilune.plan.build import Plan, make_plan
from demilune.plan.counts import flat as flat_counts
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
        size = storage.whole_number("n", fixed if n is None else n)
        if size < 0 or fixed not in (RUNTIME, size):
            allowed = (
                "at least 0 is needed" if fixed == RUNTIME else f"the specification has {fixed}"
            )
            raise InputError(f"n = {size}; {allowed}")
        return flat_counts(self.plan, self.spec.layout.sample(size))

    def verify(self, seed: int = 1) -> Verdict:
        """What the bench finds; the same seed gives the same inputs."""
        return verify(self.plan, self.executable, seed)

    def __repr__(self) -> str:
        return f"<kernel {self.spec.name} ({self.spec.language}): {self.formula}>"

    @property
    def formula(self) -> str:
        """What the kernel computes."""
        return self.spec.operation.described(self.spec.layout)

    def sizes_of(self, matrix: npt.ArrayLike) -> dict[str, Any]:
        """The sizes that the specification leaves open and ``matrix`` needs: ``kd``, ``diagonal``.

        Pass them to :meth:`to_half` and to the kernel.
        """
        return self.spec.layout.sizes_of_matrix(np.asarray(matrix))

    def to_half(self, matrix: npt.ArrayLike, **sizes: Any) -> Array:
        """The stored half of ``matrix`` in the kernel's element type (see :mod:`storage`)."""
        whole, dtype = np.asarray(matrix), np.dtype(self.spec.arithmetic.dtype)
        if whole.dtype.kind not in "iufc":
            raise InputError(f"the matrix holds {whole.dtype}; numbers are needed")
        if whole.dtype.kind == "c" and dtype.kind != "c":
            raise InputError(f"the matrix is complex and the kernel's elements are {dtype}")
        with np.errstate(all="ignore"):
            converted = whole.astype(dtype)
        if dtype.kind == "i" and np.any(converted != whole):
            raise InputError(f"the matrix holds numbers that {dtype} does not")
        return storage.to_half(converted, self.spec.layout, **sizes)

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
        call = Call(self, a, x, y, given)
        call.run()
        return call.result


def checked(made: Kernel, seed: int = 1) -> Kernel:
    """The kernel, if the bench verifies it; raises :class:`CheckError` with what failed."""
    verdict = made.verify(seed)
    if not verdict.verified:
        messages = [m for level in verdict.levels for m in level.failures]
        raise CheckError(f"{made.spec.name} is not verified: " + "; ".join(messages[:3]))
    return made
