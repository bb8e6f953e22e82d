"""Checks routines on boards: the verdict of the recorded vectors, and what the routines cost."""

from __future__ import annotations

import os
from collections.abc import Callable, Iterable, Mapping, Sequence
from concurrent.futures import ThreadPoolExecutor
from dataclasses import asdict, dataclass, field, replace
from typing import Any

from demilune.bench.recorded import BUDGET, Recording, one_call, record
from demilune.boards.board import Board, memory_of, refusals
from demilune.boards.elf import read_elf
from demilune.boards.emulate import Counts, Ran, Sizes, build, counts, run, run_python, sizes
from demilune.boards.selftest import MOST_TOLD, main_program, selftest
from demilune.errors import CheckError, DemiluneError, InputError, MissingError
from demilune.keys import RUNTIME
from demilune.plan.build import Plan, make_plan
from demilune.render import render
from demilune.spec import Spec

USUAL_N = 12
"""The n for which a call is counted where the specification leaves it open."""
CAUTION = (
    "Counts are instructions of an emulator, which are no cycles; a load or store is an access to "
    "memory as the emulator makes it."
)


@dataclass(frozen=True)
class Figures:
    """What one routine costs on a board, for one n."""

    kernel: str
    n: int
    half: int
    """Bytes of the stored half."""
    full: int
    """Bytes of the whole matrix."""
    sizes: Sizes | None = None
    counts: Counts | None = None
    message: str = ""
    """Why there are no sizes or counts."""


@dataclass(frozen=True)
class Report:
    """What became of one file of routines on one board.

    ``verdict`` is ``agrees`` (every recorded bit), ``differs``, ``failed`` (it could not be built,
    or crashed), ``refused`` (the routines are not for this board) or ``missing`` (something that
    is needed is not on this machine); ``message`` says why.
    """

    board: str
    title: str
    file: str
    language: str
    verdict: str
    message: str = ""
    cases: int = 0
    mismatches: int | None = None
    """Cases that differ; 99 stands for more, too."""
    tables: int = 0
    """Bytes of the recorded vectors."""
    routines: tuple[Figures, ...] = field(default=())

    def record(self) -> dict[str, Any]:
        """The report as plain data for JSON."""
        return asdict(self)


def check_on(
    board: Board,
    kernels: Iterable[Spec | Plan],
    files: Mapping[str, str] | None = None,
    *,
    recording: Recording | None = None,
    budget: int = BUDGET,
    seed: int = 1,
    n: int = USUAL_N,
    optimise: str = "-O2",
    measure: bool = True,
) -> Report:
    """Builds routines of one file for a board, runs their self-test, sizes and counts them.

    ``files`` are the emitted sources, made here if not passed; ``recording`` are the vectors.
    Without ``measure`` only the verdict is found. Raises
    :class:`~demilune.errors.InputError` if the budget holds no vector.
    """
    plans = [make_plan(one) if isinstance(one, Spec) else one for one in kernels]
    spec = plans[0].spec
    report = Report(board.name, board.title, spec.file, spec.language, "refused")
    reasons = [reason for plan in plans for reason in refusals(board, plan)]
    if reasons:
        return replace(report, message="; ".join(reasons))
    files = render(plans, spec.file, spec.language) if files is None else files
    recording = recording or record(spec.file, plans, budget=budget, seed=seed)
    report = replace(report, cases=recording.cases, tables=recording.bytes)
    try:
        if board.language == "python":
            return _with(report, _run_python(board, files, recording), _plain(plans, n))
        return _run_c(report, board, plans, files, recording, n, optimise, measure)
    except MissingError as error:
        return replace(report, verdict="missing", message=str(error))
    except DemiluneError as error:
        return replace(report, verdict="failed", message=str(error))


