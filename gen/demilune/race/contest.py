"""Kernels, libraries and limits, measured by turns."""

from __future__ import annotations

import datetime
from collections.abc import Callable, Iterable, Mapping, Sequence
from dataclasses import dataclass, field
from typing import Any

import numpy as np
import numpy.typing as npt

from demilune.errors import InputError
from demilune.keys import RUNTIME
from demilune.pipeline import Progress, silent
from demilune.race.contestants import (
    Contestant,
    kernel_contestant,
    library_contestant,
    peak_contestant,
    set_team,
    sum_contestant,
    whole_contestant,
)
from demilune.race.driver import Driver
from demilune.race.entrants import Entrant, LeftOut, entrants
from demilune.race.machine import machine
from demilune.race.peers import LETTERS, Library
from demilune.race.peers import libraries as all_libraries
from demilune.race.record import Race, Row, Timing
from demilune.race.values import Memory, shaped, sizes_at, stored, useful, values_for
from demilune.spec import Spec
from demilune.toolchain.build import flags_for
from demilune.toolchain.compilers import find_compiler

Array = npt.NDArray[Any]
ROUNDS, SLICE = 11, 0.002
SIZES = (64, 128, 256, 512, 1024, 2048)
FEWEST_SUMMED = 256
"""Numbers below which a sum is no limit: there the call itself is what takes the time."""
ROUNDINGS = 16
"""What two right results may differ by beside one rounding for each of n terms."""


def race(
    specs: Iterable[Spec],
    sizes: Sequence[int] | None = None,
    libraries: Sequence[Library] | None = None,
    *,
    kd: int | None = None,
    ld: int | None = None,
    rounds: int = ROUNDS,
    slice_seconds: float = SLICE,
    whole: bool = False,
    progress: Progress = silent,
) -> Race:
    """Measures kernels against libraries and limits at each size n, all by turns.

    Every kernel is verified first, and its result is compared with that of each library. Kernels
    of a fixed n run at that n alone. ``libraries`` are all of this machine unless they are given;
    ``kd`` and ``ld`` are for kernels that leave them open. A contestant runs for ``slice_seconds``
    (and five calls) before the next one does, in so many ``rounds``. With ``whole`` a library's
    product with all n*n elements runs too. Everything has as many threads as the kernel is
    specified for: one, unless it says more.
    """
    specs = list(specs)
    if rounds < 1 or not slice_seconds > 0:
        raise InputError("at least one round and slices of some seconds are needed")
    shape = {name: size for name, size in (("kd", kd), ("ld", ld)) if size is not None}
    shaped(specs, shape)
    wanted = _sizes(specs, sizes)
    peers = all_libraries() if libraries is None else list(libraries)
    runs, left_out = entrants(specs, progress)
    found = Race(machine(peers), _now(), rounds, slice_seconds, _described(runs), left_out=left_out)
    for done, n in enumerate(wanted):
        here = [one for one in runs if one.plan.spec.layout.n == n]
        if sizes is None or n in sizes:
            here += [one for one in runs if one.plan.spec.layout.n == RUNTIME]
        if here:
            progress(f"n = {n}", done, len(wanted))
            one = _Size(found, here, n, peers, shape, whole)
            one.compare()
            one.measure(
                lambda turn: progress(f"n = {n}, round {turn} of {rounds}", done, len(wanted))
            )
    progress("done", len(wanted), len(wanted))
    return found


def _sizes(specs: Sequence[Spec], sizes: Sequence[int] | None) -> list[int]:
    """The sizes to run at, those that specifications fix among them."""
    fixed = {int(spec.layout.n) for spec in specs if spec.layout.n != RUNTIME}
    leaves_open = any(spec.layout.n == RUNTIME for spec in specs)
    if sizes is not None:
        wrong = [n for n in sizes if n < 1]
        if wrong or not sizes:
            raise InputError(f"sizes are whole numbers from 1, not {wrong[0] if wrong else 'none'}")
        if not leaves_open:
            raise InputError("every kernel has a fixed n; no sizes can be told for the race")
    return sorted(fixed | set((SIZES if sizes is None else sizes) if leaves_open else ()))


