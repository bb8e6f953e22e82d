"""The types of elements: real and complex, their sizes, and lanes of them side by side."""

from __future__ import annotations

from dataclasses import dataclass


@dataclass(frozen=True)
class RealType:
    """A real type: its size in bytes and its precision."""

    name: str
    size: int
    digits: int
    """Bits of the significand (floating point) or of the magnitude (integers)."""
    wider: str | None
    """The real type that holds every product of two elements, if C has one everywhere."""

    @property
    def integer(self) -> bool:
        return self.name.startswith("int")


REALS: dict[str, RealType] = {
    t.name: t
    for t in (
        RealType("float32", 4, 24, "float64"),
        RealType("float64", 8, 53, None),
        RealType("int16", 2, 15, "int32"),
        RealType("int32", 4, 31, "int64"),
        RealType("int64", 8, 63, None),
    )
}
REAL_SIZE = {name: one.size for name, one in REALS.items()}
REAL_DIGITS = {name: one.digits for name, one in REALS.items()}


@dataclass(frozen=True)
class NumberType:
    """An element type: its real type, and whether it is complex."""

    name: str
    real: str
    complex: bool = False

    @property
    def size(self) -> int:
        """Bytes of an element."""
        return REAL_SIZE[self.real] * self.parts

    @property
    def wider(self) -> str | None:
        return REALS[self.real].wider

    @property
    def parts(self) -> int:
        return 2 if self.complex else 1

    @property
    def integer(self) -> bool:
        return REALS[self.real].integer


DTYPES: dict[str, NumberType] = {
    t.name: t
    for t in (
        NumberType("float32", "float32"),
        NumberType("float64", "float64"),
        NumberType("complex64", "float32", True),
        NumberType("complex128", "float64", True),
        NumberType("int16", "int16"),
        NumberType("int32", "int32"),
    )
}


def with_lanes(real: str, lanes: int) -> str:
    """The type of ``lanes`` numbers side by side; one lane is the number itself."""
    return real if lanes == 1 else f"{real}x{lanes}"


def real_of(type: str) -> str:
    """The real type of one lane."""
    return type.partition("x")[0]


def lanes_of(type: str) -> int:
    """The number of lanes of a type."""
    return int(type.partition("x")[2] or 1)


def same_lanes(real: str, type: str) -> str:
    """The type of ``real`` numbers in as many lanes as ``type`` has."""
    return with_lanes(real, lanes_of(type))
