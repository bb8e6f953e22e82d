"""``demilune race``: kernels against libraries and limits."""

from __future__ import annotations

from pathlib import Path

import click
from rich.table import Table
from rich.text import Text

from demilune.cli import show
from demilune.cli.commands import FORCE, JSON, ONLY, QUIET, SPEC, guarded, kernels_of, main
from demilune.errors import InputError
from demilune.race import Race, libraries, picture
from demilune.race import race as measured
from demilune.race.contest import ROUNDS, SIZES
from demilune.specfile import read

UNITS = ((1e-6, 1e9, "ns"), (1e-3, 1e6, "us"), (1.0, 1e3, "ms"))


def _numbers(text: str | None) -> list[int] | None:
    """Whole numbers from 1 with commas between them."""
    if text is None:
        return None
    parts = [part.strip() for part in text.split(",")]
    for part in parts:
        if not (part.isascii() and part.isdigit() and len(part) < 10 and int(part) > 0):
            raise InputError(
                f"--sizes: {part!r} is no size; whole numbers from 1 are needed, such as 64,256"
            )
    return [int(part) for part in parts]


@main.command()
@SPEC
@ONLY
@click.option(
    "--sizes",
    metavar="N,N,...",
    help=f"Rows of the matrix, where it is open.  [default: {','.join(map(str, SIZES))}]",
)
@click.option("--kd", type=click.IntRange(min=0), help="Half-bandwidth, where it is open.")
@click.option("--ld", type=click.IntRange(min=1), help="Leading dimension, where it is open.")
@click.option(
    "--blas",
    "paths",
    multiple=True,
    metavar="PATH",
    type=click.Path(path_type=Path),
    help="A library beside those that are found.",
)
@click.option(
    "--rounds",
    type=click.IntRange(min=1, max=1000),
    default=ROUNDS,
    show_default=True,
    help="How often everything runs in turn.",
)
@click.option(
    "--picture",
    "drawing",
    metavar="FILE.svg|.png",
    type=click.Path(path_type=Path),
    help="Draw the speed over n.",
)
@FORCE
@JSON
@QUIET
@guarded
def race(
    spec: Path, only: tuple[str, ...], sizes: str | None, kd: int | None, ld: int | None,
    paths: tuple[Path, ...], rounds: int, drawing: Path | None, force: bool, as_json: bool,
    quiet: bool,
) -> int:  # fmt: skip
    """Time verified kernels in C against every BLAS that is found, and against the machine.

    Example: demilune race examples/river_gauges.toml --picture gauges.svg
    """
    asked = _numbers(sizes)
    if drawing is not None:
        picture.prepare(drawing, force)
    specs = kernels_of(read(spec), only)
    with show.progress(quiet) as progress:
        found = measured(
            specs, asked, libraries(*paths), kd=kd, ld=ld, rounds=rounds, progress=progress
        )
    for one in found.left_out:
        show.message(f"demilune: left out: {one.name}: {one.reason}")
    if as_json:
        show.as_json(found.as_record())
    else:
        _table(found)
    if drawing is not None:
        picture.save(found, drawing)
    return found.status


def _table(found: Race) -> None:
    """Kernel by kernel and size by size, then what the columns mean and what raced."""
    table = Table(box=None, pad_edge=False, header_style="bold")
    columns = ["n", "time", "GFLOP/s", "of sum", "of peak", "spread"]
    table.add_column("kernel", overflow="fold")
    for name in (*columns, *(f"{name} / ours" for name in found.libraries)):
        table.add_column(name, justify="right", overflow="fold")
    for row in found.rows:
        peers = [row.ratio(name) for name in found.libraries]
        table.add_row(
            row.kernel, str(row.n), duration(row.time.median), f"{row.gflops:.3g}",
            part(row.of_sum), part(row.of_peak), f"{row.time.spread:.0%}",
            *("" if one is None else f"{one:.2f}" for one in peers),
        )  # fmt: skip
    shown = show.console()
    shown.print(table)
    for line in _remarks(found):
        shown.print(Text(line), soft_wrap=True)


def _remarks(found: Race) -> list[str]:
    peaks = {row.peak for row in found.rows if row.peak is not None}
    lines = [
        f"medians of {found.rounds} rounds; spread: between the quartiles, as a part of the median",
        "of sum: the time to sum the stored half of the matrix, as a part of the kernel's",
    ]
    if peaks:
        low, high = min(peaks) / 1e9, max(peaks) / 1e9
        lines.append(
            "of peak: of the speed of multiply-adds in registers, here "
            f"{low:.0f} to {high:.0f} GFLOP/s"
        )
    if found.disturbed > 0.01:
        lines.append(f"other programs had the processor in {found.disturbed:.0%} of the slices")
    for name, facts in found.machine["libraries"].items():
        used = "" if name in found.libraries else " (has no routine for these kernels)"
        lines.append(f"{name}: {facts['version']} for {facts['core']}, {facts['file']}{used}")
    if not found.machine["libraries"]:
        lines.append("no BLAS was found; pip install scipy-openblas64, or name one with --blas")
    for name, value in found.machine["variables"].items():
        lines.append(f"{name} is set to {value!r}: it changes what a library does")
    return lines


def duration(seconds: float) -> str:
    """Seconds with a unit."""
    for limit, factor, unit in UNITS:
        if seconds < limit:
            return f"{seconds * factor:.3g} {unit}"
    return f"{seconds:.3g} s"


def part(value: float | None) -> str:
    """A fraction, or nothing."""
    return "" if value is None else f"{value:.2f}"
