"""Kernels with lanes, and ways to run them, for test_lanes.py."""

from __future__ import annotations

from dataclasses import replace
from typing import Any

import numpy as np

from demilune import Plan, make_plan, make_spec, render
from demilune.bench import guard
from demilune.bench.evaluator import Evaluator
from demilune.bench.problem import (
    PAD,
    Draw,
    Problem,
    all_magnitudes,
    draw_setting,
    make_problem,
)  # fmt: skip
from demilune.bench.run import differences, flat, foretell, run_case
from demilune.layouts import LAYOUTS
from demilune.toolchain.build import Unit, build_units
from demilune.toolchain.executables import Executable

Values = dict[str, Any]

# --- kernels ------------------------------------------------------------------------------------

SHAPES = (
    (4, 1, 4), (8, 1, 8), (4, 2, 1), (2, 1, 3), (16, 1, 4), (4, 3, 2), (8, 2, 5), (2, 2, 2),
    (4, 1, 8), (8, 3, 1),
)  # fmt: skip
"""Lanes, unroll and block."""
TYPES: tuple[Values, ...] = (
    {"dtype": "float64"},
    {"dtype": "float32", "fma": True},
    {"dtype": "complex128", "structure": "hermitian"},
    {"dtype": "float64", "fma": True},
    {"dtype": "float32"},
    {"dtype": "complex64", "fma": True},
)
KINDS: tuple[Values, ...] = (
    *(
        {"operation": operation, "layout": layout}
        for layout in LAYOUTS
        for operation in ("matvec", "rank1", "quadform")
    ),
    {"operation": "matvec", "layout": "band", "loop": "dot", "kd": 1},
    {"operation": "matvec", "layout": "band", "loop": "dot", "kd": 2},
    {"operation": "matvec", "layout": "band", "loop": "dot"},
)


def kernels(place: int) -> list[Values]:
    """Some kernels of a kind; shapes, types, triangles and strides take turns."""
    kind, found = KINDS[place], []
    for turn in range(4):
        lanes, unroll, block = SHAPES[(3 * place + turn) % len(SHAPES)]
        values = {**kind, **TYPES[(place + turn) % len(TYPES)]}
        if values["dtype"] in ("float32", "complex64"):
            lanes = max(lanes, 4)
        values |= {"lanes": lanes, "unroll": unroll, "block": block}
        values["triangle"] = ("upper", "lower")[turn % 2]
        if kind["layout"] == "tiled":
            values["tile"] = 8 if unroll > 1 else max(block, 5)
        if turn == 3 and "kd" not in kind:
            values |= {"incx": "runtime"}
            values |= {"incy": "runtime"} if kind["operation"] == "matvec" else {}
        found.append(values)
    return found


def name_of(values: Values) -> str:
    words = (values["operation"], values["layout"], values.get("loop"), values.get("kd"))
    return "-".join(str(word) for word in words if word is not None)


SAMPLE: list[Values] = [
    {"layout": "full", "triangle": "lower", "lanes": 4, "unroll": 2, "block": 4},
    {"layout": "packed", "lanes": 4, "block": 2, "dtype": "complex128", "structure": "hermitian"},
    {"layout": "band", "loop": "dot", "kd": 1, "lanes": 8, "dtype": "float32", "fma": True},
    {"layout": "band", "lanes": 4, "block": 4, "triangle": "lower", "fma": True},
    {"layout": "rfp", "operation": "quadform", "lanes": 8, "dtype": "float32"},
    {"layout": "skyline", "operation": "rank1", "lanes": 4, "unroll": 3, "dtype": "complex64",
     "fma": True},
    {"layout": "tiled", "tile": 4, "operation": "rank1", "lanes": 4, "dtype": "complex128"},
    {"layout": "band", "loop": "dot", "kd": 2, "lanes": 2, "dtype": "complex128"},
]  # fmt: skip
"""Some of each, with and without fused multiply-adds, that fit every instruction set."""


def plans_of(kinds: list[Values], **more: Any) -> list[Plan]:
    return [make_plan(make_spec(f"kernel_{i}", **one, **more)) for i, one in enumerate(kinds)]


