"""Counts instructions of products on boards: from the half, and by hand from the whole matrix.

    .venv/bin/python examples/firmware/counts.py               # all boards, writes counts.md
    .venv/bin/python examples/firmware/counts.py cortex-m4f    # shows one board

y := A*x in float32 for every n from 3 to 24, in two forms: compact (loops) and unrolled (no loop).
Both are compared with the same form of what people write by hand who store the whole matrix.
The results of each pair are compared, too.
"""

from __future__ import annotations

import itertools
import json
import sys
import textwrap
from collections.abc import Sequence
from concurrent.futures import ThreadPoolExecutor
from pathlib import Path

from demilune.boards import Board, find_board, known_boards
from demilune.boards.emulate import build, counts
from demilune.errors import DemiluneError, MissingError
from demilune.plan.build import make_plan
from demilune.render import render
from demilune.spec import make_spec
from demilune.toolchain.compilers import describe_compiler

SIZES = range(3, 25)
PIECE = 15
"""Sizes of a program: all of them would not fit into the flash of a small board."""
HALF = {"layout": "packed", "dtype": "float32", "environment": "freestanding"}
FORMS = {"compact": {"block": 2}, "unrolled": {"unroll": "all"}}
PAGE = Path(__file__).with_suffix(".md")
HEAD = """# Instructions for the half and for the whole matrix

<!-- written by counts.py; do not edit -->
Instructions of one call of y := A\\*x, float32, on emulated boards: *half* is a routine of Demilune
for the packed upper triangle (compact: `{compact}`; unrolled: `{unrolled}`), *whole* the same
form of a product of the whole matrix, as people write it by hand. Both were compiled with -O2 and
without fused multiply-adds, and give the same results but for rounding. Counts are instructions of
an emulator, which are no cycles; another compiler gives others.

Both multiply and add as often; the half is loaded once instead of twice, which saves instructions
where the board computes float32 itself and registers suffice. Where functions of the compiler's
library compute, nearly all instructions are theirs, and the half saves memory only. A compiler that
puts neighbouring elements into vector registers does so with the whole matrix more easily.
"""


def by_hand(form: str, n: int) -> str:
    """The product of a whole matrix that people write: two loops, or no loop."""
    head = f"(const float a[{n * n}], const float x[{n}], float y[{n}])"
    rows = "\n".join(
        f"    y[{i}] = " + " + ".join(f"a[{i * n + j}] * x[{j}]" for j in range(n)) + ";"
        for i in range(n)
    )
    loops = f"""    for (int i = 0; i < {n}; i++) {{
        float sum = 0.0f;
        for (int j = 0; j < {n}; j++) {{
            sum += a[i * {n} + j] * x[j];
        }}
        y[i] = sum;
    }}"""
    body = loops if form == "compact" else rows
    return f"void whole_{form}_{n}{head}\n{{\n{body}\n}}\n"


def caller(board: Board, form: str, sizes: Sequence[int]) -> str:
    """The program that calls each routine of a form once, and fails where results differ."""
    most = sizes[-1]
    calls = "\n".join(
        f"    failed |= differ({n}, whole_{form}_{n}, half_{form}_{n});" for n in sizes
    )
    prototypes = "\n".join(
        f"void {kind}_{form}_{n}(const float *, const float *, float *);"
        for kind in ("whole", "half")
        for n in sizes
    )
    return f"""
typedef void product(const float *, const float *, float *);
int main(void);
{prototypes}
{board.start}
static float whole[{most * most}], half[{most * (most + 1) // 2}], x[{most}], y[{most}], z[{most}];

static int differ(int n, product *first, product *second)
{{
    int failed = 0;
    for (int j = 0; j < n; j++) {{
        for (int i = 0; i <= j; i++) {{
            const float value = (float)((7 * i + 5 * j) % 19) * 0.37f - 2.9f;
            whole[i * n + j] = value;
            whole[j * n + i] = value;
            half[i + j * (j + 1) / 2] = value;
        }}
        x[j] = (float)((11 * j) % 13) * 0.21f - 1.1f;
    }}
    first(whole, x, y);
    second(half, x, z);
    for (int i = 0; i < n; i++) {{
        const float error = y[i] - z[i];
        failed |= !(error < 1e-4f && error > -1e-4f);
    }}
    return failed;
}}

int main(void)
{{
    int failed = 0;
{calls}
    return failed;
}}
"""


