"""The five levels of the bench, from the sharpest to the broadest."""

from __future__ import annotations

import hashlib
import time
from collections.abc import Callable, Collection, Iterator
from dataclasses import asdict, dataclass, field, replace
from typing import Any

import numpy as np

from demilune.bench import guard, isolation
from demilune.bench.evaluator import Evaluator
from demilune.bench.problem import (
    KINDS,
    PAD,
    Draw,
    Lanes,
    Problem,
    Setting,
    all_magnitudes,
    draw_setting,
    integers,
    lattice,
    make_problem,
    sizes_to_try,
    structured,
    structures,
    uniform,
    with_other_junk,
)
from demilune.bench.reference import errors, numpy_product
from demilune.bench.run import arguments_of, differences, foretell, run_case
from demilune.dtypes import REAL_DIGITS
from demilune.keys import RUNTIME
from demilune.plan.build import Plan
from demilune.toolchain.executables import CExecutable, Executable

LEVELS = ("exact", "faithful", "bound", "untouched", "calling")
EXACT_SCALARS = (0.0, 1.0, -1.0, 2.0, -3.0)
GENERAL_SCALARS = (1.0, -1.0, 2.5, 0.3, -0.7)
SECONDS = 300
"""How long all levels of one kernel may take before it is taken to hang."""
FEW = 3
"""Failures of one level that are told; the rest is counted."""


@dataclass
class Level:
    """What one level found."""

    name: str
    cases: int = 0
    failures: list[str] = field(default_factory=list)
    failed: int = 0
    skipped: str = ""
    facts: dict[str, Any] = field(default_factory=dict)

    @property
    def verdict(self) -> str:
        if self.failed:
            return "failed"
        return "skipped" if self.skipped and not self.cases else "passed"

    def fail(self, message: str) -> None:
        self.failed += 1
        if len(self.failures) < FEW:
            self.failures.append(message)


@dataclass
class Verdict:
    """What the bench found of one kernel."""

    kernel: str
    language: str
    seed: int
    levels: list[Level]
    seconds: float = 0.0

    @property
    def verified(self) -> bool:
        """Whether every level that applies holds, and at least one of the first two does."""
        ran = {level.name for level in self.levels if level.verdict == "passed"}
        return not any(level.failed for level in self.levels) and bool(ran & {"exact", "faithful"})

    @property
    def cases(self) -> int:
        return sum(level.cases for level in self.levels)

    def record(self) -> dict[str, Any]:
        """The verdict as plain data, without times, so that equal runs give equal records."""
        levels = [{**asdict(level), "verdict": level.verdict} for level in self.levels]
        return {
            "kernel": self.kernel, "language": self.language, "seed": self.seed,
            "verified": self.verified, "cases": self.cases, "levels": levels,
        }  # fmt: skip


def verify(
    plan: Plan, executable: Executable, seed: int = 1, until: Collection[str] = ()
) -> Verdict:
    """Runs all levels on a kernel; the same seed gives the same inputs.

    Ends early when one of the levels in ``until`` fails.
    """
    start = time.perf_counter()
    if isinstance(executable, CExecutable) and isolation.AVAILABLE:
        levels = _isolated(plan, executable, seed, until)
    else:
        levels = list(_levels(plan, executable, seed, until))
    verdict = Verdict(plan.spec.name, plan.spec.language, seed, levels)
    verdict.seconds = time.perf_counter() - start
    return verdict


def _isolated(plan: Plan, executable: Executable, seed: int, until: Collection[str]) -> list[Level]:
    """All levels in a child process, so that a kernel that crashes takes nothing with it."""
    levels: list[Level] = []
    try:
        for level in isolation.results(_levels(plan, executable, seed, until), SECONDS):
            levels.append(level)
    except Exception as ended:
        broken = Level(LEVELS[len(levels)])
        broken.fail(
            f"the kernel {ended}"
            if isinstance(ended, isolation.Ended)
            else (f"the bench broke, as it may where memory is overwritten: {ended!r}")
        )
        levels.append(broken)
        for name in LEVELS[len(levels) :]:
            levels.append(Level(name, skipped="the kernel ended the process before"))
    return levels


