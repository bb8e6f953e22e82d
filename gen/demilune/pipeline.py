"""The main job, step by step: specifications, files, binaries, evidence."""

from __future__ import annotations

import hashlib
import json
import os
import platform
from collections.abc import Callable, Iterable
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

import numpy as np

from demilune import files
from demilune.bench import guard
from demilune.bench.levels import Verdict, verify
from demilune.contract import CAUTION
from demilune.errors import DemiluneError, MissingError
from demilune.plan.build import make_plan
from demilune.render import render
from demilune.spec import Spec
from demilune.toolchain import cache
from demilune.toolchain.build import Unit, build_units, flags_for
from demilune.toolchain.compilers import USUAL, describe_compiler, find_compiler, has_fma
from demilune.version import __version__

EVIDENCE = "evidence.json"

Progress = Callable[[str, int, int], None]
"""Told what is being done, how far it is, and how much there is."""


def silent(what: str, done: int, total: int) -> None:
    """Tells nobody."""


def units_of(specs: Iterable[Spec], progress: Progress = silent) -> list[Unit]:
    """The files that the kernels go to, with their plans and sources."""
    groups: dict[tuple[str, str], list[Spec]] = {}
    for spec in specs:
        groups.setdefault((spec.file, spec.language), []).append(spec)
    units = []
    for done, ((file, language), members) in enumerate(groups.items()):
        progress("emitting", done, len(groups))
        plans = [make_plan(spec) for spec in members]
        units.append(Unit(file, language, plans, render(plans, file, language)))
    progress("emitting", len(groups), len(groups))
    return units


def all_files(units: Iterable[Unit]) -> dict[str, str]:
    """The emitted files of all units, by name."""
    return {name: text for unit in units for name, text in unit.files.items()}


@dataclass
class Row:
    """What became of one kernel."""

    spec: Spec
    verdict: Verdict | None = None
    error: DemiluneError | None = None

    @property
    def status(self) -> str:
        """``verified``, ``failed``, ``left out`` (something is missing) or ``error``."""
        if self.verdict is not None:
            return "verified" if self.verdict.verified else "failed"
        return "left out" if isinstance(self.error, MissingError) else "error"

    @property
    def reason(self) -> str:
        """Why it is not verified, in a line."""
        if self.error is not None:
            return str(self.error)
        if self.verdict is None or self.verdict.verified:
            return ""
        failing = [level for level in self.verdict.levels if level.failed]
        if not failing:
            return "no level that decides could be run"
        return f"level {failing[0].name}: {failing[0].failures[0]}"


@dataclass
class Outcome:
    """What became of all kernels."""

    units: list[Unit]
    rows: list[Row] = field(default_factory=list)
    seed: int = 1

    @property
    def status(self) -> int:
        """The exit status: 0 all verified, 1 a check failed, 3 something was missing."""
        found = {row.status for row in self.rows}
        if found & {"failed", "error"}:
            return 1
        return 3 if "left out" in found else 0

    @property
    def missing(self) -> list[str]:
        """What was missing, each thing once."""
        return list(dict.fromkeys(row.reason for row in self.rows if row.status == "left out"))


def check(specs: Iterable[Spec], seed: int = 1, progress: Progress = silent) -> Outcome:
    """Emits, compiles and verifies all kernels; writes nothing but the compiler's cache."""
    return check_units(units_of(specs, progress), seed, progress)


def check_units(units: list[Unit], seed: int = 1, progress: Progress = silent) -> Outcome:
    """Compiles and verifies what has been emitted."""
    ready: list[Unit] = []

    def one_more(unit: Unit) -> None:
        ready.append(unit)
        progress("compiling", len(ready), len(units))

    progress("compiling", 0, len(units))
    build_units(units, one_more)
    outcome = Outcome(units, seed=seed)
    total, done = sum(len(unit.plans) for unit in units), 0
    for unit in units:
        for place, plan in enumerate(unit.plans):
            progress(f"verifying {plan.spec.name} ({plan.spec.language})", done, total)
            row = Row(plan.spec, error=unit.error)
            if unit.error is None:
                row.verdict = verify(plan, unit.executables[place], seed)
            outcome.rows.append(row)
            done += 1
    progress("verifying", total, total)
    return outcome


