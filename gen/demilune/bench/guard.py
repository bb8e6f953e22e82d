"""Guard pages: arrays that end, or begin, where the memory of the process does.

Each array is placed directly before, then directly after a page that may not be touched, in a
child process: a read or write outside ends the child with a signal.
"""

from __future__ import annotations

import mmap
import os
import signal
import sys
from collections.abc import Iterator
from typing import Any

import cffi
import numpy as np

from demilune.bench.problem import PAD, Lanes, Problem
from demilune.bench.run import arguments_of, flat
from demilune.toolchain.executables import Executable

AVAILABLE = hasattr(os, "fork") and sys.platform.startswith("linux")
WHY_NOT = "this system has no fork and mprotect as Linux has them"


def outside_touched(executable: Executable, problems: list[Problem]) -> Iterator[str]:
    """Runs the first case of each problem between guard pages; tells what went wrong."""
    sys.stdout.flush()
    sys.stderr.flush()
    reading, writing = os.pipe()
    child = os.fork()
    if child == 0:  # pragma: no cover - measured in the parent only
        try:
            os.close(reading)
            signal.signal(signal.SIGINT, signal.SIG_DFL)
            _child(executable, problems, writing)
        finally:
            os._exit(0)
    os.close(writing)
    with os.fdopen(reading, encoding="utf-8") as pipe:
        said = pipe.read().splitlines()
    _, status = os.waitpid(child, 0)
    if os.WIFSIGNALED(status):
        where = said[-1] if said else "before the first call"
        yield f"touched memory outside an array (signal {os.WTERMSIG(status)}): {where}"


def _child(executable: Executable, problems: list[Problem], pipe: int) -> None:
    for problem in problems:
        for at_end in (True, False):
            arrays = {}
            for name, one in problem.plan.arrays.items():
                whole = flat(one, problem.buffers[name], 0)
                arrays[name] = guarded(whole[PAD:-PAD], at_end)
            side = "after" if at_end else "before"
            os.write(pipe, f"{problem.setting}: guard page {side} each array\n".encode())
            executable(arguments_of(problem, arrays))


_ffi = cffi.FFI()
_ffi.cdef("int mprotect(void *, size_t, int);")


def guarded(content: Lanes, at_end: bool) -> Any:
    """A copy of ``content`` that ends directly before, or begins directly after, a guard page."""
    page, size = mmap.PAGESIZE, content.nbytes
    whole = -(-max(size, 1) // page) * page
    memory = mmap.mmap(-1, whole + page)
    start = np.frombuffer(memory, dtype=np.uint8)
    guard = whole if at_end else 0
    offset = whole - size if at_end else page
    start[offset : offset + size] = content.view(np.uint8)
    address = start.__array_interface__["data"][0]
    if _ffi.dlopen(None).mprotect(_ffi.cast("void *", address + guard), page, 0) != 0:
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
            if _never_read(problem, name):
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


def _never_read(problem: Problem, name: str) -> bool:
    """Whether the contract promises that the array is not read with these scalars."""
    scalars = problem.setting.scalars
    if name == "y":
        return scalars.get("beta", 1) == 0
    return name in problem.plan.spec.operation.unread and scalars.get("alpha", 1) == 0
