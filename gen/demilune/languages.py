"""The languages that routines are written in: one folder of templates each, found by being there.

A folder ``templates/<language>/`` holds ``language.toml`` (facts that the writer of sources
must know) and the templates. A language whose ``pseudo`` is true is for reading only.
"""

from __future__ import annotations

import tomllib
from collections.abc import Mapping
from dataclasses import dataclass
from pathlib import Path

import demilune.templates


@dataclass(frozen=True)
class Language:
    """What is particular to a language, beside its templates."""

    name: str
    title: str
    extensions: tuple[str, ...]
    """File name endings, the source first; each has a template ``file.<ending>.j2``."""
    comment: str
    """What begins a line of the header."""
    complex_elements: bool
    """Whether an element can be complex; else its parts are neighbouring elements."""
    reserved: frozenset[str]
    """Words that cannot be names."""
    pseudo: bool
    breaks_anywhere: bool
    """Whether a statement may be broken at any space; else only inside brackets."""
    default: bool
    """Whether routines are written in it where the specification does not say."""
    lanes: bool
    """Whether lanes need primitives, which ``lanes.j2`` writes."""
    runs: str
    """How routines are run here: ``cffi``, ``python``, or ``nothing``."""
    helpers: Mapping[str, tuple[str, ...]]
    """Functions of :mod:`demilune.primitives` that go into a file, by what needs them."""


TEMPLATES = Path(next(iter(demilune.templates.__path__)))


def _read(folder: Path) -> Language:
    facts = tomllib.loads((folder / "language.toml").read_text(encoding="utf-8"))
    return Language(
        name=folder.name,
        title=facts["title"],
        extensions=tuple(facts["extensions"]),
        comment=facts["comment"],
        complex_elements=facts["complex_elements"],
        reserved=frozenset(facts["reserved"].split()),
        pseudo=facts.get("pseudo", False),
        breaks_anywhere=facts["breaks_anywhere"],
        default=facts.get("default", False),
        lanes=facts.get("lanes", False),
        runs=facts.get("runs", "nothing"),
        helpers={need: tuple(names) for need, names in facts.get("helpers", {}).items()},
    )


ALL = {
    folder.name: _read(folder)
    for folder in sorted(TEMPLATES.iterdir())
    if (folder / "language.toml").is_file()
}
LANGUAGES = {name: language for name, language in ALL.items() if not language.pseudo}