def build(
    specs: Iterable[Spec],
    folder: Path,
    *,
    seed: int = 1,
    force: bool = False,
    progress: Progress = silent,
) -> Outcome:
    """The whole job: writes the sources and the evidence of their verification to ``folder``."""
    units = units_of(specs, progress)
    sources = all_files(units)
    files.prepare(folder)
    files.refuse_foreign(folder, {**sources, EVIDENCE: ""}, force)
    outcome = check_units(units, seed, progress)
    text = json.dumps(evidence(outcome), indent=1, ensure_ascii=False) + "\n"
    files.write_all(folder, {**sources, EVIDENCE: text}, force)
    return outcome


# --- evidence ------------------------------------------------------------------------------------


def evidence(outcome: Outcome) -> dict[str, Any]:
    """What was made, how, and what was found; no date and no path, so equal runs are equal."""
    return {
        "made_by": f"{files.MARK} {__version__}",
        "verdict": _verdict(outcome),
        "caution": CAUTION,
        "seed": outcome.seed,
        "files": [
            {"name": name, "bytes": len(data), "sha256": hashlib.sha256(data).hexdigest()}
            for name, data in sorted(
                (name, text.encode()) for name, text in all_files(outcome.units).items()
            )
        ],
        "compiler": _compiler(outcome),
        "machine": {
            "processor": platform.machine(),
            "system": platform.system(),
            "python": platform.python_version(),
            "numpy": np.__version__,
        },
        "kernels": [_kernel(row) for row in outcome.rows],
    }


def _verdict(outcome: Outcome) -> str:
    counts = dict.fromkeys(("verified", "failed", "error", "left out"), 0)
    for row in outcome.rows:
        counts[row.status] += 1
    return ", ".join(f"{count} {name}" for name, count in counts.items() if count)


def _compiler(outcome: Outcome) -> dict[str, Any] | None:
    try:
        compiler = find_compiler()
    except MissingError:
        return None
    flags: dict[str, list[str]] = {}
    for unit in outcome.units:
        if unit.language != "python" and unit.error is None:
            flags[unit.file] = list(flags_for(unit.plans))
    return {"name": compiler.name, "version": compiler.version, "flags": flags}


def _kernel(row: Row) -> dict[str, Any]:
    record: dict[str, Any] = {
        "name": row.spec.name,
        "language": row.spec.language,
        "specification": row.spec.values,
        "status": row.status,
    }
    if row.reason:
        record["reason"] = row.reason
    if row.verdict is not None:
        record |= {"cases": row.verdict.cases, "levels": row.verdict.record()["levels"]}
    return record


def targets() -> list[dict[str, Any]]:
    """What can be compiled and run on this machine: name, whether it is there, and details."""
    rows: list[dict[str, Any]] = [
        {"what": "python", "found": True, "detail": f"{platform.python_version()}, runs here"}
    ]
    for name in dict.fromkeys([*([named] if (named := os.environ.get("CC")) else []), *USUAL]):
        try:
            detail, found = describe_compiler(name).version, True
        except MissingError as error:
            detail, found = str(error), False
        rows.append({"what": f"c ({name})", "found": found, "detail": detail})
    fma = (
        "fma = true runs at full speed"
        if has_fma()
        else "fma = true works hosted, slowly; freestanding it is refused"
    )
    rows.append({"what": "fused multiply-add", "found": has_fma(), "detail": fma})
    pages = "reads and writes outside an array are caught" if guard.AVAILABLE else guard.WHY_NOT
    rows.append({"what": "guard pages", "found": guard.AVAILABLE, "detail": pages})
    rows.append({"what": "compiled libraries", "found": True, "detail": str(cache.used_folder())})
    return rows
