"""What the command line shows: results to stdout, messages and progress to stderr."""

from __future__ import annotations

import json
import sys
from collections.abc import Iterator, Sequence
from contextlib import contextmanager
from typing import Any

from rich.console import Console
from rich.progress import BarColumn, MofNCompleteColumn, Progress, TextColumn, TimeElapsedColumn
from rich.table import Table
from rich.text import Text

from demilune.boards.check import Report as BoardReport
from demilune.errors import DemiluneError, SpecError
from demilune.evidence.outcome import Outcome
from demilune.evidence.replay import AGREES, DIFFERS, LEFT_OUT, NOTHING, Replay
from demilune.pipeline import Progress as Report

PIPE_WIDTH = 120
COLOURS = {"verified": "green", "failed": "bold red", "error": "bold red", "left out": "yellow"}


def console(stderr: bool = False) -> Console:
    """The terminal, or a pipe without colour; NO_COLOR is respected."""
    stream = sys.stderr if stderr else sys.stdout
    width = None if stream.isatty() else PIPE_WIDTH
    return Console(file=stream, width=width, highlight=False, soft_wrap=False)


def message(text: str) -> None:
    """A message for people, to stderr."""
    print(text, file=sys.stderr)


def as_json(record: Any) -> None:
    """A report as JSON, to stdout."""
    text = json.dumps(record, indent=1, ensure_ascii=False)
    try:
        print(text)
    except UnicodeEncodeError:
        print(json.dumps(record, indent=1))


def error(problem: DemiluneError, json_too: bool) -> None:
    """What went wrong, one line a problem."""
    if isinstance(problem, SpecError):
        lines = [str(one) for one in problem.problems]
    else:
        lines = [str(problem)]
    for line in lines:
        message(f"demilune: {line}")
    if json_too:
        as_json({"status": problem.status, "errors": lines})


@contextmanager
def progress(quiet: bool) -> Iterator[Report]:
    """A bar on a terminal, nothing elsewhere."""
    if quiet or not sys.stderr.isatty():
        yield lambda what, done, total: None
        return
    columns = (
        TextColumn("{task.description}"), BarColumn(), MofNCompleteColumn(), TimeElapsedColumn()
    )  # fmt: skip
    with Progress(*columns, console=console(stderr=True), transient=True) as bar:
        task = bar.add_task("starting", total=None)

        def report(what: str, done: int, total: int) -> None:
            bar.update(task, description=what, completed=done, total=total)

        yield report


def outcome(result: Outcome) -> None:
    """The table of kernels, then why some are not verified."""
    table = Table(box=None, pad_edge=False, header_style="bold")
    for name in ("kernel", "language", "status", "cases", "largest error", "seconds"):
        table.add_column(name, justify="right" if name in ("cases", "seconds") else "left")
    for row in result.rows:
        cases, worst, seconds = "", "", ""
        if row.verdict is not None:
            cases, seconds = str(row.verdict.cases), f"{row.verdict.seconds:.2f}"
            facts = row.verdict.levels[2].facts
            if "largest error / bound" in facts:
                worst = f"{facts['largest error / bound']:.2g} of the bound"
            elif row.verdict.levels[2].skipped:
                worst = "none (integers)" if row.spec.arithmetic.type.integer else "not bounded"
        status = Text(row.status, style=COLOURS[row.status])
        table.add_row(row.spec.name, row.spec.language, status, cases, worst, seconds)
    console().print(table)
    shown = console()
    for row in result.rows:
        if row.status in ("failed", "error"):
            shown.print(
                Text(f"{row.spec.name} ({row.spec.language}): {row.reason}"), soft_wrap=True
            )
    for reason in result.missing:
        names = [r.spec.name for r in result.rows if r.status == "left out" and r.reason == reason]
        shown.print(Text(f"left out: {', '.join(names)}"), soft_wrap=True)
        shown.print(Text(f"  why, and how to get it: {reason}"), soft_wrap=True)
    if result.boards:
        boards(result.boards)
    counts = [f"{n} {s}" for s in COLOURS if (n := sum(r.status == s for r in result.rows))]
    shown.print(Text(f"{len(result.rows)} kernels: {', '.join(counts)}"), soft_wrap=True)
    if result.selfcheck:
        _planted(result, shown)