def _now() -> str:
    return datetime.datetime.now(datetime.UTC).isoformat(timespec="seconds")


def _described(runs: Iterable[Entrant]) -> dict[str, dict[str, Any]]:
    """The specifications and how the kernels were compiled."""
    compiler = find_compiler()
    return {
        one.plan.spec.name: {
            **one.plan.spec.stated,
            "compiler flags": " ".join(flags_for(compiler, [one.plan])),
        }
        for one in runs
    }


@dataclass
class _Runner:
    """A kernel at the size that is measured, and the places of what it is held against."""

    entrant: Entrant
    sizes: dict[str, Any]
    place: int = -1
    sum: int | None = None
    peak: tuple[int, int] | None = None
    peers: dict[str, int] = field(default_factory=dict)
    whole: dict[str, int] = field(default_factory=dict)


class _Size:
    """All that happens at one size."""

    def __init__(
        self,
        found: Race,
        kernels: Sequence[Entrant],
        n: int,
        libraries: Sequence[Library],
        shape: Mapping[str, int],
        whole: bool,
    ) -> None:
        self.found, self.n, self.libraries = found, n, libraries
        self.contestants: list[Contestant] = []
        self.kinds: list[str] = []
        self._places: dict[Any, int] = {}
        self.memory = Memory()
        self.runners = [_Runner(one, sizes_at(one.plan.spec, n, shape)) for one in kernels]
        self.with_whole = {
            id(one)
            for one in self.runners
            if whole and (spec := one.entrant.plan.spec).operation.name == "matvec"
            and spec.layout.whole and spec.arithmetic.dtype in LETTERS
        }  # fmt: skip
        for one in self.runners:
            self.memory.reserve_for(one.entrant.plan, one.sizes)
            dtype = one.entrant.plan.spec.arithmetic.dtype
            self.memory.reserve("a", dtype, stored(one.entrant.plan, one.sizes))
            if id(one) in self.with_whole:
                self.memory.reserve("a", dtype, n * n)
        self.memory.check(n)
        for one in self.runners:
            self._enter(one)
        self.driver = Driver(self.contestants)

    def _add(self, kind: str, key: Any, make: Any) -> int | None:
        """The place of a contestant, which is made unless it is there already."""
        if key not in self._places:
            made = make()
            if made is None:
                return None
            for number in range(2, len(self.contestants) + 2):
                if all(one.label != made.label for one in self.contestants):
                    break
                made.label = f"{made.label.split(' #')[0]} #{number}"
            self._places[key] = len(self.contestants)
            self.contestants.append(made)
            self.kinds.append(kind)
        return self._places[key]

    def _enter(self, one: _Runner) -> None:
        plan, spec = one.entrant.plan, one.entrant.plan.spec
        values = values_for(plan, one.sizes, self.memory)
        kernel = kernel_contestant(plan, one.entrant.path, values)
        one.place = self._add("kernel", spec.name, lambda: kernel) or 0
        threads = spec.schedule.threads
        for library in self.libraries:
            peer = library_contestant(library, spec, values)
            if peer is not None:
                key: Any = (peer.address, threads, peer.plain_arguments[1:], peer.label)
                place = self._add("library", key, lambda: peer)
                if place is not None:
                    one.peers[library.name] = place
            if id(one) in self.with_whole:
                dtype = spec.arithmetic.dtype
                matrix = {**values, "whole": self.memory.array("a", dtype)[: self.n**2]}
                key = ("whole", library.name, dtype, threads)
                place = self._add("whole", key, lambda: whole_contestant(library, spec, matrix))
                if place is not None:
                    one.whole[library.name] = place
        if not spec.arithmetic.type.integer:
            self._limits(one)

    def _limits(self, one: _Runner) -> None:
        plan, arithmetic = one.entrant.plan, one.entrant.plan.spec.arithmetic
        real = arithmetic.real
        peak, operations = peak_contestant(real)
        place = self._add("peak", ("peak", real), lambda: peak)
        one.peak = None if place is None else (place, operations)
        count = stored(plan, one.sizes) * arithmetic.type.parts
        if count >= FEWEST_SUMMED:
            array = self.memory.array("a", arithmetic.dtype).view(real)
            one.sum = self._add("sum", (real, count), lambda: sum_contestant(real, array, count))

    def measure(self, told: Callable[[int], None]) -> None:
        """Times everything, and notes what it found; ``told`` hears of each round."""
        driver = self.driver
        calls = [driver.calls(e, self.found.slice_seconds) for e in range(len(self.contestants))]
        seconds, disturbed = driver.interleaved(calls, self.found.rounds, told)
        timings = [
            Timing(one.label, kind, self.n, count, late, tuple(map(float, column)))
            for one, kind, count, late, column in zip(
                self.contestants, self.kinds, calls, disturbed, seconds.T, strict=True
            )
        ]
        self.found.timings += timings
        for one in self.runners:
            self.found.rows.append(self._row(one, timings))

    def _row(self, one: _Runner, timings: list[Timing]) -> Row:
        plan = one.entrant.plan
        return Row(
            kernel=plan.spec.name,
            n=self.n,
            sizes={name: int(one.sizes[name]) for name in ("kd", "ld") if name in one.sizes},
            operations=useful(plan, one.sizes),
            bytes=stored(plan, one.sizes) * plan.spec.arithmetic.type.size,
            time=timings[one.place],
            sum=None if one.sum is None else timings[one.sum],
            peak=None if one.peak is None else one.peak[1] / timings[one.peak[0]].median,
            peers={name: timings[place] for name, place in one.peers.items()},
            whole={name: timings[place] for name, place in one.whole.items()},
        )

    # --- are all doing the same job? ---------------------------------------------------------

    def compare(self) -> None:
        """Leaves out libraries with another result, and kernels whose bits change with threads."""
        for one in list(self.runners):
            spec = one.entrant.plan.spec
            terms = 1 if spec.operation.name == "rank1" else self.n
            if not one.peers and not one.whole and spec.schedule.threads == 1:
                continue
            allowed = (terms + ROUNDINGS) * float(np.finfo(spec.arithmetic.real).eps)
            ours = self.driver.results(one.place)
            self._keep_alike(one.peers, ours, f"that of {spec.name}", allowed)
            if one.whole:
                dtype, n = spec.arithmetic.dtype, self.n
                matrix = self.memory.array("a", dtype)[: n * n].reshape(n, n, order="F")
                product = matrix @ self.memory.array("x", dtype)[:n]
                self._keep_alike(one.whole, product, "that of numpy", allowed)
            if spec.schedule.threads > 1 and not self._same_bits_alone(one, ours):
                self._leave_out(spec.name, f"its bits change with threads at n = {self.n}")
                self.runners.remove(one)

    def _keep_alike(self, others: dict[str, int], ours: Array, whose: str, allowed: float) -> None:
        for name, place in list(others.items()):
            apart = _apart(ours, self.driver.results(place)[: len(ours)])
            if not apart <= allowed:
                del others[name]
                reason = (
                    f"its result is not {whose} at n = {self.n}: they differ by "
                    f"{apart:.1e} of the whole, and rounding explains {allowed:.1e}"
                )
                self._leave_out(self.contestants[place].label, reason)

    def _same_bits_alone(self, one: _Runner, ours: Array) -> bool:
        """Whether one thread gives the same bits as all of them."""
        contestant = self.contestants[one.place]
        prepare = contestant.prepare
        contestant.prepare = lambda: set_team(one.entrant.path, 1)
        alone = self.driver.results(one.place)
        contestant.prepare = prepare
        return alone.tobytes() == ours.tobytes()

    def _leave_out(self, name: str, reason: str) -> None:
        self.found.left_out.append(LeftOut(name, reason, fault=True))


def _apart(ours: Array, theirs: Array) -> float:
    """The difference of two results, as a part of the first."""
    apart, size = float(np.linalg.norm(theirs - ours)), float(np.linalg.norm(ours))
    return apart / size if apart and size else apart
