"""Routines on emulated boards: the same bits as foretold, sizes, and instructions counted."""

from __future__ import annotations

import json
import os
import platform
import re
import subprocess
import sys
from dataclasses import replace

import numpy as np
import pytest
from tools import need

from demilune.bench.faults import FAULTS
from demilune.bench.levels import verify
from demilune.bench.problem import POISON
from demilune.bench.recorded import one_call, record
from demilune.boards import (
    Board,
    check_all,
    check_on,
    find_board,
    known_boards,
    read_board,
    refusals,
)
from demilune.boards.elf import read_elf
from demilune.boards.emulate import build, counts, npm_folder, run, sizes
from demilune.boards.selftest import main_program, selftest
from demilune.errors import CheckError, InputError, MissingError, SpecError
from demilune.plan.build import make_plan
from demilune.render import render
from demilune.spec import make_spec
from demilune.toolchain.build import executable_of
from demilune.toolchain.compilers import CONTRACT_FLAGS, WARNING_FLAGS

HOST = """
title = "this machine"
compiler = "gcc"
emulator = ["env", "{program}"]
[floats]
float32 = "fused"
float64 = "fused"
"""
PACKED = {"layout": "packed", "n": 12, "dtype": "float32", "environment": "freestanding"}
KERNELS = {
    "buoy_packed": PACKED,
    "bridge_strided": {
        "layout": "full", "n": "runtime", "dtype": "float64", "alpha": "runtime",
        "beta": "runtime", "incx": "runtime", "incy": "runtime",
    },
    "gauges_hermitian": {
        "layout": "packed", "n": 5, "dtype": "complex64", "structure": "hermitian",
        "triangle": "lower", "operation": "rank1", "alpha": "runtime",
    },
}  # fmt: skip
PYTHON = {name: one for name, one in KERNELS.items() if name != "gauges_hermitian"}
OTHERS = {
    "gauges_profile": {"layout": "skyline", "n": "runtime", "dtype": "float64"},
    "buoy_counts": {"layout": "packed", "n": "runtime", "dtype": "int16"},
    "bridge_energy": {
        "operation": "quadform", "layout": "band", "n": "runtime", "dtype": "float32",
        "accumulator": "compensated",
    },
    "gauges_update": {
        "operation": "rank1", "layout": "rfp", "n": "runtime", "dtype": "float64",
        "alpha": "runtime",
    },
    "bridge_wide": {
        "layout": "tiled", "n": "runtime", "dtype": "complex64", "accumulator": "compensated",
        "beta": "runtime",
    },
}  # fmt: skip


def plan_of(name="kernel", **values):
    return make_plan(make_spec(name, **values))


def ready(name: str) -> Board:
    """A board whose programs are there."""
    board = find_board(name)
    for tool in (board.compiler, board.emulator[0], "npm" if board.npm else ""):
        if tool:
            need(tool)
    if board.npm:
        try:
            npm_folder(board)
        except MissingError as error:  # no network
            if os.environ.get("CI") == "true":
                raise
            pytest.skip(str(error))
    return board


@pytest.fixture
def host(tmp_path) -> Board:
    need("gcc")
    (tmp_path / "host.toml").write_text(HOST)
    return read_board(tmp_path / "host.toml")


# --- boards ------------------------------------------------------------------------------------


@pytest.mark.parametrize("name", known_boards())
def test_every_board_agrees(name):
    board = ready(name)
    chosen = PYTHON if board.language == "python" else KERNELS
    specs = [make_spec(one, **keys, language=board.language) for one, keys in chosen.items()]
    heard = []
    reports = check_all([board], specs, heard.append, budget=6000, n=9)
    assert heard == reports
    assert [(one.file, one.verdict, one.message) for one in reports] == [
        (one, "agrees", "") for one in chosen
    ]
    assert all(0 < one.tables <= 6000 and one.cases > 5 for one in reports)
    (packed,) = reports[0].routines
    assert (packed.n, packed.half, packed.full) == (12, 312, 576)
    assert reports[1].routines[0].n == 9
    assert json.loads(json.dumps([one.record() for one in reports]))[0]["board"] == name
    if board.language == "c":
        for report in reports:
            (one,) = report.routines
            assert one.sizes.data == 0
            assert one.sizes.code > 50
            assert one.message == ""
        soft = board.floats["float32"] == "soft"
        assert (packed.sizes.library > 0) == soft
        # Each stored element is read, and each is multiplied and added at least once.
        assert packed.counts.loads >= 78 + 12
        assert packed.counts.stores >= 12
        assert packed.counts.instructions > (5000 if soft else 78 + 2 * 66)


