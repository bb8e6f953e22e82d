"""The main job, step by step: specifications, files, binaries, evidence."""

from __future__ import annotations

import os
import platform
from collections.abc import Callable, Iterable, Mapping, Sequence
from pathlib import Path
from typing import Any

from demilune import files
from demilune.bench import guard
from demilune.bench.levels import verify
from demilune.bench.selfcheck import selfcheck as plant
from demilune.boards.board import Board
from demilune.boards.check import Report, check_all
from demilune.errors import DemiluneError, MissingError
from demilune.evidence.outcome import Outcome, Row
from demilune.evidence.page import page
from demilune.evidence.record import EVIDENCE, PAGE, evidence_of, text_of
from demilune.isa import INSTRUCTION_SETS
from demilune.plan.build import make_plan
from demilune.render import render
from demilune.spec import Spec
from demilune.toolchain import cache
from demilune.toolchain.build import Unit, build_units
from demilune.toolchain.compilers import USUAL, describe_compiler, has_fma

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


def check(
    specs: Iterable[Spec],
    seed: int = 1,
    progress: Progress = silent,
    *,
    selfcheck: bool = False,
    boards: Sequence[Board] = (),
) -> Outcome:
    """Emits, compiles and verifies all kernels; writes nothing but the compiler's cache.

    With ``selfcheck`` faults are planted into each verified kernel, and the bench must catch them.
    """
    return check_units(
        units_of(specs, progress), seed, progress, selfcheck=selfcheck, boards=boards
    )


def check_units(
    units: list[Unit],
    seed: int = 1,
    progress: Progress = silent,
    *,
    selfcheck: bool = False,
    boards: Sequence[Board] = (),
) -> Outcome:
    """Compiles and verifies what has been emitted."""
    ready: list[Unit] = []

    def one_more(unit: Unit) -> None:
        ready.append(unit)
        progress("compiling", len(ready), len(units))

    progress("compiling", 0, len(units))
    build_units(units, one_more)
    outcome = Outcome(units, seed=seed, selfcheck=selfcheck)
    total, done = sum(len(unit.plans) for unit in units), 0
    for unit in units:
        for place, plan in enumerate(unit.plans):
            progress(f"verifying {plan.spec.name} ({plan.spec.language})", done, total)
            row = Row(plan, error=unit.error)
            if unit.error is None:
                row.verdict = verify(plan, unit.executables[place], seed)
            outcome.rows.append(row)
            done += 1
    progress("verifying", total, total)
    if selfcheck:
        for row in outcome.rows:
            _plant(row, seed, progress)
    if boards:
        _on_boards(outcome, boards, seed, progress)
    return outcome


def _on_boards(outcome: Outcome, boards: Sequence[Board], seed: int, progress: Progress) -> None:
    """Checks on boards what was verified here."""
    files = {(plan.spec.file, plan.spec.language) for plan in outcome.routines}
    total = sum(board.language == language for _, language in files for board in boards)
    progress("on boards", 0, total)

    def told(report: Report) -> None:
        outcome.boards.append(report)
        progress(f"{report.file} on {report.board}", len(outcome.boards), total)

    check_all(boards, outcome.routines, told, seed=seed)


def _plant(row: Row, seed: int, progress: Progress) -> None:
    """Plants faults into one kernel; in one that is not verified they would prove nothing."""
    if row.status != "verified":
        row.untried = "the kernel itself is not verified"
        return
    name = f"{row.spec.name} ({row.spec.language})"
    try:
        row.trials = plant(row.plan, seed, lambda what, *far: progress(f"{name}: {what}", *far))
    except DemiluneError as error:
        row.untried = f"the kernels with faults could not be built: {error}"


def report_files(outcome: Outcome) -> dict[str, str]:
    """The evidence report by file name: the record, and the page that shows it."""
    record = evidence_of(outcome)
    return {EVIDENCE: text_of(record), PAGE: page(record)}


def build(
    specs: Iterable[Spec],
    folder: Path,
    *,
    seed: int = 1,
    force: bool = False,
    progress: Progress = silent,
    boards: Sequence[Board] = (),
) -> Outcome:
    """The whole job: writes the sources and the evidence of their verification to ``folder``."""
    units = units_of(specs, progress)
    sources = all_files(units)
    refuse_early(folder, sources, force)
    outcome = check_units(units, seed, progress, boards=boards)
    files.write_all(folder, {**sources, **report_files(outcome)}, force)
    return outcome


def refuse_early(folder: Path, sources: Mapping[str, str], force: bool) -> None:
    """Raises before any work is done if the sources and the report could not be written."""
    files.prepare(folder)
    files.refuse_foreign(folder, {**sources, EVIDENCE: "", PAGE: ""}, force)


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
    for one in INSTRUCTION_SETS.values():
        how = "runs here" if one.here else "compiled, not run" if one.compiles_here else "written"
        rows.append({"what": f"isa {one.name}", "found": one.here, "detail": f"{one.title}: {how}"})
    pages = "reads and writes outside an array are caught" if guard.AVAILABLE else guard.WHY_NOT
    rows.append({"what": "guard pages", "found": guard.AVAILABLE, "detail": pages})
    rows.append({"what": "compiled libraries", "found": True, "detail": str(cache.used_folder())})
    return rows
