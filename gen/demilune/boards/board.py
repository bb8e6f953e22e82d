"""Boards: how a target is compiled for and emulated, as data that a user can add to.

A board is a TOML file; those of Demilune stand beside this module. :data:`KEYS` says what a file
may hold. The emulator is told the program by ``{program}``.
"""

from __future__ import annotations

import tomllib
from collections.abc import Callable, Iterator, Mapping
from dataclasses import dataclass
from functools import cache
from pathlib import Path
from typing import Any

from demilune.bench.problem import extent_of
from demilune.dtypes import REAL_SIZE, real_of
from demilune.errors import InputError, Problem, SpecError
from demilune.files import contents
from demilune.isa import PORTABLE
from demilune.keys import RUNTIME, listing, nearest
from demilune.plan.build import Plan
from demilune.plan.tree import Fma, leaves, values, walk
from demilune.spec import shown

FOLDER = Path(__file__).parent
FLOATS = ("float32", "float64")
ARITHMETIC = ("soft", "plain", "fused")
"""What computes a floating-point type: functions, instructions, also fused multiply-adds."""


@dataclass(frozen=True)
class Board:
    """A target: compiler, emulator, memory, and what its floating-point unit has."""

    name: str
    title: str
    emulator: tuple[str, ...]
    floats: Mapping[str, str]
    """How each floating-point type is computed: ``soft``, ``plain`` or ``fused``."""
    complex: bool = True
    """Whether its complex numbers keep the sign of an imaginary part that is zero."""
    language: str = "c"
    compiler: str = ""
    flags: tuple[str, ...] = ()
    link: tuple[str, ...] = ()
    measure: tuple[str, ...] = ("-fstack-usage", "-fcallgraph-info=su")
    """Compiler flags that tell the stack; none for a compiler without them."""
    endian: str = "little"
    flash: int | None = None
    ram: int | None = None
    """Bytes; None where a routine cannot fill it."""
    start: str = ""
    """Start-up code in C for a program without a library, which calls ``main``."""
    npm: str = ""
    """A package that npm installs, whose folder is ``{npm}``."""
    packages: tuple[str, ...] = ()
    """Debian packages that bring the compiler and the emulator."""

    @property
    def how_to_get(self) -> str:
        """What to do where a program is missing."""
        if not self.packages:
            return f"install what the board {self.name} needs"
        packages = " ".join(self.packages)
        return f"install it, for example with: apt-get install --no-install-recommends {packages}"


@dataclass(frozen=True)
class _Key:
    """A key of a board's file: what is allowed, and the test for it."""

    allowed: str
    accepts: Callable[[Any], bool]
    needed: bool = False


def _text(value: Any) -> bool:
    return isinstance(value, str) and bool(value.strip())


def _texts(value: Any) -> bool:
    return isinstance(value, list) and all(isinstance(one, str) for one in value)


def _bytes(value: Any) -> bool:
    return isinstance(value, int) and not isinstance(value, bool) and value > 0


TEXTS = 'a list of texts, such as ["-O2"]'
KEYS: dict[str, _Key] = {
    "title": _Key("a text", _text, needed=True),
    "language": _Key('"c" or "python"', lambda value: value in ("c", "python")),
    "complex": _Key("true or false", lambda value: isinstance(value, bool)),
    "compiler": _Key("the name of a program", _text),
    "flags": _Key(TEXTS, _texts),
    "link": _Key(TEXTS, _texts),
    "measure": _Key(TEXTS, _texts),
    "emulator": _Key(
        'a list of texts, a program and its arguments with "{program}" among them',
        lambda value: _texts(value) and bool(value) and "{program}" in value[1:],
        needed=True,
    ),
    "endian": _Key('"little" or "big"', lambda value: value in ("little", "big")),
    "flash": _Key("a number of bytes", _bytes),
    "ram": _Key("a number of bytes", _bytes),
    "start": _Key("C source text", _text),
    "npm": _Key("the name of a package", _text),
    "packages": _Key(TEXTS, _texts),
    "floats": _Key(
        f"a table of {listing(FLOATS)}, each {listing(ARITHMETIC)}",
        lambda value: (
            isinstance(value, dict)
            and set(value) == set(FLOATS)
            and all(one in ARITHMETIC for one in value.values())
        ),
        needed=True,
    ),
}


