"""Watches every single access of a compiled routine to its arrays, on Linux and x86-64.

What a routine reads and writes is compared, element by element, with what it may. An access that
is wider than an element counts at its first one.
"""

from __future__ import annotations

import mmap
import platform
import sys
from collections.abc import Callable, Iterator
from functools import cache
from pathlib import Path
from typing import Any

import cffi
import numpy as np
import numpy.typing as npt

from demilune.bench.problem import PAD, Lanes, Problem
from demilune.errors import DemiluneError
from demilune.toolchain.cache import library
from demilune.toolchain.compilers import find_compiler

SUPPORTED = sys.platform.startswith("linux") and platform.machine() == "x86_64"
SOURCE = Path(__file__).with_name("watch.c")
FLAGS = ("-std=c11", "-O1", "-fPIC", "-shared")
WIDEST = 64
"""Bytes that one instruction may write."""
ROOM = 1 << 20
"""Accesses that are recorded of one call."""


@cache
def watcher() -> Any | None:
    """The compiled watcher as a pair of cffi interface and library, or None where there is none."""
    if not SUPPORTED or mmap.PAGESIZE != 4096:
        return None
    ffi = cffi.FFI()
    ffi.cdef("int watch_begin(uint64_t *, int, uint64_t *, int64_t); int64_t watch_end(void);")
    try:
        path = library(find_compiler(), FLAGS, {SOURCE.name: SOURCE.read_text(encoding="utf-8")})
        return ffi, ffi.dlopen(str(path))
    except (DemiluneError, OSError):
        return None


class Region:
    """An array in pages of its own, with a page before and a page behind it."""

    def __init__(self, content: Lanes, at_end: bool) -> None:
        page, size = mmap.PAGESIZE, content.nbytes
        inner = max(1, -(-size // page)) * page
        self._memory = mmap.mmap(-1, inner + 2 * page)
        raw = np.frombuffer(self._memory, dtype=np.uint8)
        offset = page + (inner - size if at_end else 0)
        raw[offset : offset + size] = content.view(np.uint8)
        self.first = int(raw.__array_interface__["data"][0])
        self.last = self.first + inner + 2 * page
        self.base = self.first + offset
        self.array = raw[offset : offset + size].view(content.dtype)


def accesses(
    regions: list[Region], call: Callable[[], object]
) -> tuple[npt.NDArray[np.uint64], int]:
    """Runs ``call``; gives pairs of address and whether it was written, and how many there were."""
    found = watcher()
    assert found is not None
    ffi, code = found
    bounds = np.array([(one.first, one.last) for one in regions], dtype=np.uint64)
    record = np.zeros((ROOM, 2), dtype=np.uint64)

    def pointer(array: npt.NDArray[np.uint64]) -> Any:
        return ffi.cast("uint64_t *", array.__array_interface__["data"][0])

    if code.watch_begin(pointer(bounds), len(regions), pointer(record), ROOM) != 0:
        raise OSError("the accesses of a routine cannot be watched here")
    try:
        call()
    finally:
        count = int(code.watch_end())
    return record[: min(count, ROOM)], count


def violations(
    problem: Problem,
    regions: dict[str, Region],
    record: npt.NDArray[np.uint64],
    never_read: Callable[[Problem, str], bool],
) -> Iterator[str]:
    """The accesses that the contract does not allow, in words; at most one an array."""
    for name, one in problem.plan.arrays.items():
        region = regions[name]
        width = region.array.itemsize // one.parts
        inside = (record[:, 0] >= region.first) & (record[:, 0] < region.last)
        mine = record[inside].astype(np.int64)
        readable = problem.readable[name] | problem.scratch[name]
        if never_read(problem, name):
            readable = readable & False
        writable = problem.writable[name] | problem.scratch[name]
        read = readable[PAD : len(readable) - PAD].reshape(-1).copy()
        write = writable[PAD : len(writable) - PAD].reshape(-1)
        for address, is_write in mine:
            place = int((address - region.base) // width)
            allowed = write if is_write else read
            if not 0 <= place < len(allowed) or not allowed[place]:
                verb = "written" if is_write else "read"
                yield f"{problem.setting}: element {place // one.parts} of {name} is {verb}"
                break
            if is_write:  # what the routine has written it may read; a write may be a wide one
                wide = slice(place, place + WIDEST // width)
                read[wide] |= write[wide]
