"""With which numbers: element types, accumulators, and whether multiply-adds are fused.

A number is a tuple of real values, one for real types and two (real and imaginary part) for
complex ones; the order of a complex product is fixed here and nowhere else. An accumulator
knows how a product is added to a running sum: plainly, in the next wider type, or with the
error of each step carried along (Dot2: Ogita, Rump, Oishi, "Accurate sum and dot product",
SIAM J. Sci. Comput. 26(6), 2005, algorithms 3.1, 3.2, 3.3 and 5.3).
"""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass
from typing import TYPE_CHECKING

from demilune.dtypes import DTYPES, REAL_DIGITS, REAL_SIZE, REALS, NumberType, real_of, same_lanes
from demilune.keys import key
from demilune.plan.tree import (
    Binary,
    Broadcast,
    Constant,
    Convert,
    Declare,
    Fma,
    Function,
    Local,
    Negate,
    Number,
    Value,
)

if TYPE_CHECKING:
    from demilune.plan.writer import Writer


LANES = (1, 2, 4, 8, 16, 32)

ACCUMULATORS = {
    "plain": "each sum is rounded to the element type",
    "wide": "sums are kept in the next wider type and rounded once",
    "compensated": "the error of each step is carried along and added at the end (Dot2)",
    "int32": "sums of integers are kept in 32 bits",
    "int64": "sums of integers are kept in 64 bits",
}


def binary(operator: str, left: Value, right: Value) -> Value:
    left, right = spread(left, right.type), spread(right, left.type)
    return Binary(operator, left, right, left.type)


def fused(left: Value, right: Value, addend: Value) -> Value:
    """``left * right + addend``, rounded once."""
    type = max(left.type, right.type, addend.type, key=len)
    left, right, addend = (spread(one, type) for one in (left, right, addend))
    return Fma(left, right, addend, type)


def spread(value: Value, type: str) -> Value:
    """``value`` in every lane of ``type``, where that has lanes and the value has none."""
    if value.type == type or real_of(type) == type:
        return value
    return Broadcast(value, type)


def _add(left: Value, right: Value) -> Value:
    if isinstance(right, Negate):  # x + -y is x - y, bit for bit
        return binary("-", left, right.operand)
    return binary("+", left, right)


def _negate(value: Value) -> Value:
    return value.operand if isinstance(value, Negate) else Negate(value, value.type)


def add(left: Number, right: Number) -> Number:
    """The sum; a left side that is known to be 0 is left out."""
    if all(isinstance(one, Constant) and one.value == 0 for one in left):
        return right
    return tuple(_add(p, q) for p, q in zip(left, right, strict=True))


def negate(number: Number) -> Number:
    return tuple(_negate(part) for part in number)


def conjugate(number: Number) -> Number:
    """The number with its imaginary part negated; a real number as it is."""
    if len(number) == 1:
        return number
    return (number[0], _negate(number[1]))


def convert(number: Number, real: str) -> Number:
    return tuple(_converted(part, real) for part in number)


def _converted(value: Value, real: str) -> Value:
    if real_of(value.type) == real:
        return value
    if isinstance(value, Constant) and REALS[value.type].wider == real:
        return Constant(value.value, real)  # exact, so that what is known stays known
    return Convert(value, same_lanes(real, value.type))


def real_terms(left: Number, right: Number, part: int) -> Iterator[tuple[str, Value, Value]]:
    """The signed real products that make up one part of ``left * right``, in order.

    The sign of a negated factor goes into that of the product, which changes no bit.
    """
    for sign, p, q in _terms(left, right, part):
        minus = (sign == "-") ^ isinstance(p, Negate) ^ isinstance(q, Negate)
        p = p.operand if isinstance(p, Negate) else p
        q = q.operand if isinstance(q, Negate) else q
        yield "-" if minus else "+", p, q


def _terms(left: Number, right: Number, part: int) -> Iterator[tuple[str, Value, Value]]:
    if len(left) == 1 or len(right) == 1:
        yield "+", left[min(part, len(left) - 1)], right[min(part, len(right) - 1)]
    elif part == 0:
        yield "+", left[0], right[0]
        yield "-", left[1], right[1]
    else:
        yield "+", left[0], right[1]
        yield "+", left[1], right[0]


def _signed(sign: str, value: Value) -> Value:
    return value if sign == "+" else _negate(value)


