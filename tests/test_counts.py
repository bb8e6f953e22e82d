"""What emitted sources do while they run: the operations, loads and stores that the plan and
the header tell, and no touch outside their arrays.

C runs in two instrumented forms: with sanitizers and arrays of exactly the stated sizes, and as
C++ with numbers that count (counting.hpp). Python runs with numbers and sequences that count.
"""

from __future__ import annotations

import json
import re
import subprocess
from collections import Counter
from collections.abc import Callable, Iterable, Iterator
from fractions import Fraction
from functools import cache
from pathlib import Path
from typing import Any, ClassVar

import numpy as np
import pytest
from test_golden import contract_of, groups, header_of, plans, sources, stated_size, write
from tools import need

from demilune import Plan, kernel, make_plan, make_spec, render
from demilune.plan.counts import flat
from demilune.plan.tree import Parameter
from demilune.storage import indices

# --- calls --------------------------------------------------------------------------------------

STRIDES = (1, -1, 3, -2)
TYPES = {"float32": "float", "float64": "double"} | {f"int{b}": f"int{b}_t" for b in (16, 32, 64)}
Arguments = dict[str, Any]


def settings_of(
    plan: Plan, sizes: tuple[int, ...], scalars: tuple[int, ...] = (2, 3)
) -> Iterator[Arguments]:
    """Arguments for calls: all but arrays, with the strides that the specification fixes."""
    spec, generator = plan.spec, np.random.default_rng(1)
    for turn, n in enumerate(sizes if spec.layout.n == "runtime" else [int(spec.layout.n)]):
        found = spec.layout.environment(spec.layout.sample(n, generator))
        for place, name in enumerate(("incx", "incy")):
            fixed = getattr(spec.operation, name, 1)
            drawn = STRIDES[(turn + place) % len(STRIDES)]
            found[name] = drawn if fixed == "runtime" else int(fixed)
        for place, name in enumerate(("alpha", "beta")):
            found[name] = scalars[(turn + place) % len(scalars)]
        yield found


def extent(one: Parameter, arguments: Arguments) -> int:
    """The elements that an array has to have, as the plan knows it."""
    assert one.extent is not None
    return max(0, one.extent.value(arguments)) if arguments["n"] or one.name == "s" else 0


def call_text(
    plan: Plan, arguments: Arguments, elements: Callable[[Parameter, Arguments], int]
) -> str:
    """One call as a block of C, between macros that make arrays and end them."""
    before, passed, after = [], [], []
    for one in plan.parameters:
        if one.kind == "array":
            count = elements(one, arguments) * one.parts
            before.append(f"ARRAY({TYPES[one.type]}, {one.name}, {count})")
            after.append(f"DONE({one.name}, {one.parts})")
        elif one.kind == "places":
            values = ", ".join(str(place) for place in [*arguments[one.name], 0])
            before.append(f"PLACES({one.name}, {len(arguments[one.name])}, {values})")
            after.append(f"RELEASE({one.name})")
        value = one.name if one.kind in ("array", "places") else str(arguments[one.name])
        passed += [value] * (2 if one.kind == "scalar" and one.complex else 1)
    call = f"{plan.spec.name}({', '.join(passed)});"
    lines = [f"BEGIN({plan.spec.name})", *before, call, *after, "END"]
    return "".join(f"    {line}\n" for line in ["{", *lines, "}"])


def run(folder: Path, *command: str) -> subprocess.CompletedProcess[str]:
    return subprocess.run(command, cwd=folder, capture_output=True, text=True, check=False)


def build(folder: Path, compiler: str, *arguments: str) -> None:
    done = run(folder, need(compiler), *arguments)
    assert done.returncode == 0, done.stderr[:3000]


# --- memory -------------------------------------------------------------------------------------

EXACT = """
#include <stdio.h>
#include <stdlib.h>
#include <string.h>
#ifndef LARGEST
#define LARGEST 1
#endif
static int calls = 0;
#define BEGIN(name)
#define ARRAY(T, name, count) T *name = (T *)malloc((count) * sizeof(T)); \\
    for (int place = 0; place < (count); place++) name[place] = (T)LARGEST;
#define PLACES(name, count, ...) const ptrdiff_t name##_all[] = {__VA_ARGS__}; \\
    ptrdiff_t *name = (ptrdiff_t *)malloc((count) * sizeof *name); \\
    if (count) memcpy(name, name##_all, (count) * sizeof *name);
#define RELEASE(name) free(name);
#define DONE(name, parts) free(name);
#define END calls++;
"""
ANY_FMA = ["-D__FP_FAST_FMA", "-D__FP_FAST_FMAF"]
"""Lets the C library stand in for an instruction that the machine may not have."""
SANITIZERS = [
    *("-std=c99", "-O0", "-fsanitize=address,undefined", "-fno-sanitize-recover=all"),
    *ANY_FMA,
]


