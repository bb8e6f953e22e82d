"""Builds a self-test for a board, runs it in the board's emulator, sizes and counts routines."""

from __future__ import annotations

import os
import re
import shutil
import subprocess
from collections.abc import Iterator, Mapping, Sequence
from contextlib import contextmanager
from dataclasses import dataclass, field
from pathlib import Path
from tempfile import TemporaryDirectory

from demilune.boards.board import Board
from demilune.boards.elf import Elf, read_elf
from demilune.boards.selftest import MOST_TOLD
from demilune.errors import CheckError, DemiluneError, MissingError
from demilune.toolchain import cache
from demilune.toolchain.compilers import CONTRACT_FLAGS, find_compiler

SECONDS = 120
PROGRAM, COUNTS, PLUGIN, EMPTY = "program", "counts.txt", "count.so", "empty.ld"
SECTIONS = ("-ffunction-sections", "-fdata-sections")
TELLING = ("error:", "undefined reference", "overflow", "cannot", "No such file")
LACKING = ("No such file", "cannot find", "cannot read spec file", "unrecognized -m")


@dataclass(frozen=True)
class Ran:
    """How a self-test ended: the cases that differ, or why there is no answer."""

    mismatches: int | None
    message: str = ""

    @property
    def agrees(self) -> bool:
        return self.mismatches == 0


@dataclass(frozen=True)
class Sizes:
    """Bytes of a routine in flash, and of its stack."""

    code: int
    """The routine and the functions of its file that it calls, literal pools included."""
    library: int
    """Functions of the compiler's library that it calls, such as arithmetic in software."""
    constants: int
    data: int
    """Variables; an emitted routine has none."""
    outside: tuple[str, ...]
    """Functions of the C library that it calls and that the system brings: not in the bytes."""
    stack: int | None
    """Its frame and those of the functions of its file at their deepest; None if not known."""
    uncounted: tuple[str, ...]
    """Functions whose stack is not in it."""


@dataclass(frozen=True)
class Counts:
    """What one call does: instructions of the emulator, and the memory accesses they make."""

    instructions: int
    loads: int
    stores: int


@dataclass
class Built:
    """A program for a board, in a folder of its own."""

    board: Board
    folder: Path
    objects: dict[str, Path] = field(default_factory=dict)
    """By source file."""

    @property
    def program(self) -> Path:
        return self.folder / PROGRAM


def program(board: Board, name: str) -> str:
    """The path of a program that the board needs; raises :class:`MissingError`."""
    path = shutil.which(name)
    if path is None:
        raise MissingError(f"board {board.name}: {name} is not on this machine; {board.how_to_get}")
    return path


def command(
    board: Board, arguments: Sequence[str], folder: Path, seconds: float = SECONDS
) -> subprocess.CompletedProcess[str]:
    """Runs a program of the board in ``folder``."""
    return subprocess.run(
        [program(board, arguments[0]), *arguments[1:]], cwd=folder, capture_output=True,
        text=True, errors="replace", timeout=seconds, check=False, stdin=subprocess.DEVNULL,
    )  # fmt: skip


@contextmanager
def build(
    board: Board,
    sources: Mapping[str, str],
    *,
    optimise: str = "-O2",
    freestanding: bool = False,
) -> Iterator[Built]:
    """Compiles and links ``sources`` (by name) for the board, in a folder that is then removed."""
    with TemporaryDirectory(prefix="demilune-board-") as name:
        built = Built(board, Path(name))
        for source, text in sources.items():
            (built.folder / source).write_text(text, encoding="utf-8")
        free = ("-ffreestanding",) if freestanding else ()
        flags = (*CONTRACT_FLAGS, optimise, *free, *SECTIONS, *board.measure, *board.flags)
        for source in (one for one in sources if one.endswith((".c", ".S"))):
            target = source.rpartition(".")[0] + ".o"
            compile_(board, [*flags, "-c", source, "-o", target], built.folder)
            built.objects[source] = built.folder / target
        names = [one.name for one in built.objects.values()]
        options = [*board.flags, *names, *board.link, "-Wl,--gc-sections", "-lm"]
        compile_(board, [*options, "-o", PROGRAM], built.folder)
        yield built


