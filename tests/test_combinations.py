"""Every pair of values of all axes, built and verified; the table in DEVELOPERS.md.

``python tests/test_combinations.py`` verifies all of them and writes the table.
"""

from __future__ import annotations

import sys
from collections import Counter
from pathlib import Path

import pytest
import space

CHUNK = 12
PLACES = 24
DOCUMENT = Path(__file__).parents[1] / "DEVELOPERS.md"
BEGIN, END = "<!-- combinations begin -->", "<!-- combinations end -->"


def chunk(place: int) -> list[dict]:
    return list(space.pairwise()[0][place::PLACES])


@pytest.mark.parametrize("place", range(PLACES))
def test_every_pair_is_verified(place):
    assert space.verify_all(chunk(place)) == []


def test_the_pairs_cover_every_value():
    specs, total = space.pairwise()
    covered = set().union(*(space.pairs(values) for values in specs))
    assert len(covered) == total > 2500
    assert len(specs) < 400


def table() -> str:
    """The combinations that the tests build and verify, as Markdown."""
    specs, total = space.pairwise()
    counts: dict[str, Counter[str]] = {}
    for values in specs:
        for key, value in space._axis(values):
            counts.setdefault(key, Counter())[value] += 1
    lines = [
        f"{len(specs)} kernels cover all {total} pairs of values of different keys that can go "
        "together.",
        "",
        "| key | values, each with the number of kernels verified |",
        "| --- | --- |",
    ]
    for key in sorted(counts):
        values = ", ".join(f"{value} ({count})" for value, count in sorted(counts[key].items()))
        lines.append(f"| {key} | {values} |")
    return "\n".join(lines)


def test_the_table_is_current():
    text = DOCUMENT.read_text(encoding="utf-8")
    written = text.split(BEGIN, 1)[1].split(END, 1)[0].strip()
    assert written == table(), "run: python tests/test_combinations.py"


def main() -> None:
    failures = [one for place in range(PLACES) for one in space.verify_all(chunk(place))]
    if failures:
        sys.exit("\n".join(failures))
    text = DOCUMENT.read_text(encoding="utf-8")
    head, rest = text.split(BEGIN, 1)
    tail = rest.split(END, 1)[1]
    DOCUMENT.write_text(f"{head}{BEGIN}\n{table()}\n{END}{tail}", encoding="utf-8")
    print(f"wrote the table of {len(space.pairwise()[0])} kernels to {DOCUMENT.name}")


if __name__ == "__main__":
    main()
