"""The commands; each does one step of the library's pipeline."""

from __future__ import annotations

import difflib
import functools
import sys
import textwrap
from collections.abc import Callable
from pathlib import Path
from typing import Any

import click
from click.core import ParameterSource

from demilune import files, pipeline, storage
from demilune.boards.board import find_board
from demilune.cli import show
from demilune.cli.starter import STARTER
from demilune.errors import DemiluneError, InputError
from demilune.evidence import shape
from demilune.evidence.reading import read_record
from demilune.evidence.record import EVIDENCE, PAGE, evidence_of
from demilune.evidence.replay import replay
from demilune.keys import nearest
from demilune.plan.build import Plan, make_plan
from demilune.plan.counts import flat as flat_counts
from demilune.render import pseudo_code
from demilune.spec import Spec
from demilune.specfile import SpecFile, read, schema
from demilune.version import __version__

INTERRUPTED = 130
Command = Callable[..., int | None]

SPEC = click.argument("spec", type=click.Path(path_type=Path, readable=False))
JSON = click.option("--json", "as_json", is_flag=True, help="Print the report as JSON.")
QUIET = click.option("-q", "--quiet", is_flag=True, help="Show no progress.")
FORCE = click.option("--force", is_flag=True, help="Write over files of somebody else, too.")
ONLY = click.option(
    "-k", "--kernel", "only", multiple=True, metavar="NAME",
    help="Only kernels whose name begins with NAME (and, where files are written, those in them).",
)  # fmt: skip
OUTPUT = click.option(
    "-o", "--output", "folder", type=click.Path(path_type=Path), default=Path("build_out"),
    show_default=True, metavar="DIR", help="The folder to write to.",
)  # fmt: skip
SEED = click.option(
    "--seed", type=click.IntRange(min=0), default=1, show_default=True,
    help="The same seed gives the same inputs.",
)  # fmt: skip


class Examples(click.Group):
    """A group that lists its commands in the order of the pipeline."""

    def list_commands(self, ctx: click.Context) -> list[str]:
        return list(self.commands)


def guarded(command: Command) -> Command:
    """Turns errors into one message and the exit status that they have."""

    @functools.wraps(command)
    def run(*arguments: Any, **options: Any) -> None:
        try:
            status = command(*arguments, **options)
            sys.stdout.flush()
        except DemiluneError as problem:
            show.error(problem, bool(options.get("as_json")))
            sys.exit(problem.status)
        except KeyboardInterrupt:
            show.message("demilune: interrupted; no file was left half-written")
            sys.exit(INTERRUPTED)
        except BrokenPipeError:
            sys.stderr.close()
            sys.exit(0)
        except OSError as problem:
            show.message(f"demilune: the output cannot be written: {problem.strerror}")
            sys.exit(2)
        sys.exit(status or 0)

    return run


@click.group(cls=Examples, context_settings={"help_option_names": ["-h", "--help"]})
@click.version_option(__version__, prog_name="demilune")
def main() -> None:
    """Make, verify and hand over kernels for symmetric and Hermitian matrices of which only one
    triangle is stored.

    Exit status: 0 done, 1 a check failed, 2 bad input, 3 something is missing on this machine.
    """


def kernels_of(source: SpecFile, only: tuple[str, ...], whole: bool = False) -> list[Spec]:
    """The kernels that are asked for; ``whole`` adds those that share a file with one."""
    if not only:
        return list(source.specs)
    chosen = [s for s in source.specs if any(s.name.startswith(name) for name in only)]
    names = list(dict.fromkeys(spec.name for spec in source.specs))
    for name in only:
        if not any(one.startswith(name) for one in names):
            few = ", ".join(names[:8]) + (", ..." if len(names) > 8 else "")
            raise InputError(
                f'{source.path}: no kernel begins with "{name}"{nearest(name, names)} ({few})'
            )
    if not whole:
        return chosen
    shared = {(spec.file, spec.language) for spec in chosen}
    return [spec for spec in source.specs if (spec.file, spec.language) in shared]


@main.command()
@click.argument("path", type=click.Path(path_type=Path), default=Path("demilune.toml"))
@JSON
@guarded
def init(path: Path, as_json: bool) -> None:
    """Write a commented specification to start from.

    Example: demilune init my_matrix.toml
    """
    with files.explained(path):
        if path.exists():
            raise InputError(f"{path} exists already; choose another name")
        if path.parent.exists() and not path.parent.is_dir():
            raise InputError(f"{path.parent} is a file, and {path.name} cannot lie in it")
    files.write_all(path.parent, {path.name: STARTER})
    if as_json:
        show.as_json({"written": str(path)})
    else:
        show.message(f"wrote {path}; next: demilune build {path}")


