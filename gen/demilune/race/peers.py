"""The BLAS libraries of this machine, and the standard's routine for a kernel.

Routines are called at their symbols, by the Fortran calling convention of the reference BLAS
(Dongarra, Du Croz, Hammarling, Hanson, ACM TOMS 14(1), 1988: level 2), with 32- or 64-bit integers.
"""

from __future__ import annotations

import ctypes
import ctypes.util
import importlib.util
from collections.abc import Iterator
from contextlib import suppress
from dataclasses import dataclass
from pathlib import Path

from demilune.errors import InputError
from demilune.spec import Spec

PREFIXES = ("", "scipy_")
SUFFIXES = (("_64_", 64), ("64_", 64), ("_", 32))
PROBE = "dsymv"
LETTERS = {"float32": "s", "float64": "d", "complex64": "c", "complex128": "z"}
MATRIX = {"full": ("y", "r"), "packed": ("p", "pr"), "band": ("b", "")}


@dataclass(frozen=True)
class Library:
    """A BLAS that was found: where, and how its symbols are written."""

    name: str
    path: str
    prefix: str
    suffix: str
    bits: int
    """Bits of its integers."""

    def symbol(self, routine: str) -> str:
        """The symbol of one of the standard's routines."""
        return f"{self.prefix}{routine}{self.suffix}"

    def address(self, routine: str) -> int | None:
        """Where a routine lies, if the library has it."""
        with suppress(AttributeError, OSError):
            function = getattr(ctypes.CDLL(self.path), self.symbol(routine))
            return ctypes.cast(function, ctypes.c_void_p).value
        return None

    def one_thread(self) -> None:
        """Keeps the library to one thread, where it knows such a call."""
        code = ctypes.CDLL(self.path)
        for name in ("openblas_set_num_threads", "bli_thread_set_num_threads"):
            for tail in ("64_", "_", ""):
                with suppress(AttributeError):
                    getattr(code, f"{self.prefix}{name}{tail}")(1)
                    return

    @property
    def configuration(self) -> str:
        """What the library says of itself."""
        code = ctypes.CDLL(self.path)
        said = []
        for name in ("openblas_get_config", "openblas_get_corename"):
            for tail in ("64_", "_", ""):
                with suppress(AttributeError):
                    function = getattr(code, f"{self.prefix}{name}{tail}")
                    function.restype = ctypes.c_char_p
                    said.append((function() or b"").decode().strip())
                    break
        return ", ".join(said)


def described(name: str, path: str) -> Library | None:
    """The library at ``path``, if it is a BLAS."""
    try:
        code = ctypes.CDLL(path)
    except OSError:
        return None
    for prefix in PREFIXES:
        for suffix, bits in SUFFIXES:
            if hasattr(code, f"{prefix}{PROBE}{suffix}"):
                return Library(name, path, prefix, suffix, bits)
    return None


def named(path: str) -> Library:
    """The library at a path that somebody gave; raises :class:`InputError` if it is no BLAS."""
    found = described(Path(path).name, path)
    if found is None:
        raise InputError(f"{path} is no library with the routine {PROBE} of the BLAS standard")
    return found


def libraries() -> list[Library]:
    """Every BLAS of this machine: those in the packages of this Python, and the system's."""
    found: dict[Path, Library] = {}
    for name, path in _candidates():
        place = Path(path)
        place = place.resolve() if place.exists() else place
        if place not in found and (one := described(name, path)) is not None:
            found[place] = one
    return list(found.values())


def _candidates() -> Iterator[tuple[str, str]]:
    for package in ("scipy_openblas64", "scipy_openblas32"):
        spec = importlib.util.find_spec(package)
        for folder in (spec.submodule_search_locations or []) if spec else []:
            for path in sorted(Path(folder).glob("lib/*openblas*.so")):
                yield package, str(path)
    for package in ("scipy", "numpy"):
        spec = importlib.util.find_spec(package)
        for folder in (spec.submodule_search_locations or []) if spec else []:
            for path in sorted(Path(folder).parent.glob(f"{package}.libs/*openblas*.so")):
                yield f"{package}'s", str(path)
    for name in ("blas", "openblas", "blis"):
        found = ctypes.util.find_library(name)
        if found:
            yield f"the system's {found}", found


def routine_for(spec: Spec) -> str | None:
    """The standard's routine that does what a kernel does, if there is one."""
    layout, type = spec.layout, spec.arithmetic.dtype
    if type not in LETTERS or layout.name not in MATRIX:
        return None
    complex = spec.arithmetic.type.complex
    kind = "h" if layout.hermitian else "s"
    product, update = MATRIX[layout.name]
    if spec.operation.name == "matvec":
        if complex and not layout.hermitian:
            return None  # csymv and zsymv are LAPACK's, and not in every library
        ending = {"y": "emv" if layout.hermitian else "ymv"}.get(product, f"{product}mv")
        return f"{LETTERS[type]}{kind}{ending}"
    if spec.operation.name == "rank1" and update and (layout.hermitian or not complex):
        ending = {"r": "er" if layout.hermitian else "yr"}.get(update, update)
        return f"{LETTERS[type]}{kind}{ending}"
    return None


def stored_for_fortran(spec: Spec) -> str:
    """``U`` or ``L``: the triangle as a library sees it, which knows columns only."""
    upper = (spec.layout.triangle == "upper") == (spec.layout.order == "column-major")
    return "U" if upper else "L"
