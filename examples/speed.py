"""Measures the whole table of speed figures: python examples/speed.py

Every kernel is made from a specification in this file, verified, and raced against the package
scipy-openblas64 (one thread unless a figure says more), against other kernels and against the
machine. The page speed.md and the numbers behind it, speed.json, are written beside this file;
with --quick or --row the tables are only shown, unless -o names a folder. Needs a C compiler and
the extra "test" of Demilune, and a machine that has nothing else to do.
"""

from __future__ import annotations

import argparse
import json
import math
import os
import sys
from collections.abc import Callable, Iterable, Iterator
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

from demilune import DemiluneError, MissingError, Spec, SpecError, make_spec
from demilune.files import write_all
from demilune.race import Race, Row, libraries, race
from demilune.race.machine import machine, steering

PEER = "scipy_openblas64"
KERNEL = {"isa": "native", "fma": True, "language": "c"}
OPEN = {**KERNEL, "n": "runtime", "block": 8}
NARROW = 2  # half-bandwidth up to which rows side by side are faster than strips
TILE = 64
EVEN = (64, 128, 256, 512, 1024, 2048, 4096, 8192)
ODD = (61, 127, 255, 509, 1021, 2039)
FIXED = (3, 4, 6, 8, 12, 16, 24, 32)
BAND_N = 20_000
TRIANGLES = ("upper", "lower")
SUFFIX = {"float64": "", "float32": "_float32"}  # ends of names, by the type of elements
BOTH = ("full", "packed")
OTHERS = ("rfp", "tiled", "skyline")
PRODUCT = "product_{layout}_{triangle}"
IN_NAMES = ("layout", "triangle", "n", "kd")  # what the names of kernels tell
QUICK_SIZES, QUICK_ROUNDS, ROUNDS = (61, 64, 509, 512, 2048), 3, 11
DIGITS = 5


@dataclass(frozen=True)
class Point:
    """One number of a figure: a kernel at a size, in a line and a column of its table."""

    line: str
    column: int
    n: int
    kernel: str


Value = Callable[[Race, Row], float | None]


@dataclass
class Figure:
    """A row of the table of figures: what is measured, and what it is to be."""

    name: str
    title: str
    what: str
    """What the numbers are."""
    value: Value
    mean: float | None
    """What the geometric mean of all numbers is to reach, if there is such a figure."""
    least: float | dict[int, float]
    """What no number is to be below, or so for each column."""
    column: str = "n"
    whole: bool = False
    specs: list[Spec] = field(default_factory=list)
    points: list[Point] = field(default_factory=list)

    def add(self, line: str, name: str, sizes: Iterable[int], **values: Any) -> None:
        """A line of the table: a kernel at sizes."""
        self.beside(name, **values)
        self.points += [Point(line, n, n, name) for n in sizes]

    def lines(
        self, name: str, sizes: Iterable[int], layouts: Iterable[str] = BOTH, label: str = "",
        **values: Any,
    ) -> None:  # fmt: skip
        """A line for each of some layouts and both triangles."""
        for layout in layouts:
            more = {"tile": TILE} if layout == "tiled" else {}
            for triangle in TRIANGLES:
                key = {"layout": layout, "triangle": triangle}
                line = f"{label}{layout}, {triangle}"
                self.add(line, name.format(**key), sizes, **key, **more, **values)

    def beside(self, name: str, **values: Any) -> None:
        """A kernel that others are measured against."""
        self.specs.append(make_spec(name, **{**OPEN, **values}))

    def wanted(self, column: int) -> float:
        """What a number of a column is not to be below."""
        return self.least if isinstance(self.least, float) else self.least[column]


def gemv(row: Row) -> float | None:
    """The time of the library's product with the whole matrix / ours."""
    return row.whole[PEER].median / row.time.median if PEER in row.whole else None


def against(other: Callable[[str], str]) -> Value:
    """The time of another kernel, found by the name of ours, / ours."""
    return lambda found, row: found.ratio(row.kernel, other(row.kernel), row.n)


