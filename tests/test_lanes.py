"""Lanes and instruction sets: the same bits at every size, offset and stride, and with every set.

What the evaluator foretells from a plan is compared with that plan's routine for each instruction
set that this machine can run; the 64-bit Arm set runs in an emulator.
"""

from __future__ import annotations

import itertools
import mmap
import platform
import re
from dataclasses import replace
from functools import cache
from typing import Any

import cffi
import numpy as np
import pytest
from lanes import (
    KINDS,
    SAMPLE,
    Values,
    executables,
    guarded_arrays,
    kernels,
    name_of,
    plans_of,
    problem_of,
    program,
    shown_wrong,
    with_results,
    wrong,
)  # fmt: skip
from test_counts import build, run
from test_emitted import C99, CXX, WARNINGS
from test_golden import write
from tools import need

from demilune import Plan, render
from demilune.bench import guard, isolation
from demilune.bench.evaluator import Evaluator
from demilune.bench.problem import (
    PAD,
    Problem,
    draw_setting,
    lattice,
    make_problem,
    stored,
    uniform,
)  # fmt: skip
from demilune.bench.reference import numpy_product
from demilune.bench.run import arguments_of, differences, flat, foretell, run_case
from demilune.isa import INSTRUCTION_SETS
from demilune.toolchain import cache as kept
from demilune.toolchain.build import Unit, build_units, flags_for
from demilune.toolchain.compilers import describe_compiler
from demilune.toolchain.executables import CExecutable, Executable

HERE = [name for name, one in INSTRUCTION_SETS.items() if one.here]
X86_64 = platform.machine() in ("x86_64", "AMD64")
X86_SETS = ["portable", "avx2", "avx512", "runtime"]
linux = pytest.mark.skipif(not isolation.AVAILABLE, reason="needs fork as Linux has it")
x86_64 = pytest.mark.skipif(not X86_64, reason="instructions of x86-64")

every_kind = pytest.mark.parametrize("place", range(len(KINDS)), ids=lambda i: name_of(KINDS[i]))


# --- sizes, offsets, strides ----------------------------------------------------------------------


@every_kind
@pytest.mark.parametrize("turn", [0, pytest.param(1, marks=pytest.mark.long)])
def test_every_size_with_every_set(turn, place):
    """Two kernels of each kind, two more with --long."""
    kinds = kernels(place)[2 * turn : 2 * turn + 2]
    made = executables(kinds, HERE)
    for number, plan in enumerate(plans_of(kinds)):
        lanes, steps = plan.spec.arithmetic.lanes, plan.spec.schedule.steps
        evaluator = Evaluator(plan)
        for n in range(max(3 * lanes * steps, 2 * plan.spec.schedule.block) + 2):
            problem = problem_of(plan, n, cases=1, draw=lattice(3))
            exact = numpy_product(problem)
            for isa, found in zip(HERE, made, strict=True):
                assert not wrong(found[number], problem, exact, by_value=True), isa
            if n <= 2 * lanes or n % 7 == 0:  # the evaluator takes its time
                problem = problem_of(plan, n)
                expected = foretell(evaluator, problem)
                for isa, found in zip(HERE, made, strict=True):
                    assert not wrong(found[number], problem, expected), isa


@every_kind
def test_every_offset_from_a_boundary(place):
    """Arrays begin 0 to 7 elements behind a boundary of 64 bytes, each at another place."""
    kinds = kernels(place)[1::2]
    for isa, found in zip(HERE, executables(kinds, HERE), strict=True):
        for executable in found:
            problem = problem_of(executable.plan, 21, cases=1)
            expected = foretell(Evaluator(executable.plan), problem)
            for offset in range(8):
                got = run_at_offset(executable, problem, offset)
                assert not list(differences(problem, expected, got, 0)), (isa, offset)


