"""Who may race: kernels in C that the bench has verified."""

from __future__ import annotations

from collections.abc import Iterable
from dataclasses import dataclass
from pathlib import Path

from demilune.errors import CheckError, InputError, MissingError
from demilune.pipeline import Progress, check, silent
from demilune.plan.build import Plan
from demilune.spec import Spec
from demilune.toolchain.build import compiled
from demilune.toolchain.compilers import find_compiler


@dataclass(frozen=True)
class Entrant:
    """A verified kernel and the library that holds it."""

    plan: Plan
    path: Path


@dataclass(frozen=True)
class LeftOut:
    """Who does not race, and why; ``fault`` if it is because a check failed."""

    name: str
    reason: str
    fault: bool = False


_verified: dict[Spec, Entrant] = {}
"""Kernels that this process has verified: one race after another asks once."""


def entrants(
    specs: Iterable[Spec], progress: Progress = silent
) -> tuple[list[Entrant], list[LeftOut]]:
    """The verified kernels among ``specs``, and those that are left out.

    Raises an error if none is left: :class:`InputError` if none is in C, :class:`CheckError` if a
    kernel is wrong, :class:`MissingError` if something is not on this machine.
    """
    specs = list(specs)
    here = [spec for spec in specs if spec.language == "c"]
    if not here:
        raise InputError("no kernel is in C, and only kernels in C are raced")
    names = [spec.name for spec in here]
    for name in names:
        if names.count(name) > 1:
            raise InputError(f'two kernels are called "{name}"')
    find_compiler()
    left_out = _in_other_languages(specs)
    outcome = check([spec for spec in here if spec not in _verified], progress=progress)
    for unit in outcome.units:
        if unit.error is None:
            path = compiled(find_compiler(), unit.plans, unit.files)
            rows = [row for row in outcome.rows if row.spec in {p.spec for p in unit.plans}]
            for row in rows:
                if row.status == "verified":
                    _verified[row.spec] = Entrant(row.plan, path)
    wrong = [row for row in outcome.rows if row.status != "verified"]
    left_out += [
        LeftOut(row.spec.name, f"not verified: {row.reason}", row.status != "left out")
        for row in wrong
    ]
    found = [_verified[spec] for spec in here if spec in _verified]
    if not found:
        reasons = "; ".join(f"{one.name}: {one.reason}" for one in left_out if one.name in names)
        raise (MissingError if outcome.status == 3 else CheckError)(f"no kernel races: {reasons}")
    return found, left_out


def _in_other_languages(specs: list[Spec]) -> list[LeftOut]:
    """Kernels that are not in C, those of a language together."""
    names: dict[str, list[str]] = {}
    for spec in specs:
        if spec.language != "c":
            names.setdefault(spec.language, []).append(spec.name)
    return [
        LeftOut(
            f"{kernels[0]} ({language})"
            if len(kernels) == 1
            else f"{kernels[0]} and {len(kernels) - 1} more ({language})",
            "only kernels in C are raced",
        )
        for language, kernels in names.items()
    ]