OF_PEER: tuple[str, Value] = (f"time of {PEER} / ours", lambda _, row: row.ratio(PEER))
OF_SUM: tuple[str, Value] = ("time to sum the stored half / ours", lambda _, row: row.of_sum)
OF_GEMV: tuple[str, Value] = (
    f"time of the full product (dgemv) of {PEER} / ours", lambda _, row: gemv(row)
)  # fmt: skip


# --- the figures ----------------------------------------------------------------------------------


def full() -> Iterator[Figure]:
    for dtype, mean in (("float64", 1.3), ("float32", 1.45)):
        one = Figure(f"full-{dtype}", f"full, {dtype}", *OF_PEER, mean, 1.0)
        one.lines(PRODUCT + SUFFIX[dtype], EVEN, ["full"], dtype=dtype)
        yield one


def packed() -> Iterator[Figure]:
    one = Figure("packed", "packed, float64 and float32", *OF_PEER, 2.8, 1.8)
    for dtype, suffix in SUFFIX.items():
        one.lines(PRODUCT + suffix, EVEN, ["packed"], label=f"{dtype}, ", dtype=dtype)
    yield one


def band() -> Iterator[Figure]:
    for name, widths, mean, least in (
        ("band-narrow", (1, 2, 4, 8, 16), 9.0, 5.0), ("band-wide", (32, 64, 128), 3.5, 2.5),
    ):  # fmt: skip
        title = f"band, float64, n = {BAND_N}, kd = {', '.join(map(str, widths))}"
        one = Figure(name, title, *OF_PEER, mean, least, column="kd")
        for triangle in TRIANGLES:
            for kd in widths:
                kernel = f"band_{triangle}_kd{kd}"
                loop = "dot" if kd <= NARROW else "fused"
                one.beside(kernel, layout="band", kd=kd, triangle=triangle, loop=loop)
                one.points.append(Point(triangle, kd, BAND_N, kernel))
        yield one


def hermitian() -> Iterator[Figure]:
    one = Figure("hermitian", "Hermitian, complex128, full and packed", *OF_PEER, 2.0, 1.2)
    values = {"structure": "hermitian", "dtype": "complex128"}
    one.lines("hermitian_{layout}_{triangle}", EVEN[:-1], **values)
    yield one


def rank1() -> Iterator[Figure]:
    one = Figure("rank1", "rank-1 update, float64, full and packed", *OF_PEER, 1.4, 1.0)
    one.lines("rank1_{layout}_{triangle}", EVEN[:-1], operation="rank1")
    yield one


def fixed() -> Iterator[Figure]:
    title = "fixed n, float64 and float32, full and packed, upper"
    one = Figure("fixed", title, *OF_PEER, 5.0, 2.5)
    for dtype in SUFFIX:
        for layout in BOTH:
            for n in FIXED:
                name = f"fixed_{layout}_{dtype}_n{n}"
                one.specs.append(_small(name, layout=layout, dtype=dtype, n=n))
                one.points.append(Point(f"{layout}, {dtype}", n, n, name))
    yield one


def _small(name: str, **values: Any) -> Spec:
    """A kernel of a fixed n: in vectors, or written out in plain C where no vector fits."""
    try:
        return make_spec(name, **KERNEL, **values)
    except SpecError:
        return make_spec(name, **{**KERNEL, "isa": "portable", "unroll": "all"}, **values)


def whole() -> Iterator[Figure]:
    title = "half storage against a full product, float64"
    one = Figure("gemv", title, *OF_GEMV, 1.9, 1.7, whole=True)
    one.lines(PRODUCT, EVEN[-2:])
    yield one


def odd() -> Iterator[Figure]:
    for layout, mean in zip(BOTH, (0.9 * 1.3, 0.9 * 2.8), strict=True):
        title = f"odd sizes, {layout}, float64"
        one = Figure(f"odd-{layout}", title, *OF_PEER, mean, 0.95)
        one.lines(PRODUCT, ODD, [layout])
        yield one


