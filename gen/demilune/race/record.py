"""What a race found: timings, and for each kernel and size what it is held against."""

from __future__ import annotations

from dataclasses import dataclass, field
from typing import Any

import numpy as np

from demilune.errors import InputError
from demilune.race.entrants import LeftOut
from demilune.version import __version__


@dataclass(frozen=True)
class Timing:
    """One contestant at one size: the seconds of a call, round by round."""

    label: str
    kind: str
    """``kernel``, ``library``, ``whole`` (a library's product with all n*n elements), ``sum`` (the
    stored half summed) or ``peak`` (multiply-adds in registers)."""
    n: int
    calls: int
    """Calls of one slice; ``seconds`` are those of one call."""
    disturbed: int
    """Rounds in which another program had the processor for a part of the time."""
    seconds: tuple[float, ...]

    @property
    def median(self) -> float:
        """Seconds."""
        return float(np.median(self.seconds))

    @property
    def quartiles(self) -> tuple[float, float]:
        """Seconds that a quarter and three quarters of the rounds stay below."""
        low, high = np.percentile(self.seconds, [25, 75])
        return float(low), float(high)

    @property
    def spread(self) -> float:
        """The range between the quartiles as a part of the median."""
        low, high = self.quartiles
        return (high - low) / self.median

    def as_record(self) -> dict[str, Any]:
        return {
            "label": self.label, "kind": self.kind, "n": self.n, "calls": self.calls,
            "disturbed": self.disturbed,
            "median": self.median, "quartiles": list(self.quartiles), "samples": [*self.seconds],
        }  # fmt: skip


@dataclass(frozen=True)
class Row:
    """A kernel at a size, and what ran beside it in the same rounds."""

    kernel: str
    n: int
    sizes: dict[str, int]
    """Sizes beside n: ``kd``, ``ld``."""
    operations: int
    """The additions and multiplications that the job needs; a kernel may do more."""
    bytes: int
    """Bytes of the stored half."""
    time: Timing
    sum: Timing | None
    """The sum of as many numbers as are stored."""
    peak: float | None
    """Operations a second that multiply-adds in registers reach, with the widest vectors."""
    peers: dict[str, Timing]
    """By the library's name: its routine for the same job."""
    whole: dict[str, Timing]
    """By the library's name: its product with the whole matrix, where it was asked for."""

    @property
    def gflops(self) -> float:
        """Needed operations a nanosecond."""
        return self.operations / self.time.median / 1e9

    @property
    def of_sum(self) -> float | None:
        """The time to sum the stored half, as a part of the kernel's."""
        return None if self.sum is None else self.sum.median / self.time.median

    @property
    def of_peak(self) -> float | None:
        """The speed as a part of the peak."""
        return None if self.peak is None else self.operations / self.time.median / self.peak

    def ratio(self, library: str) -> float | None:
        """The time of a library's routine divided by the kernel's; None if it has none."""
        other = self.peers.get(library)
        return None if other is None else other.median / self.time.median

    def as_record(self) -> dict[str, Any]:
        def against(others: dict[str, Timing]) -> dict[str, Any]:
            return {
                name: {"timing": one.label, "ratio": one.median / self.time.median}
                for name, one in others.items()
            }

        return {
            "kernel": self.kernel, "n": self.n, "sizes": self.sizes, "seconds": self.time.median,
            "spread": self.time.spread, "operations": self.operations, "gflops": self.gflops,
            "bytes": self.bytes, "sum": None if self.sum is None else self.sum.label,
            "fraction of sum": self.of_sum,
            "peak gflops": None if self.peak is None else self.peak / 1e9,
            "fraction of peak": self.of_peak, "libraries": against(self.peers),
            "whole matrix": against(self.whole),
        }  # fmt: skip


@dataclass
class Race:
    """What was measured, where, when and how."""

    machine: dict[str, Any]
    date: str
    """ISO 8601, in universal time."""
    rounds: int
    slice_seconds: float
    """Seconds that a contestant runs before the next one does, at least."""
    kernels: dict[str, dict[str, Any]]
    """The specification of each kernel, as far as it differs from the defaults."""
    rows: list[Row] = field(default_factory=list)
    timings: list[Timing] = field(default_factory=list)
    left_out: list[LeftOut] = field(default_factory=list)

    @property
    def status(self) -> int:
        """The exit status: 1 if a check failed on the way, else 0."""
        return 1 if any(one.fault for one in self.left_out) else 0

    @property
    def disturbed(self) -> float:
        """The part of all slices in which another program had the processor for some time."""
        slices = self.rounds * len(self.timings)
        return sum(one.disturbed for one in self.timings) / slices if slices else 0.0

    @property
    def libraries(self) -> list[str]:
        """The libraries that have a routine for one of the kernels."""
        return list(dict.fromkeys(name for row in self.rows for name in row.peers))

    def row(self, kernel: str, n: int) -> Row:
        """The row of a kernel at a size; raises :class:`InputError` if it did not run there."""
        for one in self.rows:
            if one.kernel == kernel and one.n == n:
                return one
        raise InputError(f"{kernel} was not raced at n = {n}")

    def ratio(self, kernel: str, other: str, n: int) -> float:
        """The time of the kernel ``other`` divided by that of ``kernel``, of the same rounds."""
        return self.row(other, n).time.median / self.row(kernel, n).time.median

    def as_record(self) -> dict[str, Any]:
        """Everything as plain data; all times are in seconds."""
        return {
            "made by": f"Demilune {__version__}",
            "date": self.date,
            "machine": self.machine,
            "rounds": self.rounds,
            "slice seconds": self.slice_seconds,
            "kernels": self.kernels,
            "rows": [row.as_record() for row in self.rows],
            "timings": [one.as_record() for one in self.timings],
            "left out": [
                {"name": one.name, "reason": one.reason, "fault": one.fault}
                for one in self.left_out
            ],
        }
