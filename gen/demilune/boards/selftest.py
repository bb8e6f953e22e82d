"""The self-test of a file of routines: recorded vectors as a source file for the board."""

from __future__ import annotations

import textwrap
from collections.abc import Iterable
from typing import Any

from demilune.bench.problem import PAD, POISON
from demilune.bench.recorded import Recording, RoutineCases
from demilune.contract import COLUMNS, title
from demilune.dtypes import REALS
from demilune.expressions import syntax, templates
from demilune.plan.tree import Parameter
from demilune.render import WIDTH, argument_position
from demilune.version import __version__

MOST_TOLD = 99
"""The largest number of differing cases that the program's exit status tells."""
LETTERS = {"float32": "f", "float64": "d", "int16": "h", "int32": "i", "int64": "q"}
"""What Python's arrays call the types."""
WORDS = {2: ("uint16_t", "H"), 4: ("uint32_t", "I"), 8: ("uint64_t", "Q")}


def selftest(recording: Recording, language: str) -> dict[str, str]:
    """The self-test as a source file, by name: in C to be compiled with the routines' file, in
    Python to stand beside it."""
    extension = {"c": "c", "python": "py"}[language]
    template = templates().get_template(f"bundle/selftest.{extension}.j2")
    text = template.render(
        file=recording.file,
        head=_head(recording, language),
        space=PAD,
        own=_own_names(recording),
        column=f"int{recording.column_bits}_t",
        tables=list(_tables(recording, language)),
        types=list(_types(recording)),
        routines=[_routine(recording, one, language) for one in recording.routines],
    )
    return {f"{recording.file}_selftest.{extension}": text.strip("\n") + "\n"}


def _own_names(recording: Recording) -> dict[str, str]:
    """The names that the C file uses beside a routine's, none of which is that of a routine."""
    taken = {one.plan.spec.name for one in recording.routines}
    words = ("copy_bytes", "marked", "maps", "places", "number", "place", "row", "shape", "differs",
             "differing")  # fmt: skip
    return {word: word + "_" * (word in taken) for word in words}


def main_program(file: str, start: str = "") -> dict[str, str]:
    """The program that runs a self-test on a board, by name; ``start`` is its start-up code."""
    head = _wrapped(
        f"Made by Demilune {__version__}: runs the self-test of {file}.c. The exit status is the "
        f"number of cases that differ, {MOST_TOLD} where there are more; 0 says that all agree."
    )
    template = templates().get_template("bundle/main.c.j2")
    text = template.render(file=file, head=head, start=start.strip("\n"), most=MOST_TOLD)
    return {f"{file}_main.c": text.strip("\n") + "\n"}


def _wrapped(text: str) -> list[str]:
    return textwrap.wrap(text, COLUMNS, break_long_words=False, break_on_hyphens=False)


def _head(recording: Recording, language: str) -> list[str]:
    routines = ", ".join(one.plan.spec.name for one in recording.routines)
    lines = _wrapped(
        f"Made by Demilune {__version__} (demilune bundle): the self-test of {routines}, "
        f"{recording.cases} recorded cases (seed {recording.seed})."
    )
    paragraphs = [
        "Each case calls a routine with recorded inputs and compares its results with recorded "
        "bits, which were foretold from the order of arithmetic that the routine's contract "
        "states. What is not given holds poison, also around each array, and must be the same "
        "afterwards."
    ]
    if not all(REALS[real].integer for real in recording.words):
        paragraphs.append(
            "Values have every magnitude: among them are signed zeros, subnormal numbers, "
            "infinities and NaN, and sums that cancel. A result that is NaN may be any NaN. A "
            "mode of the processor that flushes subnormal numbers to zero makes the test fail."
        )
    if language == "c":
        paragraphs.append(
            f"int {recording.file}_selftest(void) gives the number of cases that differ: 0 where "
            f"all agree. The tables take {recording.bytes} bytes (budget {recording.budget}). "
            f"Arrays are on the stack, at most {recording.memory} bytes at a time; there is no "
            "heap, no output and no static data that changes. The order of bytes of the "
            "processor does not matter."
        )
    else:
        paragraphs.append(
            "selftest() gives the number of cases that differ: 0 where all agree. It runs under "
            "CPython and MicroPython, with arrays for real numbers and lists for complex ones."
        )
    for paragraph in paragraphs:
        lines += ["", *_wrapped(paragraph)]
    return lines


# --- tables ------------------------------------------------------------------------------------


def _tables(recording: Recording, language: str) -> Iterable[dict[str, Any]]:
    column = f"int{recording.column_bits}_t"
    own = _own_names(recording) if language == "c" else {"maps": "maps", "places": "places"}
    for real, pool in recording.words.items():
        bits = [_hexadecimal(one, pool.size, language) for one in pool.numbers or [0]]
        meaning = f"Bits of {real} numbers: scalars, inputs and expected results."
        yield _table(f"words_{real}", WORDS[pool.size][0], meaning, bits, language)
    meaning = "Which parts of elements are given, and which are results: a bit each."
    yield _table(own["maps"], "uint8_t", meaning, map(str, recording.maps.numbers or [0]), language)
    if recording.places.numbers:
        meaning = "Places of diagonal elements."
        yield _table(
            own["places"], "int32_t", meaning, map(str, recording.places.numbers), language
        )
    for one in recording.routines:
        name = one.plan.spec.name
        meaning = f"Sizes for {title(one.plan)}. Columns: {', '.join(one.shape_columns())}."
        yield _rows(f"shapes_{name}", column, meaning, one.shapes, language)
        meaning = f"Cases: {', '.join(one.case_columns())}."
        yield _rows(f"cases_{name}", column, meaning, one.cases, language)