def _problems(document: Mapping[str, Any]) -> Iterator[tuple[str, str]]:
    for name, value in document.items():
        if name not in KEYS:
            yield name, f"unknown key{nearest(name, KEYS)} (allowed: {', '.join(KEYS)})"
        elif not KEYS[name].accepts(value):
            yield name, f"found {shown(value)}, allowed is {KEYS[name].allowed}"
    for name, key in KEYS.items():
        if key.needed and name not in document:
            yield name, f"missing; needed is {key.allowed}"
    if document.get("language", "c") == "c" and "compiler" not in document:
        yield "compiler", f"missing; a board for C needs {KEYS['compiler'].allowed}"


def parse_board(text: str, name: str, file: str) -> Board:
    """The board that a TOML text describes; ``file`` is named in messages."""
    try:
        document = tomllib.loads(text.removeprefix("\ufeff"))
    except (ValueError, RecursionError) as error:
        raise SpecError([Problem(f"not TOML: {error}", file=file)]) from error
    problems = [Problem(told, key=key, file=file) for key, told in _problems(document)]
    if problems:
        raise SpecError(problems)
    given: dict[str, Any] = {
        key: tuple(value) if isinstance(value, list) else value for key, value in document.items()
    }
    return Board(name=name, **given)


def read_board(path: str | Path) -> Board:
    """A board from a file; raises :class:`SpecError` with everything that is wrong in it."""
    path = Path(path)
    try:
        text = contents(path).decode("utf-8")
    except UnicodeDecodeError as error:
        raise InputError(f"{path}: not UTF-8 (byte {error.start}); TOML files are") from error
    return parse_board(text, path.stem, path.name)


@cache
def known_boards() -> Mapping[str, Board]:
    """The boards that Demilune has, by name."""
    return {path.stem: read_board(path) for path in sorted(FOLDER.glob("*.toml"))}


def find_board(name: str) -> Board:
    """The board of this name, or of the file of this name if it ends in ``.toml``."""
    if name.endswith(".toml"):
        return read_board(name)
    if name not in known_boards():
        raise InputError(
            f'unknown board "{name}"{nearest(name, known_boards())} '
            f"(known: {', '.join(known_boards())}, or a file that ends in .toml)"
        )
    return known_boards()[name]


# --- what does not go together -----------------------------------------------------------------


def fused_types(plan: Plan) -> set[str]:
    """The real types in which the routine has fused multiply-adds."""
    bodies = (plan.routine.body, *(one.body for one in plan.routine.functions))
    found = (value for body in bodies for one in walk(body) for value in values(one))
    return {
        real_of(leaf.type) for value in found for leaf in leaves(value) if isinstance(leaf, Fma)
    }


def refusals(board: Board, plan: Plan) -> Iterator[str]:
    """Why a routine cannot go to a board; nothing if it can."""
    spec = plan.spec
    if spec.language != board.language:
        yield f"{spec.name} is written in {spec.language}; {board.name} runs {board.language}"
        return
    for real in sorted(fused_types(plan)):
        has = board.floats.get(real, "soft")
        if has != "fused":
            what = "computes it in software" if has == "soft" else "has no such instruction"
            yield (
                f"fma = true in {real}: {board.name} {what}, and a fused multiply-add of a library "
                "need not round once; use fma = false, which gives the same bits everywhere"
            )
    if spec.arithmetic.type.complex and not board.complex:
        yield (
            f"{spec.arithmetic.dtype}: complex numbers of {board.name} lose the sign of an "
            "imaginary part that is zero; use a real dtype"
        )
    if spec.target.isa != PORTABLE:
        yield f'isa = "{spec.target.isa}": {board.name} runs portable sources; use isa = "portable"'
    if board.ram is not None and spec.layout.n != RUNTIME:
        needed = sum(memory_of(plan, int(spec.layout.n)).values())
        if needed > board.ram:
            yield f"its arrays take {needed} bytes, and {board.name} has {board.ram} bytes of RAM"


def memory_of(plan: Plan, n: int) -> dict[str, int]:
    """Bytes of each array of a call with strides of 1, for ``n`` rows."""
    sizes = {**plan.spec.layout.environment(plan.spec.layout.sample(n)), "incx": 1, "incy": 1}
    return {
        name: extent_of(one, sizes) * one.parts * REAL_SIZE[one.type]
        for name, one in plan.arrays.items()
    }
