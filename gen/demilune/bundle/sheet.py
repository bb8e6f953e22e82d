"""The data sheet of a file of routines, as plain data: what it is, needs, costs and promises."""

from __future__ import annotations

import hashlib
import subprocess
from collections.abc import Iterable, Mapping, Sequence
from fractions import Fraction
from typing import Any

from demilune import storage
from demilune.bench.recorded import Recording
from demilune.boards.board import Board, memory_of
from demilune.boards.check import CAUTION as COUNTS_CAUTION
from demilune.boards.check import USUAL_N, Figures, Report
from demilune.contract import CAUTION, contract, costs, extent_text
from demilune.dtypes import REAL_DIGITS, REAL_SIZE
from demilune.errors import MissingError
from demilune.evidence.outcome import Outcome, Row
from demilune.evidence.record import EVIDENCE
from demilune.files import MARK
from demilune.keys import RUNTIME
from demilune.languages import LANGUAGES
from demilune.plan.build import Plan
from demilune.render import prototype
from demilune.toolchain.build import Unit
from demilune.toolchain.compilers import CONTRACT_FLAGS, describe_compiler
from demilune.version import __version__

SOURCE = (
    "Higham, Accuracy and Stability of Numerical Algorithms, 2nd ed., 2002, sections 3.1 and 3.6"
)
DOT2 = "Ogita, Rump, Oishi, SIAM J. Sci. Comput. 26(6), 2005, proposition 5.5"


def names_of(file: str) -> tuple[str, str]:
    """The page and the record of a file's data sheet."""
    return f"{file}_datasheet.html", f"{file}_datasheet.json"


def names(units: Iterable[Unit]) -> list[str]:
    """The files with data sheets."""
    return [name for file in dict.fromkeys(unit.file for unit in units) for name in names_of(file)]


def sheet(
    file: str,
    units: Sequence[Unit],
    outcome: Outcome,
    recordings: Mapping[tuple[str, str], Recording],
    boards: Sequence[Board],
    optimise: str,
) -> dict[str, Any]:
    """The data sheet of the routines of ``file``, in all languages in which they were written."""
    plans: dict[str, Plan] = {}
    for unit in sorted(units, key=lambda one: one.language):  # C before Python
        for plan in unit.plans:
            plans.setdefault(plan.spec.name, plan)
    rows = [row for row in outcome.rows if row.spec.file == file]
    reports = [report for report in outcome.boards if report.file == file]
    used = [board for board in boards if any(one.board == board.name for one in reports)]
    return {
        "made_by": f"{MARK} {__version__}",
        "file": file,
        "verdict": _verdict(rows, reports),
        "here": [_here(row) for row in rows],
        "files": [_file(name, text) for unit in units for name, text in unit.files.items()],
        "selftests": [_selftest(recordings[file, unit.language]) for unit in units],
        "arithmetic of all": _shared(list(plans.values())),
        "routines": [_routine(plan) for plan in plans.values()],
        "storage": _storage(list(plans.values())),
        "boards": [_board(report) for report in reports],
        "costs": [cost for report in reports for cost in _costs(report)],
        "flags of all": _flags(optimise, units),
        "toolchains": [_toolchain(board) for board in used],
        "cautions": [
            COUNTS_CAUTION + " Bytes and counts are of the compiler and flags that are named; "
            "another compiler gives others. The bits are the same with every compiler and "
            "processor that keeps to what the sources ask for.",
            CAUTION,
        ],
        "evidence": EVIDENCE,
    }


def _flags(optimise: str, units: Sequence[Unit]) -> list[str]:
    """The flags with which C files were compiled for every board."""
    free = any(unit.plans[0].spec.target.environment == "freestanding" for unit in units)
    return [*CONTRACT_FLAGS, optimise, *(["-ffreestanding"] if free else [])]


def _shared(plans: Sequence[Plan]) -> list[str]:
    """What is stated of the arithmetic of every routine, where there are several."""
    first, *others = plans
    return [line for line in first.order if others and all(line in one.order for one in others)]