def test_counts_are_repeatable_and_grow_with_n():
    board = ready("cortex-m4f")
    plan = plan_of(layout="packed", n="runtime", dtype="float32")
    found = [check_on(board, [plan], budget=2000, n=n).routines[0].counts for n in (6, 12, 12)]
    assert found[1] == found[2]
    assert 2 * found[0].instructions < found[1].instructions < 5 * found[0].instructions


HAND_CALLER = """
extern unsigned hand(unsigned *);
static unsigned numbers[8];
int main(void) { return hand(numbers) == 0 ? 0 : 1; }
"""
# Counted by hand: see the numbers at the right (instructions, loads, stores).
HAND_M4 = """
    .syntax unified
    .thumb
    .text
    .global hand
    .type hand, %function
hand:
    push {r4, lr}       @ 1, 0, 2
    movs r2, #0         @ 1
    movs r3, #5         @ 1
1:  ldr r1, [r0]        @ 5 times 1, 1, 0
    adds r2, r2, r1     @ 5 times 1
    str r2, [r0]        @ 5 times 1, 0, 1
    adds r0, #4         @ 5 times 1
    subs r3, #1         @ 5 times 1
    bne 1b              @ 5 times 1
    bl inner            @ 1
    mov r0, r2          @ 1
    pop {r4, pc}        @ 1, 2, 0
    .size hand, .-hand
    .type inner, %function
inner:
    ldrb r1, [r0]       @ 1, 1, 0
    bx lr               @ 1
    .size inner, .-inner
"""
HAND_A64 = """
    .text
    .global hand
    .type hand, %function
hand:
    str x30, [sp, #-16]!  // 1, 0, 1
    mov w2, #0            // 1
    mov w3, #5            // 1
1:  ldr w1, [x0]          // 5 times 1, 1, 0
    add w2, w2, w1        // 5 times 1
    str w2, [x0], #4      // 5 times 1, 0, 1
    subs w3, w3, #1       // 5 times 1
    b.ne 1b               // 5 times 1
    bl inner              // 1
    mov w0, w2            // 1
    ldr x30, [sp], #16    // 1, 1, 0
    ret                   // 1
    .size hand, .-hand
    .type inner, %function
inner:
    ldrb w1, [x0]         // 1, 1, 0
    ret                   // 1
    .size inner, .-inner
"""


@pytest.mark.parametrize(
    ("name", "text", "expected"),
    [
        ("cortex-m4f", HAND_M4, (3 + 5 * 6 + 3 + 2, 5 + 2 + 1, 5 + 2)),
        ("aarch64", HAND_A64, (3 + 5 * 5 + 4 + 2, 5 + 1 + 1, 5 + 1)),
    ],
)
def test_the_counter_agrees_with_a_count_by_hand(name, text, expected):
    board = ready(name)
    with build(board, {"hand.S": text, "main.c": HAND_CALLER}) as built:
        found = counts(built, ["hand"], ["main.c"])["hand"]
        with pytest.raises(CheckError, match="has no function 'absent'"):
            counts(built, ["absent"], ["main.c"])
    assert (found.instructions, found.loads, found.stores) == expected


def test_sizes_agree_with_nm():
    board = ready("cortex-m4f")
    need("arm-none-eabi-nm")
    plan = plan_of(**PACKED)
    files = render([plan], "kernel", "c")
    test = selftest(record("kernel", [plan], budget=2000), "c")
    with build(board, {**files, **test, **main_program("kernel")}) as built:
        found = sizes(built, "kernel.c", "kernel")
        told = subprocess.run(
            ["arm-none-eabi-nm", "-S", built.objects["kernel.c"]], capture_output=True, text=True
        ).stdout
        kernel = re.search(r"^\w+ (\w+) T kernel$", told, re.MULTILINE)
        usage = built.objects["kernel.c"].with_suffix(".su").read_text()
    assert found.code == int(kernel[1], 16)
    assert found.stack == int(usage.split("\t")[1])


