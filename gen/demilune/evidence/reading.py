"""Reads a record from a file, and refuses what cannot be relied on."""

from __future__ import annotations

import json
import re
from collections.abc import Iterable
from pathlib import Path
from typing import Any

from demilune import files
from demilune.errors import InputError
from demilune.evidence import shape
from demilune.evidence.record import FORMAT, digest
from demilune.files import contents
from demilune.version import __version__


def read_record(path: str | Path) -> dict[str, Any]:
    """The record in a file; raises :class:`InputError` with one message if it is no whole one."""
    path = Path(path)
    data = contents(path)
    try:
        return checked(_parsed(data))
    except InputError as error:
        raise InputError(f"{path}: {error}") from error


def _parsed(data: bytes) -> Any:
    try:
        return json.loads(
            data.decode("utf-8"), object_pairs_hook=_object, parse_constant=_no_constant
        )
    except UnicodeDecodeError as error:
        raise InputError(f"malformed: not UTF-8 (byte {error.start})") from error
    except (ValueError, RecursionError) as error:  # also what Python limits: digits, nesting
        raise InputError(f"malformed: not JSON: {error}") from error


def _object(pairs: Iterable[tuple[str, Any]]) -> dict[str, Any]:
    made: dict[str, Any] = {}
    for key, value in pairs:
        if key in made:  # two readers could take two different ones
            raise ValueError(f"{key!a} stands twice in one object")
        made[key] = value
    return made


def _no_constant(word: str) -> None:
    raise ValueError(f"{word} is no number of JSON")


def checked(record: Any) -> dict[str, Any]:
    """``record`` if it is ours, not newer than this version, unchanged and of the right shape."""
    made_by = record.get("made_by") if isinstance(record, dict) else None
    if not isinstance(made_by, str) or not made_by.startswith(files.MARK) or "format" not in record:
        raise InputError("not evidence that Demilune wrote")
    _refuse_newer(made_by, record["format"])
    found = record.get("sha256")
    try:
        if isinstance(found, str) and found != digest(record):
            raise InputError(
                "changed since it was written: its contents do not have the SHA-256 that it states"
            )
        problem = next(shape.problems(record), None)
    except (ValueError, RecursionError) as error:
        raise InputError(f"malformed: {error}") from error
    if problem is not None:
        raise InputError(f"malformed: {problem}")
    return dict(record)


def _refuse_newer(made_by: str, form: Any) -> None:
    version = made_by.removeprefix(files.MARK).strip()
    newer_form = isinstance(form, int) and form > FORMAT
    if newer_form or release(version) > release(__version__):
        shown = "".join(letter if letter.isprintable() else "?" for letter in version)
        raise InputError(
            f"written by Demilune {shown[:40]}, which is newer than this one ({__version__}); "
            "a newer version of Demilune is needed to replay it"
        )


def release(version: str) -> tuple[int, ...]:
    """The leading numbers of a version, for comparison."""
    numbers = re.match(r"[0-9]{1,9}(?:\.[0-9]{1,9})*", version)
    return tuple(int(one) for one in numbers[0].split(".")) if numbers else ()
