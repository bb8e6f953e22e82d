"""The compilers of this machine, and the flags that the contract asks for."""

from __future__ import annotations

import os
import platform
import shutil
import subprocess
import tempfile
from dataclasses import dataclass
from functools import cache
from pathlib import Path

from demilune.errors import CheckError, MissingError

CONTRACT_FLAGS = ("-std=c99", "-ffp-contract=off")
"""What the order of arithmetic needs."""

WARNING_FLAGS = (
    "-Wall", "-Wextra", "-Wpedantic", "-Wconversion", "-Wdouble-promotion",
    "-Wstrict-prototypes", "-Wshadow",
)  # fmt: skip

OPENMP_PROBE = """
#include <omp.h>
int most(void) { return omp_get_max_threads(); }
"""

HOW_TO_GET = (
    "install gcc or clang, for example with: apt-get install gcc "
    "(or set CC to the compiler you have)"
)


@dataclass(frozen=True)
class Compiler:
    """A C compiler that was found."""

    name: str
    path: str
    version: str

    @property
    def threads_flags(self) -> tuple[str, ...]:
        """The flags for OpenMP, or none where the compiler has it not: routines run serially."""
        return _threads_flags(self)

    def run(self, arguments: list[str], folder: Path, seconds: float = 300) -> None:
        """Compiles; raises :class:`CheckError` with what the compiler said if it fails."""
        try:
            done = subprocess.run(
                [self.path, *arguments], cwd=folder, capture_output=True, text=True,
                errors="replace", timeout=seconds, check=False, stdin=subprocess.DEVNULL,
            )  # fmt: skip
        except FileNotFoundError as error:
            raise MissingError(f"compiler {self.path} is not there; {HOW_TO_GET}") from error
        except PermissionError as error:
            raise MissingError(f"compiler {self.path} cannot be run; {HOW_TO_GET}") from error
        except subprocess.TimeoutExpired as error:
            raise CheckError(f"{self.name} did not end within {seconds:.0f} s") from error
        if done.returncode < 0:
            raise CheckError(f"{self.name} was ended by signal {-done.returncode}")
        if done.returncode:
            said = (done.stderr or done.stdout).strip().splitlines()
            errors = [line for line in said if "error" in line][:5] or said[-5:]
            raise CheckError(f"{self.name} failed (exit {done.returncode}): " + "; ".join(errors))


@cache
def _threads_flags(compiler: Compiler) -> tuple[str, ...]:
    with tempfile.TemporaryDirectory(prefix="demilune-") as folder:
        (Path(folder) / "one.c").write_text(OPENMP_PROBE, encoding="ascii")
        try:
            compiler.run(["-fopenmp", "-shared", "-fPIC", "-o", "one.so", "one.c"], Path(folder))
        except CheckError:
            return ()
    return ("-fopenmp",)


USUAL = ("gcc", "clang")
"""The compilers that are looked for by these names."""


def find_compiler() -> Compiler:
    """The compiler named by CC, else gcc, clang or cc; raises :class:`MissingError`."""
    named = os.environ.get("CC")
    if named:
        return describe_compiler(named)
    for name in (*USUAL, "cc"):
        if shutil.which(name) is not None:
            return describe_compiler(name)
    raise MissingError(f"no C compiler was found; {HOW_TO_GET}")


def describe_compiler(name: str) -> Compiler:
    """The compiler called ``name``; raises :class:`MissingError` if it is not there."""
    path = shutil.which(name)
    if path is None:
        from_cc = " (from CC, which names a program without flags)"
        of = from_cc if os.environ.get("CC") == name else ""
        raise MissingError(f"compiler {name}{of} is not there; {HOW_TO_GET}")
    return _described(path)


@cache
def _described(path: str) -> Compiler:
    try:
        said = subprocess.run(
            [path, "--version"], capture_output=True, text=True, errors="replace",
            timeout=60, check=False, stdin=subprocess.DEVNULL,
        ).stdout  # fmt: skip
    except (OSError, subprocess.SubprocessError) as error:
        raise MissingError(f"compiler {path} cannot be run; {HOW_TO_GET}") from error
    version = said.splitlines()[0].strip() if said.strip() else "unknown version"
    return Compiler(Path(path).name, path, version)


@cache
def has_fma() -> bool:
    """Whether this machine has a fused multiply-add instruction, as far as can be told."""
    if platform.machine() in ("aarch64", "arm64", "riscv64", "ppc64le", "s390x"):
        return True
    try:
        return " fma " in Path("/proc/cpuinfo").read_text(encoding="ascii", errors="ignore")
    except OSError:
        return False


def machine_flags(fma: bool) -> tuple[str, ...]:
    """Flags for this machine: the instruction for fused multiply-adds where it is wanted."""
    x86 = platform.machine() in ("x86_64", "AMD64")
    return ("-mfma",) if fma and x86 and has_fma() else ()


def library_flags(fma: bool, environment: str, optimise: str = "-O2") -> tuple[str, ...]:
    """The flags for a shared library on this machine."""
    free = ("-ffreestanding",) if environment == "freestanding" else ()
    return (*CONTRACT_FLAGS, *free, optimise, *machine_flags(fma), "-fPIC", "-shared")