def _levels(
    plan: Plan, executable: Executable, seed: int, until: Collection[str]
) -> Iterator[Level]:
    if isinstance(executable, CExecutable) and plan.spec.schedule.threads > 1:
        executable.one_thread()  # threads do not outlive the fork that the bench runs in
    bench = _Bench(plan, executable, seed)
    checks: tuple[Callable[[Level], None], ...] = (
        bench.exact, bench.faithful, bench.bound, bench.untouched, bench.calling,
    )  # fmt: skip
    for name, check in zip(LEVELS, checks, strict=True):
        level = Level(name)
        bench.digest = hashlib.sha256()
        check(level)
        if level.cases:
            level.facts["results"] = bench.digest.hexdigest()
        yield level
        if level.failed and name in until:
            return


class _Bench:
    def __init__(self, plan: Plan, executable: Executable, seed: int) -> None:
        self.plan, self.executable, self.seed = plan, executable, seed
        self.spec = plan.spec
        self.evaluator = Evaluator(plan)
        self.sizes = sizes_to_try(plan)
        self.digest = hashlib.sha256()
        self.fast = isinstance(executable, CExecutable)
        self.large = max(self.sizes) > 64

    def _problems(
        self,
        level: str,
        draw: Callable[[Setting], Draw],
        scalars: tuple[float, ...],
        lanes: int,
        sizes: list[int] | None = None,
    ) -> Iterator[Problem]:
        generator = np.random.default_rng([self.seed, LEVELS.index(level)])
        for n in self.sizes if sizes is None else sizes:
            setting = draw_setting(self.plan, n, generator, scalars)
            yield make_problem(self.plan, setting, draw(setting), generator, lanes)

    def _compare(self, level: Level, problem: Problem, expected: Any, by_value: bool) -> None:
        for lane in range(problem.lanes):
            found = self._run(level, problem, lane)
            if found is None:
                continue
            for message in differences(problem, expected, found, lane, by_value=by_value):
                level.fail(message)

    def _run(self, level: Level, problem: Problem, lane: int) -> dict[str, Lanes] | None:
        """The buffers after one case, or None if the kernel raised an exception."""
        level.cases += 1
        level.facts.setdefault("sizes", [])
        if problem.setting.n not in level.facts["sizes"]:
            level.facts["sizes"].append(problem.setting.n)
        try:
            found = run_case(self.executable, problem, lane)
        except Exception as error:
            level.fail(f"{problem.setting}: raised {type(error).__name__}: {error}")
            return None
        for name in sorted(found):
            results = found[name][problem.writable[name]]
            if results.dtype.kind == "f":  # the bits of a NaN differ between processors
                results[np.isnan(results)] = np.nan
            self.digest.update(results.astype(results.dtype.newbyteorder("<")).tobytes())
        return found

    # --- 1 ---------------------------------------------------------------------------------

    def exact(self, level: Level) -> None:
        """Every partial sum representable: any order gives the numpy product, bit for bit."""
        for name in ("alpha", "beta"):
            value = getattr(self.spec.operation, name, RUNTIME)
            if value != RUNTIME and value != int(value):
                level.skipped = f"{name} = {value} makes products that are not representable"
                return
        if self._largest(max(self.sizes), {}) < 1:
            level.skipped = "n is too large for every sum to be representable"
            return

        def draw(setting: Setting) -> Draw:
            scalars = {k: int(abs(v.real) + abs(v.imag)) for k, v in setting.scalars.items()}
            largest = self._largest(setting.n, {k: max(1, v) for k, v in scalars.items()})
            level.facts[f"largest element for n = {setting.n}"] = largest
            return lattice(largest)

        lanes = 1 if self.large else 3 if self.fast else 2
        for problem in self._problems("exact", draw, EXACT_SCALARS, lanes):
            self._compare(level, problem, numpy_product(problem), by_value=True)
        self._structured(level)

    def _structured(self, level: Level) -> None:
        """Matrices whose structure shows what random ones hide."""
        generator = np.random.default_rng([self.seed, 7])
        runtime = self.spec.layout.n == RUNTIME
        for n in (2, 5) if runtime else self.sizes[:1]:
            kinds = structures(n)
            setting = draw_setting(self.plan, n, generator, EXACT_SCALARS)
            problem = make_problem(self.plan, setting, structured(kinds), generator, len(kinds))
            self._compare(level, problem, numpy_product(problem), by_value=True)

    def _largest(self, n: int, scalars: dict[str, int]) -> int:
        """The largest whole number for which no partial sum needs rounding."""
        arithmetic, operation = self.spec.arithmetic, self.spec.operation
        digits = REAL_DIGITS[operation.narrowest(arithmetic)]
        if arithmetic.type.complex:  # a product of complex numbers has two terms
            n, digits = 2 * n, digits - 2
        largest: int = operation.limit(max(n, 1), digits, scalars)
        return min(largest, int(2 ** REAL_DIGITS[arithmetic.real] - 1))

    # --- 2 ---------------------------------------------------------------------------------

    def faithful(self, level: Level) -> None:
        """Inputs of every magnitude: bit for bit what the plan foretells."""
        real = self.spec.arithmetic.real
        integer = self.spec.arithmetic.type.integer

        def draw(setting: Setting) -> Draw:
            if not integer:
                return all_magnitudes(real)
            scalars = {k: max(1, int(abs(v.real))) for k, v in setting.scalars.items()}
            return integers(self._largest(setting.n, scalars))

        lanes = KINDS if not self.large else 3
        if self.spec.arithmetic.compensated and not self.large:
            lanes += 12  # compensated sums of different orders mostly agree: look harder
        scalars = EXACT_SCALARS if integer else GENERAL_SCALARS
        for problem in self._problems("faithful", draw, scalars, lanes):
            self._compare(level, problem, foretell(self.evaluator, problem), by_value=False)

    # --- 3 ---------------------------------------------------------------------------------

    def bound(self, level: Level) -> None:
        """The error against exact rationals stays under the published bound."""
        if self.spec.arithmetic.type.integer:
            level.skipped = "integer arithmetic has no rounding errors"
            return
        sizes = [n for n in self.sizes if n <= 24][-4:]
        if not sizes:
            level.skipped = "n is too large for exact rationals; levels 1 and 2 hold the bits"
            return
        worst, ulps = 0.0, 0.0
        for problem in self._problems("bound", lambda _: uniform, GENERAL_SCALARS, 1, sizes):
            found = self._run(level, problem, 0)
            if found is None:
                continue
            ratio, distance = errors(problem, found, 0)
            fact = f"error / bound for n = {problem.setting.n}"
            level.facts[fact] = max(ratio, level.facts.get(fact, 0.0))
            worst, ulps = max(worst, ratio), max(ulps, distance)
            if not ratio <= 1:
                level.fail(f"{problem.setting}: the error is {ratio:.3g} times the bound")
        level.facts |= {"largest error / bound": worst, "largest error in ulps": ulps}

    # --- 4 ---------------------------------------------------------------------------------

    def untouched(self, level: Level) -> None:
        """Nothing unused is read or written: watched accesses, or guard pages, and poison."""
        draw = self._plain
        sizes = self.sizes[-2:] if not self.large else self.sizes[-1:]
        problems = list(self._problems("untouched", draw, GENERAL_SCALARS, 1, sizes))
        problems += [
            make_problem(self.plan, setting, draw(setting), np.random.default_rng(self.seed), 1)
            for setting in self._zero_scalars()
        ]
        for problem in problems:
            self._nothing_read(problem)
        if not self.fast:
            level.cases += len(problems)
            for message in guard.unused_touched(self.executable, problems):
                level.fail(message)
        elif guard.AVAILABLE:
            level.cases += 2 * len(problems)
            for message in guard.outside_touched(self.executable, problems):
                level.fail(message)
        else:
            level.facts["guard pages"] = guard.WHY_NOT
        for problem in problems:
            self._compare(level, problem, foretell(self.evaluator, problem), by_value=False)
            other = with_other_junk(problem)
            self._compare(level, other, foretell(self.evaluator, other), by_value=False)

    def _plain(self, setting: Setting) -> Draw:
        if not self.spec.arithmetic.type.integer:
            return uniform
        scalars = {k: max(1, int(abs(v.real))) for k, v in setting.scalars.items()}
        return integers(self._largest(setting.n, scalars))

    def _zero_scalars(self) -> Iterator[Setting]:
        """Settings in which a scalar passed at run time is zero."""
        passed = [one.name for one in self.plan.parameters if one.kind == "scalar"]
        generator = np.random.default_rng([self.seed, 9])
        for n in self.sizes[-1:]:
            for name in passed:
                setting = draw_setting(self.plan, n, generator, EXACT_SCALARS[1:])
                yield replace(setting, scalars={**setting.scalars, name: 0})
            if len(passed) == 2:
                setting = draw_setting(self.plan, n, generator, EXACT_SCALARS[1:])
                yield replace(setting, scalars=dict.fromkeys(passed, 0))

    def _nothing_read(self, problem: Problem) -> None:
        """Poisons the values of what must not be read because a scalar is zero."""
        scalars = problem.setting.scalars
        poison = "float" in problem.plan.spec.arithmetic.real
        if scalars.get("beta", 1) == 0 and "y" in problem.buffers and poison:
            problem.buffers["y"][...] = np.nan
        if scalars.get("alpha", 1) == 0 and poison:
            for name in problem.plan.spec.operation.unread:
                problem.buffers[name][...] = np.nan

    # --- 5 ---------------------------------------------------------------------------------

    def calling(self, level: Level) -> None:
        """Empty and tiny matrices, every kind of scalar, bad arguments."""
        scalars = EXACT_SCALARS
        runtime = self.spec.layout.n == RUNTIME
        small = [0, 1, 2] if runtime else self.sizes[:1]
        if not self.large:
            for problem in self._problems("calling", self._plain, scalars, 1, small * 3):
                self._compare(level, problem, foretell(self.evaluator, problem), by_value=False)
        generator = np.random.default_rng([self.seed, 8])
        setting = draw_setting(self.plan, self.sizes[0], generator, scalars)
        draw = self._plain(setting)
        for name, value in self._bad_arguments(setting):
            problem = make_problem(self.plan, setting, draw, generator, 1)
            problem.setting = replace(setting, sizes={**setting.sizes, name: value})
            self._refused(level, problem, name)
        if not level.cases:
            level.skipped = "nothing but arrays is passed"

    def _bad_arguments(self, setting: Setting) -> Iterator[tuple[str, int]]:
        """Arguments that the rules refuse, each with the value next to one they accept."""
        if self.spec.layout.n == RUNTIME:
            yield "n", -1
        rules = (*self.spec.layout.rules(), *self.spec.operation.stride_rules())
        for condition, name, _ in rules:
            for value in range(int(setting.sizes[name]), -3, -1):
                if condition.holds({**setting.sizes, name: value}):
                    yield name, value
                    break

    def _refused(self, level: Level, problem: Problem, name: str) -> None:
        arrays = {
            key: np.ascontiguousarray(buffer[:, :, 0]) for key, buffer in problem.buffers.items()
        }
        level.cases += 1
        try:
            refused = call_flat(self.executable, problem, arrays)
        except Exception as error:
            level.fail(f"{problem.setting}: {name}: raised {type(error).__name__}: {error}")
            return
        if refused != name:
            level.fail(f"{problem.setting}: {name} is not refused (refused: {refused})")
        for key, buffer in problem.buffers.items():
            if arrays[key].tobytes() != np.ascontiguousarray(buffer[:, :, 0]).tobytes():
                level.fail(f"{problem.setting}: {key} is written though {name} is refused")


def call_flat(executable: Executable, problem: Problem, arrays: dict[str, Any]) -> str | None:
    """Calls a kernel with buffers of parts, in place."""
    flat = {}
    for name, one in problem.plan.arrays.items():
        array = arrays[name].reshape(-1)
        if one.complex:
            array = array.view("complex64" if one.type == "float32" else "complex128")
        flat[name] = array[PAD:]
    return executable(arguments_of(problem, flat))
