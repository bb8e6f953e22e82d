"""The job of ``demilune bundle``: sources, self-tests, build rules, evidence and data sheets."""

from __future__ import annotations

from collections import Counter
from collections.abc import Iterable, Mapping, Sequence
from contextlib import suppress
from dataclasses import dataclass
from pathlib import Path
from typing import Any

from demilune import files, pipeline
from demilune.bench.recorded import BUDGET, Recording, record
from demilune.boards.board import Board
from demilune.boards.check import Report, check_all
from demilune.boards.selftest import selftest
from demilune.bundle import coding, recipes, sheet
from demilune.bundle.sheetpage import sheet_page
from demilune.errors import InputError
from demilune.evidence.outcome import Outcome
from demilune.evidence.record import EVIDENCE, PAGE, text_of
from demilune.pipeline import Progress, silent
from demilune.spec import Spec
from demilune.toolchain.build import Unit

OPTIMISE = "-O2"
SHORT = 2500
"""Bytes of vectors of a routine with which a self-test is shown to checkers of coding rules."""


@dataclass(frozen=True)
class Bundle:
    """A folder that is handed over, before it is written."""

    files: dict[str, str]
    """Texts by file name."""
    outcome: Outcome
    sheets: list[dict[str, Any]]
    findings: list[coding.Findings]

    @property
    def status(self) -> int:
        """The exit status: 1 a check failed, 3 something was missing, 0 neither."""
        return self.outcome.status

    def as_record(self) -> dict[str, Any]:
        """What ``--json`` tells."""
        return {
            "status": self.status,
            "files": sorted(self.files),
            "sheets": self.sheets,
            "coding rules": [one.as_record() for one in self.findings],
        }


def make(
    specs: Iterable[Spec],
    boards: Sequence[Board] = (),
    folder: Path | None = None,
    *,
    seed: int = 1,
    budget: int = BUDGET,
    optimise: str = OPTIMISE,
    force: bool = False,
    progress: Progress = silent,
) -> Bundle:
    """Makes everything; writes it to ``folder``, if there is one, whole or not at all."""
    units = pipeline.units_of(specs, progress)
    recordings = {
        (unit.file, unit.language): record(unit.file, unit.plans, budget=budget, seed=seed)
        for unit in units
    }
    tests = [selftest(recordings[unit.file, unit.language], unit.language) for unit in units]
    names = [*(name for unit in units for name in unit.files), *(n for one in tests for n in one)]
    _refuse_twice([*names, *sheet.names(units), *recipes.names(units), coding.PAGE, EVIDENCE, PAGE])
    sources = pipeline.all_files(units) | {k: text for one in tests for k, text in one.items()}
    extra = dict.fromkeys([*sheet.names(units), *recipes.names(units), coding.PAGE], "")
    if folder is not None:
        pipeline.refuse_early(folder, {**sources, **extra}, force)
    outcome = pipeline.check_units(units, seed, progress)
    _on_boards(outcome, boards, budget, seed, optimise, progress)
    findings = coding.check(sources | _short_tests(units, recordings, seed), units, progress)
    sheets = _sheets(outcome, recordings, boards, optimise)
    made = {
        **sources,
        **recipes.recipes(units),
        **pipeline.report_files(outcome),
        coding.PAGE: coding.page(findings),
    }
    for one in sheets:
        page_name, record_name = sheet.names_of(one["file"])
        made |= {record_name: text_of(one), page_name: sheet_page(one)}
    bundle = Bundle(made, outcome, sheets, findings)
    if folder is not None:
        files.write_all(folder, made, force)
    return bundle


def _short_tests(
    units: Iterable[Unit], recordings: Mapping[tuple[str, str], Recording], seed: int
) -> dict[str, str]:
    """The self-tests in C with few vectors: checkers of coding rules are slow with long tables."""
    made: dict[str, str] = {}
    for unit in units:
        if unit.language == "c":
            recording = recordings[unit.file, unit.language]
            few = SHORT * len(unit.plans)
            with suppress(InputError):  # where no vector is that short
                recording = record(unit.file, unit.plans, budget=few, seed=seed)
            made |= selftest(recording, unit.language)
    return made


def _refuse_twice(names: Iterable[str]) -> None:
    """Raises where two files of the folder would have one name, also where case does not count."""
    for name, count in Counter(name.lower() for name in names).items():
        if count > 1:
            raise InputError(
                f'the bundle would have two files "{name}"; give the kernels another file (key '
                '"file")'
            )


def _on_boards(
    outcome: Outcome, boards: Sequence[Board], budget: int, seed: int, optimise: str,
    progress: Progress,
) -> None:  # fmt: skip
    """Checks on boards the files of which every routine was verified here."""
    open_files = {
        (row.spec.file, row.spec.language) for row in outcome.rows if row.status != "verified"
    }
    plans = [
        row.plan for row in outcome.rows if (row.spec.file, row.spec.language) not in open_files
    ]
    whole = {(plan.spec.file, plan.spec.language) for plan in plans}
    total = sum(board.language == language for _, language in whole for board in boards)
    if not total:
        return
    progress("on boards", 0, total)

    def told(report: Report) -> None:
        outcome.boards.append(report)
        progress(f"{report.file} on {report.board}", len(outcome.boards), total)

    check_all(boards, plans, told, budget=budget, seed=seed, optimise=optimise)


def _sheets(
    outcome: Outcome,
    recordings: dict[tuple[str, str], Recording],
    boards: Sequence[Board],
    optimise: str,
) -> list[dict[str, Any]]:
    groups: dict[str, list[Unit]] = {}
    for unit in outcome.units:
        groups.setdefault(unit.file, []).append(unit)
    return [
        sheet.sheet(file, units, outcome, recordings, boards, optimise)
        for file, units in groups.items()
    ]