def test_the_stack_of_callees_is_added_and_what_is_not_known_is_named(host):
    source = """
extern void other(char *);
static void __attribute__((noipa)) inner(char *p) { char q[100]; *p = 1; other(q); }
void outer(void);
void outer(void) { char p[50]; inner(p); other(p); }
void __attribute__((noipa)) other(char *p) { *p = 2; }
int main(void) { outer(); return 0; }
"""
    with build(host, {"one.c": source}) as built:
        usage = built.objects["one.c"].with_suffix(".su").read_text()
        found = sizes(built, "one.c", "outer")
    known = {name: int(size) for name, size in re.findall(r":(\w+)\t(\d+)\t", usage)}
    assert found.stack == known["outer"] + known["inner"] + known["other"]
    soft = ready("cortex-m3")
    with build(soft, {"one.c": "float one(float p); float one(float p) { return p * p; }\n"
                      "int main(void) { return 0; }"}) as built:  # fmt: skip
        found = sizes(built, "one.c", "one")
    assert "__aeabi_fmul" in found.uncounted
    assert found.outside == ()
    assert found.library > 100


# --- what a board must notice ------------------------------------------------------------------

CAUGHT = ("diagonal_twice", "order_reversed", "wrong_at_one_size")


def test_a_planted_fault_fails_on_the_target_as_on_the_host(host):
    board = ready("cortex-m4f")
    plan = plan_of(**PACKED)
    recording = record("kernel", [plan], budget=8000)
    planted = [(name, one.apply(plan)) for name, one in FAULTS.items()]
    planted = [(name, changed) for name, changed in planted if changed is not None][:4]
    for name, changed in planted:
        files = render([changed], "kernel", "c", contracts=False)
        reports = [check_on(one, [plan], files, recording=recording) for one in (host, board)]
        assert [one.verdict for one in reports] == ["differs", "differs"], name
        assert reports[0].mismatches == reports[1].mismatches > 0
        assert not verify(plan, executable_of(plan, files), until=("exact", "faithful")).verified


UNSEEN = {"write_that_restores", "other_half_restored"}
"""Faults that leave every byte as it was: seen where accesses are watched, not on a board."""


@pytest.mark.parametrize("name", ["buoy_packed", "bridge_strided"])
def test_the_vectors_catch_what_the_bench_catches(host, name):
    plan = plan_of(name, **KERNELS[name])
    recording = record(name, [plan])
    assert check_on(host, [plan], recording=recording, measure=False).verdict == "agrees"
    missed, tried = set(), 0
    for fault in list(FAULTS.values())[:: 1 if name == "buoy_packed" else 3]:
        changed = fault.apply(plan)
        if changed is None or fault.name in UNSEEN:
            continue
        files = render([changed], name, "c", contracts=False)
        report = check_on(host, [plan], files, recording=recording, measure=False)
        tried += 1
        missed |= {fault.name} if report.verdict == "agrees" else set()
    assert not missed
    assert tried > 10


def test_flushed_subnormal_numbers_are_noticed(host):
    if platform.machine() != "x86_64":
        pytest.skip("the mode is set by an instruction of x86-64")
    flush = (
        "__attribute__((constructor)) static void flush(void)\n{ __builtin_ia32_ldmxcsr(0x9fc0); }"
    )
    report = check_on(replace(host, start=flush), [plan_of(**PACKED)], measure=False)
    assert report.verdict == "differs"


def test_crashes_and_loops_without_end_are_told(host):
    with build(host, {"one.c": "int main(void) { return *(volatile int *)0; }"}) as built:
        assert "crashed (signal 11" in run(host, built.program).message or "exit 139" in run(
            host, built.program
        ).message  # fmt: skip
    with build(host, {"one.c": "int main(void) { for (;;) { } }"}) as built:
        assert run(host, built.program, seconds=0.5).message == "did not end within 0.5 s"


def test_sources_that_do_not_compile_are_told(host):
    plan = plan_of(**PACKED)
    files = render([plan], "kernel", "c")
    report = check_on(host, [plan], {**files, "kernel.c": "int kernel(void) { return 1 +; }"})
    assert report.verdict == "failed"
    assert "expected expression" in report.message


# --- what does not go together -----------------------------------------------------------------


@pytest.mark.parametrize(
    ("name", "dtype", "refused"),
    [
        ("cortex-m0", "float32", True), ("cortex-m3", "float32", True),
        ("cortex-m4f", "float64", True), ("rv32imac", "float32", True),
        ("cortex-m4f", "float32", False), ("cortex-m7", "float64", False),
        ("rv64gc", "float64", False), ("aarch64", "float32", False), ("s390x", "float64", False),
    ],
)  # fmt: skip
def test_a_fused_order_needs_the_instruction(name, dtype, refused):
    plan = plan_of(**{**PACKED, "dtype": dtype}, fma=True)
    if refused:
        report = check_on(find_board(name), [plan])
        assert report.verdict == "refused"
        assert f"fma = true in {dtype}: {name} computes it in software" in report.message
    else:
        report = check_on(ready(name), [plan], budget=4000)
        assert (report.verdict, report.message) == ("agrees", "")
        assert report.routines[0].sizes.library == 0