def layouts() -> Iterator[Figure]:
    """Layouts that no library has, against our own full layout."""
    title = "RFP, tiled and skyline (full profile) against our own full layout, float64"
    other = against(lambda name: PRODUCT.format(layout="full", triangle=name.split("_")[2]))
    one = Figure("layouts", title, "time of our full layout / ours", other, None, 1 / 1.15)
    one.lines(PRODUCT, (), ["full"])
    one.lines(PRODUCT, EVEN[3:], OTHERS)
    yield one


def limit() -> Iterator[Figure]:
    n = EVEN[-1]
    title = f"every layout with unit stride, float64, n = {n}"
    one = Figure("limit-large", title, *OF_SUM, None, 0.85)
    one.lines(PRODUCT, [n], (*BOTH, *OTHERS))
    yield one
    wanted = {128: 0.75, 256: 0.75, 512: 0.75, 1024: 0.65}
    title = "in cache, full and packed, float64"
    one = Figure("limit-cache", title, *OF_SUM, None, wanted)
    one.lines(PRODUCT, wanted)
    yield one


def threads() -> Iterator[Figure]:
    """The same bits whatever runs the parts are checked by the race itself."""
    sizes, other = (512, 1024, 2048), against(lambda name: name.replace("threads", "one_thread"))
    title = "two threads, full and packed, float64; bits compared with one thread's"
    words = "time of the kernel with threads = 1 / ours"
    one = Figure("threads", title, words, other, None, 1.8)
    for layout in BOTH:
        one.beside(f"one_thread_{layout}", layout=layout)
        one.add(layout, f"threads_{layout}", sizes, layout=layout, threads=2)
    yield one


def quadform() -> Iterator[Figure]:
    title = "quadratic form against product, full and packed, float64"
    other = against(lambda name: name.replace("quadform", "product"))
    one = Figure("quadform", title, "time of our product / ours", other, None, 1.0)
    one.lines(PRODUCT, ())
    one.lines(PRODUCT.replace("product", "quadform"), EVEN, operation="quadform")
    yield one


MAKERS = (
    full, packed, band, hermitian, rank1, fixed, whole, odd, layouts, limit, threads, quadform,
)  # fmt: skip


@dataclass
class Measured:
    """A figure with its numbers by line and column, or why there are none."""

    figure: Figure
    numbers: dict[str, dict[int, float]] = field(default_factory=dict)
    found: Race | None = None
    missing: list[str] = field(default_factory=list)

    @property
    def all(self) -> list[float]:
        return [number for line in self.numbers.values() for number in line.values()]

    @property
    def mean(self) -> float:
        """The geometric mean."""
        return math.exp(sum(map(math.log, self.all)) / len(self.all))

    @property
    def lowest(self) -> tuple[float, str, int, float]:
        """The number that is lowest against what it is to be: it, its place, the wanted one."""
        rated = [
            (number / self.figure.wanted(column), number, line, column)
            for line, numbers in self.numbers.items()
            for column, number in numbers.items()
        ]
        _, number, line, column = min(rated)
        return number, line, column, self.figure.wanted(column)

    @property
    def reached(self) -> bool:
        """Whether every number is there and the figure holds."""
        if self.missing or not self.all:
            return False
        number, _, _, wanted = self.lowest
        return number >= wanted and self.mean >= (self.figure.mean or 0)

    @property
    def spread(self) -> float:
        """The largest spread of a kernel of the figure."""
        kernels = {(point.kernel, point.n) for point in self.figure.points}
        rows = self.found.rows if self.found else []
        return max((r.time.spread for r in rows if (r.kernel, r.n) in kernels), default=0)


def measure(one: Figure, rounds: int) -> Measured:
    """Races a figure; what goes wrong is told in its place."""
    result = Measured(one)
    runtime = any(spec.layout.n == "runtime" for spec in one.specs)
    sizes = sorted({point.n for point in one.points}) if runtime else None
    peers = [library for library in libraries() if library.name == PEER]
    try:
        found = race(one.specs, sizes, peers, rounds=rounds, whole=one.whole)
    except DemiluneError as error:
        result.missing.append(str(error))
        return result
    result.found = found
    result.missing += [f"{left.name}: {left.reason}" for left in found.left_out]
    for point in one.points:
        try:
            number = one.value(found, found.row(point.kernel, point.n))
        except DemiluneError as error:
            result.missing.append(str(error))
        else:
            if number is not None:
                result.numbers.setdefault(point.line, {})[point.column] = number
            else:
                result.missing.append(f"{point.kernel} has nothing to be held against")
    return result


