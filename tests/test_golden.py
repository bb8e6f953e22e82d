"""The text of emitted sources: golden files, form, and the contract in their heads.

``python tests/test_golden.py`` accepts changes: it shows the differences and rewrites
tests/golden/. The specifications that the tests of sources share are made here.
"""

from __future__ import annotations

import difflib
import json
import os
import random
import re
import subprocess
import sys
from functools import cache
from pathlib import Path
from typing import Any

import pytest

from demilune import Plan, SpecError, __version__, make_plan, make_spec, parse, render
from demilune.plan.tree import Parameter
from demilune.spec import known_keys

# --- the specifications -------------------------------------------------------------------------

AXES: dict[str, list[Any]] = {
    "operation": ["matvec", "matvec", "quadform", "rank1"],
    "layout": ["full", "packed", "band", "rfp", "tiled", "skyline"],
    "loop": ["dot", "axpy", "fused"],
    "dtype": ["float32", "float64", "complex64", "complex128", "int16", "int32"],
    "accumulator": ["plain", "wide", "compensated", "int64"],
    "fma": [False, True],
    "block": [1, 2, 3, 4],
    "direction": ["forward", "backward"],
    "unroll": [1, "all"],
    "structure": ["symmetric", "hermitian"],
    "triangle": ["upper", "lower"],
    "order": ["column-major", "row-major"],
    "n": ["runtime", 3, 5],
    "alpha": [1, -1, 3, "runtime"],
    "beta": [0, 1, 2, "runtime"],
    "incx": [1, -2, "runtime"],
    "incy": [1, -1, "runtime"],
    "kd": ["runtime", 2],
    "ld": [None, "runtime"],
    "tile": [2, 3],
    "environment": ["hosted", "freestanding"],
}
"""Each value of each choice; None leaves a key at its default."""


def _drawn(dice: random.Random) -> dict[str, Any]:
    """Values that go together."""
    while True:
        values = {key: dice.choice(choices) for key, choices in AXES.items()}
        known = known_keys(values["operation"], values["layout"])
        values = {k: value for k, value in values.items() if k in known and value is not None}
        try:
            make_spec("one", **values)
        except SpecError:
            continue
        return values


@cache
def specs() -> tuple[dict[str, Any], ...]:
    """Specifications in which nearly every two values that go together meet."""
    dice, seen, found = random.Random(1), set(), []
    while len(found) < 100:
        best, new = {}, set()
        for _ in range(20):
            values = _drawn(dice)
            pairs = {(p, q) for p in values.items() for q in values.items() if p[0] < q[0]} - seen
            if len(pairs) > len(new):
                best, new = values, pairs
        if not new:
            break
        seen |= new
        found.append(best)
    return tuple(found)


@cache
def plans(language: str = "c") -> tuple[Plan, ...]:
    return tuple(
        make_plan(make_spec(f"kernel_{place}", language=language, **values))
        for place, values in enumerate(specs())
    )


@cache
def sources(language: str = "c") -> dict[str, str]:
    """The files of each plan on its own."""
    files: dict[str, str] = {}
    for plan in plans(language):
        files |= render([plan], plan.spec.file, language)
    return files


@cache
def groups() -> dict[str, str]:
    """The C files with all routines of an environment in one."""
    files: dict[str, str] = {}
    for environment in ("hosted", "freestanding"):
        chosen = [plan for plan in plans() if plan.spec.target.environment == environment]
        files |= render(chosen, environment, "c")
    return files


def write(folder: Path, files: dict[str, str]) -> list[str]:
    """Writes files; gives the names of the C sources."""
    for name, text in files.items():
        (folder / name).write_text(text, encoding="utf-8")
    return [name for name in files if name.endswith(".c")]


def test_every_value_of_every_choice_is_among_them():
    assert 60 <= len(specs()) <= 100
    for key, choices in AXES.items():
        for value in choices:
            if value is not None:
                assert any(one.get(key) == value for one in specs()), f"{key} = {value}"


# --- golden files -------------------------------------------------------------------------------

FOLDER = Path(__file__).with_name("golden")
ENDING = ".golden"
"""Behind each name, so that no formatter takes emitted Python for ours."""