def test_what_else_is_refused():
    m0 = find_board("cortex-m0")
    large = plan_of(layout="packed", n=200, dtype="float64")
    assert "bytes of RAM" in next(refusals(m0, large))
    python = find_board("micropython")
    assert "is written in c" in next(refusals(python, large))
    hermitian = plan_of(**KERNELS["gauges_hermitian"], language="python")
    assert "lose the sign of an imaginary part" in next(refusals(python, hermitian))
    assert "no such instruction" in next(
        refusals(python, plan_of(**PACKED, language="python", fma=True))
    )
    lanes = plan_of(layout="full", n="runtime", dtype="float64", isa="avx2")
    assert 'use isa = "portable"' in next(refusals(m0, lanes))


def test_the_board_whose_complex_numbers_lose_a_sign_does_lose_it():
    board = replace(ready("micropython"), complex=True)
    plan = plan_of(**KERNELS["gauges_hermitian"], language="python")
    assert check_on(board, [plan]).verdict == "differs"


def test_a_planted_fault_in_python_fails_on_the_board():
    board = ready("micropython")
    plan = plan_of(**PACKED, language="python")
    files = render([plan], "kernel", "python")
    changed = files["kernel.py"].replace("y[k] = _single(float(y[k]) + acc)", "y[k] = float(y[k])")
    assert changed != files["kernel.py"]
    report = check_on(board, [plan], {"kernel.py": changed}, budget=4000)
    assert report.verdict == "differs"
    assert report.mismatches > 0
    report = check_on(board, [plan], {"kernel.py": "kernel = None\n"}, budget=4000)
    assert (report.verdict, report.mismatches) == ("failed", None)
    assert "gave no answer" in report.message


@pytest.mark.parametrize("name", known_boards())
def test_missing_programs_are_named_with_their_packages(name, tmp_path, monkeypatch):
    board = find_board(name)
    plan = plan_of(**PACKED, language=board.language)
    monkeypatch.setenv("PATH", str(tmp_path))
    report = check_on(board, [plan], budget=2000)
    assert report.verdict == "missing"
    program = board.compiler or board.emulator[0]
    assert f"{program} is not on this machine; install it" in report.message
    assert " ".join(board.packages) in report.message


def test_a_missing_part_of_the_compiler_is_named_with_its_package(host):
    lacking = replace(host, flags=("--specs=absent.specs",), packages=("libabsent",))
    report = check_on(lacking, [plan_of(**PACKED)], budget=2000)
    assert report.verdict == "missing"
    assert "apt-get install --no-install-recommends libabsent" in report.message


# --- files of boards ---------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("old", "new", "key", "message"),
    [
        ('title = "this machine"', "", "title", "missing; needed is a text"),
        ("compiler", "compilr", "compilr", 'did you mean "compiler"?'),
        ('"{program}"', '"program"', "emulator", 'with "{program}" among them'),
        ('"gcc"', '""', "compiler", "allowed is the name of a program"),
        ('float64 = "fused"', "", "floats", 'a table of "float32", "float64"'),
        ('"fused"', '"quick"', "floats", '"soft", "plain", "fused"'),
        ("[floats]", "ram = 0\n[floats]", "ram", "found 0, allowed is a number of bytes"),
        ("[floats]", 'endian = "middle"\n[floats]', "endian", 'allowed is "little" or "big"'),
        ("[floats]", 'flags = "-O2"\n[floats]', "flags", "allowed is a list of texts"),
        ("[floats]", 'language = "ada"\n[floats]', "language", 'allowed is "c" or "python"'),
    ],
)
def test_mistakes_in_a_board_are_told(tmp_path, old, new, key, message):
    path = tmp_path / "mine.toml"
    path.write_text(HOST.replace(old, new))
    with pytest.raises(SpecError) as caught:
        find_board(str(path))
    told = [str(one) for one in caught.value.problems if one.key == key]
    assert len(told) == 1
    assert told[0].startswith(f"mine.toml, key {key}: ")
    assert message in told[0]


