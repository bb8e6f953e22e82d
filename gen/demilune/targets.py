"""For which machine: language, environment, and the files that routines go to."""

from __future__ import annotations

from dataclasses import dataclass

from demilune.keys import key
from demilune.languages import LANGUAGES


@dataclass(frozen=True)
class Target:
    """Where a routine is to run."""

    language: str = key("c", "language of the source", words=tuple(LANGUAGES))
    environment: str = key(
        "hosted", "hosted, or freestanding: no header but stdint.h and stddef.h",
        words=("hosted", "freestanding"),
    )  # fmt: skip
    file: str | None = key(
        None, "name of the file that routines share; else one for each", text=True
    )
