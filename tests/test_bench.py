"""The bench: its evaluator, its references, and the planted faults that it must catch."""

from __future__ import annotations

import itertools
from dataclasses import replace
from fractions import Fraction

import numpy as np
import pytest
from hypothesis import example, given
from hypothesis import strategies as st

from demilune import make_plan, make_spec, render, verify
from demilune.bench.evaluator import fused
from demilune.bench.faults import FAULTS
from demilune.bench.levels import LEVELS
from demilune.layouts import LAYOUTS
from demilune.operations import OPERATIONS
from demilune.toolchain.build import Unit, build_units

# --- the evaluator -------------------------------------------------------------------------------


def nearest(exact: Fraction, dtype: type) -> float:
    """``exact`` rounded once to ``dtype``: the nearer of two neighbours, ties to even."""
    info = np.finfo(dtype)
    if exact == 0:
        return 0.0
    size, sign = abs(exact), 1 if exact > 0 else -1
    exponent = max(info.minexp, size.numerator.bit_length() - size.denominator.bit_length() - 1)
    while Fraction(2) ** (exponent + 1) <= size:
        exponent += 1
    unit = Fraction(2) ** (exponent - info.nmant)
    whole = round(size / unit)  # Python rounds halves of a Fraction to even
    result = whole * unit
    return sign * (float("inf") if result > Fraction(float(info.max)) else float(result))


floats32 = st.floats(width=32, allow_nan=False, allow_infinity=False)
floats64 = st.floats(allow_nan=False, allow_infinity=False)


@given(floats32, floats32, floats32)
@example(2.3024636774055936e16, 1.477905532137548e22, 0.0)  # overflows: once a warning
def test_fused_multiply_add_of_binary32_is_rounded_once(a, b, c):
    found = fused(*(np.array([v], dtype=np.float32) for v in (a, b, c)))[0]
    exact = Fraction(a) * Fraction(b) + Fraction(c)
    assert float(found) == nearest(exact, np.float32)


@given(floats64, floats64, floats64)
def test_fused_multiply_add_of_binary64_is_rounded_once(a, b, c):
    found = fused(*(np.array([v]) for v in (a, b, c)))[0]
    assert float(found) == nearest(Fraction(a) * Fraction(b) + Fraction(c), np.float64)


def test_fused_multiply_add_where_two_roundings_go_wrong():
    # The product is just above a tie between two binary32 numbers: rounding to binary64 first
    # loses that (a known trap of software that fuses in the wider type).
    a, c = np.float32([1 + 2**-12]), np.float32([2**-80])
    assert fused(a, a, c).view(np.uint32)[0] == 0x3F801001


# --- planted faults ------------------------------------------------------------------------------

VARIANTS = (
    {"dtype": "float32"},
    {"dtype": "complex128", "structure": "hermitian", "triangle": "lower", "block": 3},
    {"dtype": "float64", "direction": "backward", "fma": True},
    {"dtype": "complex64", "order": "row-major", "block": 2},
)


def faulty_specs():
    """A kernel for each operation, layout and loop order, the variants taking turns."""
    kinds = [
        (layout, operation, loop)
        for layout in LAYOUTS
        for operation, made in OPERATIONS.items()
        for loop in made.loops()
    ]
    for place, (layout, operation, loop) in enumerate(kinds):
        values = dict(VARIANTS[place % len(VARIANTS)])
        if layout == "rfp":
            values.pop("order", None)
        if layout == "tiled":
            values["tile"] = 4
        values |= {"operation": operation, "layout": layout, "loop": loop, "incx": "runtime"}
        if operation != "quadform":
            values["alpha"] = "runtime"
        if operation == "matvec":
            values |= {"beta": "runtime", "incy": "runtime"}
        yield values