def run_at_offset(executable: Executable, problem: Problem, offset: int) -> dict[str, Any]:
    contents, views = {}, {}
    for place, (name, one) in enumerate(problem.plan.arrays.items()):
        content = flat(one, problem.buffers[name], 0)
        raw = np.zeros(content.nbytes + 64 + 8 * content.itemsize, dtype=np.uint8)
        address = raw.__array_interface__["data"][0] + PAD * content.itemsize
        first = -address % 64 + (offset + place) % 8 * content.itemsize
        views[name] = raw[first : first + content.nbytes].view(content.dtype)
        views[name][:] = content
    executable(arguments_of(problem, {name: view[PAD:] for name, view in views.items()}))
    for name, one in problem.plan.arrays.items():
        contents[name] = views[name].view(one.type).reshape(-1, one.parts)
    return contents


@pytest.mark.parametrize("layout", ["packed", "band", "tiled"])
@pytest.mark.parametrize("operation", ["matvec", "rank1"])
def test_every_stride(operation, layout):
    vectors = ["incx", "incy"] if operation == "matvec" else ["incx"]
    kinds = [
        {"operation": operation, "layout": layout, "lanes": 4, "block": 4}
        | dict(zip(vectors, steps, strict=False))
        for steps in (("runtime", "runtime"), (1, -1), (-1, 2), (2, -3), (-3, 1))
    ]
    for isa, found in zip(HERE, executables(kinds, HERE), strict=True):
        for executable in found:
            operation = executable.plan.spec.operation
            free = [name for name in vectors if getattr(operation, name) == "runtime"]
            for steps in itertools.product((1, -1, 3, -2), repeat=len(free)):
                sizes = dict(zip(free, steps, strict=True))
                problem = problem_of(executable.plan, 19, cases=1, **sizes)
                expected = foretell(Evaluator(executable.plan), problem)
                assert not wrong(executable, problem, expected), isa


# --- compilers, flags, Python ---------------------------------------------------------------------

FLAGS = ("-O0", "-O1", "-O2", "-O3", "-O3 -march=native")


@cache
def foretold() -> list[list[tuple[Problem, Any]]]:
    found = []
    for plan in plans_of(SAMPLE):
        problems = [problem_of(plan, n) for n in (1, 6, 11, 29)]
        evaluator = Evaluator(plan)
        found.append([(one, foretell(evaluator, one)) for one in problems])
    return found


@pytest.mark.parametrize("compiler", ["gcc", "clang"])
@pytest.mark.parametrize("isa", [*HERE, "runtime"])
def test_the_same_bits_with_every_compiler_and_flag(isa, compiler):
    if isa == "runtime" and not X86_64:
        pytest.skip("chosen at run time on x86-64")
    described = describe_compiler(need(compiler))
    plans = plans_of(SAMPLE, isa=isa)
    files = render(plans, "many", "c", contracts=False)
    for level in FLAGS if isa != "runtime" else FLAGS[::2]:
        flags = (*(f for f in flags_for(described, plans) if f != "-O2"), *level.split())
        library = kept.library(described, flags, files)
        for plan, cases in zip(plans, foretold(), strict=True):
            executable = CExecutable(plan, library)
            for problem, expected in cases:
                assert not wrong(executable, problem, expected), level


@every_kind
def test_the_same_bits_in_python(place):
    kinds = kernels(place)[1:3]
    units = []
    for plan in plans_of(kinds, language="python"):
        name = plan.spec.name
        units.append(Unit(name, "python", [plan], render([plan], name, "python", contracts=False)))
    for unit in build_units(units):
        assert unit.error is None
        evaluator = Evaluator(unit.plans[0])
        for n in (0, 1, 2, 5, 9):
            problem = problem_of(unit.plans[0], n, cases=2)
            assert not wrong(unit.executables[0], problem, foretell(evaluator, problem))


# --- several sets in one file ---------------------------------------------------------------------


def runtime_files(suffix: str = "") -> tuple[list[Plan], dict[str, str]]:
    """The sample as one file, its routines for the set ``suffix`` made visible in their place."""
    plans = plans_of(SAMPLE, isa="runtime")
    files = render(plans, "many", "c", contracts=False)
    if suffix:
        text = files["many.c"]
        for plan in plans:
            name = f"{plan.spec.name}_{suffix}"
            assert f"static int {name}(" in text
            text = text.replace(f"static int {name}(", f"int {name}(")
        files["many.c"] = text
    return plans, files


