"""For which machine: language, environment, instruction set, and the files routines go to."""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass

from demilune.arithmetic import Arithmetic
from demilune.dtypes import with_lanes
from demilune.isa import INSTRUCTION_SETS, NATIVE, PORTABLE, InstructionSet, chosen_at_run_time
from demilune.keys import RUNTIME, key
from demilune.languages import LANGUAGES


@dataclass(frozen=True)
class Target:
    """Where a routine is to run."""

    language: str = key("c", "language of the source", words=tuple(LANGUAGES))
    environment: str = key(
        "hosted", "hosted, or freestanding: no header but stdint.h and stddef.h",
        words=("hosted", "freestanding"),
    )  # fmt: skip
    isa: str = key(
        PORTABLE,
        'instructions for lanes; "native" is the best of this machine, "runtime" holds several '
        "and chooses when it is called",
        words=(*INSTRUCTION_SETS, NATIVE, RUNTIME),
    )
    file: str | None = key(
        None, "name of the file that routines share; else one for each", text=True
    )

    @property
    def instruction_sets(self) -> list[InstructionSet]:
        """The sets that a file holds code for, the best first."""
        return chosen_at_run_time() if self.isa == RUNTIME else [INSTRUCTION_SETS[self.isa]]

    def problems(self, arithmetic: Arithmetic) -> Iterator[tuple[str, str]]:
        """Pairs of a key and why its value cannot be."""
        if self.isa == PORTABLE or arithmetic.lanes == 1:
            return  # without lanes there is nothing that vector instructions would do
        if self.language != "c":
            yield "isa", f'vector instructions are for C; with "{self.language}" use "portable"'
        elif self.environment == "freestanding":
            yield "isa", 'vector instructions need their header; freestanding files are "portable"'
        elif arithmetic.type.integer:
            yield "isa", "vector instructions are for floating-point types"
        elif arithmetic.accumulator == "plain":
            for one in self.instruction_sets:
                if one.width(with_lanes(arithmetic.real, arithmetic.lanes)) is None:
                    widths = " or ".join(map(str, one.widths(arithmetic.real)))
                    yield (
                        "lanes",
                        f'a register of "{one.name}" has {widths} lanes of {arithmetic.real}; use '
                        f"a multiple of one, not {arithmetic.lanes}",
                    )
                    return
                if arithmetic.fma and not one.fuses(arithmetic.real):
                    yield "fma", f'"{one.name}" has no fused multiply-add; leave fma at false'
                    return