def check_all(
    boards: Sequence[Board],
    kernels: Iterable[Spec | Plan],
    told: Callable[[Report], None] = lambda report: None,
    *,
    budget: int = BUDGET,
    seed: int = 1,
    n: int = USUAL_N,
    optimise: str = "-O2",
    measure: bool = True,
) -> list[Report]:
    """Checks each file of routines on each board of its language, several at a time.

    ``told`` hears of each report in the order of the list, as soon as it is ready.
    """
    groups: dict[tuple[str, str], list[Plan]] = {}
    for one in kernels:
        plan = make_plan(one) if isinstance(one, Spec) else one
        groups.setdefault((plan.spec.file, plan.spec.language), []).append(plan)
    work: list[tuple[Board, list[Plan], dict[str, str], Recording | InputError]] = []
    for (file, language), plans in groups.items():
        fitting = [board for board in boards if board.language == language]
        if fitting:
            files = render(plans, file, language)
            try:
                recording: Recording | InputError = record(file, plans, budget=budget, seed=seed)
            except InputError as error:
                recording = error
            work += [(board, plans, files, recording) for board in fitting]

    def check(one: tuple[Board, list[Plan], dict[str, str], Recording | InputError]) -> Report:
        board, plans, files, recording = one
        if isinstance(recording, InputError):
            spec = plans[0].spec
            told = str(recording)
            return Report(board.name, board.title, spec.file, spec.language, "failed", told)
        return check_on(
            board, plans, files, recording=recording, seed=seed, n=n, optimise=optimise,
            measure=measure,
        )  # fmt: skip

    reports = []
    with ThreadPoolExecutor(os.cpu_count() or 1) as pool:
        for report in pool.map(check, work):
            told(report)
            reports.append(report)
    return reports


def _with(report: Report, ran: Ran, routines: tuple[Figures, ...]) -> Report:
    verdict = "failed" if ran.mismatches is None else "agrees" if ran.agrees else "differs"
    message = ran.message
    if ran.mismatches:
        more = " or more" if ran.mismatches == MOST_TOLD and report.language == "c" else ""
        message = f"{ran.mismatches}{more} of {report.cases} cases differ"
    return replace(
        report, verdict=verdict, message=message, mismatches=ran.mismatches, routines=routines
    )


def _plain(plans: Iterable[Plan], n: int) -> tuple[Figures, ...]:
    """The figures that no compiler is needed for."""
    found = []
    for plan in plans:
        fixed = plan.spec.layout.n
        rows = n if fixed == RUNTIME else int(fixed)
        full = rows * rows * plan.spec.arithmetic.type.size
        found.append(Figures(plan.spec.name, rows, memory_of(plan, rows)["a"], full))
    return tuple(found)


def _run_python(board: Board, files: Mapping[str, str], recording: Recording) -> Ran:
    test = selftest(recording, "python")
    return run_python(board, {**files, **test}, f"{recording.file}_selftest")


def _run_c(
    report: Report,
    board: Board,
    plans: Sequence[Plan],
    files: Mapping[str, str],
    recording: Recording,
    n: int,
    optimise: str,
    measure: bool,
) -> Report:
    free = plans[0].spec.target.environment == "freestanding"
    source, test = f"{report.file}.c", f"{report.file}_selftest.c"
    figures = list(_plain(plans, n))
    main = main_program(report.file, board.start)
    with build(
        board, {**files, **selftest(recording, "c"), **main}, optimise=optimise, freestanding=free
    ) as built:
        if read_elf(built.program).big_endian != (board.endian == "big"):
            raise CheckError(f'the program is not "{board.endian}"-endian, as the board is')
        ran = run(board, built.program)
        for place, one in enumerate(figures if measure else ()):
            figures[place] = replace(one, sizes=sizes(built, source, one.kernel))
    if ran.agrees and measure:
        counted = one_call(report.file, plans, n, seed=recording.seed)
        with build(
            board, {**files, **selftest(counted, "c"), **main}, optimise=optimise, freestanding=free
        ) as built:
            try:
                found = counts(built, [one.kernel for one in figures], [test])
                figures = [replace(one, counts=found[one.kernel]) for one in figures]
            except DemiluneError as error:
                figures = [replace(one, message=f"not counted: {error}") for one in figures]
    return _with(report, ran, tuple(figures))
