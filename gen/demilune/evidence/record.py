"""The record of a run: what was asked, made, compiled, checked and found, as plain data.

It holds no date, no path and no duration, so that equal runs give equal bytes, and the SHA-256
of its own canonical form, so that damage and changes are noticed. That sum is no signature: who
changes a record on purpose can compute it anew, but a replay will then disagree.
"""

from __future__ import annotations

import hashlib
import json
import math
import platform
import re
from collections.abc import Iterator
from typing import Any

import numpy as np

from demilune import files
from demilune.bench.levels import Level
from demilune.bench.problem import sizes_to_try
from demilune.contract import CAUTION, specification
from demilune.errors import MissingError
from demilune.evidence.outcome import Outcome, Row
from demilune.evidence.statements import CALLED, STATEMENTS
from demilune.keys import RUNTIME
from demilune.languages import LANGUAGES
from demilune.toolchain.build import flags_for
from demilune.toolchain.compilers import find_compiler
from demilune.version import __version__

EVIDENCE = "evidence.json"
PAGE = "evidence.html"
FORMAT = 1
"""The version of the record's form; a change that an older reader cannot read raises it."""

REPLAY = f"demilune verify --replay {EVIDENCE}"
INFINITE = "infinite"
"""What stands for an error without end: JSON has no number for it."""

HOISTED = ("largest error / bound", "largest error in ulps", "results", "guard pages", "sizes")
"""Facts of a level that have a place of their own in the record."""
BY_SIZE = re.compile(r"error / bound for n = (\d+)")


def evidence_of(outcome: Outcome) -> dict[str, Any]:
    """The record of a run, sealed with its own SHA-256."""
    return sealed(
        {
            "made_by": f"{files.MARK} {__version__}",
            "format": FORMAT,
            "verdict": _verdict(outcome),
            "caution": CAUTION,
            "replay": REPLAY,
            "seed": outcome.seed,
            "files": list(_files(outcome)),
            "compiler": _compiler(outcome),
            "machine": machine(),
            "levels": [statement.record() for statement in STATEMENTS],
            "shared_by_all_levels": CALLED,
            "kernels": [kernel_record(row) for row in outcome.rows],
            "planted_faults": _planted_faults(outcome),
            "boards": [report.record() for report in outcome.boards],
            "not_checked": list(_not_checked(outcome)),
        }
    )


def canonical(record: dict[str, Any]) -> bytes:
    """What is hashed: the record without its sum, keys sorted, no spaces, ASCII only.

    Raises ValueError if it holds a number that JSON has not.
    """
    rest = {key: value for key, value in record.items() if key != "sha256"}
    return json.dumps(
        rest, sort_keys=True, separators=(",", ":"), ensure_ascii=True, allow_nan=False
    ).encode("ascii")


def digest(record: dict[str, Any]) -> str:
    """The SHA-256 of the canonical form, in hexadecimal."""
    return hashlib.sha256(canonical(record)).hexdigest()


def sealed(record: dict[str, Any]) -> dict[str, Any]:
    """The record with its own SHA-256, directly after what made it."""
    rest = {key: value for key, value in record.items() if key not in ("made_by", "sha256")}
    return {"made_by": record["made_by"], "sha256": digest(record), **rest}


def text_of(record: dict[str, Any]) -> str:
    """The record as the text of a file."""
    return json.dumps(record, indent=1, ensure_ascii=False) + "\n"


# --- parts ---------------------------------------------------------------------------------------


def _verdict(outcome: Outcome) -> str:
    counts = dict.fromkeys(("verified", "failed", "error", "left out"), 0)
    for row in outcome.rows:
        counts[row.status] += 1
    line = ", ".join(f"{count} {name}" for name, count in counts.items() if count)
    planted = _planted_faults(outcome)
    if planted is None:
        return line
    return f"{line}; {planted['caught']} of {planted['planted']} planted faults caught"


def _files(outcome: Outcome) -> Iterator[dict[str, Any]]:
    made = {name: text for unit in outcome.units for name, text in unit.files.items()}
    for name, text in sorted(made.items()):
        data = text.encode()
        yield {"name": name, "bytes": len(data), "sha256": hashlib.sha256(data).hexdigest()}


def _compiler(outcome: Outcome) -> dict[str, Any] | None:
    try:
        compiler = find_compiler()
    except MissingError:
        return None
    flags: dict[str, list[str]] = {}
    for unit in outcome.units:
        if LANGUAGES[unit.language].runs == "cffi" and unit.error is None:
            flags[unit.file] = list(flags_for(compiler, unit.plans))
    return {"name": clean(compiler.name), "version": clean(compiler.version), "flags": flags}


def machine() -> dict[str, str]:
    """This machine and the versions of what computes, which can decide over bits."""
    return {
        "processor": platform.machine(),
        "system": platform.system(),
        "python": platform.python_version(),
        "numpy": np.__version__,
    }