def compile_(board: Board, arguments: Sequence[str], folder: Path) -> None:
    """Runs the board's compiler; raises :class:`CheckError` with what it said."""
    try:
        done = command(board, [board.compiler, *arguments], folder)
    except subprocess.TimeoutExpired as error:
        raise CheckError(f"{board.compiler} did not end within {SECONDS} s") from error
    if done.returncode == 0:
        return
    said = (done.stderr or done.stdout).strip().splitlines()
    errors = [line for line in said if any(one in line for one in TELLING)]
    told = "; ".join(errors[:3] or said[-3:])
    if any(one in told for one in LACKING):
        raise MissingError(
            f"board {board.name}: {board.compiler} lacks a part: {told}; {board.how_to_get}"
        )
    raise CheckError(f"{board.compiler} failed (exit {done.returncode}): {told}")


def run(board: Board, path: Path, *, seconds: float = SECONDS, plugin: Sequence[str] = ()) -> Ran:
    """Runs a program in the emulator, and tells how it ended."""
    try:
        done = command(board, emulator(board, path.name, plugin), path.parent, seconds)
    except subprocess.TimeoutExpired:
        return Ran(None, f"did not end within {seconds:g} s")
    if 0 <= done.returncode <= MOST_TOLD:
        return Ran(done.returncode)
    said = (done.stderr or done.stdout).strip().splitlines()
    how = f"signal {-done.returncode}" if done.returncode < 0 else f"exit {done.returncode}"
    return Ran(None, f"crashed ({how})" + (f": {said[0]}" if said else ""))


def emulator(board: Board, name: str, plugin: Sequence[str] = ()) -> list[str]:
    """The command that emulates a program."""
    first, *rest = (f"./{name}" if one == "{program}" else one for one in board.emulator)
    loaded = ["-plugin", ",".join([f"./{PLUGIN}", *plugin])] if plugin else []
    return [first, *loaded, *rest]


# --- sizes -------------------------------------------------------------------------------------


def sizes(built: Built, source: str, routine: str) -> Sizes:
    """The bytes of a routine that ``source`` defines.

    The linker keeps what the routine needs and nothing else, once without the compiler's library
    and once with it. An empty linker script leaves each section by itself.
    """
    (built.folder / EMPTY).write_text("SECTIONS { }\n", encoding="ascii")
    own = _kept(built, source, routine, ())
    whole = _kept(built, source, routine, ("-lgcc",))
    stack, uncounted = stack_of(built, source, routine)
    return Sizes(
        code=own.bytes("code"),
        library=whole.bytes("code") - own.bytes("code"),
        constants=whole.bytes("constants"),
        data=whole.bytes("data"),
        outside=tuple(sorted(own.wanted & whole.wanted)),
        stack=stack,
        uncounted=tuple(sorted(own.wanted | uncounted)),
    )


def _kept(built: Built, source: str, routine: str, libraries: Sequence[str]) -> Elf:
    options = ["-nostdlib", "-r", "-Wl,--gc-sections", f"-Wl,-e,{routine}", "-T", EMPTY]
    kept = built.objects[source].with_name("kept.o")
    given = [built.objects[source].name, *libraries, "-o", kept.name]
    compile_(built.board, [*built.board.flags, *options, *given], built.folder)
    return read_elf(kept)


NODE = re.compile(r'node: \{ title: "([^"]*)" label: "([^"]*)"')
EDGE = re.compile(r'edge: \{ sourcename: "([^"]*)" targetname: "([^"]*)"')


def stack_of(built: Built, source: str, routine: str) -> tuple[int | None, set[str]]:
    """The stack of a routine and its callees of the same file, and the callees without a number.

    From the compiler's graph of calls; None without one, or where a frame is not of fixed size.
    """
    graph = built.objects[source].with_suffix(".ci")
    if not graph.is_file():
        return None, set()
    text = graph.read_text(encoding="utf-8", errors="replace")
    frames: dict[str, int] = {}
    for title, label in NODE.findall(text):
        told = re.search(r"(\d+) bytes \((static|dynamic,bounded)\)", label)
        if told:
            frames[title.rpartition(":")[2]] = int(told[1])
    calls: dict[str, set[str]] = {}
    for caller, callee in EDGE.findall(text):
        calls.setdefault(caller.rpartition(":")[2], set()).add(callee.rpartition(":")[2])
    unknown: set[str] = set()

    def deepest(name: str, above: tuple[str, ...]) -> int:
        if name not in frames or name in above:
            unknown.add(name)
            return 0
        inner = [deepest(one, (*above, name)) for one in sorted(calls.get(name, ()))]
        return frames[name] + max(inner, default=0)

    if routine not in frames:
        return None, set()
    return deepest(routine, ()), unknown