@dataclass(frozen=True)
class Arithmetic:
    """The arithmetic of a kernel."""

    dtype: str = key("float64", "type of the elements of A and x", words=tuple(DTYPES))
    accumulator: str = key("plain", "how sums are kept", words=tuple(ACCUMULATORS))
    lanes: int = key(
        1, "neighbouring elements of a strip side by side, each with a sum of its own",
        numbers=LANES,
    )  # fmt: skip
    fma: bool = key(False, "whether each multiply-add is fused (rounded once)", flag=True)

    @property
    def type(self) -> NumberType:
        """The type of the elements of A and x."""
        return DTYPES[self.dtype]

    @property
    def real(self) -> str:
        """The real type of the elements."""
        return self.type.real

    @property
    def sums(self) -> str:
        """The real type in which sums are kept."""
        if self.accumulator == "wide":
            return self.type.wider or self.real
        if self.accumulator.startswith("int"):
            return self.accumulator
        return self.real

    @property
    def result(self) -> str:
        """The real type of results: integers keep the accumulator's, which holds the sum."""
        return self.sums if self.type.integer else self.real

    @property
    def compensated(self) -> bool:
        return self.accumulator == "compensated"

    @property
    def in_place(self) -> bool:
        """Whether a sum can be kept in an element of the result itself."""
        return not self.compensated and self.sums == self.result

    @property
    def cells(self) -> int:
        """How many numbers one running sum needs."""
        return 2 if self.compensated else 1

    def problems(self) -> Iterator[tuple[str, str]]:
        """Pairs of a key and why its value cannot be."""
        if self.accumulator == "wide" and self.type.wider is None:
            yield (
                "accumulator",
                (
                    f'"wide" needs a type wider than {self.real}, which C99 does not promise on '
                    'every machine; use "compensated"'
                ),
            )
        if self.accumulator == "compensated" and self.type.integer:
            yield (
                "accumulator",
                (
                    '"compensated" carries rounding errors, and integer sums have none; use '
                    '"plain", "wide", "int32" or "int64"'
                ),
            )
        if self.accumulator.startswith("int"):
            if not self.type.integer:
                yield "accumulator", f'"{self.accumulator}" is for integers, not {self.dtype}'
            elif REAL_SIZE[self.accumulator] < REAL_SIZE[self.real]:
                yield "accumulator", f"{self.accumulator} is narrower than {self.dtype}"
        if self.lanes > 1 and self.type.integer:
            yield "lanes", "sums of integers are exact in every order; leave lanes at 1"
        elif self.lanes > 1 and self.accumulator != "plain":
            yield (
                "lanes",
                f'lanes keep plain sums; use accumulator = "plain", not "{self.accumulator}"',
            )
        if self.fma and self.type.integer:
            yield "fma", "integer multiply-adds are exact; leave fma at false"

    # --- products and sums ---------------------------------------------------------------

    def multiply(self, left: Number, right: Number) -> Number:
        """``left * right``; with ``fma`` the second product of each part is fused."""
        result = []
        for part in range(max(len(left), len(right))):
            total: Value | None = None
            for sign, p, q in real_terms(left, right, part):
                if total is None:
                    total = binary("*", _signed(sign, p), q)
                elif self.fma:
                    total = fused(_signed(sign, p), q, total)
                else:
                    total = binary(sign, total, binary("*", p, q))
            assert total is not None
            result.append(total)
        return tuple(result)

    def multiply_add(self, total: Number, left: Number, right: Number) -> Number:
        """``total + left * right``; one part of the result for each part of ``total``.

        A ``total`` that is known to be 0 is left out.
        """
        if all(isinstance(one, Constant) and one.value == 0 for one in total):
            return self.multiply(left, right)[: len(total)]
        if not self.fma:
            product = self.multiply(left, right)
            return add(total, product[: len(total)])
        result = []
        for part, start in enumerate(total):
            value: Value = start
            for sign, p, q in real_terms(left, right, part):
                value = fused(_signed(sign, p), q, value)
            result.append(value)
        return tuple(result)

    def constant(self, number: float | int, real: str) -> Value:
        return Constant(number, real)

    # --- running sums --------------------------------------------------------------------

    def zero(self, parts: int) -> Number:
        """A running sum of nothing: ``cells`` numbers, one behind the other."""
        nought = 0 if self.sums.startswith("int") else 0.0
        return (Constant(nought, self.sums),) * (parts * self.cells)

    def accumulate(self, w: Writer, total: Number, left: Number, right: Number) -> Number:
        """The running sum ``total`` after ``left * right`` is added to it.

        ``left`` and ``right`` are in the type of the sums. A compensated step is written to
        ``w`` and its result is made of new locals.
        """
        if not self.compensated:
            return self.multiply_add(total, left, right)
        parts = len(total) // 2
        sums, errors = list(total[:parts]), list(total[parts:])
        for part in range(parts):
            for sign, p, q in real_terms(left, right, part):
                product = w.call(self.two_product(), (_signed(sign, p), q))
                step = w.call(self.two_sum(), (sums[part], product[0]))
                sums[part] = step[0]
                errors[part] = binary("+", errors[part], binary("+", step[1], product[1]))
        return (*sums, *errors)

    def merge(self, w: Writer, total: Number, other: Number) -> Number:
        """The compensated sum ``total`` after the compensated sum ``other`` is added to it."""
        parts = len(total) // 2
        sums, errors = [], []
        for part in range(parts):
            step = w.call(self.two_sum(), (total[part], other[part]))
            sums.append(step[0])
            both = binary("+", step[1], other[parts + part])
            errors.append(binary("+", total[parts + part], both))
        return (*sums, *errors)

    def accumulate_sum(self, w: Writer, total: Number, left: Number, sums: Number) -> Number:
        """The running sum ``total`` after ``left`` times the value of the sum ``sums`` is added.

        Of a compensated sum the errors are carried over too: they are not rounded to the element
        type in between.
        """
        half = len(sums) // self.cells
        result = self.accumulate(w, total, left, sums[:half])
        if not self.compensated:
            return result
        parts = len(result) // 2
        errors = self.multiply_add(result[parts:], left, sums[half:])
        return (*result[:parts], *errors)

    def doubled(self, sums: Number) -> Number:
        """Twice a running sum, exactly."""
        return add(sums, sums)

    def total(self, sums: Number) -> Number:
        """The value of a running sum."""
        if not self.compensated:
            return sums
        half = len(sums) // 2
        return add(sums[:half], sums[half:])

    # --- helpers of the compensated sum -----------------------------------------------------

    def two_sum(self) -> Function:
        """The rounded sum and its error (Knuth): 6 operations."""
        a, b, s, z = (Local(name, self.sums) for name in ("a", "b", "s", "z"))
        error = binary("+", binary("-", a, binary("-", s, z)), binary("-", b, z))
        return Function(
            f"two_sum_{self.sums}",
            "s + e is exactly a + b, and s is a + b rounded (Knuth).",
            ("a", "b"),
            self.sums,
            (
                Declare("s", binary("+", a, b), False),
                Declare("z", binary("-", s, a), False),
                Declare("e", error, False),
            ),
            ("s", "e"),
        )

    def two_product(self) -> Function:
        """The rounded product and its error: one fused multiply-add, or Dekker's 17 operations."""
        a, b, p = (Local(name, self.sums) for name in ("a", "b", "p"))
        product = Declare("p", binary("*", a, b), False)
        meaning = "p + e is exactly a * b, and p is a * b rounded"
        if self.fma:
            fused = Fma(a, b, Negate(p, self.sums), self.sums)
            body = (product, Declare("e", fused, False))
            return Function(
                f"two_product_fma_{self.sums}",
                f"{meaning} (with a fused multiply-add).",
                ("a", "b"), self.sums, body, ("p", "e"),
            )  # fmt: skip
        half = (REAL_DIGITS[self.sums] + 1) // 2
        factor = Constant(float(2**half + 1), self.sums)  # Veltkamp: splits a significand

        def split(name: str, value: Local) -> tuple[Declare, ...]:
            scaled, high = Local(f"{name}_scaled", self.sums), Local(f"{name}_high", self.sums)
            rest = binary("-", scaled, binary("-", scaled, value))
            return (
                Declare(scaled.name, binary("*", factor, value), False),
                Declare(high.name, rest, False),
                Declare(f"{name}_low", binary("-", value, high), False),
            )

        ah, al, bh, bl = (Local(name, self.sums) for name in ("a_high", "a_low", "b_high", "b_low"))
        rest = binary("-", p, binary("*", ah, bh))
        rest = binary("-", rest, binary("*", al, bh))
        rest = binary("-", rest, binary("*", ah, bl))
        error = binary("-", binary("*", al, bl), rest)
        return Function(
            f"two_product_{self.sums}",
            f"{meaning} (Dekker, with Veltkamp's split).",
            ("a", "b"), self.sums,
            (product, *split("a", a), *split("b", b), Declare("e", error, False)),
            ("p", "e"),
        )  # fmt: skip

    # --- words ---------------------------------------------------------------------------

    @property
    def statement(self) -> tuple[str, ...]:
        """The arithmetic contract in sentences, without the order of the sums."""
        kind = "integer" if self.type.integer else "IEEE 754"
        lines = [
            f"Elements are {self.dtype}, sums are kept in {self.sums}; the arithmetic is {kind}."
        ]
        if self.type.complex:
            lines.append(
                "A complex product p*q has the real part pr*qr - pi*qi and the imaginary part "
                "pr*qi + pi*qr, in that order."
            )
        if self.compensated:
            lines.append(
                "Every product and every sum is split into its rounded value s and its error; "
                "the errors are summed in a second accumulator e, and a sum's value is s + e "
                "(Dot2: Ogita, Rump, Oishi, SIAM J. Sci. Comput. 26(6), 2005)."
            )
            if not self.fma:
                big = "2^115" if self.sums == "float32" else "2^996"
                lines.append(
                    f"Splitting overflows for factors of {big} and above: the result is then "
                    "not a number, though the exact one may be in range."
                )
        if self.fma:
            lines.append(
                "Each multiply-add is fused: the product is not rounded before it is added "
                "(for complex numbers the products of one part follow one another, real by "
                "real first)."
            )
        elif not self.type.integer:
            lines.append(
                "Each product is rounded before it is added: no fused multiply-add, no other "
                "contraction."
            )
        return tuple(lines)
