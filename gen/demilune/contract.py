"""What a routine promises, as lines of text for the head of an emitted file."""

from __future__ import annotations

import textwrap
from collections.abc import Iterable
from fractions import Fraction
from math import lcm
from typing import TYPE_CHECKING, Any

from demilune.dtypes import REAL_DIGITS
from demilune.expressions import integer_text
from demilune.index import Choice, Expr
from demilune.keys import RUNTIME
from demilune.languages import Language
from demilune.plan.build import Plan
from demilune.plan.counts import flat, polynomial
from demilune.plan.tree import Parameter
from demilune.version import __version__

if TYPE_CHECKING:
    from demilune.spec import Spec

COLUMNS = 84
LARGEST_UNIT = 64
"""A formula for the costs holds for multiples of a unit; above this it says too little."""
CAUTION = (
    "Evidence is not certification. Where lives or property depend on the result, the applicable "
    "standards, local codes and qualified people decide."
)


def title(plan: Plan) -> str:
    """One line: name and formula."""
    return f"{plan.spec.name}: {plan.spec.operation.described(plan.spec.layout)}"


def specification(spec: Spec) -> list[str]:
    """The specification as TOML, without what is left at its default."""
    values = {key: value for key, value in spec.stated.items() if key != "language"}
    return [f"[kernel.{spec.name}]", *(f"{key} = {_toml(value)}" for key, value in values.items())]


def _toml(value: Any) -> str:
    if isinstance(value, bool):
        return "true" if value else "false"
    return f'"{value}"' if isinstance(value, str) else repr(value)


def file_head(plans: Iterable[Plan]) -> list[str]:
    """The head of a file: what made it, and from what."""
    lines = [f"Made by Demilune {__version__} (demilune emit) from this specification:", ""]
    for plan in plans:
        lines += ["    " + line for line in specification(plan.spec)] + [""]
    lines += _wrapped(
        "This file belongs to whoever had it made: its makers claim no rights in it. It comes "
        f"without warranty. {CAUTION}"
    )
    return lines


def contract(plan: Plan, language: Language, reports: bool) -> list[str]:
    """The contract of one routine."""
    spec = plan.spec
    lines = [title(plan), ""]
    lines += _section("Matrix", _matrix(plan))
    lines += _section("Arguments", _arguments(plan, language))
    lines += _section("Arithmetic", plan.order)
    if spec.arithmetic.type.integer:
        lines += _section("Range", _range(plan))
    lines += _section("Cost", costs(plan))
    lines += _section("Returns", _returns(plan, language, reports))
    return lines[:-1]


def _section(name: str, paragraphs: Iterable[str]) -> list[str]:
    lines = [f"{name}:"]
    for paragraph in paragraphs:
        lines += ["  " + line for line in _wrapped(paragraph, COLUMNS - 2)]
    return [*lines, ""]


def _wrapped(text: str, width: int = COLUMNS) -> list[str]:
    return textwrap.wrap(text, width, break_long_words=False, break_on_hyphens=False)


def _matrix(plan: Plan) -> list[str]:
    layout = plan.spec.layout
    n = "n" if layout.n == RUNTIME else str(layout.n)
    kind = f"{layout.structure} of {n} rows, the {layout.triangle} triangle stored"
    lines = [f"A is {kind}; layout {layout.name}, {layout.order}; i and j count from 0."]
    lines += layout.formula
    if layout.hermitian:
        lines.append("The imaginary part of the diagonal is taken as 0 and never read.")
    lines.append("Nothing else of the array is read or written.")
    return lines


def _arguments(plan: Plan, language: Language) -> list[str]:
    lines = []
    for one in plan.parameters:
        lines.append(f"{argument_names(one, language)}: {_argument(plan, one, language)}")
    vectors = [one.name for one in plan.parameters if one.kind == "array"]
    lines.append(f"The arrays {', '.join(vectors)} must not overlap.")
    if RUNTIME in (
        getattr(plan.spec.operation, "incx", 1),
        getattr(plan.spec.operation, "incy", 1),
    ):
        lines.append("With a negative stride a vector is passed backward, as in the BLAS standard.")
    return lines


def argument_names(one: Parameter, language: Language) -> str:
    if one.kind == "scalar" and one.complex and not language.complex_elements:
        return f"{one.name}_re, {one.name}_im"
    return one.name


def _argument(plan: Plan, one: Parameter, language: Language) -> str:
    rules = {argument: rule for _, argument, rule in plan.spec.layout.rules()}
    rules |= {argument: rule for _, argument, rule in plan.spec.operation.stride_rules()}
    if plan.spec.layout.n == RUNTIME:
        rules["n"] = "at least 0"
    if one.kind == "size":
        rule = rules.get(one.name)
        return one.meaning + (f"; {rule}" if rule and rule not in one.meaning else "")
    if one.kind == "scalar":
        kind = "complex" if one.complex else one.type
        unread = plan.spec.operation.unread if one.name == "alpha" else ("y",)
        verb = "is" if len(unread) == 1 else "are"
        return f"{one.meaning}, {kind}; where it is 0, {' and '.join(unread)} {verb} not read"
    assert one.extent is not None
    use = {"in": "read", "out": "written", "inout": "read and written", "scratch": "written"}
    count = extent_text(one.extent)
    if one.name == "a" and one.extent.constant is None:
        count = plan.spec.layout.extent_words or count
    if one.kind == "places":
        return f"{one.meaning}; {counted(count, 'integer')}, read"
    kind = f"complex, pairs of {one.type}" if one.complex else one.type
    if one.complex and language.complex_elements:
        kind = f"complex, parts rounded to {one.type}" if one.type == "float32" else "complex"
    return f"{one.meaning}; {counted(count, 'element')} ({kind}), {use[one.use]}"


