"""Emitted sources do what they promise: compilers, flags, C++, Python and its arithmetic."""

from __future__ import annotations

import array
import ast
import ctypes
import ctypes.util
import inspect
import math
import platform
import re
import traceback
from fractions import Fraction
from functools import cache
from pathlib import Path
from typing import Any

import numpy as np
import pytest
from hypothesis import example, given, settings
from hypothesis import strategies as st
from test_counts import build, extent, run, settings_of
from test_golden import groups, plans, sources, write
from tools import need

from demilune import kernel, make_plan, make_spec, render
from demilune.plan.tree import Parameter
from demilune.primitives import _fma, _fma_single, _single

X86 = platform.machine() in ("x86_64", "AMD64")
FMA = ["-mfma"] if X86 else []
WARNINGS = [
    *("-Wall", "-Wextra", "-Wpedantic", "-Wconversion", "-Wdouble-promotion"),
    *("-Wstrict-prototypes", "-Wshadow", "-Werror"),
]
C99 = ["-std=c99", *WARNINGS]
CXX = ["-x", "c++", "-std=c++17", *(flag for flag in WARNINGS if "prototypes" not in flag)]
DIALECTS = {"gcc": C99, "clang": C99, "g++": CXX, "clang++": CXX}


# --- warnings -----------------------------------------------------------------------------------


@pytest.mark.parametrize("compiler", DIALECTS)
def test_no_warning(compiler, tmp_path):
    names = write(tmp_path, sources())
    build(tmp_path, compiler, "-fsyntax-only", *DIALECTS[compiler], *FMA, *names)


def test_no_warning_of_the_optimiser(tmp_path):
    names = write(tmp_path, groups())
    build(tmp_path, "gcc", "-O1", *C99, *FMA, "-S", *names)


@pytest.mark.parametrize("compiler", DIALECTS)
def test_a_planted_warning_is_seen(compiler, tmp_path):
    name = next(name for name in sources() if name.endswith(".c"))
    write(tmp_path, sources())
    text = sources()[name] + "\nint narrow(long long);\nint narrow(long long p) { return p; }\n"
    (tmp_path / name).write_text(text, encoding="utf-8")
    done = run(tmp_path, need(compiler), "-fsyntax-only", *DIALECTS[compiler], *FMA, name)
    assert done.returncode != 0
    assert "conversion" in done.stderr


# --- flags that void the contract ---------------------------------------------------------------

SUM = """
#include <stdio.h>
#include "plain.h"
int main(void)
{
    double a[36], x[8], y[8], lone[1] = {-0.0}, one[1] = {1.0}, s[1];
    for (int i = 0; i < 36; i++) a[i] = 1.0 / (i + 1);
    for (int i = 0; i < 8; i++) x[i] = 1.0 / (3 + 2 * i);
    sum(8, a, x, y);
    single(lone, one, s);
    for (int i = 0; i < 8; i++) printf("%a ", y[i]);
    printf("%a\\n", s[0]);
    return 0;
}
"""


PLAIN: list[tuple[str, dict[str, Any]]] = [
    ("sum", {"loop": "dot"}),
    ("single", {"loop": "dot", "n": 1, "unroll": 1}),
    ("wide", {"loop": "fused", "dtype": "float32", "accumulator": "wide"}),
    ("careful", {"loop": "axpy", "accumulator": "compensated", "block": 2}),
]
WAVES: list[tuple[str, dict[str, Any]]] = [
    ("wave", {"loop": "fused", "dtype": "complex64", "block": 2}),
    ("wave_update", {"operation": "rank1", "dtype": "complex128"}),
]


def plain_files(kernels: list[tuple[str, dict[str, Any]]], **more: Any) -> dict[str, str]:
    some = [make_spec(name, layout="packed", **values, **more) for name, values in kernels]
    return render([make_plan(spec) for spec in some], "plain", "c")