GOLDEN: dict[str, list[tuple[str, dict[str, Any]]]] = {
    "buoy": [
        ("buoy", {"layout": "packed", "dtype": "float32", "n": 6, "block": 2}),
    ],
    "buoy_unrolled": [
        (
            "buoy_unrolled",
            {"layout": "packed", "dtype": "float32", "n": 3, "unroll": "all", "fma": True,
             "environment": "freestanding", "loop": "dot"},
        ),
    ],
    "footbridge": [
        ("stiffness_band", {"layout": "band", "alpha": "runtime", "beta": "runtime"}),
        ("stiffness_profile", {"layout": "skyline", "triangle": "lower", "loop": "dot"}),
    ],
    "gauges": [
        (
            "gauges",
            {"layout": "full", "loop": "axpy", "incx": "runtime", "incy": -2, "beta": 1,
             "order": "row-major", "direction": "backward"},
        ),
    ],
    "gauges_update": [
        (
            "gauges_update",
            {"operation": "rank1", "layout": "packed", "dtype": "complex64",
             "structure": "hermitian", "alpha": "runtime"},
        ),
    ],
    "gauges_rfp": [("gauges_rfp", {"layout": "rfp", "loop": "dot"})],
    "energy": [
        ("energy", {"operation": "quadform", "layout": "full", "accumulator": "compensated"}),
    ],
    "counts_tiled": [
        (
            "counts_tiled",
            {"layout": "tiled", "tile": 4, "dtype": "int16", "environment": "freestanding"},
        ),
    ],
    "buoy_python": [
        (
            "buoy_python",
            {"layout": "packed", "dtype": "float32", "accumulator": "compensated",
             "language": "python", "incx": "runtime"},
        ),
    ],
    "gauges_python": [
        (
            "gauges_python",
            {"layout": "band", "dtype": "complex128", "structure": "hermitian", "fma": True,
             "language": "python", "loop": "dot", "alpha": "runtime"},
        ),
    ],
    "gauges_avx2": [
        (
            "gauges_avx2",
            {"layout": "full", "triangle": "lower", "isa": "avx2", "lanes": 4, "block": 4,
             "unroll": 2, "fma": True},
        ),
    ],
    "footbridge_rows": [
        (
            "footbridge_rows",
            {"layout": "band", "kd": 1, "ld": 2, "loop": "dot", "isa": "avx2", "lanes": 4},
        ),
    ],
    "gauges_runtime": [
        (
            "gauges_runtime",
            {"operation": "quadform", "layout": "packed", "isa": "runtime", "lanes": 8,
             "block": 1},
        ),
    ],
    "buoy_lanes": [
        ("buoy_lanes", {"layout": "packed", "dtype": "float32", "lanes": 4, "block": 2}),
    ],
    "buoy_lanes_python": [
        (
            "buoy_lanes_python",
            {"layout": "packed", "dtype": "float32", "lanes": 4, "language": "python"},
        ),
    ],
}  # fmt: skip


def golden_texts() -> dict[str, str]:
    """What the golden files should hold."""
    texts: dict[str, str] = {}
    for file, kernels in GOLDEN.items():
        made = [make_plan(make_spec(name, file=file, **values)) for name, values in kernels]
        texts |= render(made, file, made[0].spec.language)
    return {name + ENDING: text for name, text in texts.items()}


def differences(folder: Path) -> dict[str, str]:
    """By name: how the files of a folder differ from what is emitted now."""
    wanted = golden_texts()
    kept = {one.name: one.read_bytes().decode() for one in folder.glob(f"*{ENDING}")}
    found = {}
    for name in sorted(wanted.keys() | kept.keys()):
        old, new = kept.get(name, ""), wanted.get(name, "")
        if old != new or (name in kept) != (name in wanted):
            lines = difflib.unified_diff(
                old.splitlines(True), new.splitlines(True), f"golden/{name}", f"emitted/{name}"
            )
            found[name] = "".join(lines)
    return found


def accept(folder: Path) -> str:
    """Makes the golden files what is emitted now; gives the differences."""
    found, wanted = differences(folder), golden_texts()
    for name in found:
        if name in wanted:
            (folder / name).write_bytes(wanted[name].encode())
        else:
            (folder / name).unlink()
    return "".join(found.values())


def test_sources_are_the_golden_ones():
    found = differences(FOLDER)
    help = "accept the changes with: python tests/test_golden.py"
    assert not found, f"{', '.join(found)} changed; {help}\n{''.join(found.values())}"


def test_golden_files_are_few_enough_to_be_read():
    lines = sum(one.read_text().count("\n") for one in FOLDER.glob(f"*{ENDING}"))
    assert 500 < lines < 4500