def program(chosen: Iterable[Plan], includes: list[str], calls: dict[str, str]) -> str:
    """A C program that makes the calls of the plan whose number is passed, else of all."""
    text = EXACT + "".join(f'#include "{name}"\n' for name in includes)
    for name, made in calls.items():
        text += f"static void run_{name}(void)\n{{\n{made}}}\n"
    text += "int main(int count, char **words)\n{\n"
    text += "    const int only = count > 1 ? atoi(words[1]) : -1;\n"
    for place, plan in enumerate(chosen):
        text += f"    if (only < 0 || only == {place}) run_{plan.spec.name}();\n"
    return text + '    printf("%d", calls);\n    return 0;\n}\n'


def test_memory_is_touched_only_inside_arrays_of_the_stated_sizes(tmp_path):
    calls = {}
    for plan in plans():
        said = header_of(plan)
        calls[plan.spec.name] = "".join(
            call_text(plan, one, lambda array, one, said=said: stated_size(said, array, one))
            for one in settings_of(plan, (0, 1, 2, 5, 9), (2, 0, 3, 1))
        )
    names = write(tmp_path, groups())
    text = program(plans(), [f"{name[:-1]}h" for name in names], calls)
    (tmp_path / "main.c").write_text(text)
    build(tmp_path, "gcc", *SANITIZERS, *names, "main.c", "-o", "main", "-lm")
    done = run(tmp_path, "./main")
    assert done.returncode == 0, done.stderr[:3000]
    assert int(done.stdout) == text.count("BEGIN(") - 1 > 100


FAULTY: dict[str, dict[str, Any]] = {
    "strip_too_many": {"layout": "packed", "loop": "dot"},
    "result_too_many": {"layout": "full", "loop": "axpy", "triangle": "lower"},
    "row_too_many": {"layout": "skyline", "loop": "fused", "dtype": "int16"},
    "column_too_many": {"layout": "rfp", "operation": "quadform", "dtype": "complex64"},
    "element_too_many": {"layout": "band", "operation": "rank1", "kd": 2, "order": "row-major"},
}


def test_a_bound_one_too_long_is_caught(tmp_path):
    chosen = [make_plan(make_spec(name, n="runtime", **one)) for name, one in FAULTY.items()]
    calls = {}
    for plan in chosen:
        name = plan.spec.name
        files = render([plan], name, "c")
        source = files[f"{name}.c"]
        bound = re.search(r"for \(ptrdiff_t [ik] = \w+; [ik] (<) ", source)
        assert bound is not None
        files[f"{name}.c"] = f"{source[: bound.start(1)]}<={source[bound.end(1) :]}"
        write(tmp_path, files)
        calls[name] = "".join(call_text(plan, one, extent) for one in settings_of(plan, (4, 5)))
    text = program(chosen, [f"{name}.c" for name in FAULTY], calls)
    (tmp_path / "main.c").write_text(text)
    build(tmp_path, "gcc", *SANITIZERS, "main.c", "-o", "main")
    for place, name in enumerate(FAULTY):
        done = run(tmp_path, "./main", str(place))
        assert done.returncode != 0, name
        assert "AddressSanitizer: heap-buffer-overflow" in done.stderr, name


@pytest.mark.parametrize(
    "values",
    [
        {"dtype": "int32", "accumulator": "int32", "loop": "dot", "n": 8},
        {"dtype": "int32", "accumulator": "int32", "loop": "fused", "n": 2, "beta": 100_000},
        {"dtype": "int16", "accumulator": "int32", "operation": "quadform", "n": 6},
    ],
    ids=["product", "product-added", "form"],
)
def test_integers_of_the_stated_size_cannot_overflow(values, tmp_path):
    plan = make_plan(make_spec("whole", layout="packed", **values))
    files = render([plan], "whole", "c")
    said = contract_of(files["whole.h"])["Range"]
    found = re.search(rf"(\d+) for n = {values['n']}\b", said)
    assert found is not None
    largest = int(found[1])
    names = write(tmp_path, files)
    calls = {"whole": call_text(plan, next(settings_of(plan, ())), extent)}
    (tmp_path / "main.c").write_text(program([plan], ["whole.h"], calls))
    for much, clean in ((largest, True), (largest + 1, False)):
        if much == 2 ** (int(values["dtype"][3:]) - 1):
            continue  # the elements themselves are the limit
        flags = [*SANITIZERS, f"-DLARGEST={much}"]
        build(tmp_path, "gcc", *flags, *names, "main.c", "-o", "main")
        done = run(tmp_path, "./main")
        assert (done.returncode == 0) == clean, done.stderr[:1000]
        assert clean or "signed integer overflow" in done.stderr


