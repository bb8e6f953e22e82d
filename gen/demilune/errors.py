"""What can go wrong, and the exit status that each kind of it has on the command line."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass


class DemiluneError(Exception):
    """Base of all errors that Demilune raises on purpose; the message is one for people."""

    status = 2


@dataclass(frozen=True)
class Problem:
    """One thing that is wrong with a specification, and where."""

    message: str
    kernel: str | None = None
    key: str | None = None
    file: str | None = None

    def __str__(self) -> str:
        where = [self.file] if self.file else []
        where += [f"kernel {self.kernel}"] if self.kernel else []
        where += [f"key {self.key}"] if self.key else []
        where = ["".join(c if c.isprintable() else "?" for c in part) for part in where]
        return f"{', '.join(where)}: {self.message}" if where else self.message


class SpecError(DemiluneError):
    """A specification asks for what is not known or not possible; holds every problem found."""

    def __init__(self, problems: Sequence[Problem]) -> None:
        self.problems = tuple(problems)
        super().__init__("\n".join(str(problem) for problem in self.problems))


class InputError(DemiluneError):
    """An argument, a file or a folder cannot be used as it is."""


class CheckError(DemiluneError):
    """A check failed: the product is not what was promised."""

    status = 1


class MissingError(DemiluneError):
    """Something that the work needs is not on this machine; the message says how to get it."""

    status = 3
