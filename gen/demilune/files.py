"""Writing files: whole or not at all, and never over what Demilune did not write."""

from __future__ import annotations

import os
import tempfile
from collections.abc import Iterator, Mapping
from contextlib import contextmanager
from pathlib import Path

from demilune.errors import InputError

MARK = "Made by Demilune"
"""What the first lines of an emitted file hold; a file without it is somebody's own."""

MARKED_LINES = 6


def ours(path: Path) -> bool:
    """Whether an existing file was written by Demilune."""
    try:
        with path.open(encoding="utf-8") as file:
            return any(MARK in line for line, _ in zip(file, range(MARKED_LINES), strict=False))
    except (OSError, UnicodeDecodeError):
        return False


def prepare(folder: Path) -> None:
    """Makes the output folder; raises :class:`InputError` if it cannot be written to."""
    with explained(folder):
        if folder.exists() and not folder.is_dir():
            raise InputError(f"{folder} is a file; -o needs a folder")
        folder.mkdir(parents=True, exist_ok=True)
        if not os.access(folder, os.W_OK | os.X_OK):
            raise InputError(f"{folder} is not writable")


def refuse_foreign(folder: Path, names: Mapping[str, str], force: bool) -> None:
    """Raises :class:`InputError` if a file is in the way that Demilune did not write."""
    folders = [name for name in names if (folder / name).is_dir()]
    if folders:
        raise InputError(f"{folder / folders[0]} is a folder, and a file is to be written there")
    foreign = [name for name in names if (folder / name).exists() and not ours(folder / name)]
    if foreign and not force:
        raise InputError(
            f"{folder / foreign[0]} was not written by Demilune and is left alone; "
            "move it away, choose another folder, or pass --force"
        )


def write_all(folder: Path, files: Mapping[str, str], force: bool = False) -> list[str]:
    """Writes all files or none; gives the names of those whose contents changed.

    Every file is first written whole under a temporary name beside its place. Files that hold
    the same bytes already are left as they are.
    """
    prepare(folder)
    refuse_foreign(folder, files, force)
    changed = [name for name, text in files.items() if current(folder / name) != text]
    waiting: dict[str, Path] = {}
    try:
        with explained(folder):
            for name in changed:
                waiting[name] = _write_beside(folder / name, files[name])
            for name, temporary in list(waiting.items()):
                temporary.replace(folder / name)
                del waiting[name]
    finally:
        for temporary in waiting.values():
            temporary.unlink(missing_ok=True)
    return changed


def contents(path: Path) -> bytes:
    """The bytes of a file; raises :class:`InputError` if it cannot be read."""
    try:
        return path.read_bytes()
    except OSError as error:
        raise InputError(f"{path}: cannot be read: {error.strerror}") from error


def current(path: Path) -> str | None:
    """The text of a file, or None if there is none."""
    try:
        return path.read_bytes().decode("utf-8")
    except (OSError, UnicodeDecodeError):
        return None


def _write_beside(path: Path, text: str) -> Path:
    handle, name = tempfile.mkstemp(prefix=f".{path.name}.", dir=path.parent)
    try:
        with os.fdopen(handle, "wb") as file:
            file.write(text.encode("utf-8"))
            file.flush()
            os.fsync(file.fileno())
        umask = os.umask(0)
        os.umask(umask)
        Path(name).chmod(0o666 & ~umask)
    except BaseException:
        Path(name).unlink(missing_ok=True)
        raise
    return Path(name)


@contextmanager
def explained(place: Path) -> Iterator[None]:
    """Turns errors of the system into one message that says where."""
    try:
        yield
    except OSError as error:
        raise InputError(
            f"{error.filename or place}: cannot be written: {error.strerror}"
        ) from error
