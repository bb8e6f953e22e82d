"""The nodes of a plan: a small language-free tree.

Values are real: a complex number is a pair of them, so that the order of its arithmetic is in
the tree and not left to a language. Every value has a type, one of ``float32``, ``float64``,
``int16``, ``int32`` and ``int64``, or so many lanes of one, such as ``float64x4``; both operands
of an operation have the type of its result, and only :class:`Convert` changes a real type.
"""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass, field, replace
from typing import TypeAlias

from demilune.index import Compare, Expr, expr

ONE = expr(1)
Active: TypeAlias = tuple[Expr, Expr] | None
"""Lanes from the first number to before the second; None is all of them."""

# --- values ------------------------------------------------------------------------------


@dataclass(frozen=True)
class Constant:
    """A number that the type holds exactly."""

    value: float | int
    type: str


@dataclass(frozen=True)
class Local:
    """A local variable or a scalar parameter."""

    name: str
    type: str


@dataclass(frozen=True)
class Load:
    """The element ``index`` of ``array``; of a complex array its real (0) or imaginary part (1).

    A type with lanes loads as many elements, ``stride`` apart. With ``active``, only the lanes
    from its first number to before its second are read; the others are 0.
    """

    array: str
    index: Expr
    type: str
    part: int | None = None
    stride: Expr = ONE
    active: Active = None
    dense: bool = False
    """Whether all elements between those of a stride belong to the matrix, and may be read."""

    @property
    def names(self) -> frozenset[str]:
        """The integers that the places depend on."""
        return _names(self.index, self.stride, *(self.active or ()))


@dataclass(frozen=True)
class Binary:
    """``left operator right``, rounded once to ``type``; the operator is ``+``, ``-`` or ``*``."""

    operator: str
    left: Value
    right: Value
    type: str


@dataclass(frozen=True)
class Negate:
    """The value with its sign changed: exact, also for zeros."""

    operand: Value
    type: str


@dataclass(frozen=True)
class Fma:
    """``left * right + addend`` with one rounding (IEEE 754 fusedMultiplyAdd)."""

    left: Value
    right: Value
    addend: Value
    type: str


@dataclass(frozen=True)
class Convert:
    """The value rounded to ``type`` (floating point), or held in ``type`` (integers)."""

    operand: Value
    type: str


@dataclass(frozen=True)
class Broadcast:
    """One number in every lane."""

    operand: Value
    type: str


@dataclass(frozen=True)
class Pack:
    """Numbers beside each other, one a lane; the lanes that are left are 0."""

    operands: tuple[Value, ...]
    type: str


@dataclass(frozen=True)
class Fold:
    """The sums over the lanes of the operands: one number, or one a lane and 0 in those left.

    Each is added up by halves: lane l and lane l + half, until one is left.
    """

    operands: tuple[Value, ...]
    type: str


@dataclass(frozen=True)
class Where:
    """The lanes of ``value`` that are active, and those of ``otherwise`` that are not."""

    active: tuple[Expr, Expr]
    value: Value
    otherwise: Value
    type: str

    @property
    def names(self) -> frozenset[str]:
        """The integers that tell which lanes are active."""
        return _names(*self.active)


Value: TypeAlias = (
    Constant | Local | Load | Binary | Negate | Fma | Convert | Broadcast | Pack | Fold | Where
)
Number: TypeAlias = tuple[Value, ...]
"""One value, or the real and the imaginary part."""


# --- conditions --------------------------------------------------------------------------


@dataclass(frozen=True)
class Equals:
    """Whether all of ``values`` (the parts of a scalar) equal the numbers beside them, or not."""

    values: Number
    numbers: tuple[float | int, ...]
    negated: bool = False


Condition: TypeAlias = Compare | Equals


# --- statements --------------------------------------------------------------------------


@dataclass(frozen=True)
class Comment:
    """A remark for the reader."""

    text: str


@dataclass(frozen=True)
class Integer:
    """Declares an integer that does not change."""

    name: str
    value: Expr


@dataclass(frozen=True)
class Declare:
    """Declares a local variable; ``changes`` tells whether it is assigned again."""

    name: str
    value: Value
    changes: bool

    @property
    def type(self) -> str:
        return self.value.type


@dataclass(frozen=True)
class Assign:
    """Gives a local variable a new value."""

    name: str
    value: Value


@dataclass(frozen=True)
class Store:
    """Writes an element; all parts of ``number`` are computed before the first is written.

    A type with lanes writes as many elements, ``stride`` apart, or the ``active`` ones.
    """

    array: str
    index: Expr
    number: Number
    type: str
    stride: Expr = ONE
    active: Active = None

    @property
    def names(self) -> frozenset[str]:
        """The integers that the places depend on."""
        return _names(self.index, self.stride, *(self.active or ()))


