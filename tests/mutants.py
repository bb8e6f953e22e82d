"""Tries the tests with mutants of the layouts, the plan and the operations.

``python tests/mutants.py 60`` changes one place of the program at a time (a sign, a comparison, a
bound by one, a branch), runs a part of the tests on the changed copy, and tells which changes no
test noticed. A change that alters nothing that can be seen (an equivalent mutant) survives too.
"""

from __future__ import annotations

import ast
import concurrent.futures
import os
import random
import shutil
import subprocess
import sys
import tempfile
from pathlib import Path

ROOT = Path(__file__).parents[1]
FILES = ("layouts/*.py", "plan/build.py", "plan/writer.py", "plan/prune.py", "index.py")
TESTS = (
    "test_layouts.py", "test_golden.py", "test_kernel.py", "test_library.py",
    "test_combinations.py",
)  # fmt: skip
SECONDS = 240

SWAPS = {
    ast.Add: ast.Sub, ast.Sub: ast.Add, ast.Mult: ast.Add, ast.FloorDiv: ast.Mult,
    ast.Lt: ast.LtE, ast.LtE: ast.Lt, ast.Gt: ast.GtE, ast.GtE: ast.Gt,
    ast.Eq: ast.NotEq, ast.NotEq: ast.Eq, ast.And: ast.Or, ast.Or: ast.And,
}  # fmt: skip


class Mutator(ast.NodeTransformer):
    """Changes the place with number ``target``; counts the places."""

    def __init__(self, target: int = -1) -> None:
        self.target, self.count, self.what = target, 0, ""

    def _here(self, node: ast.AST, what: str) -> bool:
        self.count += 1
        if self.count - 1 != self.target:
            return False
        self.what = f"line {node.lineno}: {what}"  # type: ignore[attr-defined]
        return True

    def visit_BinOp(self, node: ast.BinOp) -> ast.AST:
        self.generic_visit(node)
        new = SWAPS.get(type(node.op))
        if new and self._here(node, f"{type(node.op).__name__} to {new.__name__}"):
            node.op = new()
        return node

    def visit_Compare(self, node: ast.Compare) -> ast.AST:
        self.generic_visit(node)
        new = SWAPS.get(type(node.ops[0]))
        if new and self._here(node, f"{type(node.ops[0]).__name__} to {new.__name__}"):
            node.ops[0] = new()
        return node

    def visit_BoolOp(self, node: ast.BoolOp) -> ast.AST:
        self.generic_visit(node)
        new = SWAPS[type(node.op)]
        if self._here(node, f"{type(node.op).__name__} to {new.__name__}"):
            node.op = new()
        return node

    def visit_Constant(self, node: ast.Constant) -> ast.AST:
        if isinstance(node.value, bool):
            if self._here(node, f"{node.value} to {not node.value}"):
                return ast.copy_location(ast.Constant(not node.value), node)
        elif isinstance(node.value, int) and self._here(node, f"{node.value} plus 1"):
            return ast.copy_location(ast.Constant(node.value + 1), node)
        return node

    def visit_UnaryOp(self, node: ast.UnaryOp) -> ast.AST:
        self.generic_visit(node)
        if isinstance(node.op, ast.Not) and self._here(node, "not left out"):
            return node.operand
        return node

    def visit_ClassDef(self, node: ast.ClassDef) -> ast.AST:
        # Declarations of keys and texts are no behaviour of the layouts: functions only.
        node.body = [
            self.visit(one) if isinstance(one, ast.FunctionDef) else one for one in node.body
        ]
        return node


def places() -> list[tuple[Path, int]]:
    found = []
    for pattern in FILES:
        for path in sorted((ROOT / "gen/demilune").glob(pattern)):
            counter = Mutator()
            counter.visit(ast.parse(path.read_text(encoding="utf-8")))
            found += [(path, number) for number in range(counter.count)]
    return found


def try_one(place: tuple[Path, int] | None) -> tuple[str, bool]:
    """What was changed, and whether a test noticed; without a place nothing is changed."""
    path, number = place or places()[0]
    mutator = Mutator(number if place else -1)
    tree = ast.fix_missing_locations(mutator.visit(ast.parse(path.read_text(encoding="utf-8"))))
    with tempfile.TemporaryDirectory(prefix="demilune-mutant-") as folder:
        copy = Path(folder)
        for name in ("gen", "tests", "examples"):
            shutil.copytree(ROOT / name, copy / name, ignore=shutil.ignore_patterns("__pycache__"))
        shutil.copytree(ROOT / "templates", copy / "gen/demilune/templates")
        for name in ("DEVELOPERS.md", "pyproject.toml"):
            shutil.copy(ROOT / name, copy / name)
        (copy / path.relative_to(ROOT)).write_text(ast.unparse(tree), encoding="utf-8")
        environment = {**os.environ, "PYTHONPATH": str(copy / "gen")}
        command = [sys.executable, "-m", "pytest", "-x", "-q", "-n", "0", "--hypothesis-seed=1"]
        try:
            done = subprocess.run(
                [*command, *(f"tests/{name}" for name in TESTS)], cwd=copy, env=environment,
                capture_output=True, timeout=SECONDS, check=False,
            )  # fmt: skip
            noticed = done.returncode != 0
        except subprocess.TimeoutExpired:
            noticed = True
    return f"{path.relative_to(ROOT)}, {mutator.what}", noticed


def main() -> None:
    wanted = int(sys.argv[1]) if len(sys.argv) > 1 else 40
    if try_one(None)[1]:
        sys.exit("the tests fail on the unchanged program")
    chosen = random.Random(1).sample(places(), wanted)
    with concurrent.futures.ThreadPoolExecutor(os.cpu_count()) as pool:
        results = list(pool.map(try_one, chosen))
    for what, noticed in results:
        if not noticed:
            print(f"survives: {what}")
    caught = sum(noticed for _, noticed in results)
    print(f"{caught} of {wanted} mutants were noticed ({len(places())} places in all)")


if __name__ == "__main__":
    main()