def refused(folder: Path, said: str) -> bool:
    """Whether the file itself has refused to be compiled: by #error, and by nothing else."""
    lines = (folder / "plain.c").read_text().splitlines()
    places = [int(place) - 1 for place in re.findall(r"(?m)^plain\.c:(\d+):.*\berror:", said)]
    return bool(places) and all(lines[place].startswith("#error") for place in places)


ASSOCIATIVE = "-fassociative-math -fno-signed-zeros -fno-trapping-math"


@pytest.mark.parametrize(
    ("compiler", "flags"),
    [
        ("gcc", "-ffast-math"),
        ("gcc", "-Ofast"),
        ("gcc", "-ffinite-math-only"),
        ("gcc", ASSOCIATIVE),
        pytest.param("gcc", "-mfpmath=387", marks=pytest.mark.skipif(not X86, reason="x86")),
        ("gcc", "-U__FLT_MANT_DIG__ -D__FLT_MANT_DIG__=11"),
        ("gcc", "-U__DBL_MANT_DIG__ -D__DBL_MANT_DIG__=24"),
        ("clang", "-ffast-math"),
        ("clang", "-Ofast"),
        ("clang", "-ffinite-math-only"),
        ("clang", "-U__FLT_MANT_DIG__ -D__FLT_MANT_DIG__=11"),
    ],
)
def test_flags_that_void_the_contract_are_refused(compiler, flags, tmp_path):
    write(tmp_path, plain_files(PLAIN))
    done = run(tmp_path, need(compiler), "-O2", *flags.split(), "-c", "plain.c", "-o", "plain.o")
    assert done.returncode != 0
    assert refused(tmp_path, done.stderr), done.stderr


@pytest.mark.parametrize("compiler", ["gcc", "clang"])
@pytest.mark.parametrize(
    "flags",
    [
        ASSOCIATIVE,
        "-funsafe-math-optimizations",
        "-freciprocal-math",
        "-fno-signed-zeros",
        pytest.param(
            "-march=native -ffp-contract=fast",
            id="contract",
            marks=pytest.mark.skipif(not X86, reason="-march=native is not everywhere"),
        ),
    ],
)
def test_flags_are_refused_or_change_no_bit(compiler, flags, tmp_path):
    if compiler == "clang" and "contract" in flags:
        pytest.skip("clang 14 heeds no pragma once it is told to fuse, and tells nobody")
    write(tmp_path, plain_files(PLAIN) | {"main.c": SUM})
    build(tmp_path, compiler, "-O0", "plain.c", "main.c", "-o", "main")
    expected = run(tmp_path, "./main").stdout
    assert expected.split()[-1] == "0x0p+0"
    done = run(tmp_path, need(compiler), "-O3", *flags.split(), "-c", "plain.c")
    if done.returncode:
        assert refused(tmp_path, done.stderr), done.stderr
    else:
        build(tmp_path, compiler, "plain.o", "main.c", "-o", "main")
        assert run(tmp_path, "./main").stdout == expected


@pytest.mark.skipif(not X86, reason="the flag that grants the instruction is that of x86")
@pytest.mark.parametrize("compiler", ["gcc", "clang"])
@pytest.mark.parametrize("dtype", ["float32", "float64"])
def test_freestanding_fma_needs_the_instruction(compiler, dtype, tmp_path):
    spec = make_spec("plain", environment="freestanding", fma=True, dtype=dtype)
    write(tmp_path, render([make_plan(spec)], "plain", "c"))
    done = run(tmp_path, need(compiler), "-ffreestanding", "-c", "plain.c")
    assert done.returncode != 0
    assert "fused multiply-add" in done.stderr
    build(tmp_path, compiler, "-ffreestanding", "-mfma", "-c", "plain.c")


