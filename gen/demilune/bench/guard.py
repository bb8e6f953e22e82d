"""Whether a kernel touches what it may not: watched accesses, or guard pages.

Each array is placed so that it ends, then so that it begins, at the edge of memory that may not
be touched, in a child process: a read or write outside is recorded, or ends the child.
"""

from __future__ import annotations

import mmap
import os
import sys
from collections.abc import Iterator
from dataclasses import replace
from functools import partial
from typing import Any

import cffi
import numpy as np

from demilune.bench import isolation, watch
from demilune.bench.problem import PAD, Lanes, Problem
from demilune.bench.run import arguments_of, flat
from demilune.isa import PORTABLE
from demilune.render import render
from demilune.toolchain import cache
from demilune.toolchain.build import flags_for
from demilune.toolchain.compilers import find_compiler
from demilune.toolchain.executables import CExecutable, Executable

AVAILABLE = hasattr(os, "fork") and sys.platform.startswith("linux")
SECONDS = 120
WHY_NOT = "this system has no fork and mprotect as Linux has them"


def outside_touched(executable: Executable, problems: list[Problem]) -> Iterator[str]:
    """Runs the first case of each problem in a child; tells what was touched that may not be.

    Every access is watched where that can be done; elsewhere guard pages lie around each array.
    """
    if watch.watcher() is None:
        yield from _in_child(_guarded(executable, problems))
        return
    found = list(_in_child(_watched(executable, problems)))
    lanes = executable.plan.spec.arithmetic.lanes > 1
    if (found or lanes) and isinstance(executable, CExecutable):
        # A vector load counts at its first element, and may pass over elements that it does not
        # use: judge by a build of the same plan whose accesses are single elements.
        found = list(_in_child(_watched(_without_vectors(executable), problems)))
    yield from found


def _in_child(work: Iterator[str]) -> Iterator[str]:
    try:
        yield from isolation.results(work, SECONDS)
    except isolation.Ended as ended:
        yield f"touched memory outside every array: the kernel {ended}"


def _without_vectors(executable: CExecutable) -> CExecutable:
    spec = executable.plan.spec
    target = replace(spec.target, isa=PORTABLE)
    plan = replace(executable.plan, spec=replace(spec, target=target))
    files = render([plan], plan.spec.name, "c", contracts=False)
    compiler = find_compiler()
    flags = (*flags_for(compiler, [plan]), "-fno-tree-vectorize")
    return CExecutable(plan, cache.library(compiler, flags, files))


def _watched(executable: Executable, problems: list[Problem]) -> Iterator[str]:
    for problem in problems:
        for at_end in (True, False):
            regions = {
                name: watch.Region(flat(one, problem.buffers[name], 0)[PAD:-PAD], at_end)
                for name, one in problem.plan.arrays.items()
            }
            arrays = {name: region.array for name, region in regions.items()}
            call = partial(executable, arguments_of(problem, arrays))
            record, count = watch.accesses(list(regions.values()), call)
            if count > len(record):
                yield f"{problem.setting}: more accesses than can be recorded ({count})"
            yield from watch.violations(problem, regions, record, never_read)


def _guarded(executable: Executable, problems: list[Problem]) -> Iterator[str]:
    for problem in problems:
        for at_end in (True, False):
            arrays = {}
            for name, one in problem.plan.arrays.items():
                content = flat(one, problem.buffers[name], 0)[PAD:-PAD]
                arrays[name] = guarded(content, at_end, closed=never_read(problem, name))
            executable(arguments_of(problem, arrays))
    yield from ()


_ffi = cffi.FFI()
_ffi.cdef("int mprotect(void *, size_t, int);")


def guarded(content: Lanes, at_end: bool, closed: bool = False) -> Any:
    """A copy of ``content`` that ends directly before, or begins directly after, a guard page.

    ``closed`` makes its own pages inaccessible too, for an array that must not be touched.
    """
    page, size = mmap.PAGESIZE, content.nbytes
    whole = -(-max(size, 1) // page) * page
    memory = mmap.mmap(-1, whole + page)
    start = np.frombuffer(memory, dtype=np.uint8)
    guard = whole if at_end else 0
    offset = whole - size if at_end else page
    start[offset : offset + size] = content.view(np.uint8)
    address = start.__array_interface__["data"][0]
    first, length = (address, whole + page) if closed else (address + guard, page)
    if _ffi.dlopen(None).mprotect(_ffi.cast("void *", first), length, 0) != 0:
        raise OSError("mprotect failed")
    return start[offset : offset + size].view(content.dtype)


class Watched:
    """A sequence for Python kernels that refuses to be touched where it may not be."""

    def __init__(self, values: Any, readable: Lanes, writable: Lanes) -> None:
        self.values = values
        self.readable, self.writable = readable, writable

    def __getitem__(self, index: int) -> Any:
        if not 0 <= index < len(self.readable) or not self.readable[index]:
            raise IndexError(f"element {index} is read")
        return self.values[index]

    def __setitem__(self, index: int, value: Any) -> None:
        if not 0 <= index < len(self.writable) or not self.writable[index]:
            raise IndexError(f"element {index} is written")
        self.values[index] = value
        self.readable[index] = True


def unused_touched(executable: Executable, problems: list[Problem]) -> Iterator[str]:
    """The same for Python kernels: every single access is watched."""
    for problem in problems:
        arrays = {}
        for name, one in problem.plan.arrays.items():
            scratch, readable, writable = (
                np.asarray(masks[name].any(axis=1))
                for masks in (problem.scratch, problem.readable, problem.writable)
            )
            writable = writable | scratch
            if never_read(problem, name):
                readable = readable & False
            arrays[name] = Watched(
                flat(one, problem.buffers[name], 0)[PAD:-PAD].copy(),
                readable[PAD:-PAD].copy(),
                writable[PAD:-PAD].copy(),
            )
        try:
            executable(arguments_of(problem, arrays))
        except IndexError as error:
            yield f"{problem.setting}: {error}, which may not be touched"
        except Exception as error:
            yield f"{problem.setting}: raised {type(error).__name__}: {error}"


def never_read(problem: Problem, name: str) -> bool:
    """Whether the contract promises that the array is not read with these scalars."""
    scalars = problem.setting.scalars
    if name == "y":
        return scalars.get("beta", 1) == 0
    return name in problem.plan.spec.operation.unread and scalars.get("alpha", 1) == 0