def test_changes_are_shown_and_accepted(tmp_path):
    assert accept(tmp_path).count("+++ ") == len(golden_texts())
    name = f"buoy.c{ENDING}"
    (tmp_path / name).write_text((tmp_path / name).read_text().replace("float", "double"))
    (tmp_path / f"old.c{ENDING}").write_text("int old;\n")
    shown = accept(tmp_path)
    assert f"--- golden/{name}" in shown
    assert "-int old;" in shown
    assert not differences(tmp_path)


# --- form ---------------------------------------------------------------------------------------

DATE = r"\b(19|20)\d\d-\d\d|\b\d\d:\d\d|\b\d{1,2} (Jan|Feb|Mar|Apr|May|Jun|Jul|Aug|Sep|Oct|Nov|Dec)"
ABSOLUTE = r"(^|[\s\"'(<=])/[A-Za-z_][\w.-]*/|[A-Z]:\\"
CLAIM = r"(?i)licen[cs]e|copyright|spdx|all rights reserved|\bMIT\b|\bGPL"


@pytest.mark.parametrize("language", ["c", "python"])
def test_form(language):
    for name, text in sources(language).items():
        assert text.endswith("\n"), name
        assert not text.endswith("\n\n"), name
        assert text.isascii(), name
        assert "\t" not in text, name
        assert "\r" not in text, name
        for line in text.splitlines():
            assert line == line.rstrip(), f"{name}: {line!r}"
        for pattern in (DATE, ABSOLUTE, CLAIM):
            assert not re.search(pattern, text, re.MULTILINE), f"{name}: {pattern}"


@pytest.mark.parametrize("language", ["c", "python"])
def test_lines_have_at_most_90_columns(language):
    for name, text in sources(language).items():
        longest = max(text.splitlines(), key=len)
        assert len(longest) <= 90, f"{name}: {longest}"


def code_of(text: str) -> str:
    """C or Python without comments and texts."""
    without = re.sub(r"/\*.*?\*/|\"\"\".*?\"\"\"|\"[^\"\n]*\"", " ", text, flags=re.DOTALL)
    return re.sub(r"(?m)^\s*#.*$| # .*$", " ", without)


@pytest.mark.parametrize("language", ["c", "python"])
def test_names_can_be_read(language):
    for name, text in sources(language).items():
        bad = set(re.findall(r"\b[a-zA-Z]{1,3}\d+\b", code_of(text)))
        assert not bad, f"{name}: {bad}"


def test_freestanding_files_include_only_what_every_compiler_brings():
    found: dict[str, set[str]] = {"hosted": set(), "freestanding": set()}
    for plan in plans():
        for ending in ("c", "h"):
            text = sources()[f"{plan.spec.file}.{ending}"]
            included = set(re.findall(r"#\s*include\s*[<\"](.+?)[>\"]", text))
            found[plan.spec.target.environment] |= included - {f"{plan.spec.file}.h"}
    assert found["freestanding"] == {"stdint.h", "stddef.h"}
    assert found["hosted"] == {"stdint.h", "stddef.h", "math.h"}


RENDER = """
import hashlib, json, sys
from demilune import make_plan, make_spec, render
total = hashlib.sha256()
for name, language, values in json.load(sys.stdin):
    plan = make_plan(make_spec(name, language=language, **values))
    for file, text in sorted(render([plan], name, language).items()):
        total.update(f"{file}{text}".encode())
print(total.hexdigest())
"""


def test_same_bytes_in_every_process(tmp_path):
    asked = [
        (plan.spec.name, plan.spec.language, values)
        for language in ("c", "python")
        for plan, values in list(zip(plans(language), specs(), strict=True))[::2]
    ]
    sums = set()
    for seed, zone, locale in (("0", "UTC", "C"), ("17", "Asia/Tokyo", "tr_TR.UTF-8")):
        home = tmp_path / seed
        home.mkdir()
        changed = {"PYTHONHASHSEED": seed, "TZ": zone, "LC_ALL": locale, "HOME": str(home)}
        done = subprocess.run(
            [sys.executable, "-c", RENDER], cwd=home, env=os.environ | changed,
            input=json.dumps(asked), capture_output=True, text=True, check=True,
        )  # fmt: skip
        sums.add(done.stdout)
    assert len(sums) == 1


# --- the contract -------------------------------------------------------------------------------