@main.command()
@SPEC
@ONLY
@JSON
@guarded
def plan(spec: Path, only: tuple[str, ...], as_json: bool) -> None:
    """Show what a kernel will do before anything is made: storage, loops, costs.

    Example: demilune plan examples/buoy_estimator.toml
    """
    plans: dict[str, Plan] = {}
    for one in kernels_of(read(spec), only):
        plans.setdefault(one.name, make_plan(one))
    records = [plan_record(made) for made in plans.values()]
    if as_json:
        show.as_json(records)
        return
    for number, record in enumerate(records):
        print(("\n" if number else "") + plan_text(record))


def plan_record(made: Plan) -> dict[str, Any]:
    """What ``demilune plan`` tells of one kernel."""
    layout = made.spec.layout
    sizes = [int(layout.n)] if layout.n != "runtime" else [8, 64, 512]
    return {
        "kernel": made.spec.name,
        "formula": made.spec.operation.described(layout),
        "specification": made.spec.stated,
        "assumed": layout.assumes,
        "index formula": list(layout.formula),
        "storage": storage.picture(layout),
        "arithmetic": list(made.order),
        "pseudo-code": pseudo_code(made).rstrip().splitlines(),
        "counts": {f"n = {n}": flat_counts(made, layout.sample(n)) for n in sizes},
    }


def plan_text(record: dict[str, Any]) -> str:
    """The same for people."""
    lines = [f"{record['kernel']}: {record['formula']}", ""]
    for name in ("index formula", "storage", "arithmetic", "pseudo-code"):
        found = record[name]
        if name == "arithmetic":
            found = [line for sentence in found for line in textwrap.wrap(sentence, 86)]
        lines += [f"{name}:", *("    " + line for line in found), ""]
    assumed = f", with {record['assumed']}" if record["assumed"] else ""
    lines.append(f"counts of one call{assumed} (loads and stores in elements):")
    columns = list(record["counts"])
    rows = list(record["counts"][columns[0]])
    width = max(map(len, rows))
    cells = [[f"{record['counts'][c][row]}" for c in columns] for row in rows]
    wide = [max(len(c), *(len(r[i]) for r in cells)) for i, c in enumerate(columns)]
    lines.append(" " * (width + 6) + "  ".join(c.rjust(w) for c, w in zip(columns, wide)))  # noqa: B905
    for row, values in zip(rows, cells, strict=True):
        text = "  ".join(value.rjust(w) for value, w in zip(values, wide, strict=True))
        lines.append(f"    {row.ljust(width)}  {text}")
    return "\n".join(lines)


@main.command()
@SPEC
@OUTPUT
@ONLY
@click.option("--check", is_flag=True, help="Write nothing; exit 1 if a file would change.")
@click.option("--diff", is_flag=True, help="Write nothing; show what would change.")
@FORCE
@JSON
@QUIET
@guarded
def emit(
    spec: Path, folder: Path, only: tuple[str, ...], check: bool, diff: bool, force: bool,
    as_json: bool, quiet: bool,
) -> int:  # fmt: skip
    """Write the sources and nothing else.

    Example: demilune emit examples/footbridge.toml -o generated --check
    """
    with show.progress(quiet) as progress:
        texts = pipeline.all_files(
            pipeline.units_of(kernels_of(read(spec), only, whole=True), progress)
        )
    if check or diff:
        stale = [n for n, text in texts.items() if files.current(folder / n) != text]
        if diff and not as_json:
            for name in stale:
                sys.stdout.writelines(_diff(folder, name, texts[name]))
        if as_json:
            show.as_json({"files": list(texts), "would change": stale})
        elif check:
            for name in stale:
                show.message(f"{folder / name} would change")
        return 1 if stale else 0
    changed = files.write_all(folder, texts, force)
    if as_json:
        show.as_json({"folder": str(folder), "files": list(texts), "changed": changed})
    else:
        for name in texts:
            print(folder / name)
    return 0


def _diff(folder: Path, name: str, text: str) -> list[str]:
    old = (files.current(folder / name) or "").splitlines(keepends=True)
    new = text.splitlines(keepends=True)
    return list(difflib.unified_diff(old, new, str(folder / name), f"{name} (new)"))