def _file(name: str, text: str) -> dict[str, Any]:
    data = text.encode()
    return {"name": name, "bytes": len(data), "sha256": hashlib.sha256(data).hexdigest()}


# --- verdicts ------------------------------------------------------------------------------------


def _verdict(rows: Sequence[Row], reports: Sequence[Report]) -> str:
    verified = sum(row.status == "verified" for row in rows)
    agree = sum(report.verdict == "agrees" for report in reports)
    here = f"{verified} of {len(rows)} routines verified on the machine that made this sheet"
    if not reports:
        return f"{here}; tried on no board."
    return f"{here}; recorded bits agree on {agree} of {len(reports)} boards."


def _here(row: Row) -> dict[str, Any]:
    found: dict[str, Any] = {
        "routine": row.spec.name,
        "language": row.spec.language,
        "status": row.status,
    }
    if row.verdict is not None:
        found["cases"] = row.verdict.cases
        facts = row.verdict.levels[2].facts
        if "largest error / bound" in facts:
            found["largest error"] = f"{facts['largest error / bound']:.2g} of the bound"
    return found


def _selftest(recording: Recording) -> dict[str, Any]:
    language = recording.routines[0].plan.spec.language
    extension = LANGUAGES[language].extensions[0]
    return {
        "name": f"{recording.file}_selftest.{extension}",
        "cases": recording.cases,
        "tables": recording.bytes,
        "budget": recording.budget,
        "stack": recording.memory if language == "c" else None,
        "seed": recording.seed,
    }


# --- routines ------------------------------------------------------------------------------------


def _routine(plan: Plan) -> dict[str, Any]:
    spec = plan.spec
    rows = _rows(plan)
    bytes_of = memory_of(plan, rows)
    full = rows * rows * spec.arithmetic.type.size
    return {
        "name": spec.name,
        "formula": spec.operation.described(spec.layout),
        "prototype": prototype(plan) + ";",
        "n": rows,
        "n is": "fixed" if spec.layout.n != RUNTIME else f"passed; n = {rows} is an example",
        "dtype": spec.arithmetic.dtype,
        "arithmetic": list(plan.order),
        "counted from the plan": costs(plan),
        "arrays": [
            {
                "name": one.name,
                "use": one.use,
                "elements": extent_text(one.extent) if one.extent is not None else "",
                "bytes of an element": REAL_SIZE.get(one.type, 0) * one.parts,
                "bytes": bytes_of[one.name],
            }
            for one in plan.arrays.values()
        ],
        "ram": {"half": bytes_of["a"], "full": full, "saved": full - bytes_of["a"]},
        "error": error_bound(plan, rows),
    }


def _rows(plan: Plan) -> int:
    return USUAL_N if plan.spec.layout.n == RUNTIME else int(plan.spec.layout.n)


def _storage(plans: Sequence[Plan]) -> list[dict[str, Any]]:
    """Each way of storing once, with the routines that have it."""
    found: dict[tuple[str, ...], dict[str, Any]] = {}
    for plan in plans:
        layout = plan.spec.layout
        picture = storage.picture(layout)
        key = (layout.name, *layout.formula, *picture)
        one = found.setdefault(
            key,
            {
                "layout": f"{layout.name}, {layout.triangle} triangle, {layout.order}",
                "formula": list(layout.formula),
                "picture": picture,
                "routines": [],
            },
        )
        one["routines"].append(plan.spec.name)
    return list(found.values())