def test_boards_that_cannot_be_read_are_told(tmp_path):
    (tmp_path / "mine.toml").write_text("title = ")
    with pytest.raises(SpecError, match=r"mine\.toml: not TOML"):
        read_board(tmp_path / "mine.toml")
    (tmp_path / "mine.toml").write_bytes(b"\xff")
    with pytest.raises(InputError, match="not UTF-8"):
        read_board(tmp_path / "mine.toml")
    with pytest.raises(InputError, match='did you mean "cortex-m4f"'):
        find_board("cortex-m4")
    with pytest.raises(InputError, match="absent"):
        find_board("absent.toml")


def test_a_wrong_byte_order_is_told(host):
    report = check_on(replace(host, endian="big"), [plan_of(**PACKED)], budget=2000)
    if sys.byteorder == "little":
        assert report.verdict == "failed"
        assert '"big"-endian' in report.message


# --- recorded vectors --------------------------------------------------------------------------


@pytest.mark.parametrize("name", [*KERNELS, *OTHERS])
def test_vectors_are_reproducible_within_the_budget_and_agree_on_the_host(host, name):
    plan = plan_of(name, **{**KERNELS, **OTHERS}[name])
    for budget in (1500, 5000, 70000):
        recording = record(name, [plan], budget=budget)
        assert recording.bytes <= budget
        assert recording.column_bits == (32 if budget > 65536 else 16)
        if budget == 5000:
            again = record(name, [plan], budget=budget)
            assert selftest(recording, "c") == selftest(again, "c")
            assert selftest(recording, "c") != selftest(record(name, [plan], seed=2), "c")
        report = check_on(host, [plan], recording=recording, measure=False)
        assert (report.verdict, report.message) == ("agrees", "")


def test_a_larger_budget_has_more_vectors_and_the_smallest_that_fails_says_what_is_needed():
    plan = plan_of(**PACKED)
    counts = [record("kernel", [plan], budget=budget).cases for budget in (1000, 4000, 32768)]
    assert 0 < counts[0] < counts[1] < counts[2]
    assert counts[2] > 200
    with pytest.raises(InputError, match=r"a vector needs \d+ bytes, and 300 of the budget of 300"):
        record("kernel", [plan], budget=300)
    (report,) = check_all([find_board("cortex-m0")], [plan.spec], budget=300)
    assert report.verdict == "failed"
    assert "of the budget of 300 bytes" in report.message


def test_the_tables_hold_the_bytes_that_are_told(host):
    plan = plan_of(**KERNELS["bridge_strided"])
    recording = record("kernel", [plan], budget=10000)
    files = render([plan], "kernel", "c")
    sources = {**files, **selftest(recording, "c"), **main_program("kernel")}
    with build(host, sources, optimise="-O0") as built:
        symbols = read_elf(built.objects["kernel_selftest.c"]).symbols
    held = sum(one.size for one in symbols if not one.function and one.defined)
    assert held == recording.bytes


def test_the_vectors_have_every_kind_of_value():
    plan = plan_of(**KERNELS["bridge_strided"])
    recording = record("kernel", [plan])
    bits = np.array(recording.words["float64"].numbers, dtype=np.uint64)
    values = bits.view(np.float64)
    tiny = np.finfo(np.float64).tiny
    assert 0 in bits
    assert 1 << 63 in bits
    assert np.isinf(values).any()
    assert np.isnan(values).any()
    assert ((np.abs(values) < tiny) & (values != 0)).any()
    assert POISON["float64"] not in bits
    (routine,) = recording.routines
    columns = routine.case_columns()
    scalars = {
        (values[row[columns["scalar alpha"]]], values[row[columns["scalar beta"]]])
        for row in routine.cases
    }
    assert {(0.0, 0.0), (1.0, 1.0), (0.0, 1.0)} <= scalars
    assert any(alpha == 0 and beta not in (0, 1) for alpha, beta in scalars)
    assert any(beta == 0 and alpha not in (0, 1) for alpha, beta in scalars)
    shapes = routine.shape_columns()
    for name in ("incx", "incy"):
        assert {-3, -2, -1, 1, 2, 3} <= {row[shapes[name]] for row in routine.shapes}
    # n = 0, and each argument that is refused: n, ld, incx, incy.
    assert 0 in {row[shapes["n"]] for row in routine.shapes}
    assert {row[0] for row in routine.shapes} >= {0, 1}
    assert len({row[0] for row in routine.shapes}) == 5