def test_stated_sizes_are_those_that_are_needed():
    for plan in plans():
        said = header_of(plan)
        for arguments in settings_of(plan, tuple(range(20))):
            for one in plan.parameters:
                if one.extent is not None and (one.kind != "places" or arguments["n"]):
                    found = stated_size(said, one, arguments)
                    assert found == extent(one, arguments), f"{plan.spec.name}, {one.name}"


# --- counts of C --------------------------------------------------------------------------------

KINDS = ("additions", "multiplications", "fused multiply-adds", "conversions")


def further(plan: Plan) -> list[Arguments]:
    """Plain sizes, beyond those from which the header's formulas were made where n is free."""
    found = re.search(r"multiple of (\d+)", header_of(plan)["Cost"])
    unit, n = int(found[1]) if found else 1, plan.spec.layout.n
    plain = plan.spec.layout.sample
    sizes = [unit * times for times in (3, 12, 14)] if n == "runtime" else [int(n)]
    return [{**next(settings_of(plan, (1,))), **plain(size)} for size in sizes]


@cache
def cases() -> list[tuple[Plan, Arguments, bool]]:
    """Each call that is counted, and whether the header's costs should hold for it."""
    found = []
    for plan in plans():
        found += [(plan, one, False) for one in settings_of(plan, (0, 1, 2, 5, 8))]
        found += [(plan, one, True) for one in further(plan)]
    return found


def counted_in_c(
    folder: Path, files: dict[str, str], asked: list[tuple[Plan, Arguments]]
) -> list[dict[str, Any]]:
    """The counts of each call, while the emitted source runs with numbers that count."""
    hpp = Path(__file__).with_name("counting.hpp")
    text = f'#include "{hpp}"\n'
    for place, name in enumerate(write(folder, files)):
        text += f'namespace file_{place} {{\n#include "{name}"\n}}\nusing namespace file_{place};\n'
    for place, (plan, arguments) in enumerate(asked):
        text += f"static void call_{place}()\n{call_text(plan, arguments, extent)}"
    calls = "".join(f"    call_{place}();\n" for place in range(len(asked)))
    (folder / "main.cpp").write_text(f"{text}int main()\n{{\n{calls}}}\n")
    build(folder, "g++", "-std=c++17", "-O0", *ANY_FMA, "main.cpp", "-o", "main")
    done = run(folder, "./main")
    assert done.returncode == 0, done.stderr
    return [json.loads(line) for line in done.stdout.splitlines()]


def in_elements(plan: Plan, found: dict[str, Any]) -> dict[str, int]:
    """Counts in elements: a complex one is counted by its real part."""
    result = {kind: found[kind] for kind in KINDS}
    for name, one in plan.arrays.items():
        for what in (f"loads of {name}", f"stores of {name}"):
            result[what] = sum(found[what][:: one.parts])
            rest = sum(found[what][one.parts - 1 :: one.parts])
            if rest != result[what]:  # only a Hermitian diagonal is read by its real part alone
                assert plan.spec.layout.hermitian, what
                assert what == "loads of a", what
                assert rest < result[what], what
    return result


@pytest.fixture(scope="module")
def measured(tmp_path_factory: pytest.TempPathFactory) -> list[dict[str, Any]]:
    folder = tmp_path_factory.mktemp("counting")
    return counted_in_c(folder, groups(), [(plan, one) for plan, one, _ in cases()])


def told(plan: Plan, arguments: Arguments) -> dict[str, int]:
    """The counts that the plan foretells."""
    found = flat(plan, arguments)
    assert found["flops"] == sum(found[kind] for kind in KINDS[:3]) + found[KINDS[2]]
    wanted = [f"{what} of {name}" for name in plan.arrays for what in ("loads", "stores")]
    return {what: found[what] for what in (*KINDS, *wanted)}


def test_c_does_what_the_plan_counts(measured):
    wrong = []
    for (plan, arguments, _), found in zip(cases(), measured, strict=True):
        counts, foretold = in_elements(plan, found), told(plan, arguments)
        differ = {k: (foretold[k], v) for k, v in counts.items() if foretold[k] != v}
        if differ:
            wrong.append(f"{plan.spec.name}, {arguments}: told, found: {differ}")
    assert not wrong, "\n".join([f"{len(wrong)} of {len(measured)} differ", *wrong[:5]])