def error_bound(plan: Plan, rows: int) -> dict[str, Any]:
    """The published bound of the error as a formula, with its numbers; the bench checks by it.

    Whole and fixed-point numbers have their range instead, as the contract states it.
    """
    arithmetic, operation = plan.spec.arithmetic, plan.spec.operation
    if arithmetic.type.integer:
        return {"formula": _section(plan, "Range"), "source": "", "values": {}}
    roundings = operation.roundings(rows, arithmetic.type.parts)
    unit = Fraction(1, 2 ** REAL_DIGITS[arithmetic.real])
    values: dict[str, str] = {"m": str(roundings), "u": f"2^-{REAL_DIGITS[arithmetic.real]}"}
    told = "gamma(m) = m*u/(1 - m*u), G is the same result of absolute values"
    if arithmetic.compensated:
        few = 4 * arithmetic.type.parts
        formula = f"|error| <= gamma({few})*L + 2*gamma(m)^2*G; {told}, L what the last steps add"
        values |= {
            f"gamma({few})": _short(_gamma(few, unit)),
            "2*gamma(m)^2": _short(2 * _gamma(roundings, unit) ** 2),
        }
        return {"formula": [formula], "source": DOT2, "values": values}
    if arithmetic.sums != arithmetic.real:
        wide = Fraction(1, 2 ** REAL_DIGITS[arithmetic.sums])
        formula = (
            f"|error| <= u*|result| + 2*gamma(m)*G; {told}, with the u of the sums in gamma: "
            f"2^-{REAL_DIGITS[arithmetic.sums]}"
        )
        values["2*gamma(m)"] = _short(2 * _gamma(roundings, wide))
        return {"formula": [formula], "source": SOURCE, "values": values}
    values["gamma(m)"] = _short(_gamma(roundings, unit))
    return {"formula": [f"|error| <= gamma(m)*G; {told}"], "source": SOURCE, "values": values}


def _gamma(m: int, u: Fraction) -> Fraction:
    return m * u / (1 - m * u)


def _short(value: Fraction) -> str:
    return f"{float(value):.3g}"


def _section(plan: Plan, name: str) -> list[str]:
    """The lines of a section of the contract."""
    lines = contract(plan, LANGUAGES["c"], False)
    start = lines.index(f"{name}:") + 1
    end = lines.index("", start) if "" in lines[start:] else len(lines)
    return [" ".join(line.strip() for line in lines[start:end])]


# --- boards --------------------------------------------------------------------------------------


def _board(report: Report) -> dict[str, Any]:
    return {
        "board": report.board,
        "title": report.title,
        "language": report.language,
        "verdict": report.verdict,
        "message": report.message,
        "cases": report.cases,
    }


def _costs(report: Report) -> list[dict[str, Any]]:
    """What each routine costs on the board, as far as it is known."""
    return [_cost(report, one) for one in report.routines if one.sizes is not None or one.counts]


def _cost(report: Report, one: Figures) -> dict[str, Any]:
    found: dict[str, Any] = {"board": report.board, "routine": one.kernel, "n": one.n}
    if one.sizes is not None:
        sizes = one.sizes
        found |= {
            "code": sizes.code, "library": sizes.library, "constants": sizes.constants,
            "data": sizes.data, "stack": sizes.stack, "stack not counted": list(sizes.uncounted),
            "from the system": list(sizes.outside),
        }  # fmt: skip
    if one.counts is not None:
        counts = one.counts
        found |= {
            "instructions": counts.instructions, "loads": counts.loads, "stores": counts.stores,
        }  # fmt: skip
    if one.message:
        found["message"] = one.message
    return found


def _toolchain(board: Board) -> dict[str, Any]:
    """The programs that compiled for a board and emulated it, with their versions."""
    return {
        "board": board.name,
        "title": board.title,
        "compiler": _compiler(board.compiler) if board.compiler else board.npm,
        "flags": list(board.flags),
        "emulator": _version(board.emulator[0]),
    }


def _compiler(name: str) -> str:
    try:
        told = describe_compiler(name).version
    except MissingError:
        return f"{name} (not on this machine)"
    return told if told.startswith(name) else f"{name}: {told}"


def _version(name: str) -> str:
    try:
        said = subprocess.run(
            [name, "--version"], capture_output=True, text=True, errors="replace", check=False,
            timeout=60, stdin=subprocess.DEVNULL,
        ).stdout.splitlines()  # fmt: skip
    except (OSError, subprocess.SubprocessError):
        return f"{name} (not on this machine)"
    told = said[0].strip() if said else "unknown version"
    return told if name in told.lower() else f"{name}: {told}"
