"""Sections and symbols of ELF files, 32 and 64 bits, of both byte orders.

After the generic ABI, System V Application Binary Interface, chapter 4 (object files).
"""

from __future__ import annotations

import struct
from collections.abc import Iterator
from dataclasses import dataclass
from pathlib import Path
from typing import Any

from demilune.errors import CheckError

WRITE, ALLOCATED, EXECUTABLE = 1, 2, 4
SYMBOL_TABLE, NO_BITS = 2, 8
RELOCATIONS = (4, 9)
FUNCTION = 2
ARM = 40
UNWINDING = (".eh_frame", ".ARM.ex", ".gcc_except", ".note", ".comment")
"""Sections that tools read and no routine needs."""


@dataclass(frozen=True)
class Section:
    """A section: its kind, flags and size."""

    name: str
    kind: int
    flags: int
    size: int

    @property
    def code(self) -> bool:
        return self.flags & (ALLOCATED | EXECUTABLE) == ALLOCATED | EXECUTABLE

    @property
    def data(self) -> bool:
        """Whether it takes RAM: variables."""
        return self.flags & (ALLOCATED | WRITE) == ALLOCATED | WRITE

    @property
    def constants(self) -> bool:
        return (
            self.flags & (ALLOCATED | WRITE | EXECUTABLE) == ALLOCATED
            and self.kind != NO_BITS
            and not self.name.startswith(UNWINDING)
        )


@dataclass(frozen=True)
class Symbol:
    """A function, object or other place with a name."""

    name: str
    address: int
    size: int
    function: bool
    defined: bool


@dataclass(frozen=True)
class Elf:
    """An object file or a program."""

    big_endian: bool
    sections: tuple[Section, ...]
    symbols: tuple[Symbol, ...]
    wanted: frozenset[str]
    """What other files must bring: undefined, and named where an address is to be put in."""

    @property
    def functions(self) -> dict[str, Symbol]:
        return {one.name: one for one in self.symbols if one.function and one.defined}

    def bytes(self, kind: str) -> int:
        """The bytes of the sections of a kind: ``code``, ``constants`` or ``data``."""
        return sum(one.size for one in self.sections if getattr(one, kind))


def read_elf(path: Path) -> Elf:
    """Reads a file; raises :class:`CheckError` if it is no ELF file."""
    data = path.read_bytes()
    try:
        return _read(data)
    except (struct.error, IndexError, ValueError) as error:
        raise CheckError(f"{path.name} is no ELF file: {error}") from error


def _read(data: bytes) -> Elf:
    if data[:4] != b"\x7fELF":
        raise ValueError("its first bytes are others")
    wide, big = data[4] == 2, data[5] == 2
    order = ">" if big else "<"
    machine = struct.unpack_from(order + "H", data, 18)[0]
    head = struct.unpack_from(order + ("3Q" if wide else "3I"), data, 24)
    size, count, names_at = struct.unpack_from(order + "3H", data, 58 if wide else 46)
    shape = order + ("IIQQQQIIQQ" if wide else "10I")
    raw = [struct.unpack_from(shape, data, head[2] + i * size) for i in range(count)]
    texts = raw[names_at]
    sections = tuple(Section(_text(data, texts[4] + one[0]), one[1], one[2], one[5]) for one in raw)
    symbols: list[Symbol] = []
    wanted: set[str] = set()
    for one in raw:
        if one[1] == SYMBOL_TABLE:
            names = raw[one[6]][4]
            found = [
                _symbol(data, at, order, wide, names, machine == ARM)
                for at in range(one[4], one[4] + one[5], one[9])
            ]
            symbols += found
            wanted |= {found[number].name for number in _relocated(data, raw, order, wide)}
    wanted &= {one.name for one in symbols if not one.defined and one.name}
    named = tuple(one for one in symbols if one.name)
    return Elf(big, sections, named, frozenset(wanted))


def _relocated(data: bytes, raw: list[tuple[Any, ...]], order: str, wide: bool) -> Iterator[int]:
    """The numbers of the symbols whose addresses are to be put in."""
    for one in raw:
        if one[1] in RELOCATIONS:
            for at in range(one[4], one[4] + one[5], one[9]):
                info = struct.unpack_from(order + ("8xQ" if wide else "4xI"), data, at)[0]
                yield info >> (32 if wide else 8)


def _symbol(data: bytes, at: int, order: str, wide: bool, names: int, arm: bool) -> Symbol:
    if wide:
        name, info, _, place, value, size = struct.unpack_from(order + "IBBHQQ", data, at)
    else:
        name, value, size, info, _, place = struct.unpack_from(order + "IIIBBH", data, at)
    function = info & 15 == FUNCTION
    if function and arm:
        value &= ~1  # the lowest bit says that it is Thumb code
    return Symbol(_text(data, names + name), value, size, function, place != 0)


def _text(data: bytes, at: int) -> str:
    return data[at : data.index(b"\0", at)].decode("utf-8", "replace")
