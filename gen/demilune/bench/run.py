"""Runs a kernel on a problem and compares every byte with what was expected."""

from __future__ import annotations

from collections.abc import Iterator, Mapping
from typing import Any

import numpy as np

from demilune.bench.evaluator import Evaluator
from demilune.bench.problem import BITS, PAD, Lanes, Problem
from demilune.plan.build import Plan
from demilune.plan.tree import Parameter
from demilune.toolchain.executables import Executable


def flat(one: Parameter, buffer: Lanes, lane: int) -> Any:
    """One case as a contiguous array of the element type, padding included."""
    parts = np.ascontiguousarray(buffer[:, :, lane])
    if not one.complex:
        return parts.reshape(-1)
    return parts.view("complex64" if one.type == "float32" else "complex128").reshape(-1)


def arguments_of(problem: Problem, arrays: Mapping[str, Any]) -> dict[str, Any]:
    """All arguments of a call; ``arrays`` begin at element 0."""
    setting = problem.setting
    values: dict[str, Any] = {}
    for one in problem.plan.parameters:
        if one.kind in ("size", "places"):
            values[one.name] = setting.sizes[one.name]
        elif one.kind == "scalar":
            values[one.name] = setting.scalars[one.name]
        else:
            values[one.name] = arrays[one.name]
    return values


def run_case(executable: Executable, problem: Problem, lane: int) -> dict[str, Lanes]:
    """Runs one case on copies of the buffers; gives them as element, part."""
    copies = {
        name: flat(one, problem.buffers[name], lane).copy()
        for name, one in problem.plan.arrays.items()
    }
    executable(arguments_of(problem, {name: copy[PAD:] for name, copy in copies.items()}))
    return {
        name: copies[name].view(one.type).reshape(-1, one.parts)
        for name, one in problem.plan.arrays.items()
    }


def foretell(evaluator: Evaluator, problem: Problem) -> dict[str, Lanes]:
    """The buffers after the call, for all cases, as the plan has it."""
    after = {name: buffer.copy() for name, buffer in problem.buffers.items()}
    scalars: dict[str, tuple[float | int, ...]] = {}
    for one in problem.plan.parameters:
        if one.kind == "scalar":
            value = problem.setting.scalars[one.name]
            scalars[one.name] = (value.real, value.imag) if one.complex else (value.real,)
    inside = {name: buffer[PAD:] for name, buffer in after.items()}
    evaluator.run(problem.setting.sizes, scalars, inside)
    return after


def differences(
    problem: Problem,
    expected: Mapping[str, Lanes],
    found: Mapping[str, Lanes],
    lane: int,
    *,
    by_value: bool = False,
) -> Iterator[str]:
    """What differs: results from what is expected, all else from what it was before.

    NaN equals NaN where a result is one. ``by_value`` lets the two zeros be equal.
    """
    for name, one in problem.plan.arrays.items():
        bits = BITS[one.type]
        want = np.ascontiguousarray(expected[name][:, :, lane])
        got = found[name]
        before = np.ascontiguousarray(problem.buffers[name][:, :, lane])
        results = problem.writable[name]
        same = got.view(bits) == want.view(bits)
        if one.type.startswith("float"):
            same |= results & np.isnan(got) & np.isnan(want)
            if by_value:
                same |= results & (got == want)
        bad = results & ~same
        kept = ~results & ~problem.scratch[name]
        touched = kept & (got.view(bits) != before.view(bits))
        for place, part in np.argwhere(bad)[:1]:
            yield describe(problem, one, place, part, want[place, part], got[place, part])
        for place, part in np.argwhere(touched)[:1]:
            text = describe(problem, one, place, part, before[place, part], got[place, part])
            yield f"written where nothing may be written: {text}"


def describe(problem: Problem, one: Parameter, place: int, part: int, want: Any, got: Any) -> str:
    """Where a difference is, with both values in decimal and hexadecimal."""
    element = int(place) - PAD
    piece = f", {('real', 'imaginary')[part]} part" if one.complex else ""
    return (
        f"{problem.setting}: element {element} of {one.name}{piece}: "
        f"expected {shown(want)}, found {shown(got)}"
    )


def shown(value: Any) -> str:
    """A number in decimal and its bits in hexadecimal."""
    bits = np.asarray(value).reshape(1).view(BITS[value.dtype.name])[0]
    return f"{value} (0x{int(bits):0{2 * value.dtype.itemsize}x})"


def plan_name(plan: Plan) -> str:
    """The kernel's name with its language."""
    return f"{plan.spec.name} ({plan.spec.language})"
