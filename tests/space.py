"""The space of specifications, as tests walk through it.

The rules of what goes together stand here a second time, on purpose: the tests find out where
the program's own rules differ from them.
"""

from __future__ import annotations

import itertools
import platform
import random
import shutil
import subprocess
import tempfile
from collections.abc import Callable, Sequence
from functools import cache
from pathlib import Path
from typing import Any

from demilune import make_plan, make_spec, render, verify
from demilune.isa import INSTRUCTION_SETS
from demilune.languages import LANGUAGES
from demilune.layouts import LAYOUTS
from demilune.operations import OPERATIONS
from demilune.spec import Spec
from demilune.toolchain.build import Unit, build_units

Choose = Callable[[str, Sequence[Any]], Any]
"""Picks one of the values for a key."""

SCALARS = ("runtime", 1, -1, 2, 0.5, 0.1)
STRIDES = ("runtime", 1, 2, -1, -3)
SIZES = ("runtime", "runtime", 1, 2, 3, 4, 5, 6, 7, 8, 12, 13)

LANES = (1, 2, 4, 8, 16)
X86_64 = ("avx2", "avx512")
REGISTERS = {
    32: {"avx2": 4, "avx512": 4, "neon": 4},
    64: {"avx2": 2, "avx512": 2, "neon": 2},
}
"""The fewest lanes of a register, by bits of a number; powers of two above that fit too."""


def draw(choose: Choose) -> dict[str, Any]:
    """One specification, value by value; each value is chosen from those that can still be."""
    v: dict[str, Any] = {}

    def take(key: str, values: Sequence[Any]) -> Any:
        v[key] = choose(key, values)
        return v[key]

    operation = take("operation", tuple(OPERATIONS))
    layout = take("layout", tuple(LAYOUTS))
    dtype = take("dtype", ("float32", "float64", "complex64", "complex128", "int16", "int32"))
    integer, complex_ = dtype.startswith("int"), dtype.startswith("complex")
    take("structure", ("symmetric", "hermitian") if complex_ else ("symmetric",))
    take("triangle", ("upper", "lower"))
    take("order", ("column-major",) if layout == "rfp" else ("column-major", "row-major"))
    n = take("n", SIZES)
    largest = n if isinstance(n, int) else 16
    if layout == "tiled":
        tile = take("tile", tuple(t for t in (1, 2, 3, 4, 8, 16) if t <= largest))
        largest = min(largest, tile)
    if layout == "rfp":
        take("transposed", (False, True))
    kd: Any = None
    if layout == "band":
        widths = (0, 1, 2, 5)
        kd = take("kd", ("runtime", *(w for w in widths if n == "runtime" or w < n)))
    if layout in ("full", "band"):
        leading: list[Any] = [None, "runtime"]
        if (layout == "full" and n != "runtime") or (layout == "band" and kd != "runtime"):
            leading.append((n if layout == "full" else kd + 1) + 3)
        if take("ld", leading) is None:
            del v["ld"]
    loops = {"matvec": ("dot", "axpy", "fused"), "rank1": ("axpy",), "quadform": ("dot", "fused")}
    take("loop", loops[operation])
    take("block", tuple(b for b in (1, 2, 3, 4, 5, 8, 16) if b <= largest))
    forward = take("direction", ("forward", "backward")) == "forward"
    unrolls = n != "runtime" and layout != "skyline" and kd != "runtime"
    take("unroll", (1, *((2, 3) if forward else ()), *(("all",) if unrolls else ())))
    accumulators = ["plain"]
    if dtype in ("float32", "complex64") or integer:
        accumulators.append("wide")
    if not integer and operation != "rank1":
        accumulators.append("compensated")
    if integer:
        accumulators += ["int64", "int32"]
    plain = take("accumulator", accumulators) == "plain"
    beside = (
        v["loop"] == "fused"
        or operation == "rank1"
        or (operation == "matvec" and v["loop"] == "dot" and layout == "band")
    )
    lanes = take("lanes", LANES if plain and beside and forward and not integer else (1,))
    take("fma", (False,) if integer else (False, True))
    scalars = tuple(s for s in SCALARS if isinstance(s, int | str)) if integer else SCALARS
    if operation != "quadform":
        take("alpha", scalars)
    if operation == "matvec":
        take("beta", (0, *scalars))
        take("incy", STRIDES)
    take("incx", STRIDES)
    language = take("language", tuple(LANGUAGES))
    environment = take("environment", ("hosted", "freestanding"))
    if language == "c" and environment == "hosted" and plain and not integer:
        widths = REGISTERS[64 if dtype in ("float64", "complex128") else 32]
        sets = {name for name, least in widths.items() if lanes >= least}
        runtime = ("runtime",) if sets >= set(X86_64) else ()
        take("isa", ("portable", *sorted(sets), *runtime))
    else:
        take("isa", ("portable",))
    return v