@main.command()
@click.argument("spec", type=click.Path(path_type=Path, readable=False), required=False)
@click.option(
    "-o",
    "--output",
    "folder",
    type=click.Path(path_type=Path),
    metavar="DIR",
    help="The folder for the evidence: build_out, or with --replay none, if it is not given.",
)
@ONLY
@SEED
@click.option(
    "--selfcheck",
    is_flag=True,
    help="Plant faults into every kernel, and fail if the bench does not catch one.",
)
@click.option(
    "--replay",
    "recorded",
    type=click.Path(path_type=Path),
    metavar="EVIDENCE.json",
    help="Repeat a recorded run, and tell whether every bit agrees.",
)
@FORCE
@JSON
@QUIET
@click.pass_context
@guarded
def verify(
    context: click.Context, spec: Path | None, folder: Path | None, only: tuple[str, ...],
    seed: int, selfcheck: bool, recorded: Path | None, force: bool, as_json: bool, quiet: bool,
) -> int:  # fmt: skip
    """Compile and verify every kernel and write the evidence, or repeat a recorded run.

    Example: demilune verify examples/river_gauges.toml --seed 7
    """
    if folder is not None and recorded is not None:
        pipeline.refuse_early(folder, {}, force)
    if recorded is not None:
        given = context.get_parameter_source("seed") is not ParameterSource.DEFAULT
        if spec is not None or only or selfcheck or given:
            raise InputError(
                "--replay takes the specification, kernels, seed and planted faults from the "
                "record; SPEC, -k, --seed and --selfcheck do not go with it"
            )
        return _replay(recorded, folder, force, as_json, quiet)
    if spec is None:
        raise click.UsageError("Missing argument 'SPEC'; or repeat a run with --replay.", context)
    source = read(spec)
    specs, boards = kernels_of(source, only), [find_board(name) for name in source.boards]
    folder = folder or Path("build_out")
    pipeline.refuse_early(folder, {}, force)
    with show.progress(quiet) as progress:
        result = pipeline.check(specs, seed, progress, selfcheck=selfcheck, boards=boards)
    files.write_all(folder, pipeline.report_files(result), force)
    if as_json:
        show.as_json(evidence_of(result))
    else:
        show.outcome(result)
        print(f"{EVIDENCE} and {PAGE} are in {folder}")
    return result.status


def _replay(path: Path, folder: Path | None, force: bool, as_json: bool, quiet: bool) -> int:
    recorded = read_record(path)
    with show.progress(quiet) as progress:
        try:
            result = replay(recorded, progress)
        except InputError as error:
            raise InputError(f"{path}: {error}") from error
    if folder is not None:
        files.write_all(folder, pipeline.report_files(result.outcome), force)
    if as_json:
        show.as_json(result.as_record())
    else:
        show.replayed(result)
    return result.status


@main.command()
@SPEC
@OUTPUT
@ONLY
@SEED
@FORCE
@JSON
@QUIET
@guarded
def build(
    spec: Path, folder: Path, only: tuple[str, ...], seed: int, force: bool, as_json: bool,
    quiet: bool,
) -> int:  # fmt: skip
    """Emit, compile and verify every kernel, and write sources and evidence.

    Example: demilune build examples/buoy_estimator.toml
    """
    source = read(spec)
    specs = kernels_of(source, only, whole=True)
    boards = [find_board(name) for name in source.boards]
    with show.progress(quiet) as progress:
        result = pipeline.build(
            specs, folder, seed=seed, force=force, progress=progress, boards=boards
        )
    if as_json:
        show.as_json(evidence_of(result))
    else:
        show.outcome(result)
        print(f"sources, {EVIDENCE} and {PAGE} are in {folder}")
    return result.status


@main.command()
@JSON
@guarded
def targets(as_json: bool) -> None:
    """Show what can be compiled and run on this machine, and what is missing.

    Example: demilune targets
    """
    records = pipeline.targets()
    if as_json:
        show.as_json(records)
        return
    for record in records:
        state = "found" if record["found"] else "missing"
        print(f"{record['what']:<22} {state:<8} {record['detail']}")


@main.command("schema")
@click.option("--evidence", is_flag=True, help="That of evidence.json instead.")
@JSON
@guarded
def schema_command(evidence: bool, as_json: bool) -> None:
    """Print the JSON Schema of specification files, or of evidence.

    Example: demilune schema > specification.schema.json
    """
    show.as_json(shape.schema() if evidence else schema())
