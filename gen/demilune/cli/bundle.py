"""``demilune bundle``: the folder that is handed over to a firmware."""

from __future__ import annotations

from pathlib import Path

import click
from rich.text import Text

from demilune.bench.recorded import BUDGET
from demilune.boards.board import find_board
from demilune.bundle import Bundle, make
from demilune.bundle.job import OPTIMISE
from demilune.cli import show
from demilune.cli.commands import (
    FORCE,
    JSON,
    ONLY,
    OUTPUT,
    QUIET,
    SEED,
    SPEC,
    guarded,
    kernels_of,
    main,
)
from demilune.specfile import read


@main.command()
@SPEC
@OUTPUT
@ONLY
@click.option(
    "--board", "named", multiple=True, metavar="NAME|FILE.toml",
    help="A board beside those of the specification.",
)  # fmt: skip
@click.option(
    "--budget", type=click.IntRange(min=1), default=BUDGET, show_default=True, metavar="BYTES",
    help="What the recorded vectors of a file of routines may take of the flash.",
)  # fmt: skip
@click.option(
    "--optimise", type=click.Choice(["-O0", "-O1", "-O2", "-O3", "-Os"]), default=OPTIMISE,
    show_default=True, help="How the routines are compiled for the boards.",
)  # fmt: skip
@SEED
@FORCE
@JSON
@QUIET
@guarded
def bundle(
    spec: Path, folder: Path, only: tuple[str, ...], named: tuple[str, ...], budget: int,
    optimise: str, seed: int, force: bool, as_json: bool, quiet: bool,
) -> int:  # fmt: skip
    """Write a folder for a firmware: sources, self-tests, build rules, evidence, data sheets.

    Example: demilune bundle examples/buoy_estimator.toml -o buoy
    """
    source = read(spec)
    specs = kernels_of(source, only, whole=True)
    boards = [find_board(name) for name in dict.fromkeys((*source.boards, *named))]
    with show.progress(quiet) as progress:
        made = make(
            specs, boards, folder, seed=seed, budget=budget, optimise=optimise, force=force,
            progress=progress,
        )  # fmt: skip
    if as_json:
        show.as_json({"folder": str(folder), **made.as_record()})
    else:
        _told(made, folder)
    return made.status


def _told(made: Bundle, folder: Path) -> None:
    """What became of the routines, and the files."""
    show.outcome(made.outcome)
    shown = show.console()
    for one in made.findings:
        name = one.checker.name
        if one.version is None:
            shown.print(Text(f"coding rules: {name} is not on this machine"), soft_wrap=True)
        for rule in one.unexplained:
            line = f"coding rules: {name} names {rule}, for which there is no reason"
            shown.print(Text(line), soft_wrap=True)
        for file, why in one.failed.items():
            shown.print(Text(f"coding rules: {name} could not check {file}: {why}"), soft_wrap=True)
    for file in made.files:
        print(folder / file)