BOARDS = {"agrees": "green", "missing": "yellow"}


def boards(reports: Sequence[BoardReport]) -> None:
    """What became of routines on boards, and what they cost there."""
    table = Table(box=None, pad_edge=False, header_style="bold")
    names = (
        "board",
        "routine",
        "verdict",
        "cases",
        "code",
        "stack",
        "instructions",
        "loads",
        "stores",
    )
    for place, name in enumerate(names):
        table.add_column(name, justify="left" if place < 3 else "right")
    for report in reports:
        verdict = Text(report.verdict, style=BOARDS.get(report.verdict, "bold red"))
        for one in report.routines or (None,):
            sizes, counts = (one.sizes, one.counts) if one else (None, None)
            code = "" if sizes is None else str(sizes.code + sizes.library)
            stack = "" if sizes is None or sizes.stack is None else str(sizes.stack)
            calls = ("", "", "") if counts is None else (
                str(counts.instructions), str(counts.loads), str(counts.stores)
            )  # fmt: skip
            name = one.kernel if one else report.file
            table.add_row(report.board, name, verdict, str(report.cases), code, stack, *calls)
    shown = console()
    shown.print(table)
    for report in reports:
        if report.message:
            shown.print(Text(f"{report.file} on {report.board}: {report.message}"), soft_wrap=True)
    shown.print(Text("bytes, and counts of one call in an emulator: instructions are no cycles"))


def _planted(result: Outcome, shown: Console) -> None:
    """How many planted faults were caught, and the bench's debt."""
    trials = [trial for row in result.rows for trial in row.trials or []]
    caught = sum(trial.caught for trial in trials)
    shown.print(Text(f"planted faults: {len(trials)} planted, {caught} caught"), soft_wrap=True)
    for row in result.rows:
        for trial in row.survivors:
            name = f"{row.spec.name} ({row.spec.language})"
            line = f"the bench's debt: {trial.fault.name} in {name}: {trial.fault.meaning}"
            shown.print(Text(line, style="bold red"), soft_wrap=True)
        if row.untried:
            line = f"no faults planted in {row.spec.name} ({row.spec.language}): {row.untried}"
            shown.print(Text(line), soft_wrap=True)


FOUND = {AGREES: "green", DIFFERS: "bold red", NOTHING: "yellow", LEFT_OUT: "yellow"}


def replayed(result: Replay) -> None:
    """What a replay found, kernel by kernel, and what may be why."""
    table = Table(box=None, pad_edge=False, header_style="bold")
    for name in ("kernel", "language", "replay", "recorded", "here"):
        table.add_column(name)
    for one in result.kernels:
        found = Text(one.found, style=FOUND[one.found])
        table.add_row(one.name, one.language, found, one.recorded_status, one.status)
    shown = console()
    shown.print(table)
    for one in result.kernels:
        for line in [*one.differences, *([one.reason] if one.reason else [])]:
            shown.print(_printable(f"{one.name} ({one.language}): {line}"), soft_wrap=True)
    for line in result.files:
        shown.print(_printable(line), soft_wrap=True)
    if not result.agrees and result.surroundings:
        shown.print(Text("what else is not as it was recorded:"))
        for line in result.surroundings:
            shown.print(_printable(f"  {line}"), soft_wrap=True)
    shown.print(Text(result.verdict), soft_wrap=True)


def _printable(text: str) -> Text:
    """A line that may hold words from a file: nothing of it steers the terminal."""
    return Text("".join(letter if letter.isprintable() else "?" for letter in text))
