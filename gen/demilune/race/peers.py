"""The BLAS libraries of this machine, and the standard's routine for a kernel.

Routines are called at their symbols, by the Fortran calling convention of the reference BLAS
(Dongarra, Du Croz, Hammarling, Hanson, ACM TOMS 14(1), 1988: level 2), with 32- or 64-bit integers.
"""

from __future__ import annotations

import ctypes
import ctypes.util
import importlib.util
import re
from collections.abc import Iterator
from contextlib import suppress
from dataclasses import dataclass
from functools import cached_property
from pathlib import Path

from demilune.errors import InputError
from demilune.spec import Spec

PREFIXES = ("", "scipy_")
SUFFIXES = (("_64_", 64), ("64_", 64), ("_", 32))
PROBE = "dsymv"
LETTERS = {"float32": "s", "float64": "d", "complex64": "c", "complex128": "z"}
PRODUCTS = {"full": ("symv", "hemv"), "packed": ("spmv", "hpmv"), "band": ("sbmv", "hbmv")}
UPDATES = {"full": ("syr", "her"), "packed": ("spr", "hpr")}
"""By layout: the routine for symmetric and that for Hermitian matrices."""
LONG_INTEGERS = "USE64BITINT"
"""What OpenBLAS says of itself where its integers have 64 bits."""


@dataclass(frozen=True)
class Library:
    """A BLAS that was found: where, and how its symbols are written."""

    name: str
    path: str
    prefix: str
    suffix: str
    bits: int
    """Bits of its integers."""

    @cached_property
    def _code(self) -> ctypes.CDLL:
        return ctypes.CDLL(self.path)

    def symbol(self, routine: str) -> str:
        """The symbol of one of the standard's routines."""
        return f"{self.prefix}{routine}{self.suffix}"

    def address(self, routine: str) -> int | None:
        """Where a routine lies, if the library has it."""
        function = getattr(self._code, self.symbol(routine), None)
        return None if function is None else ctypes.cast(function, ctypes.c_void_p).value

    def set_threads(self, count: int) -> None:
        """Lets the library use so many threads, where it knows such a call."""
        for name in ("openblas_set_num_threads", "bli_thread_set_num_threads"):
            function = self._own(name)
            if function is not None:
                function(count)

    @property
    def facts(self) -> dict[str, str | int]:
        """Its version, the processor core that it takes this machine for, and its place."""
        said, core = self._says("openblas_get_config"), self._says("openblas_get_corename")
        version = re.match(r"\S+ [\d.]+", said)
        return {
            "version": version[0] if version else "unknown",
            "core": core or "unknown",
            "says": said,
            "integer bits": self.bits,
            "file": Path(self.path).name,
        }

    def _own(self, name: str) -> ctypes._NamedFuncPointer | None:
        """A function in C beside the standard's; those for Fortran end with ``_``."""
        for tail in ("64_", ""):
            function = getattr(self._code, f"{self.prefix}{name}{tail}", None)
            if function is not None:
                return function  # type: ignore[no-any-return]
        return None

    def _says(self, name: str) -> str:
        function = self._own(name)
        if function is None:
            return ""
        function.restype = ctypes.c_char_p
        return (function() or b"").decode(errors="replace").strip()


def _described(name: str, path: str) -> Library | None:
    """The library at ``path``, if it is a BLAS."""
    try:
        code = ctypes.CDLL(path)
    except OSError:
        return None
    for prefix in PREFIXES:
        for suffix, bits in SUFFIXES:
            if hasattr(code, f"{prefix}{PROBE}{suffix}"):
                found = Library(name, path, prefix, suffix, bits)
                long = LONG_INTEGERS in str(found.facts["says"])
                return Library(name, path, prefix, suffix, 64) if long else found
    return None


def library(path: str | Path) -> Library:
    """The library at a path that somebody gave; raises :class:`InputError` if it is no BLAS."""
    place = Path(path)
    if not place.exists():
        raise InputError(f"{path}: there is no such library")
    found = _described(place.name, str(place.resolve()))
    if found is None:
        raise InputError(
            f"{path} is no library of this machine with the routine {PROBE} of the BLAS standard"
        )
    return found


def libraries(*paths: str | Path) -> list[Library]:
    """Those at ``paths``, and every BLAS that is found on this machine, each once.

    They are looked for in the packages of this Python (scipy-openblas64 and 32, scipy, numpy)
    and where the system keeps its own.
    """
    found = {one.path: one for one in map(library, paths)}
    for name, path in _candidates():
        place = str(Path(path).resolve()) if Path(path).exists() else path
        if place not in found and (one := _described(name, place)) is not None:
            found[place] = one
    return _named_apart(list(found.values()))


def _named_apart(found: list[Library]) -> list[Library]:
    """Libraries of one name are numbered, as results go by names."""
    seen: dict[str, int] = {}
    named = []
    for one in found:
        seen[one.name] = count = seen.get(one.name, 0) + 1
        name = one.name if count == 1 else f"{one.name} ({count})"
        named.append(Library(name, one.path, one.prefix, one.suffix, one.bits))
    return named


def _candidates() -> Iterator[tuple[str, str]]:
    for package in ("scipy_openblas64", "scipy_openblas32"):
        for folder in _folders(package):
            for path in sorted(folder.glob("lib/*openblas*.so")):
                yield package, str(path)
    for package in ("scipy", "numpy"):
        for folder in _folders(package):
            for path in sorted(folder.parent.glob(f"{package}.libs/*openblas*.so")):
                yield f"{package}'s", str(path)
    for name in ("blas", "openblas", "blis"):
        where = ctypes.util.find_library(name)
        if where:
            yield f"system's {name}", where


def _folders(package: str) -> list[Path]:
    """The folders of an installed package; it is not imported."""
    with suppress(ImportError, ValueError):
        spec = importlib.util.find_spec(package)
        return [Path(one) for one in (spec.submodule_search_locations or [])] if spec else []
    return []


def routine_for(spec: Spec) -> str | None:
    """The standard's routine that does what a kernel does, if there is one."""
    layout, dtype = spec.layout, spec.arithmetic.dtype
    families = {"matvec": PRODUCTS, "rank1": UPDATES}.get(spec.operation.name, {})
    if dtype not in LETTERS or layout.name not in families:
        return None
    if spec.arithmetic.type.complex and not layout.hermitian:
        return None  # complex symmetric routines are LAPACK's, and not in every library
    if layout.hermitian and layout.order == "row-major":
        return None  # read by columns it is the conjugate matrix
    return LETTERS[dtype] + families[layout.name][layout.hermitian]


def triangle_for_fortran(spec: Spec) -> str:
    """``U`` or ``L``: the triangle as a library sees it, which knows columns only."""
    upper = (spec.layout.triangle == "upper") == (spec.layout.order == "column-major")
    return "U" if upper else "L"