def measure_all(only: list[str], quick: bool) -> list[Measured]:
    """Every figure whose name begins with one of ``only``, or all."""
    results = []
    for make in MAKERS:
        try:
            figures = list(make())
        except SpecError as error:
            name = make.__name__
            print(f"{name}: left out: {error}", file=sys.stderr)
            nothing = Figure(name, name, *OF_PEER, None, 0.0)
            results.append(Measured(nothing, missing=[str(error)]))
            continue
        for one in figures:
            if only and not any(one.name.startswith(name) for name in only):
                continue
            if quick:
                kept = [p for p in one.points if p.n in (*QUICK_SIZES, *FIXED, BAND_N)]
                one.points = kept or one.points[:1]
            print(f"{one.name} ...", file=sys.stderr, flush=True)
            results.append(measure(one, QUICK_ROUNDS if quick else ROUNDS))
    return results


def page(results: list[Measured], facts: dict[str, Any]) -> str:
    """All figures in Markdown."""
    lines = [
        "<!-- Made by Demilune (examples/speed.py); do not change it by hand. -->",
        "# Speed", "", *introduction(facts), "", *summary(results),
    ]  # fmt: skip
    for one in results:
        lines += ["", *section(one)]
    return "\n".join(lines) + "\n"


def introduction(facts: dict[str, Any]) -> list[str]:
    caches = ", ".join(f"{size} {level}" for level, size in facts["caches"].items())
    library = facts["libraries"].get(PEER, {"says": "not found"})
    return [
        "Made by `python examples/speed.py`, which measures it all again. Numbers are ratios of "
        f"times of one run: medians of {facts['rounds']} rounds in which all run in turn, one "
        "thread unless said; the larger, the faster are the kernels. Every kernel was verified, "
        "and its results compared with the library's, before it was timed.",
        "",
        f"- date: {facts['date']}",
        f"- machine: {facts['processor']}, {facts['cores']} cores, caches: {caches}; "
        f"{facts['system']}; load {facts['load'][0]:.2f} before and {facts['load'][1]:.2f} after; "
        f"other programs ran in at most {facts['disturbed']:.1%} of the slices of a figure",
        f"- instructions: {facts['instructions']}; compiler: {facts['compiler']}",
        f"- library: {PEER}: {library['says']}, which takes the machine for {library.get('core')}",
    ]


def summary(results: list[Measured]) -> list[str]:
    """Wanted and measured side by side."""
    lines = [
        "| figure | mean | wanted | lowest | wanted | where | reached |",
        "| --- | --- | --- | --- | --- | --- | --- |",
    ]
    for one in results:
        if not one.all:
            lines.append(f"| {one.figure.title} | | | | | not measured | no |")
            continue
        mean = "" if one.figure.mean is None else f"{one.figure.mean:.2f}"
        number, line, column, wanted = one.lowest
        where = f"{line}, {one.figure.column} = {column}"
        lines.append(
            f"| {one.figure.title} | {one.mean:.2f} | {mean} | {number:.2f} | {wanted:.2f} | "
            f"{where} | {'yes' if one.reached else 'no'} |"
        )
    return lines


def section(one: Measured) -> list[str]:
    """One figure: its numbers, and the specifications of its kernels."""
    lines = [f"## {one.figure.title}", ""]
    if one.all:
        columns = sorted({point.column for point in one.figure.points})
        lines += [
            f"{one.figure.what[0].upper()}{one.figure.what[1:]} (spread of our times: up to "
            f"{one.spread:.0%}).",
            "",
            f"| {one.figure.column} | {' | '.join(map(str, columns))} |",
            f"| --- |{' --- |' * len(columns)}",
        ]
        for line, numbers in one.numbers.items():
            cells = [f"{numbers[c]:.2f}" if c in numbers else "" for c in columns]
            lines.append(f"| {line} | {' | '.join(cells)} |")
    lines += [f"- Not measured: {reason}" for reason in dict.fromkeys(one.missing)]
    if one.figure.specs:
        lines += ["", "The kernels:", ""]
    return lines + [f"- {words}" for words in specifications(one.figure.specs)]