@x86_64
@pytest.mark.parametrize("isa", [name for name in X86_SETS if name in HERE])
def test_each_branch_of_a_file_with_several_sets(isa):
    plans, files = runtime_files(isa)
    gcc = describe_compiler(need("gcc"))
    library = kept.library(gcc, flags_for(gcc, plans), files)
    for plan, cases in zip(plans, foretold(), strict=True):
        name = f"{plan.spec.name}_{isa}"
        routine = replace(plan.routine, name=name)
        forced = replace(plan, spec=replace(plan.spec, name=name), routine=routine)
        for problem, expected in cases:
            assert not wrong(CExecutable(forced, library), problem, expected)


@pytest.mark.parametrize("compiler", ["gcc", "clang"])
def test_a_file_with_several_sets_elsewhere_is_plain_c(compiler):
    plans, files = runtime_files()
    described = describe_compiler(need(compiler))
    elsewhere = {name: text.replace("__x86_64__", "NEVER") for name, text in files.items()}
    library = kept.library(described, flags_for(described, plans), elsewhere)
    for plan, cases in zip(plans, foretold(), strict=True):
        for problem, expected in cases:
            assert not wrong(CExecutable(plan, library), problem, expected)


# --- what is not finite, and beta = 0 -------------------------------------------------------------


@every_kind
def test_what_is_not_finite_reaches_only_what_it_reaches_without_lanes(place):
    """A lane that is left out is not multiplied by 0: infinity would make it NaN."""
    kinds = [{k: v for k, v in one.items() if k != "structure"} for one in kernels(place)[:2]]
    for one in kinds:
        one["dtype"] = {"complex64": "float32", "complex128": "float64"}.get(
            one["dtype"], one["dtype"]
        )
    plain = [{k: v for k, v in one.items() if k not in ("lanes", "unroll")} for one in kinds]
    (without,) = executables(plain, ["portable"])
    for isa, found in zip(HERE, executables(kinds, HERE), strict=True):
        for executable, lone in zip(found, without, strict=True):
            for where, value in itertools.product("xA", (np.inf, np.nan)):
                problem = with_one_not_finite(executable.plan, where, value)
                for case in range(problem.lanes):
                    got = [run_case(one, problem, case) for one in (executable, lone)]
                    for name, results in problem.writable.items():
                        classes = [kind_of(one[name][results]) for one in got]
                        said = (isa, executable.plan.spec.stated, where, value, case)
                        assert np.array_equal(*classes), said