def kernel_record(row: Row) -> dict[str, Any]:
    """What was asked of one kernel, and what was found."""
    spec = row.spec
    record: dict[str, Any] = {
        "name": spec.name,
        "language": spec.language,
        "formula": spec.operation.described(spec.layout),
        "asked": "\n".join(specification(spec)),
        "specification": spec.values,
        "status": row.status,
    }
    if row.reason:
        record["reason"] = clean(row.reason)
    if row.verdict is not None:
        record["cases"] = row.verdict.cases
        record["sizes"] = sorted(set(sizes_to_try(row.plan)))
        record["levels"] = [_level(level) for level in row.verdict.levels]
    if row.trials is not None:
        record["planted_faults"] = [
            {
                "fault": trial.fault.name,
                "meaning": trial.fault.meaning,
                "caught": trial.caught,
                "caught_by": list(trial.caught_by),
                "message": clean(trial.message),
            }
            for trial in row.trials
        ]
    return record


def _level(level: Level) -> dict[str, Any]:
    facts = level.facts
    record: dict[str, Any] = {
        "name": level.name,
        "verdict": level.verdict,
        "cases": level.cases,
        "failed": level.failed,
        "failures": [clean(one) for one in level.failures],
        "skipped": clean(level.skipped),
    }
    if "results" in facts:
        record["results"] = facts["results"]
    if "sizes" in facts:
        record["sizes"] = plain(facts["sizes"])
    if "largest error / bound" in facts:
        by_size = {
            found[1]: plain(value)
            for name, value in facts.items()
            if (found := BY_SIZE.fullmatch(name))
        }
        record["largest_error"] = {
            "in_bounds": plain(facts["largest error / bound"]),
            "in_ulps": plain(facts["largest error in ulps"]),
            **({"in_bounds_by_n": by_size} if by_size else {}),
        }
    record["facts"] = {
        name: plain(value)
        for name, value in facts.items()
        if name not in HOISTED and not BY_SIZE.fullmatch(name)
    }
    return record


def _planted_faults(outcome: Outcome) -> dict[str, Any] | None:
    if not outcome.selfcheck:
        return None
    trials = [(row, trial) for row in outcome.rows for trial in row.trials or []]
    return {
        "planted": len(trials),
        "caught": sum(trial.caught for _, trial in trials),
        "survivors": [
            {"kernel": row.spec.name, "language": row.spec.language, "fault": trial.fault.name}
            for row, trial in trials
            if not trial.caught
        ],
        "untried": [
            {"kernel": row.spec.name, "language": row.spec.language, "why": clean(row.untried)}
            for row in outcome.rows
            if row.untried
        ],
    }


def _not_checked(outcome: Outcome) -> Iterator[dict[str, Any]]:
    for row in outcome.rows:
        yield from _not_checked_of(row)
    if not outcome.selfcheck:
        why = "--selfcheck was not given"
        yield _gap("whether the bench catches faults planted into these kernels", why)
    if any(RUNTIME in row.spec.values.values() for row in outcome.rows):
        yield _gap(
            "sizes, strides and scalars other than those tried",
            "what is passed at run time has no end; the sizes that were tried are listed",
        )
    yield _gap(
        "other compilers, flags and processors",
        "what is verified is what was compiled and run here; a replay elsewhere tells of there",
    )
    yield _gap(
        "speed, and rounding or flush-to-zero modes other than the default",
        "no level looks at them",
    )


def _not_checked_of(row: Row) -> Iterator[dict[str, Any]]:
    if row.verdict is None:
        yield _gap("every level", row.reason, row)
        return
    for level in row.verdict.levels:
        if level.skipped:
            part = "a part of " if level.cases else ""
            yield _gap(f"{part}level {level.name}", level.skipped, row)
        if "guard pages" in level.facts:
            yield _gap("guard pages around the arrays", str(level.facts["guard pages"]), row)
    if row.untried:
        yield _gap("planted faults", row.untried, row)


def _gap(what: str, why: str, row: Row | None = None) -> dict[str, Any]:
    names = (row.spec.name, row.spec.language) if row is not None else (None, None)
    return {"kernel": names[0], "language": names[1], "what": what, "why": clean(why)}


# --- plain data ----------------------------------------------------------------------------------

FOLDERS = re.compile(r"(?<![\w.)/])/(?=[\w.])(?:[^\s/:;,'\"()]+/)*")


def clean(text: str) -> str:
    """A text without the folders of paths, and with nothing that UTF-8 cannot hold."""
    return FOLDERS.sub("", text).encode("utf-8", "replace").decode("utf-8")


def plain(value: Any) -> Any:
    """A fact of the bench as something that JSON has."""
    if value is None or isinstance(value, bool):
        return value
    if isinstance(value, np.generic):
        return plain(value.item())
    if isinstance(value, int):
        return value
    if isinstance(value, float):
        return value if math.isfinite(value) else INFINITE if value > 0 else str(value)
    if isinstance(value, dict):
        return {str(key): plain(one) for key, one in value.items()}
    if isinstance(value, list | tuple | set | frozenset):
        return [plain(one) for one in value]
    return clean(str(value))