def _hexadecimal(value: int, size: int, language: str) -> str:
    return f"0x{value:0{2 * size}x}" + ("u" if language == "c" else "")


def _table(
    name: str, type: str, meaning: str, values: Iterable[str], language: str
) -> dict[str, Any]:
    numbers = list(values)
    lines = textwrap.wrap(", ".join(numbers) + ",", WIDTH - 4)
    return {
        "name": name, "type": type, "meaning": _remark(meaning, language),
        "size": f"[{len(numbers)}]", "lines": lines,
    }  # fmt: skip


def _rows(
    name: str, type: str, meaning: str, rows: list[tuple[int, ...]], language: str
) -> dict[str, Any]:
    opened, closed = ("{", "}") if language == "c" else ("(", ")")
    lines: list[str] = []
    for row in rows:
        lines += textwrap.wrap(f"{opened}{', '.join(map(str, row))}{closed},", WIDTH - 4)
    return {
        "name": name, "type": type, "meaning": _remark(meaning, language),
        "size": f"[{len(rows)}][{len(rows[0])}]", "lines": lines,
    }  # fmt: skip


def _remark(text: str, language: str) -> str:
    joint = "\n   " if language == "c" else "\n# "
    return joint.join(textwrap.wrap(text, WIDTH - 6))


# --- functions ---------------------------------------------------------------------------------


def _types(recording: Recording) -> Iterable[dict[str, Any]]:
    parameters = [one for routine in recording.routines for one in routine.plan.parameters]
    for real in recording.words:
        used = [one for one in parameters if one.type == real]
        word, letter = WORDS[REALS[real].size]
        size, floating = REALS[real].size, not REALS[real].integer
        infinity = {4: 0x7F800000, 8: 0x7FF0000000000000}.get(size, 0)
        top = (1 << 8 * size - 1) - 1
        yield {
            "name": real, "type": syntax("c")["c_type"](real), "word": word,
            "letter": LETTERS[real], "bits": letter, "poison": f"0x{int(POISON[real]):x}",
            "magnitude": f"0x{top:x}" if floating else "",
            "infinity": f"0x{infinity:x}" if floating else "",
            "compared": any(one.kind == "array" and one.use != "scratch" for one in used),
            "scratch": any(one.kind == "array" and one.use == "scratch" for one in used),
            "scalar": any(one.kind == "scalar" for one in used),
            "filled": any(one.kind == "array" for one in used),
        }  # fmt: skip


def _routine(recording: Recording, one: RoutineCases, language: str) -> dict[str, Any]:
    plan = one.plan
    shape, case = one.shape_columns(), one.case_columns()
    own = _own_names(recording) if language == "c" else {"row": "row", "shape": "shape"}
    arrays = []
    for parameter in plan.parameters:
        name = parameter.name
        if parameter.kind == "places":
            arrays.append({
                "name": name, "type": "ptrdiff_t", "length": one.lengths[name] or 1,
                "letter": "i", "places": shape[f"places {name}"],
                "size": shape[f"length {name}"],
            })  # fmt: skip
        elif parameter.kind == "array":

            def at(what: str, name: str = name) -> str:
                column = case.get(f"{what} {name}")
                return "0" if column is None else f"{own['row']}[{column}]"

            arrays.append({
                "name": name, "type": syntax("c")["c_type"](parameter.type),
                "real": parameter.type, "length": one.lengths[name] + 2 * PAD, "places": None,
                "size": shape[f"length {name}"], "given": shape[f"given {name}"],
                "results": shape[f"results {name}"], "scratch": parameter.use == "scratch",
                "words": f"words_{parameter.type}", "given_at": at("given"),
                "expected_at": at("results"), "complex": parameter.complex,
            })  # fmt: skip
    return {
        "name": plan.spec.name, "cases": len(one.cases), "reports": one.reports,
        "arrays": arrays,
        "arguments": [
            text for p in plan.parameters for text in _argument(p, shape, case, language, own)
        ],
        "positions": {p.name: argument_position(plan, p.name) for p in plan.parameters},
    }  # fmt: skip


def _argument(
    one: Parameter,
    shape: dict[str, int],
    case: dict[str, int],
    language: str,
    own: dict[str, str],
) -> list[str]:
    if one.kind == "size":
        return [f"{own['shape']}[{shape[one.name]}]"]
    if one.kind == "scalar":
        at, words = f"{own['row']}[{case[f'scalar {one.name}']}]", f"words_{one.type}"
        places = [f"{at} + {part}" if part else at for part in range(one.parts)]
        if language == "c":
            return [f"value_{one.type}({words}[{place}])" for place in places]
        if one.complex:
            return [f'pairs("{one.type}", {words}[{at} : {at} + 2])[0]']
        return [f'numbers("{one.type}", {words}[{at} : {at} + 1])[0]']
    return [f"&{one.name}[SPACE]" if one.kind == "array" and language == "c" else one.name]
