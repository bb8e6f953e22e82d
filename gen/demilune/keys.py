"""Keys of a specification: how each of the five choices declares what it can be told.

A choice is a dataclass; a field made with :func:`key` is a key that a specification may hold.
From the fields come the checks, the defaults, the JSON Schema and the help, so that a new
layout or operation with keys of its own touches no other file.
"""

from __future__ import annotations

import dataclasses
import difflib
from collections.abc import Iterable, Mapping
from dataclasses import dataclass
from typing import Any

RUNTIME = "runtime"
"""The word for a size or scalar that the caller passes instead of the specification."""


@dataclass(frozen=True)
class Key:
    """What is allowed for a key.

    ``words`` are the strings it may be; ``minimum`` and ``maximum`` bound a whole number if
    ``whole`` (zero excluded if ``nonzero``); ``numbers`` are the whole numbers it may be;
    ``number`` allows any finite number; ``flag`` true and false; ``text`` any string.
    """

    help: str
    words: tuple[str, ...] = ()
    whole: bool = False
    minimum: int | None = None
    maximum: int | None = None
    nonzero: bool = False
    number: bool = False
    numbers: tuple[int, ...] = ()
    flag: bool = False
    text: bool = False

    @property
    def allowed(self) -> str:
        """What the key may be, in words."""
        parts = [f'"{word}"' for word in self.words]
        if self.whole:
            limits = []
            if self.minimum is not None:
                limits.append(f"from {self.minimum}")
            if self.maximum is not None:
                limits.append(f"to {self.maximum}")
            kind = "a whole number other than 0" if self.nonzero else "a whole number"
            parts.append(" ".join([kind, *limits]))
        parts += [str(one) for one in self.numbers]
        if self.number:
            parts.append("a finite number")
        if self.flag:
            parts.append("true or false")
        if self.text:
            parts.append("a text")
        return " or ".join([", ".join(parts[:-1]), parts[-1]] if len(parts) > 1 else parts)

    @property
    def schema(self) -> dict[str, Any]:
        """The JSON Schema (draft 2020-12) of one value."""
        options: list[dict[str, Any]] = []
        if self.words:
            options.append({"enum": list(self.words)})
        if self.whole:
            option: dict[str, Any] = {"type": "integer"}
            if self.minimum is not None:
                option["minimum"] = self.minimum
            if self.maximum is not None:
                option["maximum"] = self.maximum
            if self.nonzero:
                option["not"] = {"const": 0}
            options.append(option)
        if self.numbers:
            options.append({"enum": list(self.numbers)})
        if self.number:
            options.append({"type": "number"})
        if self.flag:
            options.append({"type": "boolean"})
        if self.text:
            options.append({"type": "string"})
        return options[0] if len(options) == 1 else {"anyOf": options}


def key(default: Any, help: str, **allowed: Any) -> Any:
    """A dataclass field that is a key of the specification."""
    return dataclasses.field(default=default, metadata={"key": Key(help, **allowed)})


def keys_of(choice: type) -> dict[str, Key]:
    """The keys that the dataclass ``choice`` declares, in order."""
    return {
        field.name: field.metadata["key"]
        for field in dataclasses.fields(choice)
        if "key" in field.metadata
    }


def defaults_of(choice: type) -> dict[str, Any]:
    """The defaults of the keys of the dataclass ``choice``."""
    return {f.name: f.default for f in dataclasses.fields(choice) if "key" in f.metadata}


def pick(choice: type, values: Mapping[str, Any]) -> Any:
    """An instance of ``choice`` from those of ``values`` that are its keys."""
    return choice(**{name: values[name] for name in keys_of(choice) if name in values})


def nearest(word: str, known: Iterable[str]) -> str:
    """``; did you mean "..."?`` with the nearest of the ``known`` words, or nothing."""
    close = difflib.get_close_matches(word.lower(), list(known), n=1, cutoff=0.5)
    return f'; did you mean "{close[0]}"?' if close else ""


def listing(words: Iterable[str]) -> str:
    """The ``words`` in quotes, with commas."""
    return ", ".join(f'"{word}"' for word in words)