@dataclass(frozen=True)
class Call:
    """Calls a function of the plan; its results become new locals named ``targets``."""

    function: str
    arguments: tuple[Value, ...]
    targets: tuple[str, ...]
    type: str


@dataclass(frozen=True)
class For:
    """Runs ``body`` for ``variable`` from ``low`` to ``high`` - 1 by ``step``, or backward.

    Backward means the same values from the last to the first; then ``high - low`` is a
    multiple of ``step``.
    """

    variable: str
    low: Expr
    high: Expr
    body: tuple[Statement, ...]
    step: int = 1
    backward: bool = False
    parallel: bool = False
    """Whether the passes may run at the same time: none uses what another writes."""

    @property
    def first(self) -> Expr:
        return self.high - self.step if self.backward else self.low


@dataclass(frozen=True)
class If:
    """Runs ``then`` where ``condition`` holds, else ``otherwise``."""

    condition: Condition
    then: tuple[Statement, ...]
    otherwise: tuple[Statement, ...] = ()


@dataclass(frozen=True)
class Reject:
    """Refuses an argument: nothing has been written when this runs."""

    condition: Condition
    argument: str
    rule: str


@dataclass(frozen=True)
class Finish:
    """Ends the routine: all is done."""


Statement: TypeAlias = (
    Comment | Integer | Declare | Assign | Store | Call | For | If | Reject | Finish
)


# --- parameters, functions and the whole ----------------------------------------------------


@dataclass(frozen=True)
class Parameter:
    """A parameter of the routine.

    ``kind`` is ``size`` (an integer), ``scalar`` (a number), ``array`` (numbers) or
    ``places`` (integers that are storage indices). ``extent`` counts the elements that the
    routine may touch, ``use`` is ``in``, ``out``, ``inout`` or ``scratch``.
    """

    name: str
    kind: str
    meaning: str
    type: str = "size"
    complex: bool = False
    extent: Expr | None = None
    use: str = "in"

    @property
    def parts(self) -> int:
        return 2 if self.complex else 1


@dataclass(frozen=True)
class Function:
    """A helper made of locals and arithmetic only; ``results`` are names it declares."""

    name: str
    meaning: str
    arguments: tuple[str, ...]
    type: str
    body: tuple[Statement, ...]
    results: tuple[str, ...]


@dataclass(frozen=True)
class Routine:
    """What is to be written in a language: a name, parameters and statements."""

    name: str
    parameters: tuple[Parameter, ...]
    body: tuple[Statement, ...]
    functions: tuple[Function, ...] = field(default=())

    def renamed(self, name: str) -> Routine:
        return replace(self, name=name)


def _names(*integers: Expr) -> frozenset[str]:
    return frozenset().union(*(one.names for one in integers))


def nested(statement: Statement) -> tuple[tuple[Statement, ...], ...]:
    """The blocks of statements directly inside ``statement``."""
    if isinstance(statement, For):
        return (statement.body,)
    if isinstance(statement, If):
        return (statement.then, statement.otherwise)
    return ()


def walk(body: tuple[Statement, ...]) -> Iterator[Statement]:
    """All statements in order of text, outer ones before those inside them."""
    for statement in body:
        yield statement
        for block in nested(statement):
            yield from walk(block)


def uses_fma(routine: Routine) -> bool:
    """Whether the routine, or a function of it, has a fused multiply-add."""
    bodies = (routine.body, *(one.body for one in routine.functions))
    found = (value for body in bodies for one in walk(body) for value in values(one))
    return any(isinstance(leaf, Fma) for value in found for leaf in leaves(value))


def operands(value: Value) -> tuple[Value, ...]:
    """The values that ``value`` is made of."""
    if isinstance(value, Binary):
        return (value.left, value.right)
    if isinstance(value, Fma):
        return (value.left, value.right, value.addend)
    if isinstance(value, Negate | Convert | Broadcast):
        return (value.operand,)
    if isinstance(value, Pack | Fold):
        return value.operands
    if isinstance(value, Where):
        return (value.value, value.otherwise)
    return ()


def values(statement: Statement) -> tuple[Value, ...]:
    """The values that stand directly in ``statement``."""
    if isinstance(statement, Declare | Assign):
        return (statement.value,)
    if isinstance(statement, Store):
        return statement.number
    if isinstance(statement, Call):
        return statement.arguments
    if isinstance(statement, If | Reject) and isinstance(statement.condition, Equals):
        return statement.condition.values
    return ()


def leaves(value: Value) -> Iterator[Value]:
    """``value`` and everything inside it."""
    yield value
    for operand in operands(value):
        yield from leaves(operand)
