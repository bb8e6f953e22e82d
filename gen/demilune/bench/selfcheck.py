"""Tries the bench on a kernel: every planted fault that applies to it must be caught."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, replace

from demilune.bench.faults import FAULTS, Fault
from demilune.bench.levels import verify
from demilune.plan.build import Plan
from demilune.render import render
from demilune.toolchain.build import Unit, build_units
from demilune.toolchain.executables import Executable


@dataclass(frozen=True)
class Trial:
    """What became of one planted fault."""

    fault: Fault
    caught_by: tuple[str, ...]
    """The levels that failed, to the first that should."""
    message: str
    """The first failure that a level which should catch it reported."""

    @property
    def caught(self) -> bool:
        """Whether a level that should catch it did."""
        return bool(set(self.caught_by) & set(self.fault.levels))

    def record(self) -> dict[str, object]:
        """The trial as plain data."""
        return {
            "fault": self.fault.name, "meaning": self.fault.meaning, "caught": self.caught,
            "caught by": list(self.caught_by), "message": self.message,
        }  # fmt: skip


def selfcheck(
    plan: Plan, seed: int = 1, progress: Callable[[str, int, int], None] = lambda *_: None
) -> list[Trial]:
    """Plants each fault that applies into the kernel, builds it and lets the bench look for it.

    Raises what building raises: :class:`~demilune.errors.MissingError` without a compiler.
    """
    planted: list[tuple[Fault, Plan]] = []
    for number, fault in enumerate(FAULTS.values()):
        changed = fault.apply(plan)
        if changed is not None:
            name = f"fault{number}"
            routine = replace(changed.routine, name=name)
            planted.append((fault, replace(changed, spec=replace(plan.spec, name=name),
                                           routine=routine)))  # fmt: skip
    executables = _built([changed for _, changed in planted])
    trials = []
    for done, ((fault, _), executable) in enumerate(zip(planted, executables, strict=True)):
        progress(f"planting {fault.name}", done, len(planted))
        verdict = verify(plan, executable, seed, until=fault.levels)
        failed = [level for level in verdict.levels if level.failed]
        wanted = [level for level in failed if level.name in fault.levels] or failed
        message = wanted[0].failures[0] if wanted else ""
        trials.append(Trial(fault, tuple(level.name for level in failed), message))
    return trials


def _built(plans: list[Plan]) -> list[Executable]:
    language = plans[0].spec.language
    files = render(plans, "faults", language, contracts=False)
    (unit,) = build_units([Unit("faults", language, plans, files)])
    if unit.error is not None:
        raise unit.error
    return unit.executables
