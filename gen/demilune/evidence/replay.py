"""Repeats a recorded run and compares: sources, bits of all results, verdicts, planted faults."""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass, field
from typing import Any

from demilune.errors import InputError, SpecError
from demilune.evidence.outcome import Outcome
from demilune.evidence.record import evidence_of
from demilune.pipeline import Progress, check, silent
from demilune.spec import Spec, make_spec

AGREES, DIFFERS, NOTHING, LEFT_OUT = "every bit agreed", "differs", "nothing to compare", "left out"


@dataclass
class Repeated:
    """What the replay found of one kernel."""

    name: str
    language: str
    found: str
    """``every bit agreed``, ``differs``, ``nothing to compare`` (no bits were recorded), or
    ``left out`` (something is missing here)."""
    recorded_status: str
    status: str
    differences: list[str] = field(default_factory=list)
    reason: str = ""
    """Why it was left out."""


@dataclass
class Replay:
    """What a replay found."""

    recorded: dict[str, Any]
    outcome: Outcome
    record: dict[str, Any]
    """The record of the repeated run."""
    kernels: list[Repeated]
    files: list[str]
    """What differs in the files that were made."""

    @property
    def agrees(self) -> bool:
        """Whether every recorded bit, and every byte of every source, agreed."""
        found = {one.found for one in self.kernels}
        return not self.files and AGREES in found and found <= {AGREES, NOTHING}

    @property
    def status(self) -> int:
        """The exit status: 1 if anything differs or fails, 3 if something was missing."""
        found = {one.found for one in self.kernels}
        if self.files or DIFFERS in found:
            return 1
        return self.outcome.status or (0 if self.agrees else 1)

    @property
    def verdict(self) -> str:
        """The outcome in one line."""
        counts = {
            found: sum(one.found == found for one in self.kernels)
            for found in (AGREES, DIFFERS, NOTHING, LEFT_OUT)
        }
        others = [f"{word}: {n}" for word, n in counts.items() if n and word != AGREES]
        kernels = f"{AGREES} in {counts[AGREES]} of {len(self.kernels)} kernels"
        total = len(self.record["files"])
        if self.files:
            sources = f"source files that differ: {len(self.files)}"
        else:
            sources = f"{total} of {total} source files agreed"
        return "; ".join([kernels, *others, sources])

    @property
    def surroundings(self) -> list[str]:
        """In what the two runs differ beside their results, which may be why they do."""
        return list(_surroundings(self.recorded, self.record))

    def as_record(self) -> dict[str, Any]:
        """The replay as plain data."""
        return {
            "replayed": self.recorded["sha256"],
            "agrees": self.agrees,
            "verdict": self.verdict,
            "files": self.files,
            "kernels": [
                {
                    "name": one.name,
                    "language": one.language,
                    "found": one.found,
                    "recorded status": one.recorded_status,
                    "status": one.status,
                    "differences": one.differences,
                    **({"reason": one.reason} if one.reason else {}),
                }
                for one in self.kernels
            ],
            "surroundings": self.surroundings,
        }


def replay(recorded: dict[str, Any], progress: Progress = silent) -> Replay:
    """Repeats the run of a checked record: same specifications, seed and planted faults."""
    outcome = check(
        specs_of(recorded), recorded["seed"], progress,
        selfcheck=recorded["planted_faults"] is not None,
    )  # fmt: skip
    record = evidence_of(outcome)
    here = {(one["name"], one["language"]): one for one in record["kernels"]}
    reasons = {(row.spec.name, row.spec.language): row.reason for row in outcome.rows}
    kernels = []
    for old in recorded["kernels"]:
        key = old["name"], old["language"]
        kernels.append(_repeated(old, here[key], reasons[key]))
    files = list(_file_differences(recorded["files"], record["files"]))
    return Replay(recorded, outcome, record, kernels, files)