def faulty_units(values, language):
    """The kernel with each fault that applies to it: the right plan, the faults, the binaries."""
    spec = make_spec("kernel", language=language, **values)
    plan = make_plan(spec)
    faults, plans = [], []
    for number, fault in enumerate(FAULTS.values()):
        changed = fault.apply(plan)
        if changed is not None:
            name = f"fault{number}"
            routine = replace(changed.routine, name=name)
            plans.append(replace(changed, spec=replace(spec, name=name), routine=routine))
            faults.append(fault)
    unit = Unit("many", language, plans, render(plans, "many", language, contracts=False))
    (unit,) = build_units([unit])
    assert unit.error is None, unit.error
    return plan, faults, unit.executables


SMOKE = list(itertools.islice(faulty_specs(), 0, None, 3))


@pytest.mark.parametrize("values", SMOKE, ids=lambda v: f"{v['operation']}-{v['layout']}")
def test_planted_faults_are_caught(values):
    """A third of all operations, layouts and loop orders; all of them with --long."""
    assert survivors(values, "python") == []


@pytest.mark.long
@pytest.mark.parametrize("language", ["c", "python"])
@pytest.mark.parametrize("values", list(faulty_specs()), ids=lambda v: str(list(v.values())[-4:]))
def test_every_planted_fault_is_caught(values, language):
    assert survivors(values, language) == []


def survivors(values, language) -> list[str]:
    plan, faults, executables = faulty_units(values, language)
    assert len(faults) > 15
    found = []
    for fault, executable in zip(faults, executables, strict=True):
        verdict = verify(plan, executable, until=fault.levels)
        caught = [level.name for level in verdict.levels if level.failed]
        if not set(caught) & set(fault.levels):
            found.append(f"{fault.name}: {caught or 'survives'}")
    return found


def test_every_fault_of_the_catalogue_applies_somewhere():
    applied = set()
    more = [{"dtype": "float32", "accumulator": "compensated", "fma": True}, {"layout": "band"}]
    for values in [*faulty_specs(), *more]:
        plan = make_plan(make_spec("kernel", **values))
        applied |= {name for name, fault in FAULTS.items() if fault.apply(plan) is not None}
    assert applied == set(FAULTS)
    assert len(FAULTS) >= 40


@pytest.mark.parametrize("level", LEVELS)
def test_each_level_has_faults_that_it_should_catch(level):
    assert [fault for fault in FAULTS.values() if level in fault.levels]


def test_a_kernel_in_c_that_crashes_is_reported():
    values = next(v for v in faulty_specs() if v["operation"] == "matvec")
    spec = make_spec("kernel", **values)
    plan = make_plan(spec)
    files = render([plan], "kernel", "c")
    source = files["kernel.c"].replace("return 0;", "return *(volatile int *)0;")
    (unit,) = build_units([Unit("kernel", "c", [plan], {**files, "kernel.c": source})])
    verdict = verify(plan, unit.executables[0])
    assert not verdict.verified
    assert "SIGSEGV" in verdict.levels[0].failures[0]


def test_a_message_says_where_and_shows_bits():
    spec = make_spec("kernel", layout="packed", n=5, dtype="float32", language="python")
    plan = make_plan(spec)
    changed = FAULTS["nothing_done"].apply(plan)
    assert changed is not None
    files = render([changed], "kernel", "python", contracts=False)
    (unit,) = build_units([Unit("kernel", "python", [changed], files)])
    message = verify(plan, unit.executables[0]).levels[0].failures[0]
    for part in ("n = 5", "element 0 of y", "expected", "found", "0x00000000"):
        assert part in message


def test_the_same_seed_gives_the_same_record():
    spec = make_spec("kernel", layout="rfp", language="python")
    plan = make_plan(spec)
    (unit,) = build_units([Unit("kernel", "python", [plan], render([plan], "kernel", "python"))])
    first, again = (verify(plan, unit.executables[0], seed=5).record() for _ in range(2))
    other = verify(plan, unit.executables[0], seed=6).record()
    assert first == again != other