def costs_of(said: str, n: int) -> dict[str, Fraction]:
    """The costs that a header states for n: formulas, or numbers for certain n."""
    parts = re.split(r"n = (\d+): ", said)
    if len(parts) > 1:
        said = dict(zip(parts[1::2], parts[2::2], strict=True)).get(str(n), "")
    found = {}
    pattern = r"([-+*/^ \dn]+) (operations?|(?:loads?|stores?) of \w+)"
    for formula, what in re.findall(pattern, said):
        value = eval(formula.strip().replace("^", "**"), {"n": Fraction(n)})
        found[re.sub(r"^(load|store|operation)\b", r"\1s", what)] = Fraction(value)
    return found


def test_headers_state_the_costs_that_are_found(measured):
    checked: Counter[bool] = Counter()
    for (plan, arguments, plain), found in zip(cases(), measured, strict=True):
        if not plain:
            continue
        counts = in_elements(plan, found)
        wanted = costs_of(header_of(plan)["Cost"], arguments["n"])
        flops = counts[KINDS[0]] + counts[KINDS[1]] + 2 * counts[KINDS[2]]
        nonzero = {k: v for k, v in counts.items() if " of " in k and v}
        if wanted:  # else numbers are stated, for other n
            assert wanted == {"operations": flops, **nonzero}, f"{plan.spec.name}, {arguments}"
        checked[bool(wanted)] += 1
    assert checked[True] > 2 * checked[False]


# --- counts of Python ---------------------------------------------------------------------------


class Number:
    """A number that counts what is done with it."""

    tally: ClassVar[Counter[str]] = Counter()

    def __init__(self, value: Any) -> None:
        self.value = value.value if isinstance(value, Number) else value

    def _made(self, kind: str, value: Any) -> Number:
        Number.tally[kind] += 1
        return Number(value)

    def __add__(self, other: Any) -> Number:
        return self._made("additions", self.value + Number(other).value)

    def __sub__(self, other: Any) -> Number:
        return self._made("additions", self.value - Number(other).value)

    def __mul__(self, other: Any) -> Number:
        return self._made("multiplications", self.value * Number(other).value)

    def __rmul__(self, other: Any) -> Number:
        return self._made("multiplications", other * self.value)

    def __neg__(self) -> Number:
        return Number(-self.value)


class Pair:
    """A complex element: its real part counts as the load of it."""

    def __init__(self, re: Any, im: Any, read: Callable[[], None] = lambda: None) -> None:
        self._re, self._im, self._read = re, im, read

    @property
    def real(self) -> Any:
        self._read()
        return self._re

    @property
    def imag(self) -> Any:
        return self._im


class Cells:
    """An array that counts loads and stores of each element."""

    def __init__(self, count: int, complex: bool, integer: bool) -> None:
        one = Number(1 if integer else 1.0)
        self.cells: list[Any] = [Pair(one, one) if complex else one for _ in range(count)]
        self.loads, self.stores = [0] * count, [0] * count

    def __getitem__(self, place: int) -> Any:
        def read() -> None:
            self.loads[place] += 1

        assert place >= 0
        cell = self.cells[place]
        if isinstance(cell, Pair):
            return Pair(cell._re, cell._im, read)
        read()
        return cell

    def __setitem__(self, place: int, value: Any) -> None:
        assert place >= 0
        self.stores[place] += 1
        if isinstance(value, Pair):
            value = Pair(Number(value.real), Number(value.imag))
        else:
            value = Number(value)
        self.cells[place] = value


def counted_in_python(plan: Plan, text: str, arguments: Arguments) -> dict[str, Any]:
    """The counts of one call, while the emitted source runs on numbers that count."""
    # Running sums start as constants; they have to count too.
    text = re.sub(r"(?m)^( +\w+ = )(-?[\d.]+)$", r"\1Number(\2)", text)
    space: dict[str, Any] = {"Number": Number}
    exec(text, space)

    def fma(a: Any, b: Any, c: Any) -> Number:
        Number.tally["fused multiply-adds"] += 1
        return Number(Number(a).value * Number(b).value + Number(c).value)

    space |= dict.fromkeys(("float", "int", "_single"), lambda value: value)
    space |= dict.fromkeys(("_fma", "_fma_single"), fma)
    space["complex"] = lambda re, im=0: re if isinstance(re, Pair) else Pair(re, im)
    cells = {
        name: Cells(extent(one, arguments), one.complex, one.type.startswith("int"))
        for name, one in plan.arrays.items()
    }
    passed = []
    for one in plan.parameters:
        value = cells[one.name] if one.name in cells else arguments[one.name]
        passed.append(value.tolist() if one.kind == "places" else value)
    Number.tally = Counter()
    space[plan.spec.name](*passed)
    found: dict[str, Any] = {kind: Number.tally[kind] for kind in KINDS[:3]}
    for name, one in cells.items():
        found |= {f"loads of {name}": one.loads, f"stores of {name}": one.stores}
    return found


