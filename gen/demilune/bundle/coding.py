"""Coding rules: what the checkers of this machine print about a bundle, each with its reason."""

from __future__ import annotations

import re
import shutil
import subprocess
import textwrap
from collections import Counter
from collections.abc import Callable, Iterable, Mapping, Sequence
from concurrent.futures import ThreadPoolExecutor
from dataclasses import dataclass, field
from os import cpu_count
from pathlib import Path
from tempfile import TemporaryDirectory
from typing import Any

from demilune.bundle.reasons import REASONS
from demilune.contract import CAUTION
from demilune.files import MARK
from demilune.pipeline import Progress, silent
from demilune.plan.tree import uses_fma
from demilune.toolchain.build import Unit
from demilune.toolchain.compilers import CONTRACT_FLAGS, machine_flags
from demilune.version import __version__

PAGE = "deviations.md"
HEAD = (
    "Every rule that a checker named when it looked at the C files of this folder, with the reason "
    "why it is deviated from. The page is made from what the checkers printed; each file was "
    "checked by itself, with its header, the self-tests with fewer vectors. What a rule is about, "
    "and its category, is told from memory and in our own words: the text of the guidelines "
    "decides. A checker checks a part of a guideline only, and what it does not find may be there."
)
SECONDS = 300
WARNED = re.compile(r"^(?P<file>[^:\s]+):\d+(?::\d+)?: (?:\w+ )*(?:warning|error): (?P<text>.*)$")
NAMED = re.compile(r"\[(?P<rules>-?[\w.,+=-]+)\]$")
CPPCHECK = re.compile(r"^(?P<file>[^:]+):\d+: (?P<rule>[\w.-]+): ")


@dataclass(frozen=True)
class Checker:
    """A program that checks sources: how it is called, and what brings it."""

    name: str
    title: str
    package: str
    command: Callable[[str, Sequence[str]], list[str]]
    """From a file and the compiler flags that it needs."""


CHECKERS = (
    Checker(
        "cppcheck", "MISRA C:2012 as far as cppcheck's addon checks it, and its own checks",
        "cppcheck",
        lambda file, flags: [
            "cppcheck", "--addon=misra", "--std=c99", "--enable=warning,style,portability",
            "--quiet", "--template={file}:{line}: {id}: {message}", file,
        ],
    ),
    Checker(
        "clang-tidy", "the checks bugprone-* and cert-* of clang-tidy", "clang-tidy",
        lambda file, flags: [
            "clang-tidy", "-quiet", "--checks=-*,bugprone-*,cert-*", file, "--", *flags,
        ],
    ),
    Checker(
        "gcc", "gcc -fanalyzer, with -Wall -Wextra", "gcc",
        lambda file, flags: [
            "gcc", *flags, "-O2", "-fanalyzer", "-Wall", "-Wextra", "-c", file, "-o", "/dev/null",
        ],
    ),
    Checker(
        "clang", "clang --analyze", "clang",
        lambda file, flags: [
            "clang", "--analyze", *flags, "--analyzer-output", "text", file,
        ],
    ),
)  # fmt: skip


@dataclass
class Findings:
    """What one checker printed about all files."""

    checker: Checker
    version: str | None = None
    """None where the checker is not on this machine."""
    found: dict[str, Counter[str]] = field(default_factory=dict)
    """How often a rule was named, by rule and file."""
    failed: dict[str, str] = field(default_factory=dict)
    """Files that it could not check, and what it said."""

    @property
    def unexplained(self) -> list[str]:
        """Rules for which there is no reason."""
        return [rule for rule in self.found if rule not in REASONS]

    def as_record(self) -> dict[str, Any]:
        """The findings as plain data for JSON."""
        return {
            "checker": self.checker.name,
            "version": self.version,
            "found": {rule: dict(files) for rule, files in self.found.items()},
            "failed": self.failed,
            "without a reason": self.unexplained,
        }


def check(
    sources: Mapping[str, str], units: Iterable[Unit], progress: Progress = silent
) -> list[Findings]:
    """Lets every checker look at the C files of a bundle, each file by itself."""
    flags = {name: _flags(unit) for unit in units if unit.language == "c" for name in _own(unit)}
    all_findings = [Findings(checker) for checker in CHECKERS]
    if not flags:
        return []
    headers = {name: text for name, text in sources.items() if name.endswith(".h")}
    work = []
    for findings in all_findings:
        if shutil.which(findings.checker.name) is not None:
            findings.version = _version(findings.checker.name)
            work += [(findings, name) for name in flags]

    def run(one: tuple[Findings, str]) -> tuple[int, str]:
        findings, name = one
        return _run(findings.checker, name, flags[name], {**headers, name: sources[name]})

    with ThreadPoolExecutor(cpu_count() or 1) as pool:
        answers = zip(work, pool.map(run, work), strict=True)
        for number, ((findings, name), said) in enumerate(answers):
            progress(f"{findings.checker.name}: {name}", number + 1, len(work))
            _gather(findings, name, *said)
    for one in all_findings:
        one.found = {rule: one.found[rule] for rule in sorted(one.found, key=_order)}
    return all_findings