def specifications(specs: list[Spec]) -> Iterator[str]:
    """What was specified; kernels together that differ in what their names tell alone."""
    alike: dict[str, list[str]] = {}
    for spec in specs:
        values = {k: v for k, v in spec.stated.items() if k not in IN_NAMES}
        values.setdefault("isa", "portable")
        words = ", ".join(f"{key} = {json.dumps(value)}" for key, value in values.items())
        alike.setdefault(words, []).append(spec.name)
    for words, names in alike.items():
        yield f"{', '.join(f'`{name}`' for name in names)}: {words}"


def record(results: list[Measured], facts: dict[str, Any]) -> str:
    """Everything that was measured, a figure a line."""
    figures = []
    for one in results:
        found = None if one.found is None else one.found.as_record()
        if found is not None:
            del found["machine"]
        figures.append({
            "name": one.figure.name, "title": one.figure.title, "what": one.figure.what,
            "wanted mean": one.figure.mean, "wanted least": one.figure.least,
            "mean": one.mean if one.all else None, "lowest": one.lowest if one.all else None,
            "reached": one.reached, "numbers": one.numbers, "missing": one.missing, "race": found,
        })  # fmt: skip
    head = json.dumps({"made by": "Made by Demilune (examples/speed.py)", **facts})
    body = ",\n".join(json.dumps(_rounded(one)) for one in figures)
    return f'{{"machine": {head},\n"figures": [\n{body}\n]}}\n'


def _rounded(value: Any) -> Any:
    """Numbers with the digits that a measurement has."""
    if isinstance(value, float):
        return float(f"{value:.{DIGITS}g}")
    if isinstance(value, dict):
        return {key: _rounded(one) for key, one in value.items()}
    return [_rounded(one) for one in value] if isinstance(value, list | tuple) else value


def unsteered() -> None:
    """Starts again without the variables that change what a library does, if there are any."""
    if names := steering():
        print(f"starting again without {', '.join(names)}", file=sys.stderr)
        kept = {name: value for name, value in os.environ.items() if name not in names}
        os.execve(sys.executable, [sys.executable, *sys.argv], kept)  # noqa: S606


def main() -> int:
    parser = argparse.ArgumentParser(description=__doc__.splitlines()[0])
    parser.add_argument("--quick", action="store_true", help="few sizes and rounds")
    parser.add_argument(
        "--row", action="append", default=[], metavar="NAME",
        help="only figures whose name begins with NAME",
    )  # fmt: skip
    parser.add_argument("-o", "--output", type=Path, metavar="DIR", help="folder for the page")
    given = parser.parse_args()
    unsteered()
    peers = [library for library in libraries() if library.name == PEER]
    if not peers:
        error = MissingError(f"{PEER} is not here; get it with: pip install scipy-openblas64")
        print(error, file=sys.stderr)
        return error.status
    before = os.getloadavg()[0]
    results = measure_all(given.row, given.quick)
    if not results:
        print(f"no figure begins with {' or '.join(given.row)}", file=sys.stderr)
        return 2
    date = next((one.found.date for one in results if one.found), "unknown")
    rounds = QUICK_ROUNDS if given.quick else ROUNDS
    load = [before, os.getloadavg()[0]]
    disturbed = max((one.found.disturbed for one in results if one.found), default=0.0)
    facts = {**machine(peers), "date": date, "rounds": rounds, "load": load}
    facts["disturbed"] = disturbed
    text = page(results, facts)
    folder = given.output
    if folder is None and not given.quick and not given.row:
        folder = Path(__file__).parent
    if folder is None:
        print(text)
    else:
        write_all(folder, {"speed.md": text, "speed.json": record(results, facts)})
        print("\n".join(summary(results)))
    return 0


if __name__ == "__main__":
    sys.exit(main())