def test_python_does_what_the_plan_counts():
    for plan in plans("python"):
        text = sources("python")[f"{plan.spec.file}.py"]
        for arguments in settings_of(plan, (0, 1, 2, 5, 8)):
            found = counted_in_python(plan, text, arguments)
            sums = {k: sum(v) if isinstance(v, list) else v for k, v in found.items()}
            foretold = told(plan, arguments)
            assert sums == {k: foretold[k] for k in sums}, f"{plan.spec.name}, {arguments}"


# --- what the operations promise ----------------------------------------------------------------

LAYOUTS: dict[str, dict[str, Any]] = {
    "full": {}, "packed": {}, "band": {"kd": 3}, "rfp": {}, "tiled": {"tile": 3}, "skyline": {},
}  # fmt: skip


def one_call(n: int, **values: Any) -> tuple[Plan, dict[str, Any]]:
    plan = make_plan(make_spec("made", language="python", **values))
    text = render([plan], "made", "python")["made.py"]
    (arguments,) = settings_of(plan, (n,))
    return plan, {**counted_in_python(plan, text, arguments), "arguments": arguments}


@pytest.mark.parametrize("triangle", ["upper", "lower"])
@pytest.mark.parametrize("loop", ["fused", "dot", "axpy"])
@pytest.mark.parametrize("layout", LAYOUTS)
def test_loads_of_each_stored_element(layout, loop, triangle):
    times = 1 if loop == "fused" else 2
    for block, n in ((1, 7), (2, 6), (3, 8)):
        values = {"layout": layout, "loop": loop, "triangle": triangle, **LAYOUTS[layout]}
        plan, found = one_call(n, block=block, **values)
        wanted = [0] * len(found["loads of a"])
        for i, j, at in indices(plan.spec.layout, found["arguments"]):
            for row, column, place in zip(i, j, at, strict=True):
                wanted[place] = 1 if row == column else times
        assert found["loads of a"] == wanted
        if layout in ("full", "packed", "rfp", "tiled"):
            assert sum(wanted) == n + times * n * (n - 1) // 2
        assert sum(found["stores of a"]) == 0


# Beyond the 2n^2 operations of the product. By hand, for real numbers: alpha costs n products
# (two times n where x is scaled first and each strip's sum again), beta n products, and sums
# that meet only at the end of a strip n additions.
BEYOND = {
    ("dot", 1, 0): 0, ("dot", "runtime", 0): 1, ("dot", "runtime", "runtime"): 3,
    ("axpy", 1, 0): 0, ("axpy", "runtime", 0): 1, ("axpy", "runtime", "runtime"): 2,
    ("fused", 1, 0): 1, ("fused", "runtime", 0): 3, ("fused", "runtime", "runtime"): 4,
}  # fmt: skip


@pytest.mark.parametrize(("loop", "alpha", "beta"), BEYOND)
@pytest.mark.parametrize("layout", ["full", "packed", "rfp", "tiled"])
def test_a_product_takes_two_operations_an_element(layout, loop, alpha, beta):
    for n in (5, 6):
        values = {"layout": layout, "loop": loop, "alpha": alpha, "beta": beta, "block": 2}
        values |= LAYOUTS[layout]
        flops = sum(one_call(n, **values)[1][kind] for kind in KINDS[:2])
        assert flops == 2 * n * n + BEYOND[loop, alpha, beta] * n
        assert flops == kernel("made", **values).counts(n)["flops"]


def test_a_wrong_count_would_be_seen(tmp_path):
    plan = make_plan(make_spec("one", layout="packed", loop="fused"))
    files = render([plan], "one", "c")
    files["one.c"] = files["one.c"].replace("y[k] = ", "y[k] = a[0] * 0.0 + ", 1)
    (arguments,) = settings_of(plan, (4,))
    found = in_elements(plan, counted_in_c(tmp_path, files, [(plan, arguments)])[0])
    differ = {k: found[k] - v for k, v in told(plan, arguments).items() if found[k] != v}
    assert differ == {"additions": 4, "multiplications": 4, "loads of a": 4}