def with_one_not_finite(plan: Plan, where: str, value: float, n: int = 11) -> Problem:
    """Positive numbers, so that no infinities of both signs meet; the value at another place in
    each case."""

    def draw(generator: np.random.Generator, shape: tuple[int, ...], name: str) -> Any:
        values = np.abs(uniform(generator, shape, name))
        for case in range(shape[-1]):
            if name == where == "x":
                values[case, 0, case] = value
            elif name == where:
                values[case, case // 2, 0, case] = values[case // 2, case, 0, case] = value
        return values

    generator = np.random.default_rng(3)
    return make_problem(plan, draw_setting(plan, n, generator, (1.0,)), draw, generator, n)


def kind_of(values: Any) -> Any:
    return np.where(np.isnan(values), 3, np.where(np.isinf(values), np.sign(values), 2))


@linux
@pytest.mark.parametrize("beta", [0, "runtime"])
@pytest.mark.parametrize("isa", HERE)
def test_beta_zero_never_reads_y(isa, beta):
    kinds = [{**one, "beta": beta} for one in SAMPLE if one.get("operation", "matvec") == "matvec"]
    (found,) = executables(kinds, [isa])
    for executable in found:
        problem = problem_of(executable.plan, 13, cases=1)
        problem.setting = replace(problem.setting, scalars={**problem.setting.scalars, "beta": 0})
        problem.buffers["y"][...] = np.nan
        expected = foretell(Evaluator(executable.plan), problem)
        assert not wrong(executable, problem, expected)
        assert list(guard.outside_touched(executable, [problem])) == []


# --- programs of their own: sanitizers, and another machine ---------------------------------------


def small_problems(plans: list[Plan]) -> list[Problem]:
    return [problem_of(plan, n, cases=1) for plan in plans for n in (0, 1, 5, 13)]


def test_neon_in_an_emulator(tmp_path):
    compiler, emulator = need("aarch64-linux-gnu-gcc"), need("qemu-aarch64")
    plans = plans_of(SAMPLE, isa="neon")
    problems = small_problems(plans)
    write(tmp_path, {**render(plans, "many", "c", contracts=False), "main.c": program(problems)})
    for level in ("-O0", "-O3"):
        flags = ["-std=c99", "-ffp-contract=off", "-static", level]
        build(tmp_path, compiler, *flags, *WARNINGS, "-c", "many.c")
        build(tmp_path, compiler, *flags, "many.o", "main.c", "-o", "main", "-lm")
        done = run(tmp_path, emulator, "./main")
        assert done.returncode == 0, done.stderr
        assert not shown_wrong(done.stdout, problems)


@pytest.mark.parametrize("compiler", ["gcc", "clang"])
@pytest.mark.parametrize("isa", HERE)
def test_sanitizers_find_nothing(isa, compiler, tmp_path):
    plans = plans_of(SAMPLE, isa=isa)
    problems = small_problems(plans)
    write(tmp_path, {**render(plans, "many", "c", contracts=False), "main.c": program(problems)})
    sanitize = ["-fsanitize=address,undefined", "-fno-sanitize-recover=all", "-g"]
    build(tmp_path, compiler, "-std=c99", "-ffp-contract=off", "-O1", *sanitize, "many.c",
          "main.c", "-o", "main", "-lm")  # fmt: skip
    done = run(tmp_path, "./main")
    assert done.returncode == 0, done.stderr[:3000]
    assert not shown_wrong(done.stdout, problems)


DIALECTS = {"gcc": C99, "clang": C99, "g++": CXX, "clang++": CXX}
"""The optimiser of gcc only: as g++ 12 it warns of its own header of AVX-512."""


@x86_64
@pytest.mark.parametrize("compiler", DIALECTS)
@pytest.mark.parametrize("isa", X86_SETS)
def test_no_warning_whether_it_runs_here_or_not(isa, compiler, tmp_path):
    write(tmp_path, render(plans_of(SAMPLE, isa=isa), "many", "c"))
    how = ["-O1", "-S"] if compiler == "gcc" else ["-fsyntax-only"]
    build(tmp_path, compiler, *how, *DIALECTS[compiler], "many.c")


# --- pages that may not be touched ----------------------------------------------------------------
# A leading dimension of two pages, one element more or less, puts the first or the last element of
# every strip at the edge of a page; pages that hold no stored element are closed.

PAGE = mmap.PAGESIZE
_ffi = cffi.FFI()
_ffi.cdef("int mprotect(void *, size_t, int);")


def in_open_pages(plan: Plan, problem: Problem, edge: str) -> tuple[Any, list[int]]:
    """The matrix in pages, and the pages that hold no stored element."""
    content = flat(plan.arrays["a"], problem.buffers["a"], 0)[PAD:-PAD]
    size = content.itemsize
    places = [np.asarray(at) for _, _, at in stored(plan, problem.setting.sizes)]
    places = np.concatenate([np.ravel(at) for at in places])
    # The first stored element begins a page, or the last one of all ends a page.
    shift = -int(places.min()) if edge == "start" else -int(places.max()) - 1
    pages = content.nbytes // PAGE + 3
    memory = mmap.mmap(-1, pages * PAGE)
    raw = np.frombuffer(memory, dtype=np.uint8)
    first = PAGE + (shift * size) % PAGE
    view = raw[first : first + content.nbytes].view(content.dtype)
    view[:] = content
    held = {(first + int(place) * size) // PAGE for place in places}
    start = raw.__array_interface__["data"][0]
    return view, [start + page * PAGE for page in set(range(pages)) - held]


def set_access(pages: list[int], access: int) -> None:
    for page in pages:
        if _ffi.dlopen(None).mprotect(_ffi.cast("void *", page), PAGE, access) != 0:
            raise OSError("mprotect failed")


def gated(executable: Executable, sizes: tuple[int, ...] = (2, 18)) -> Any:
    """Runs a kernel with every page closed that it may not touch; gives its results' faults."""
    plan = executable.plan
    elements = 2 * PAGE // np.dtype(plan.spec.arithmetic.real).itemsize
    elements //= plan.spec.arithmetic.type.parts
    evaluator = Evaluator(plan)
    for n, more, edge in itertools.product(sizes, (-1, 0, 1), ("start", "end")):
        problem = problem_of(plan, n, cases=1, ld=elements + more)
        expected = foretell(evaluator, problem)
        arrays = guarded_arrays(problem, edge == "end")
        arrays["a"], closed = in_open_pages(plan, problem, edge)
        set_access(closed, 0)
        executable(arguments_of(problem, arrays))
        set_access(closed, mmap.PROT_READ | mmap.PROT_WRITE)
        yield from differences(problem, expected, with_results(problem, arrays), 0)


GATED: list[Values] = [
    {"layout": layout, "triangle": triangle, "operation": operation, "ld": "runtime",
     "lanes": lanes, "unroll": unroll, "block": block, **more}
    for layout, more in (("full", {}), ("band", {"kd": 5}), ("band", {"kd": 1}))
    for triangle in ("upper", "lower")
    for operation, (lanes, unroll, block) in (
        ("matvec", (4, 2, 4)), ("rank1", (4, 1, 2)), ("quadform", (8, 1, 3)),
    )
]  # fmt: skip
GATED += [
    {"layout": "band", "loop": "dot", "kd": kd, "ld": "runtime", "triangle": triangle, "lanes": 8}
    for kd in (1, 2, "runtime")
    for triangle in ("upper", "lower")
]


@linux
@pytest.mark.parametrize("isa", HERE)
def test_nothing_beside_a_strip_is_loaded(isa):
    (found,) = executables(GATED, [isa])
    for executable in found:
        assert list(isolation.results(gated(executable), 60)) == [], executable.plan.spec.stated


TOO_MUCH = {
    "before a strip": "for (ptrdiff_t k_0 = 1; k_0 < n; k_0++) (void)p[k_0 * (ld + 1) - 1];",
    "behind a strip": "for (ptrdiff_t k_0 = 0; k_0 < n; k_0++) (void)p[k_0 * ld + n];",
}


@linux
@pytest.mark.parametrize("what", TOO_MUCH)
def test_one_element_too_much_is_noticed(what):
    (plan,) = plans_of([{"layout": "full", "triangle": "lower", "ld": "runtime", "lanes": 4}])
    files = render([plan], "many", "c", contracts=False)
    text, count = re.subn(
        r"(?m)^    return 0;$",
        f"    {{ const volatile double *p = a; {TOO_MUCH[what]} }}\n    return 0;",
        files["many.c"],
    )
    assert count == 1
    (unit,) = build_units([Unit("many", "c", [plan], {**files, "many.c": text})])
    with pytest.raises(isolation.Ended, match="SIGSEGV"):
        list(isolation.results(gated(unit.executables[0]), 60))


@linux
@pytest.mark.parametrize(("kd", "ld"), [(1, 2), (1, 3), (2, 3), (2, 5)])
def test_rows_side_by_side_end_with_the_array(kd, ld):
    """Elements at a small fixed stride are loaded with those between them, but none behind."""
    kinds = [
        {"layout": "band", "loop": "dot", "kd": kd, "ld": ld, "triangle": triangle,
         "order": order, "lanes": lanes, "dtype": dtype}
        for triangle, order in itertools.product(("upper", "lower"), ("column-major", "row-major"))
        for lanes, dtype in ((8, "float64"), (16, "float32"))
    ]  # fmt: skip
    for isa, found in zip(HERE, executables(kinds, HERE), strict=True):
        for executable in found:
            problems = [
                problem_of(executable.plan, n, cases=1, draw=lattice(3)) for n in range(1, 28)
            ]
            assert not list(isolation.results(guarded_runs(executable, problems), 60)), isa


def guarded_runs(executable: Executable, problems: list[Problem]) -> Any:
    for problem, at_end in itertools.product(problems, (True, False)):
        arrays = guarded_arrays(problem, at_end)
        executable(arguments_of(problem, arrays))
        yield from differences(problem, numpy_product(problem), with_results(problem, arrays), 0)