# --- counts ------------------------------------------------------------------------------------


def plugin_library() -> Path:
    """The plugin that counts, compiled by the compiler of this machine."""
    text = Path(__file__).with_name("count.c").read_text(encoding="utf-8")
    flags = ("-std=c11", "-O2", "-fPIC", "-shared")
    return cache.library(find_compiler(), flags, {"count.c": text})


def counts(built: Built, routines: Sequence[str], callers: Sequence[str]) -> dict[str, Counts]:
    """What the first call of each routine does; ``callers`` are sources whose code calls them.

    Raises :class:`CheckError` if the program does not end well or a routine is not called.
    """
    elf = read_elf(built.program)
    names = {name for one in callers for name in read_elf(built.objects[one]).functions}
    try:
        entries = {elf.functions[name].address: name for name in routines}
    except KeyError as error:
        raise CheckError(f"the program has no function {error}") from error
    shutil.copy(plugin_library(), built.folder / PLUGIN)
    options = [f"out={COUNTS}", *(f"routine={address:x}" for address in entries)]
    options += [f"caller={low:x}-{high:x}" for low, high in _ranges(elf, names)]
    ran = run(built.board, built.program, plugin=options)
    if not ran.agrees:
        raise CheckError(f"the counted call {ran.message or 'gave other bits'}")
    found: dict[str, Counts] = {}
    for line in (built.folder / COUNTS).read_text(encoding="ascii").splitlines():
        address, *numbers = line.split()
        found[entries[int(address, 16)]] = Counts(*map(int, numbers))
    if missing := [name for name in routines if name not in found]:
        raise CheckError(f"no call was counted of {', '.join(missing)}")
    return found


def _ranges(elf: Elf, names: set[str]) -> list[tuple[int, int]]:
    found = [elf.functions[name] for name in sorted(names) if name in elf.functions]
    return [(one.address, one.address + one.size) for one in found]


# --- Python ------------------------------------------------------------------------------------


def npm_folder(board: Board) -> Path:
    """The folder with the board's npm package, which npm puts there once."""
    folder = cache.used_folder() / f"npm-{cache.digest(board.npm.encode())[:16]}"
    if (folder / "node_modules").is_dir():
        return folder
    with TemporaryDirectory(prefix="making-", dir=folder.parent) as name:
        arguments = ["npm", "install", "--prefix", name, "--no-audit", "--no-fund", board.npm]
        try:
            done = command(board, arguments, Path(name))
        except subprocess.TimeoutExpired as error:
            raise MissingError(f"npm did not bring {board.npm} within {SECONDS} s") from error
        if done.returncode:
            said = (done.stderr or done.stdout).strip().splitlines()
            raise MissingError(
                f"board {board.name}: npm cannot bring {board.npm}: {'; '.join(said[:2])}"
            )
        try:
            os.rename(name, folder)  # noqa: PTH104 - the temporary folder is then gone
            Path(name).mkdir()
        except OSError as error:
            if not (folder / "node_modules").is_dir():
                raise DemiluneError(f"{folder} cannot be made: {error.strerror}") from error
    return folder


def run_python(board: Board, modules: Mapping[str, str], test: str) -> Ran:
    """Runs the function ``selftest`` of the module ``test`` in the board's interpreter.

    The interpreter has a file system of its own, into which the program puts the modules.
    """
    program(board, board.emulator[0])
    place = str(npm_folder(board)) if board.npm else ""
    lines = ["import sys", "sys.path.append('')"]
    lines += [
        f"with open({name!r}, 'w') as file:\n    file.write({text!r})"
        for name, text in modules.items()
    ]
    lines += [f"import {test}", f"print('differing', {test}.selftest())"]
    with TemporaryDirectory(prefix="demilune-board-") as folder:
        (Path(folder) / PROGRAM).write_text("\n".join(lines) + "\n", encoding="utf-8")
        arguments = [one.replace("{npm}", place) for one in emulator(board, PROGRAM)]
        try:
            done = command(board, arguments, Path(folder))
        except subprocess.TimeoutExpired:
            return Ran(None, f"did not end within {SECONDS} s")
    answer = re.search(r"^differing (\d+)$", done.stdout, re.MULTILINE)
    if answer is None:
        said = (done.stdout + done.stderr).strip().splitlines()
        return Ran(None, f"gave no answer: {said[-1] if said else 'nothing was printed'}")
    return Ran(int(answer[1]))