@pytest.mark.skipif(not X86, reason="looks for an instruction of x86")
@pytest.mark.parametrize(
    ("compiler", "mode"),
    [
        ("gcc", "-std=gnu11"),
        ("clang", "-std=gnu11"),
        ("g++", "-x c++ -std=gnu++17"),
        ("clang++", "-x c++ -std=gnu++17"),
    ],
)
@pytest.mark.parametrize("kernels", [PLAIN, WAVES], ids=["real", "complex"])
def test_sums_and_products_are_fused_only_where_it_is_asked(compiler, mode, kernels, tmp_path):
    found = {}
    for fma in (False, True):
        write(tmp_path, plain_files(kernels, fma=fma))
        flags = [*mode.split(), "-O3", "-march=haswell", "-S", "plain.c", "-o", "plain.s"]
        build(tmp_path, compiler, *flags)
        found[fma] = re.findall(r"\bvfn?m(?:add|sub)\w+", (tmp_path / "plain.s").read_text())
    assert not found[False]
    assert len(found[True]) >= len(kernels)


# --- several routines in a file, and C++ --------------------------------------------------------

USER = """
#include <cstdio>
#include "pair.h"
int main()
{
    const double a[3] = {2, 1, 3}, x[2] = {10, 100};
    double y[2], s[1];
    product(2, a, x, y);
    form(2, a, x, s);
    std::printf("%g %g %g", y[0], y[1], s[0]);
    return product(-1, a, x, y) == 1 ? 0 : 1;
}
"""


def pair(language: str) -> dict[str, str]:
    both = [
        make_spec(name, layout="packed", accumulator="compensated", language=language, **values)
        for name, values in (("product", {"loop": "dot"}), ("form", {"operation": "quadform"}))
    ]
    return render([make_plan(spec) for spec in both], "pair", language)


@pytest.mark.parametrize(("c", "cxx"), [("gcc", "g++"), ("clang", "clang++")])
def test_two_routines_in_one_file_called_from_cxx(c, cxx, tmp_path):
    files = pair("c")
    assert files["pair.c"].count("static void two_sum") == 1
    write(tmp_path, files | {"user.cpp": USER})
    build(tmp_path, c, *C99, "-c", "pair.c")
    build(tmp_path, cxx, "-std=c++17", "user.cpp", "pair.o", "-o", "user")
    done = run(tmp_path, "./user")
    assert (done.returncode, done.stdout) == (0, "120 310 32200")
    # Without the header's extern "C" the same names cannot be linked.
    (tmp_path / "pair.h").write_text(files["pair.h"].replace("__cplusplus", "NEVER"))
    done = run(tmp_path, cxx, "-std=c++17", "user.cpp", "pair.o", "-o", "user")
    assert "undefined reference" in done.stderr


def test_two_routines_in_one_python_file():
    space: dict[str, Any] = {}
    exec(pair("python")["pair.py"], space)
    y, s = [0.0, 0.0], [0.0]
    space["product"](2, [2.0, 1.0, 3.0], [10.0, 100.0], y)
    space["form"](2, [2.0, 1.0, 3.0], [10.0, 100.0], s)
    assert (y, s) == ([120.0, 310.0], [32200.0])


# --- Python sources -----------------------------------------------------------------------------


def test_python_sources_import_nothing_but_math():
    for name, text in sources("python").items():
        for node in ast.walk(ast.parse(text)):
            assert not isinstance(node, ast.ImportFrom), name
            if isinstance(node, ast.Import):
                assert [one.name for one in node.names] == ["math"], name


CODES = {"float32": "f", "float64": "d", "int16": "h", "int32": "i", "int64": "q", "size": "q"}


def container(kind: str, values: np.ndarray[Any, Any], one: Parameter) -> Any:
    if kind == "list" or (one.complex and kind != "numpy"):
        return values.tolist()
    if kind == "numpy":
        return values.copy()
    made = array.array(CODES[one.type], values.tolist())
    return memoryview(made) if kind == "memoryview" else made