def test_routines_of_one_file_share_the_budget(host):
    plans = [
        make_plan(make_spec(name, **PACKED, file="buoy", operation=operation))
        for name, operation in (("buoy_predict", "matvec"), ("row", "rank1"), ("maps", "quadform"))
    ]
    recording = record("buoy", plans, budget=12000)
    assert recording.bytes <= 12000
    assert all(len(one.cases) >= 7 for one in recording.routines)
    report = check_on(host, plans, recording=recording)
    assert (report.verdict, report.cases) == ("agrees", recording.cases)
    assert [one.kernel for one in report.routines] == ["buoy_predict", "row", "maps"]
    soft = check_on(ready("cortex-m3"), plans, recording=recording)
    wanted = {one.kernel: one.sizes.uncounted for one in soft.routines}
    assert "memset" not in wanted["row"]  # it has nothing to set to zero
    assert all("__aeabi_fmul" in one for one in wanted.values())


@pytest.mark.parametrize("compiler", ["gcc", "clang", "g++", "clang++"])
def test_the_self_test_compiles_without_a_warning(compiler, tmp_path):
    need(compiler)
    named = {"copy_bytes": PACKED, "marked": {**PACKED, "operation": "quadform"}}
    for name, keys in {**KERNELS, **OTHERS, **named}.items():
        plan = plan_of(name, **keys)
        recording = record(name, [plan], budget=2500)
        for file, text in {
            **render([plan], name, "c"), **selftest(recording, "c"), **main_program(name),
        }.items():  # fmt: skip
            (tmp_path / file).write_text(text)
            if not file.endswith((f"{name}.c", f"{name}.h")):
                assert max(map(len, text.splitlines())) <= 90
                assert re.findall(r"#include (.*)", text) in ([f'"{name}.h"'], [])
    cpp = compiler.endswith("+")
    flags = [one for one in WARNING_FLAGS if not cpp or one != "-Wstrict-prototypes"]
    language = ["-std=c++11", "-x", "c++"] if cpp else [*CONTRACT_FLAGS]
    sources = sorted(str(one) for one in tmp_path.glob("*_[sm]*.c") if "_main" not in one.name)
    sources = [one for one in sources if one.endswith("_selftest.c")]
    assert len(sources) == len(KERNELS) + len(OTHERS) + 2
    done = subprocess.run(
        [compiler, *language, *flags, "-Werror", "-O2", "-c", *sources],
        cwd=tmp_path, capture_output=True, text=True,
    )  # fmt: skip
    assert done.returncode == 0, done.stderr


def test_the_python_self_test_runs_under_cpython(tmp_path):
    for name, keys in {**KERNELS, **OTHERS}.items():
        plan = plan_of(name, **keys, language="python")
        recording = record(name, [plan], budget=4000)
        files = {**render([plan], name, "python"), **selftest(recording, "python")}
        assert max(len(line) for line in files[f"{name}_selftest.py"].splitlines()) <= 90
        for file, text in files.items():
            (tmp_path / file).write_text(text)
        command = f"import {name}_selftest as t; print(t.selftest())"
        environment = {**os.environ, "PYTHONPATH": str(tmp_path)}
        done = subprocess.run(
            [sys.executable, "-c", command], capture_output=True, text=True, env=environment
        )
        assert done.stdout == "0\n", done.stderr
        # A result that is off by one bit, in the expected words, is found.
        result = plan.arrays[plan.spec.operation.result]
        (routine,) = recording.routines
        words = recording.words[result.type].numbers
        places = {row[routine.case_columns()[f"results {result.name}"]] for row in routine.cases}
        for place in places:
            words[place] ^= 1
        (tmp_path / f"{name}_selftest.py").write_text(
            selftest(recording, "python")[f"{name}_selftest.py"]
        )
        done = subprocess.run(
            [sys.executable, "-c", command], capture_output=True, text=True, env=environment
        )
        assert done.stdout not in ("0\n", "")


def test_one_call_has_plain_strides_and_general_scalars():
    recording = one_call("kernel", [plan_of(**KERNELS["bridge_strided"])], 7)
    (routine,) = recording.routines
    (shape,) = routine.shapes
    columns = routine.shape_columns()
    assert [shape[columns[name]] for name in ("n", "incx", "incy")] == [7, 1, 1]
    assert len(routine.cases) == 1


def test_the_boards_are_shipped_with_what_they_need():
    for board in known_boards().values():
        assert board.packages
        assert board.title
    assert {one.endian for one in known_boards().values()} == {"little", "big"}
