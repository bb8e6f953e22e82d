"""DEVELOPERS.md says that an addition is one file: here each kind is made, in a copy, and verified.

The copy gets the files of ``tests/additions/`` (or rows of a table), and nothing else is changed.
"""

from __future__ import annotations

import os
import platform
import shutil
import subprocess
import sys
from pathlib import Path

import pytest

ROOT = Path(__file__).parents[1]
ADDITIONS = Path(__file__).parent / "additions"

DRIVER = """
import itertools
from demilune import expand, check
specs = []
for number, values in enumerate({cases}):
    specs += expand(f"tried{{number}}", values)
result = check(specs)
failed = [(row.spec.stated, row.status, row.reason) for row in result.rows]
failed = [one for one in failed if one[1] != {wanted!r}]
assert not failed, failed[:3]
assert len(specs) >= {least}, len(specs)
print(len(specs), "kernels", {wanted!r})
"""


@pytest.fixture
def copy(tmp_path):
    """A copy of the program, as importable from its folder gen/."""
    shutil.copytree(ROOT / "gen", tmp_path / "gen")
    shutil.copytree(ROOT / "templates", tmp_path / "gen/demilune/templates")
    return tmp_path / "gen/demilune"


def run(program: Path, cases: list[dict], least: int, wanted: str = "verified") -> None:
    script = DRIVER.format(cases=cases, least=least, wanted=wanted)
    environment = {**os.environ, "PYTHONPATH": str(program.parent)}
    done = subprocess.run(
        [sys.executable, "-c", script], env=environment, capture_output=True, text=True, check=False
    )
    assert done.returncode == 0, done.stderr[-2000:]


def test_a_layout_is_a_file(copy):
    shutil.copy(ADDITIONS / "layout_reversed.py", copy / "layouts/reversed.py")
    shape = {"layout": "reversed", "triangle": ["upper", "lower"], "n": ["runtime", 7]}
    product = {**shape, "loop": ["dot", "axpy", "fused"], "block": [1, 3]}
    hermitian = {**shape, "dtype": "complex64", "structure": "hermitian", "operation": "rank1"}
    run(copy, [product, hermitian], 50)


def test_an_operation_is_a_file(copy):
    shutil.copy(ADDITIONS / "operation_rank2.py", copy / "operations/rank2.py")
    layouts = ["full", "packed", "band", "rfp", "tiled", "skyline"]
    real = {"operation": "rank2", "layout": layouts, "alpha": "runtime", "incy": "runtime"}
    hermitian = {**real, "dtype": "complex128", "structure": "hermitian", "block": 2}
    run(copy, [real, {**hermitian, "incx": "runtime"}, {**real, "dtype": "int16"}], 36)
    # Lanes and threads are the walk's: the operation does not know of them.
    lanes = {**real, "lanes": 4, "block": [1, 4], "triangle": ["upper", "lower"]}
    run(copy, [lanes, {**hermitian, "lanes": 2}, {**real, "layout": "packed", "threads": 3}], 36)


def test_a_loop_order_is_a_row(copy):
    table = copy / "schedules.py"
    text = table.read_text(encoding="utf-8")
    row = (ADDITIONS / "order_diagonal_first.txt").read_text(encoding="utf-8")
    before, after = text.split("\n\n@dataclass(frozen=True)\nclass Schedule:")
    table.write_text(
        f"{before.rstrip()}\n{row}\n\n@dataclass(frozen=True)\nclass Schedule:{after}",
        encoding="utf-8",
    )
    layouts = ["full", "packed", "band", "rfp", "tiled", "skyline"]
    product = {"loop": "inside_out", "layout": layouts, "triangle": ["upper", "lower"]}
    run(copy, [product, {**product, "operation": "quadform", "block": 3}], 48)


def test_a_dtype_is_two_rows(copy):
    table = copy / "dtypes.py"
    text = table.read_text(encoding="utf-8")
    for row, before in (
        ('RealType("int8", 1, 7, "int16")', 'RealType("int16", 2, 15, "int32")'),
        ('NumberType("int8", "int8")', 'NumberType("int16", "int16")'),
    ):
        assert text.count(before) == 1
        text = text.replace(before, f"{row},\n        {before}")
    table.write_text(text, encoding="utf-8")
    layouts = ["full", "packed", "band", "rfp", "tiled", "skyline"]
    kernels = {"dtype": "int8", "layout": layouts, "accumulator": ["plain", "wide", "int32"]}
    run(copy, [kernels, {**kernels, "operation": "rank1"}], 72)


@pytest.mark.skipif(platform.machine() != "x86_64", reason="its registers are those of x86-64")
def test_an_instruction_set_is_a_table(copy):
    shutil.copy(ADDITIONS / "isa_sse2.toml", copy / "templates/c/isa/sse2.toml")
    layouts = ["full", "packed", "band", "rfp", "tiled", "skyline"]
    shape = {"isa": "sse2", "layout": layouts, "triangle": ["upper", "lower"]}
    double = {**shape, "lanes": [2, 4], "block": 4}
    single = {**shape, "dtype": "float32", "lanes": 8, "block": [3, 8], "unroll": 2}
    hermitian = {**shape, "dtype": "complex64", "structure": "hermitian", "lanes": 4, "block": 2}
    update = {**double, "operation": ["rank1", "quadform"]}
    run(copy, [double, single, hermitian, update], 100)


def test_a_language_is_a_folder(copy):
    folder = copy / "templates/outline"
    shutil.copytree(copy / "templates/pseudo", folder)
    facts = (folder / "language.toml").read_text(encoding="utf-8")
    (folder / "language.toml").write_text(facts.replace("pseudo = true", ""), encoding="utf-8")
    run(copy, [{"language": "outline", "layout": ["packed", "rfp"]}], 2, wanted="left out")
    # Nobody who does not ask for it gets it.
    run(copy, [{"layout": "packed"}], 2)