def test_python_routines_take_every_kind_of_sequence():
    dice = np.random.default_rng(7)
    for plan in plans("python"):
        space: dict[str, Any] = {}
        exec(sources("python")[f"{plan.spec.file}.py"], space)
        for arguments in settings_of(plan, (5,), (2, 3)):
            drawn = {}
            for one in plan.parameters:
                if one.kind == "places":
                    drawn[one.name] = np.asarray(arguments[one.name], dtype=np.int64)
                elif one.kind == "array":
                    shape = (extent(one, arguments), one.parts)
                    real = dice.integers(-4, 5, shape) / (1 if one.type[0] == "i" else 7)
                    values = real.astype(one.type)
                    if one.complex:
                        values = values.view("complex64" if one.type == "float32" else "complex128")
                    drawn[one.name] = values.reshape(-1)
            results = set()
            for kind in ("list", "array", "memoryview", "numpy"):
                passed = [
                    container(kind, drawn[one.name], one)
                    if one.name in drawn
                    else arguments[one.name]
                    for one in plan.parameters
                ]
                space[plan.spec.name](*passed)
                bits = [
                    np.asarray(value, dtype=drawn[one.name].dtype).tobytes()
                    for one, value in zip(plan.parameters, passed, strict=True)
                    if one.name in drawn
                ]
                results.add(b"|".join(bits))
            assert len(results) == 1, plan.spec.name


def test_python_source_is_seen_by_inspect_and_in_tracebacks():
    made = kernel("tide", layout="packed", language="python", incx="runtime")
    source = inspect.getsource(made.function)
    assert source.startswith("def tide(n, a, x, incx, y):")
    assert source in made.source
    with pytest.raises(ValueError, match="incx") as caught:
        made.function(2, [1.0] * 3, [1.0] * 2, 0, [0.0] * 2)
    shown = "".join(traceback.format_exception(caught.value))
    line = next(line for line in made.source.splitlines() if "raise" in line and "incx" in line)
    assert line.strip() in shown


# --- binary32 and the fused multiply-add in Python ----------------------------------------------
# Compared with exact rational arithmetic, rounded here by the definition of IEEE 754, and with
# numpy and the C library of this machine.


def rounded(exact: Fraction, digits: int, least: int, top: int) -> float:
    """``exact`` to nearest, ties to even: ``digits`` bits, last bit at least 2**least."""
    size, exponent = abs(exact), least
    while size >= Fraction(2) ** (exponent + digits):
        exponent += 1
    steps, rest = divmod(size / Fraction(2) ** exponent, 1)
    steps += rest > Fraction(1, 2) or (rest == Fraction(1, 2) and steps % 2 == 1)
    value = steps * Fraction(2) ** exponent
    number = math.inf if value >= Fraction(2) ** top else float(value)
    return -number if exact < 0 else number


FORMATS = {"float32": (24, -149, 128), "float64": (53, -1074, 1024)}
C_NAMES = {"float32": ("fmaf", ctypes.c_float), "float64": ("fma", ctypes.c_double)}
MANY = settings(max_examples=max(300, settings.default.max_examples))


def same(p: float, q: float) -> bool:
    """The same bits, or both not a number."""
    return repr(p) == repr(q)


