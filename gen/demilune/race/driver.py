"""Times contestants from C: calls at their addresses, no Python in between."""

from __future__ import annotations

from collections.abc import Callable, Iterable
from typing import Any

import cffi
import numpy as np
import numpy.typing as npt

from demilune.expressions import templates
from demilune.race.contestants import Contestant
from demilune.toolchain.cache import library
from demilune.toolchain.compilers import find_compiler

Array = npt.NDArray[Any]
FLAGS = ("-std=gnu99", "-O2", "-fPIC", "-shared")
LEAST_CALLS = 5
"""Calls of a slice, where one takes long: the caches settle."""
DECLARATIONS = """
void set_pointer(int, int, void *); void set_size(int, int, int64_t);
void set_scalar(int, int, double, double); void set_routine(int, void *);
double seconds(int, int64_t, int64_t); double seconds_of_processor(void);
"""
TRIES, DISTURBED = 4, 1.03
"""A slice is run again where it took so many times the time that it had a processor."""


class Driver:
    """All contestants in one compiled driver; one is known by its place in the list."""

    def __init__(self, contestants: Iterable[Contestant]) -> None:
        self.contestants = list(contestants)
        entries = [
            {"declared": c.declared.format(e=e), "call": c.call.format(e=e)}
            for e, c in enumerate(self.contestants)
        ]
        slots = max((len(c.arguments) for c in self.contestants), default=0)
        template = templates().get_template("race/driver.c.j2")
        text = template.render(entries=entries, slots=max(1, slots))
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

    def seconds(self, entry: int, calls: int, before: int = 0) -> float:
        """The seconds that so many calls take, after ``before`` calls that are not counted."""
        self.contestants[entry].prepare()
        return float(self._code.seconds(entry, before, calls))

    def results(self, entry: int) -> Array:
        """What one call leaves in the array that it changes, which then is as it was."""
        array = self.contestants[entry].result
        assert array is not None
        before = array.copy()
        self.seconds(entry, 1)
        found = array.copy()
        array[:] = before
        return found

    def calls(self, entry: int, slice_seconds: float) -> int:
        """How many calls fill a slice: so many seconds, and not fewer than a few."""
        calls = 1
        while (took := self.slice(entry, calls)[0]) < slice_seconds / 4:
            calls *= 4 if took < slice_seconds / 40 else 2
        return max(LEAST_CALLS, round(calls * slice_seconds / took))

    def slice(self, entry: int, calls: int) -> tuple[float, bool]:
        """The seconds of so many calls, and whether other programs ran in that time every try.

        One call before them is not counted: it finds the caches as another left them.
        """
        best = float("inf")
        for _ in range(TRIES):
            took = self.seconds(entry, calls, before=1)
            best = min(best, took)
            if took <= DISTURBED * self._code.seconds_of_processor():
                return took, False
        return best, True

    def interleaved(
        self, calls: list[int], rounds: int, told: Callable[[int], None] = lambda done: None
    ) -> tuple[Array, list[int]]:
        """Seconds of one call, by round and contestant; each round runs every one in turn.

        And for each contestant, how many of its slices other programs disturbed.
        """
        found, disturbed = np.empty((rounds, len(calls))), [0] * len(calls)
        for turn in range(rounds):
            for entry, count in enumerate(calls):
                took, late = self.slice(entry, count)
                found[turn, entry] = took / count
                disturbed[entry] += late
            told(turn + 1)
        return found, disturbed