def executables(kinds: list[Values], sets: list[str]) -> list[list[Executable]]:
    """For each set the kernels with it, all of a set and of one kind of sums in one file."""
    units: dict[tuple[str, bool], Unit] = {}
    for isa in sets:
        for plan in plans_of(kinds, isa=isa):
            key = (isa, plan.spec.arithmetic.fma)
            units.setdefault(key, Unit("many", "c", [], {})).plans.append(plan)
    for unit in units.values():
        unit.files = render(unit.plans, "many", "c", contracts=False)
    made: dict[str, dict[str, Executable]] = {isa: {} for isa in sets}
    for (isa, _), unit in zip(units, build_units(units.values()), strict=True):
        assert unit.error is None, f"{isa}: {unit.error}"
        made[isa] |= {one.plan.spec.name: one for one in unit.executables}
    return [[made[isa][f"kernel_{i}"] for i in range(len(kinds))] for isa in sets]


def problem_of(
    plan: Plan, n: int, cases: int = 4, draw: Draw | None = None, **sizes: Any
) -> Problem:
    """Random inputs: ordinary ones, two ranges of exponents, and now and then a special."""
    generator = np.random.default_rng(n)
    setting = draw_setting(plan, n, generator, (1.0,))
    setting = replace(setting, sizes={**setting.sizes, **sizes})
    draw = draw or all_magnitudes(plan.spec.arithmetic.real)
    return make_problem(plan, setting, draw, generator, cases)


def wrong(
    executable: Executable, problem: Problem, expected: Any, by_value: bool = False
) -> list[str]:
    """How the results differ from what is expected, bit by bit."""
    found = []
    for case in range(problem.lanes):
        got = run_case(executable, problem, case)
        found += differences(problem, expected, got, case, by_value=by_value)
    return [f"{problem.plan.spec.stated}: {message}" for message in found[:3]]


def guarded_arrays(problem: Problem, at_end: bool) -> dict[str, Any]:
    """The arrays of the first case, each in pages with a closed one at one end."""
    return {
        name: guard.guarded(flat(one, problem.buffers[name], 0)[PAD:-PAD], at_end)
        for name, one in problem.plan.arrays.items()
    }


def with_results(problem: Problem, arrays: dict[str, Any]) -> dict[str, Any]:
    """The buffers of the first case with what the arrays hold."""
    found = {}
    for name, one in problem.plan.arrays.items():
        found[name] = problem.buffers[name][:, :, 0].copy()
        found[name][PAD:-PAD] = arrays[name].view(one.type).reshape(-1, one.parts)
    return found


# --- programs of their own ----------------------------------------------------------------------

MAIN = """
#include <stdint.h>
#include <stdio.h>
#include <stdlib.h>
#include <string.h>
#include "many.h"
#define ARRAY(T, name, bytes) T *name = (T *)malloc(bytes); memcpy(name, name##_bits, bytes);
#define SHOW(name, bytes) for (size_t at = 0; at < (bytes); at++) \\
    printf("%02x", ((const unsigned char *)name)[at]); printf("\\n"); free(name);
int main(void)
{
"""
C_TYPES = {"float32": "float", "float64": "double"}


def program(problems: list[Problem]) -> str:
    """A C program that runs the first case of each in arrays of just their size, and shows it."""
    text = MAIN
    for problem in problems:
        lines, passed, after = [], [], []
        for one in problem.plan.parameters:
            name = one.name
            if one.kind == "places":
                values = ", ".join(map(str, [*problem.setting.sizes[name], 0]))
                lines.append(f"static const ptrdiff_t {name}[] = {{{values}}};")
            elif one.kind == "array":
                data = flat(one, problem.buffers[name], 0)[PAD:-PAD].view(np.uint8)
                values = ", ".join(map(str, [*data, 0]))
                lines.append(f"static const unsigned char {name}_bits[] = {{{values}}};")
                lines.append(f"ARRAY({C_TYPES[one.type]}, {name}, {len(data)})")
                after.append(f"SHOW({name}, {len(data)})")
            sizes = problem.setting.sizes
            passed.append(name if one.kind in ("array", "places") else str(sizes[name]))
        call = f"{problem.plan.spec.name}({', '.join(passed)});"
        lines = ["{", *lines, call, *after, "}"]
        text += "".join(f"    {line}\n" for line in lines)
    return text + "    return 0;\n}\n"


def shown_wrong(said: str, problems: list[Problem]) -> list[str]:
    """How what the program shows differs from what is foretold."""
    lines, bad = iter(said.splitlines()), []
    for problem in problems:
        arrays = {
            name: np.frombuffer(bytes.fromhex(next(lines)), dtype=one.type)
            for name, one in problem.plan.arrays.items()
        }
        expected = foretell(Evaluator(problem.plan), problem)
        bad += differences(problem, expected, with_results(problem, arrays), 0)
    assert not list(lines)
    return bad