def numbers(width: int) -> st.SearchStrategy[float]:
    """Any number, and often those at the ends: tiny, huge, whole, signed zeros, specials."""
    digits, least, top = FORMATS[f"float{width}"]
    scaled = st.builds(
        lambda m, e: math.ldexp(float(m), e),
        st.integers(-(2**digits) + 1, 2**digits - 1),
        st.sampled_from([least, least + 1, -digits, -1, 0, 1, (least + digits) // 2, top - digits]),
    )
    return st.one_of(scaled, st.floats(width=width), st.sampled_from([0.0, -0.0, 1.0, -1.0]))


@MANY
@given(st.one_of(numbers(64), numbers(32).map(lambda v: v * (1 + 2.0**-24))))
@example(2.0**-150)
@example(-(2.0**-150))
@example(math.nextafter(2.0**-150, 1))
@example(2.0**128 - 2.0**103)
@example(math.nextafter(2.0**128 - 2.0**103, 0))
@example(1 + 2.0**-24)
@example(1 + 3 * 2.0**-24)
@example(math.nan)
def test_single_rounds_as_numpy_and_as_defined(value):
    with np.errstate(all="ignore"):
        assert same(_single(value), float(np.float32(value)))
    if math.isfinite(value) and value != 0:
        assert same(_single(value), rounded(Fraction(value), *FORMATS["float32"]))


def ties(width: int) -> st.SearchStrategy[tuple[float, float, float]]:
    """a*b next to half a unit of c: where rounding twice goes wrong."""
    digits = FORMATS[f"float{width}"][0]

    def made(c: int, e: int, p: int, q: int, sign: int) -> tuple[float, float, float]:
        factors = (1 + p * 2.0 ** (1 - digits), 1 + q * 2.0 ** (1 - digits))
        return math.ldexp(sign * factors[0], -digits), factors[1], math.ldexp(float(c), e)

    return st.builds(
        made, st.integers(2 ** (digits - 1), 2**digits - 1), st.just(1 - digits),
        st.integers(-3, 3), st.integers(-3, 3), st.sampled_from([-1, 1]),
    )  # fmt: skip


@cache
def c_library() -> ctypes.CDLL:
    return ctypes.CDLL(ctypes.util.find_library("m"))


def checked_fma(made: Any, width: int, a: float, b: float, c: float) -> None:
    name, kind = C_NAMES[f"float{width}"]
    found = made(a, b, c)
    if all(map(math.isfinite, (a, b, c))):
        exact = Fraction(a) * Fraction(b) + Fraction(c)
        if exact != 0:
            assert same(found, rounded(exact, *FORMATS[f"float{width}"]))
        else:  # IEEE 754, 6.3: the sum of opposites is +0, that of like zeros keeps the sign
            product = math.copysign(1, a) * math.copysign(1, b)
            minus = c == 0 and a * b == 0 and product < 0 and math.copysign(1, c) < 0
            assert same(found, -0.0 if minus else 0.0)
    if platform.libc_ver()[0] == "glibc":  # whose fma and fmaf round once
        function = getattr(c_library(), name)
        function.restype, function.argtypes = kind, [kind] * 3
        assert same(found, function(a, b, c))


@MANY
@given(st.one_of(st.tuples(*[numbers(64)] * 3), ties(64)))
@example((5e-324, 0.5, 0.0))
@example((-5e-324, 0.25, 0.0))
@example((1e200, 1e200, -math.inf))
@example((0.0, math.inf, 1.0))
@example((1e308, 10.0, -1e308))
@example((-0.0, 1.0, -0.0))
def test_fma_is_exact_arithmetic_rounded_once(numbers_of):
    checked_fma(_fma, 64, *numbers_of)


@MANY
@given(st.one_of(st.tuples(*[numbers(32)] * 3), ties(32)))
@example((2.0**-149, 0.5, 0.0))
@example((2.0**127, 2.0, -(2.0**127)))
@example((1 + 2.0**-12, 1 + 2.0**-12, 2.0**-80))  # a C library is known to round it twice
def test_fma_single_is_exact_arithmetic_rounded_once(numbers_of):
    checked_fma(_fma_single, 32, *numbers_of)


def test_rounding_twice_would_be_seen():
    a, b, c = 2.0**-24 * (1 + 2.0**-23), 1 - 2.0**-23, 1 + 2.0**-23  # just below a tie
    with pytest.raises(AssertionError):
        checked_fma(lambda a, b, c: _single(_fma(a, b, c)), 32, a, b, c)
    checked_fma(_fma_single, 32, a, b, c)
