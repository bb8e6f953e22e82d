"""What became of the kernels of one run, before it is written down."""

from __future__ import annotations

from dataclasses import dataclass, field

from demilune.bench.levels import Verdict
from demilune.bench.selfcheck import Trial
from demilune.boards.check import Report
from demilune.errors import DemiluneError, MissingError
from demilune.plan.build import Plan
from demilune.spec import Spec
from demilune.toolchain.build import Unit

BOARD_STATUS = {"agrees": "verified", "missing": "left out"}
"""What a verdict on a board means for the whole; all others are failures."""


@dataclass
class Row:
    """What became of one kernel."""

    plan: Plan
    verdict: Verdict | None = None
    error: DemiluneError | None = None
    trials: list[Trial] | None = None
    """The planted faults, if they were asked for and could be tried."""
    untried: str = ""
    """Why they could not."""

    @property
    def spec(self) -> Spec:
        return self.plan.spec

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

    @property
    def survivors(self) -> list[Trial]:
        """The planted faults that the bench did not catch: its debt."""
        return [trial for trial in self.trials or [] if not trial.caught]


@dataclass
class Outcome:
    """What became of all kernels."""

    units: list[Unit]
    rows: list[Row] = field(default_factory=list)
    seed: int = 1
    selfcheck: bool = False
    """Whether faults were planted."""
    boards: list[Report] = field(default_factory=list)
    """What became of the routines on boards."""

    @property
    def status(self) -> int:
        """The exit status: 0 all verified, 1 a check failed, 3 something was missing.

        A planted fault that survives is a check that failed: that of the bench.
        """
        found = {row.status for row in self.rows}
        found |= {BOARD_STATUS.get(report.verdict, "failed") for report in self.boards}
        verified = [row for row in self.rows if row.status == "verified"]
        if found & {"failed", "error"} or any(row.survivors or row.untried for row in verified):
            return 1
        return 3 if "left out" in found else 0

    @property
    def missing(self) -> list[str]:
        """What was missing, each thing once."""
        return list(dict.fromkeys(row.reason for row in self.rows if row.status == "left out"))

    @property
    def routines(self) -> list[Plan]:
        """The plans of what was verified."""
        return [row.plan for row in self.rows if row.status == "verified"]