def unwrapped(text: str) -> list[str]:
    """The lines of a comment, without what begins them in C."""
    return [re.sub(r"^ \* ?", "", line) for line in text.splitlines()]


def contract_of(text: str) -> dict[str, str]:
    """The sections of the first contract in a header or a docstring, each as one line."""
    lines = unwrapped(text)
    first = next(place for place, line in enumerate(lines) if line.strip() == "Matrix:")
    sections: dict[str, str] = {}
    for line in lines[first:]:
        if "*/" in line or '"""' in line:
            break
        head = re.fullmatch(r" *([A-Z][a-z]+):", line)
        if head:
            sections[head[1]] = ""
        else:
            last = list(sections)[-1]
            sections[last] = f"{sections[last]} {line.strip()}".strip()
    return sections


def header_of(plan: Plan) -> dict[str, str]:
    return contract_of(sources()[f"{plan.spec.file}.h"])


def stated_size(said: dict[str, str], one: Parameter, arguments: dict[str, Any]) -> int:
    """The number of elements of an array from the text of the contract.

    It may use what the index formula names: "w(t) = ... is the width of tile t".
    """
    if arguments["n"] == 0 and one.name != "s":
        return 0
    size = rf"(?:^| ){one.name}: [^:]*?; ([^;:]*?)(, with [^;:]*)? (?:elements?|integers?)\b"
    found = re.search(size, said["Arguments"])
    assert found, f"{one.name} has no size in: {said}"
    known = {"abs": abs, "min": min, "max": max, **arguments}

    def value(text: str) -> Any:
        text = re.sub(r"\|(\w+)\|", r"abs(\1)", text).replace("/", "//").replace("^", "**")
        return eval(text, known)

    for name, value_text in re.findall(r"(\w) = (.*) \(rounded down\)", found[2] or ""):
        known[name] = value(value_text)
    rules = r"\b(start|w)\(([a-z,]+)\) = (.+?)(?= is the width| [A-Z])"
    for name, names, formula in re.findall(rules, said["Matrix"]):
        known[name] = value(f"lambda {names}: {formula}")
    return int(value(found[1]))


@pytest.mark.parametrize("language", ["c", "python"])
def test_the_contract_is_complete(language):
    ending = {"c": "h", "python": "py"}[language]
    for plan in plans(language):
        spec, text = plan.spec, sources(language)[f"{plan.spec.file}.{ending}"]
        said = contract_of(text)
        wanted = {"Matrix", "Arguments", "Arithmetic", "Cost", "Returns"}
        assert set(said) == wanted | ({"Range"} if spec.arithmetic.type.integer else set())
        assert re.search(rf"\b{spec.name}: [yAs] := ", text)
        for line in spec.layout.formula:
            assert line in said["Matrix"]
        for line in plan.order:
            assert line in said["Arithmetic"]
        for one in plan.parameters:
            assert re.search(rf"(^| ){one.name}(_re, {one.name}_im)?: ", said["Arguments"])
        assert "overlap" in said["Arguments"]
        assert re.search(r"\d.* operations?.*\d.* loads?.*\d.* stores? of", said["Cost"])
        assert f"Demilune {__version__}" in text


def test_costs_name_the_sizes_they_hold_for():
    for plan in plans():
        said = header_of(plan)["Cost"]
        if any(one.name == "kd" for one in plan.parameters):
            assert "kd" in said, f"{plan.spec.name}: {said}"
        if any(one.kind == "places" for one in plan.parameters):
            assert re.search("full|profile|diagonal", said), f"{plan.spec.name}: {said}"
        if any(one.kind == "scalar" for one in plan.parameters):
            assert re.search("alpha|beta|scalar|factor", said), f"{plan.spec.name}: {said}"


@pytest.mark.parametrize("language", ["c", "python"])
def test_the_specification_in_the_head_makes_the_same_file(language):
    for plan in plans(language)[::2]:
        files = {k: t for k, t in sources(language).items() if k.split(".")[0] == plan.spec.file}
        for text in files.values():
            head = text[: text.index("This file belongs")]
            asked = "\n".join(line for line in unwrapped(head) if line.startswith("    "))
            again = next(spec for spec in parse(asked) if spec.language == language)
            assert again == plan.spec
            assert render([make_plan(again)], again.file, language) == files


if __name__ == "__main__":
    sys.stdout.write(accept(FOLDER) or "nothing changed\n")