def _own(unit: Unit) -> list[str]:
    """The C files of a unit; headers are checked with them."""
    return [f"{unit.file}.c", f"{unit.file}_selftest.c"]


def _flags(unit: Unit) -> list[str]:
    free = unit.plans[0].spec.target.environment == "freestanding"
    fma = any(uses_fma(plan.routine) for plan in unit.plans)
    return [*CONTRACT_FLAGS, *(["-ffreestanding"] if free else []), *machine_flags(fma)]


def _version(program: str) -> str:
    said = subprocess.run(
        [program, "--version"], capture_output=True, text=True, check=False, timeout=SECONDS,
        stdin=subprocess.DEVNULL,
    ).stdout.splitlines()  # fmt: skip
    told = [line.strip() for line in said if re.search(r"\d\.\d", line)]
    return told[0] if told else "unknown version"


def _run(
    checker: Checker, name: str, flags: Sequence[str], texts: Mapping[str, str]
) -> tuple[int, str]:
    """What a checker says of a file, in a folder of its own: some leave files for later runs."""
    with TemporaryDirectory(prefix="demilune-rules-") as folder:
        for other, text in texts.items():
            (Path(folder) / other).write_text(text, encoding="utf-8")
        try:
            done = subprocess.run(
                checker.command(name, flags), cwd=folder, capture_output=True, text=True,
                errors="replace", check=False, timeout=SECONDS, stdin=subprocess.DEVNULL,
            )  # fmt: skip
        except subprocess.TimeoutExpired:
            return 1, f"{name}:1: error: {checker.name} did not end within {SECONDS} s"
        return done.returncode, (done.stdout + done.stderr).replace(f"{folder}/", "")


def _gather(findings: Findings, name: str, status: int, text: str) -> None:
    """Counts the rules that a checker named; what stops it is told as it said it."""
    errors = [line for line in text.splitlines() if re.search(r":\d+: (fatal )?error: ", line)]
    if errors or (status and findings.checker.name != "cppcheck"):
        told = errors or text.splitlines() or [f"exit {status}"]
        findings.failed[name] = " ".join(told[0].split())
        return
    for line in text.splitlines():
        for file, rule in named(line):
            findings.found.setdefault(rule, Counter())[file] += 1


def named(line: str) -> list[tuple[str, str]]:
    """The file and the rules that a line of a checker's output names; none if it is no finding."""
    own = CPPCHECK.match(line)
    if own and own["rule"] not in ("warning", "error", "note"):
        return [(own["file"], own["rule"])]
    warned = WARNED.match(line)
    if warned is None:
        return []
    rules = NAMED.search(warned["text"])
    names = rules["rules"].split(",") if rules else ["without a name"]
    return [(warned["file"], rule) for rule in names]


def _order(rule: str) -> tuple[str, list[int]]:
    """Rules by what they are called, then by their numbers."""
    name, _, numbers = rule.rpartition("-")
    if re.fullmatch(r"\d+\.\d+", numbers):
        return name, [int(one) for one in numbers.split(".")]
    return rule, []


# --- the page ------------------------------------------------------------------------------------


def page(findings: Sequence[Findings]) -> str:
    """The page of deviations, in Markdown."""
    lines = [
        f"<!-- {MARK} {__version__} (demilune bundle) -->",
        "# Coding rules: deviations",
        "",
        *textwrap.wrap(HEAD, 100),
    ]
    if not findings:
        lines += ["", "There is no C file."]
    for one in findings:
        lines += ["", f"## {one.checker.title}", ""]
        if one.version is None:
            lines += [
                f"Not checked: {one.checker.name} is not on this machine. Install it, for example",
                f"with: apt-get install --no-install-recommends {one.checker.package}",
            ]
            continue
        lines += [f"{one.version}:", "", f"    {_shown(one.checker)}", ""]
        lines += [f"Not checked: {name}: {why}" for name, why in one.failed.items()]
        lines += _table(one)
    return "\n".join([*lines, "", *textwrap.wrap(CAUTION, 100)]) + "\n"


def _shown(checker: Checker) -> str:
    words = checker.command("FILE.c", [*CONTRACT_FLAGS, "..."])
    return " ".join(f"'{word}'" if set(word) & set("{}* ") else word for word in words)


def _table(one: Findings) -> list[str]:
    if not one.found:
        return [] if one.failed else ["Clean: it named no rule."]
    lines = ["| rule | about | where | reason |", "| --- | --- | --- | --- |"]
    for rule, places in one.found.items():
        reason = REASONS.get(rule)
        where = ", ".join(f"{file} ({count})" for file, count in sorted(places.items()))
        about, why = (reason.about, reason.why) if reason else ("", "**None yet; look at it.**")
        if reason and reason.category:
            about = f"{about} ({reason.category})"
        lines.append(f"| {rule.replace('misra-c2012-', '')} | {about} | {where} | {why} |")
    return lines