def count_on(board: Board) -> dict[str, int]:
    """The instructions of every routine on a board, by name."""
    found: dict[str, int] = {}
    pieces = [one for one in (SIZES[:PIECE], SIZES[PIECE:]) if one]
    for form, sizes in itertools.product(FORMS, pieces):
        specs = [make_spec(f"half_{form}_{n}", n=n, **HALF, **FORMS[form]) for n in sizes]
        sources = render([make_plan(spec) for spec in specs], "half", "c", contracts=False)
        sources |= {"whole.c": "".join(by_hand(form, n) for n in sizes)}
        sources |= {"main.c": caller(board, form, sizes)}
        names = [f"{kind}_{form}_{n}" for kind in ("whole", "half") for n in sizes]
        with build(board, sources, freestanding=True) as built:
            counted = counts(built, names, ["main.c"])
        found |= {name: one.instructions for name, one in counted.items()}
    return found


def _which(sizes: list[int]) -> str:
    """Which n these are, in words."""
    if len(sizes) == len(SIZES):
        return "every n"
    return f"n = {', '.join(map(str, sizes))}" if sizes else "no n"


def table(board: Board, found: dict[str, int]) -> list[str]:
    """The counts on a board as Markdown, and whether the half takes fewer everywhere."""
    fewer = {
        form: [n for n in SIZES if found[f"half_{form}_{n}"] < found[f"whole_{form}_{n}"]]
        for form in FORMS
    }
    told = "; ".join(f"{form}: fewer for {_which(sizes)}" for form, sizes in fewer.items()) + "."
    lines = [f"## {board.name}: {board.title}", ""]
    told = told[0].upper() + told[1:]
    lines += [f"{describe_compiler(board.compiler).version}.", *textwrap.wrap(told, 100), ""]
    columns = [f"{form}, {kind}" for form in FORMS for kind in ("half", "whole", "half / whole")]
    lines += [f"| n | {' | '.join(columns)} |", "| --- " * (len(columns) + 1) + "|"]
    for n in SIZES:
        cells = []
        for form in FORMS:
            half, whole = found[f"half_{form}_{n}"], found[f"whole_{form}_{n}"]
            cells += [str(half), str(whole), f"{half / whole:.2f}"]
        lines.append(f"| {n} | {' | '.join(cells)} |")
    return lines


def main(names: list[str]) -> int:
    """Counts on the boards of these names, or on all; tells what is missing."""
    chosen = [find_board(name) for name in names] or list(known_boards().values())
    boards = [board for board in chosen if board.language == "c"]
    words = {
        form: ", ".join(f"{key} = {json.dumps(value)}" for key, value in keys.items())
        for form, keys in FORMS.items()
    }
    status, sections = 0, [HEAD.format(**words).rstrip()]

    def counted(board: Board) -> list[str] | DemiluneError:
        try:
            return table(board, count_on(board))
        except DemiluneError as error:
            return error

    with ThreadPoolExecutor(2) as pool:
        for board, lines in zip(boards, pool.map(counted, boards), strict=True):
            if isinstance(lines, DemiluneError):
                print(f"counts: {board.name}: {lines}", file=sys.stderr)
                status = max(status, 3 if isinstance(lines, MissingError) else 1)
            else:
                print(f"counted on {board.name}", file=sys.stderr)
                sections.append("\n".join(lines))
    text = "\n\n".join(sections) + "\n"
    if names:
        print(text, end="")
    elif status == 0:
        PAGE.write_text(text, encoding="utf-8")
    return status


if __name__ == "__main__":
    sys.exit(main(sys.argv[1:]))