def extent_text(extent: Expr) -> str:
    """The number of elements in words and symbols."""
    if extent.constant is not None:
        return str(extent.constant)
    text = integer_text(extent)
    for atom in {a for monomial, _ in extent.terms for a in monomial if isinstance(a, Choice)}:
        name = next(iter(atom.condition.names), "")
        text = text.replace(integer_text(Expr((((atom,), 1),))), f"|{name}|")
    return text


def _range(plan: Plan) -> list[str]:
    spec = plan.spec
    digits = REAL_DIGITS[spec.operation.narrowest(spec.arithmetic)]
    lines = [
        "No sum or result overflows while all elements are at most M in magnitude and "
        f"{spec.operation.limit_rule(digits)}."
    ]
    scalars = {
        name: abs(int(getattr(spec.operation, name)))
        for name in ("alpha", "beta")
        if getattr(spec.operation, name, RUNTIME) != RUNTIME
    }
    free = [n for n in ("alpha", "beta") if getattr(spec.operation, n, 0) == RUNTIME]
    given = f" with {' and '.join(free)} of 1 in magnitude" if free else ""
    top = 2 ** REAL_DIGITS[spec.arithmetic.real] - 1
    sizes = [int(spec.layout.n)] if spec.layout.n != RUNTIME else [4, 16, 64, 256]
    limits = [(n, min(top, spec.operation.limit(n, digits, scalars))) for n in sizes]
    lines.append("Largest M: " + ", ".join(f"{m} for n = {n}" for n, m in limits) + given + ".")
    lines.append("Larger elements may overflow; the result is then undefined.")
    return lines


def costs(plan: Plan) -> list[str]:
    """Counts of operations, loads and stores, exact for the sizes they name."""
    spec = plan.spec
    assumed = [spec.layout.assumes] if spec.layout.assumes else []
    scalars = [one.name for one in plan.parameters if one.kind == "scalar"]
    if scalars:
        assumed.append(f"{' and '.join(scalars)} other than 0 and 1")
    start = f"With {' and '.join(assumed)}: " if assumed else ""
    if spec.layout.n != RUNTIME:
        n = int(spec.layout.n)
        lines = [start + _cost_line(flat(plan, spec.layout.sample(n)))]
        real = not spec.arithmetic.type.complex
        if spec.operation.result == "y" and real and spec.layout.whole:
            lines.append(f"The product alone is 2n^2 = {2 * n * n}.")
        return lines
    step, tile = spec.schedule.block, spec.layout.period
    unit = lcm(step, tile, spec.arithmetic.lanes * spec.schedule.steps)
    if unit > LARGEST_UNIT:
        sizes = (16, 64, 256)
        return [f"{start}n = {n}: {_cost_line(flat(plan, spec.layout.sample(n)))}" for n in sizes]
    points = {n: flat(plan, spec.layout.sample(n)) for n in (unit * k for k in (2, 3, 4, 5, 7, 8))}
    names = [name for name in next(iter(points.values())) if name != "bytes of locals"]
    formulas = {
        name: polynomial({n: record[name] for n, record in points.items()}) for name in names
    }
    if any(formula is None for formula in formulas.values()):
        return [f"{start}n = {n}: {_cost_line(record)}" for n, record in list(points.items())[:3]]
    texts = {name: _polynomial_text(formula) for name, formula in formulas.items() if formula}
    when = f" (n a multiple of {unit})" if unit > 1 else ""
    return [f"{start}{_cost_line(texts)}{when}"]


def counted(count: Any, what: str) -> str:
    """A count with its noun, which is in the plural unless the count is 1."""
    first, *rest = what.split(" ", 1)
    noun = first if str(count) == "1" else f"{first}s"
    return " ".join([str(count), noun, *rest])


def _cost_line(record: dict[str, Any]) -> str:
    parts = [counted(record["flops"], "operation")]
    for kind in ("load", "store"):
        for key, value in record.items():
            if key.startswith(f"{kind}s of ") and value not in (0, "0"):
                parts.append(counted(value, f"{kind} of {key.split()[-1]}"))
    return ", ".join(parts) + "."


def _polynomial_text(coefficients: tuple[Fraction, Fraction, Fraction]) -> str:
    parts = []
    for coefficient, power in zip(coefficients, ("n^2", "n", ""), strict=True):
        if coefficient:
            size = abs(coefficient)
            number = "" if size == 1 and power else f"{size}*" if power else f"{size}"
            if size.denominator != 1 and power:
                number = f"{size.numerator}*" if size.numerator != 1 else ""
                text = f"{number}{power}/{size.denominator}"
            else:
                text = f"{number}{power}"
            parts.append(("- " if coefficient < 0 else "+ ") + text)
    text = " ".join(parts) or "0"
    return (
        text.removeprefix("+ ").replace("- ", "-", 1)
        if text.startswith("-")
        else (text.removeprefix("+ "))
    )


def _returns(plan: Plan, language: Language, reports: bool) -> list[str]:
    if not reports:
        return ["nothing; there is no argument that could be refused."]
    if language.complex_elements:
        return ["nothing; raises ValueError for a bad argument, before anything is written."]
    return ["0, or the position of the first bad argument, before anything is written."]