def specs_of(recorded: dict[str, Any]) -> list[Spec]:
    """The specifications of a record; raises :class:`InputError` if they are none."""
    specs: dict[tuple[str, str], Spec] = {}
    for one in recorded["kernels"]:
        values = one["specification"]
        if "name" in values:
            raise InputError('malformed: a specification has no key "name"')
        try:
            spec = make_spec(one["name"], **values)
        except SpecError as error:
            raise InputError(f"its specification is refused: {error.problems[0]}") from error
        key = spec.language, spec.name.lower()
        if spec.language != one["language"] or key in specs:
            raise InputError(f"malformed: kernel {spec.name} ({spec.language}) is not clear")
        specs[key] = spec
    return list(specs.values())


def _repeated(old: dict[str, Any], new: dict[str, Any], reason: str) -> Repeated:
    result = Repeated(old["name"], old["language"], AGREES, old["status"], new["status"])
    levels = old.get("levels", [])
    if not any("results" in level for level in levels):
        result.found = NOTHING
        return result
    if new["status"] in ("left out", "error"):
        result.found = LEFT_OUT if new["status"] == "left out" else DIFFERS
        result.reason = reason
        return result
    result.differences = [*_level_differences(levels, new.get("levels", [])), *_planted(old, new)]
    if result.differences:
        result.found = DIFFERS
    return result


def _level_differences(old: list[dict[str, Any]], new: list[dict[str, Any]]) -> Iterator[str]:
    here = {level["name"]: level for level in new}
    for level in old:
        name, found = level["name"], here.pop(level["name"], None)
        if found is None:
            yield f"level {name} is not run here"
            continue
        if level.get("results") != found.get("results"):
            before, after = (one.get("results", "none")[:16] for one in (level, found))
            yield f"level {name}: other bits (SHA-256 recorded {before}, here {after})"
        if level["verdict"] != found["verdict"]:
            why = (found["failures"] or [found["skipped"]])[0]
            yield (
                f"level {name}: recorded {level['verdict']}, here {found['verdict']}"
                + (f": {why}" if why else "")
            )
    for name in here:
        yield f"level {name} was not recorded"


def _planted(old: dict[str, Any], new: dict[str, Any]) -> Iterator[str]:
    before, after = (
        {trial["fault"]: (trial["caught"], trial["caught_by"]) for trial in trials}
        for trials in (old.get("planted_faults", []), new.get("planted_faults", []))
    )
    for fault in sorted(before.keys() | after.keys()):
        if before.get(fault) != after.get(fault):
            told = [_caught(one.get(fault)) for one in (before, after)]
            yield f"planted fault {fault}: recorded {told[0]}, here {told[1]}"


def _caught(found: tuple[bool, list[str]] | None) -> str:
    if found is None:
        return "not planted"
    return f"{'caught' if found[0] else 'not caught'} (levels: {', '.join(found[1]) or 'none'})"


def _file_differences(old: list[dict[str, Any]], new: list[dict[str, Any]]) -> Iterator[str]:
    before, after = ({one["name"]: one["sha256"] for one in files} for files in (old, new))
    for name in sorted(before.keys() | after.keys()):
        if name not in after:
            yield f"{name} was recorded and is not made here"
        elif name not in before:
            yield f"{name} is made here and was not recorded"
        elif before[name] != after[name]:
            yield f"{name}: other bytes (SHA-256 recorded {before[name][:16]}, here " + (
                f"{after[name][:16]})"
            )


def _surroundings(old: dict[str, Any], new: dict[str, Any]) -> Iterator[str]:
    pairs = {"made by": (old["made_by"], new["made_by"])}
    pairs |= {name: (old["machine"][name], new["machine"][name]) for name in new["machine"]}
    compilers = [one["compiler"] or {"version": "none", "flags": {}} for one in (old, new)]
    pairs["compiler"] = (compilers[0]["version"], compilers[1]["version"])
    flags = [
        " ".join(dict.fromkeys(flag for each in one["flags"].values() for flag in each)) or "none"
        for one in compilers
    ]
    pairs["flags"] = (flags[0], flags[1])
    for name, (before, after) in pairs.items():
        if before != after:
            yield f"{name}: recorded {before}, here {after}"
