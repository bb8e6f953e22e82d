"""Compiled libraries, kept in the user's cache folder by what they were made from.

An entry is a folder named by the hash of source, compiler and flags. It is made beside its place
and renamed into it, so that a half-made one is never seen and two processes do no harm; it is
used only while the library's own hash is the one written beside it.
"""

from __future__ import annotations

import atexit
import functools
import hashlib
import json
import os
import shutil
import tempfile
from collections.abc import Mapping, Sequence
from pathlib import Path

import platformdirs

from demilune.errors import CheckError, InputError
from demilune.toolchain.compilers import Compiler

LIBRARY, RECORD = "library.so", "record.json"


def cache_folder() -> Path:
    """The folder of the cache: DEMILUNE_CACHE, or the user's own."""
    named = os.environ.get("DEMILUNE_CACHE")
    return Path(named) if named else Path(platformdirs.user_cache_dir("demilune"))


def digest(data: bytes) -> str:
    """SHA-256 in hexadecimal."""
    return hashlib.sha256(data).hexdigest()


def library(compiler: Compiler, flags: Sequence[str], sources: Mapping[str, str]) -> Path:
    """The compiled library of ``sources``, from the cache if it is there and whole."""
    made_from = [compiler.path, compiler.version, list(flags), dict(sorted(sources.items()))]
    entry = digest(json.dumps(made_from).encode())
    place = used_folder() / entry
    if _whole(place):
        return place / LIBRARY
    return _make(place, compiler, flags, sources)


def used_folder() -> Path:
    """The cache folder, or one for this process alone where that cannot be written to."""
    root = cache_folder()
    try:
        root.mkdir(parents=True, exist_ok=True)
        if os.access(root, os.W_OK):
            return root
    except OSError:
        pass
    return _own_folder()


@functools.cache
def _own_folder() -> Path:
    # A folder that others could write to would let them plant libraries: take a new one.
    try:
        folder = tempfile.mkdtemp(prefix="demilune-")
    except OSError as error:
        raise InputError(f"no folder for compiled libraries: {error.strerror}") from error
    atexit.register(shutil.rmtree, folder, ignore_errors=True)
    return Path(folder)


def forget(library: Path) -> None:
    """Removes the entry of a library."""
    shutil.rmtree(library.parent, ignore_errors=True)


def _whole(place: Path) -> bool:
    """Whether the entry is there and its library is the one that was put there."""
    try:
        record = json.loads((place / RECORD).read_text(encoding="utf-8"))
        return bool(record["sha256"] == digest((place / LIBRARY).read_bytes()))
    except (OSError, ValueError, KeyError, TypeError):
        return False


def _make(
    place: Path, compiler: Compiler, flags: Sequence[str], sources: Mapping[str, str]
) -> Path:
    try:
        folder = Path(tempfile.mkdtemp(prefix="making-", dir=place.parent))
        try:
            for name, text in sources.items():
                (folder / name).write_text(text, encoding="utf-8")
            inputs = sorted(name for name in sources if name.endswith(".c"))
            compiler.run([*flags, "-o", LIBRARY, *inputs, "-lm"], folder)
            if not (folder / LIBRARY).is_file():
                raise CheckError(f"{compiler.name} ended well and wrote no library")
            made = digest((folder / LIBRARY).read_bytes())
            (folder / RECORD).write_text(json.dumps({"sha256": made}), encoding="utf-8")
            _put(folder, place)
        finally:
            shutil.rmtree(folder, ignore_errors=True)
    except OSError as error:
        raise InputError(f"the cache folder {place.parent} fails: {error.strerror}") from error
    return place / LIBRARY


def _put(folder: Path, place: Path) -> None:
    """Renames ``folder`` to ``place``; a whole entry of another process is left there."""
    for _ in range(3):
        try:
            folder.rename(place)
        except OSError:
            if _whole(place):
                return
            if place.is_dir() and not place.is_symlink():
                shutil.rmtree(place, ignore_errors=True)
            else:
                place.unlink(missing_ok=True)
        else:
            return
    raise OSError(0, f"the entry {place.name} cannot be replaced")
