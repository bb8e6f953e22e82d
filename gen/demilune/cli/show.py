"""What the command line shows: results to stdout, messages and progress to stderr."""

from __future__ import annotations

import json
import sys
from collections.abc import Iterator
from contextlib import contextmanager
from typing import Any

from rich.console import Console
from rich.progress import BarColumn, MofNCompleteColumn, Progress, TextColumn, TimeElapsedColumn
from rich.table import Table
from rich.text import Text

from demilune.errors import DemiluneError, SpecError
from demilune.pipeline import Outcome
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
    counts = [f"{n} {s}" for s in COLOURS if (n := sum(r.status == s for r in result.rows))]
    shown.print(Text(f"{len(result.rows)} kernels: {', '.join(counts)}"), soft_wrap=True)
