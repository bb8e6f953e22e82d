"""Instruction sets with vector registers: one table of primitives each, found by being there.

A file ``templates/c/isa/<name>.toml`` tells what a register is and how one is loaded, added,
multiplied and folded; lanes of a plan become as many registers as they need. The order of
arithmetic is the plan's, so that the same lanes give the same bits with every table.
"""

from __future__ import annotations

import platform
import re
import tomllib
from collections.abc import Mapping
from dataclasses import dataclass, field
from functools import cache
from pathlib import Path

from demilune.dtypes import lanes_of, real_of
from demilune.languages import TEMPLATES

PORTABLE = "portable"
NATIVE = "native"
"""The best of this machine, resolved when a specification is read."""


@dataclass(frozen=True)
class InstructionSet:
    """A table of primitives for one kind of vector register."""

    name: str
    title: str
    rank: int
    """Among those of one machine, the widest is the highest."""
    machines: tuple[str, ...]
    """Machines that may have it, as :func:`platform.machine` calls them; none is all."""
    flags: tuple[str, ...]
    """What the processor must have, as Linux lists it and compilers ask for it."""
    target: str
    """What compilers are told, so that files need no option."""
    header: str
    registers: Mapping[str, Mapping[str, str]] = field(compare=False, repr=False)
    """The primitives by type of register, such as ``float64x4``."""
    helpers: Mapping[str, str] = field(compare=False, repr=False)
    """Functions that the primitives call."""

    @property
    def compiles_here(self) -> bool:
        """Whether a compiler for this machine knows its instructions."""
        return not self.machines or platform.machine() in self.machines

    def widths(self, real: str) -> list[int]:
        """Lanes of the registers for a real type, from the narrowest to the widest."""
        return sorted(lanes_of(type) for type in self.registers if real_of(type) == real)

    def fuses(self, real: str) -> bool:
        """Whether it has a fused multiply-add."""
        return all("fma" in self.registers[f"{real}x{width}"] for width in self.widths(real))

    def width(self, type: str) -> int | None:
        """Lanes of the widest register that so many lanes fill without a rest."""
        fitting = [w for w in self.widths(real_of(type)) if lanes_of(type) % w == 0]
        return fitting[-1] if fitting else None

    @property
    def here(self) -> bool:
        """Whether this machine can run it, as far as can be told."""
        return self.compiles_here and set(self.flags) <= processor_flags()

    def functions(self, text: str) -> dict[str, str]:
        """The helper functions that ``text`` calls, each after those that it calls itself."""
        found: dict[str, str] = {}
        for name, source in self.helpers.items():
            if re.search(rf"\b{name}\(", text):
                found |= self.functions(source.replace(f" {name}(", ""))
                found[name] = source.strip("\n")
        return found


@cache
def processor_flags() -> frozenset[str]:
    """What Linux says this processor has; nothing elsewhere."""
    try:
        text = Path("/proc/cpuinfo").read_text(encoding="ascii", errors="ignore")
    except OSError:
        return frozenset()
    found = re.search(r"^(?:flags|Features)\s*:(.*)$", text, re.MULTILINE)
    return frozenset(found[1].split()) if found else frozenset()


def _read(path: Path) -> InstructionSet:
    facts = tomllib.loads(path.read_text(encoding="utf-8"))
    return InstructionSet(
        name=path.stem,
        title=facts["title"],
        rank=facts["rank"],
        machines=tuple(facts["machines"]),
        flags=tuple(facts["flags"]),
        target=facts["target"],
        header=facts["header"],
        registers={name: one for name, one in facts.items() if re.match(r"float\d+x\d+$", name)},
        helpers=facts.get("functions", {}),
    )


INSTRUCTION_SETS: dict[str, InstructionSet] = {
    one.name: one
    for one in sorted(
        (_read(path) for path in (TEMPLATES / "c" / "isa").glob("*.toml")),
        key=lambda one: (one.rank, one.name),
    )
}


def native() -> InstructionSet:
    """The best instruction set of this machine."""
    return max((one for one in INSTRUCTION_SETS.values() if one.here), key=lambda one: one.rank)


def chosen_at_run_time() -> list[InstructionSet]:
    """The x86-64 sets that one file can hold together, the best first, the portable last."""
    kept = [one for one in INSTRUCTION_SETS.values() if not one.machines or one.flags]
    return sorted(kept, key=lambda one: -one.rank)


def is_primitive(name: str) -> bool:
    """Whether a file with lanes may use the name itself."""
    if re.search(r"float(32|64)x\d+", name):
        return True
    return any(name == one or name.startswith(f"{one}_") for s in INSTRUCTION_SETS.values()
               for one in s.helpers)  # fmt: skip