# --- pairwise coverage ---------------------------------------------------------------------------


def _axis(values: dict[str, Any]) -> set[tuple[str, Any]]:
    """What a specification covers: its values, sizes by their kind."""
    kinds = {key: value for key, value in values.items() if key not in ("n", "ld", "tile")}
    n = values["n"]
    kinds["n"] = n if n in ("runtime", 1) else "even" if n % 2 == 0 else "odd"
    if "ld" in values:
        kinds["ld"] = "runtime" if values["ld"] == "runtime" else "fixed"
    if "tile" in values:
        kinds["tile"] = "1" if values["tile"] == 1 else "larger"
    return {(key, _plain(value)) for key, value in kinds.items()}


def _plain(value: Any) -> str:
    return str(value).lower() if isinstance(value, bool) else str(value)


def pairs(values: dict[str, Any]) -> set[tuple[tuple[str, str], tuple[str, str]]]:
    """The pairs of values of different keys that a specification covers."""
    return set(itertools.combinations(sorted(_axis(values)), 2))


@cache
def pairwise() -> tuple[tuple[dict[str, Any], ...], int]:
    """Specifications that cover every pair of values that was ever seen together.

    The pairs that can be are those among many random specifications; then specifications are
    kept, the one with most uncovered pairs first, until all pairs are covered.
    """
    source = random.Random(20261201)
    pool = [draw(lambda key, values: source.choice(values)) for _ in range(6000)]
    covers = [pairs(values) for values in pool]
    open_pairs = set().union(*covers)
    total = len(open_pairs)
    kept = []
    gains = [len(one) for one in covers]
    while open_pairs:
        # Gains only shrink: the best of the stale ones is looked at again until it stays best.
        while True:
            best = max(range(len(pool)), key=gains.__getitem__)
            now = len(covers[best] & open_pairs)
            if now == gains[best]:
                break
            gains[best] = now
        kept.append(pool[best])
        open_pairs -= covers[best]
    return tuple(kept), total


# --- building and verifying many at a time -------------------------------------------------------

CROSS_COMPILERS = {"neon": "aarch64-linux-gnu-gcc"}
"""What compiles for instructions of another kind of machine than this."""


def verify_all(values: Sequence[dict[str, Any]]) -> list[str]:
    """Builds and verifies specifications, many in a file; gives what failed.

    What this machine cannot run is compiled only, where there is a compiler for it.
    """
    units, failures = [], []
    groups: dict[tuple[Any, ...], list[Spec]] = {}
    for spec in (make_spec(f"k{i}", **one) for i, one in enumerate(values)):
        key = (spec.language, spec.target.environment, spec.target.isa, spec.arithmetic.fma)
        groups.setdefault(key, []).append(spec)
    for (language, _, isa, _), members in groups.items():
        plans = [make_plan(spec) for spec in members]
        files = render(plans, "many", language)
        machines = [one.machines for one in members[0].target.instruction_sets]
        if all(not some or platform.machine() in some for some in machines):
            units.append(Unit("many", language, plans, files))
        elif shutil.which(CROSS_COMPILERS.get(isa, "")):
            failures += _not_compiled(CROSS_COMPILERS[isa], files)
    for unit in build_units(units):
        if unit.error is not None:
            failures.append(str(unit.error))
            continue
        for plan, executable in zip(unit.plans, unit.executables, strict=True):
            isa = plan.spec.target.isa
            if isa != "runtime" and not INSTRUCTION_SETS[isa].here:
                continue
            verdict = verify(plan, executable)
            if not verdict.verified:
                messages = [m for level in verdict.levels for m in level.failures]
                failures.append(f"{plan.spec.stated}: {messages}")
    return failures


def _not_compiled(compiler: str, files: dict[str, str]) -> list[str]:
    """What the compiler says against the files."""
    with tempfile.TemporaryDirectory() as folder:
        for name, text in files.items():
            Path(folder, name).write_text(text, encoding="utf-8")
        done = subprocess.run(
            [compiler, "-std=c99", "-Wall", "-Wextra", "-Werror", "-O1", "-S", "many.c"],
            cwd=folder, capture_output=True, text=True, check=False,
        )  # fmt: skip
    return [done.stderr[:3000]] if done.returncode else []
