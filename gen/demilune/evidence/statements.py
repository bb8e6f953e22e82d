"""What each level of the bench checks, against what, and what it shares with the generator.

A mistake in something shared could be made twice and so go unseen by that level; what a level
does not share, it checks.
"""

from __future__ import annotations

from dataclasses import asdict, dataclass

PLAN = "the plan"
LAYOUT = "the layout's formula"


@dataclass(frozen=True)
class Statement:
    """What a level claims."""

    name: str
    checks: str
    against: str
    shares: tuple[str, ...]
    """What both the kernel and the check are made from; empty for nothing."""

    def record(self) -> dict[str, object]:
        """The statement as plain data."""
        return {**asdict(self), "shares": list(self.shares)}


STATEMENTS = (
    Statement(
        "exact",
        "Inputs for which every partial sum is representable, so that every order of summation "
        "has one result; compared bit for bit.",
        "numpy's product of the whole symmetric matrix, by the formula of the operation.",
        (LAYOUT,),
    ),
    Statement(
        "faithful",
        "Inputs of every magnitude, cancelling sums, signed zeros, subnormals, infinities and "
        "NaN; compared bit for bit, NaN as a class.",
        "what an evaluator foretells from the order of arithmetic in the plan, without the "
        "templates, the emitted source or the compiler.",
        (PLAN, LAYOUT),
    ),
    Statement(
        "bound",
        "The componentwise error of every result is at most the published bound.",
        "the same product in exact rational numbers; the bounds of Higham, Accuracy and "
        "Stability of Numerical Algorithms, 2nd ed., 2002, sections 3.1 and 3.6, and for "
        "compensated sums of Ogita, Rump and Oishi, 2005, proposition 5.5.",
        (LAYOUT,),
    ),
    Statement(
        "untouched",
        "Nothing that the contract does not name is read or written: the other half, padding, "
        "gaps between strides, and what lies before and after every array.",
        "signalling NaN and a bit pattern of our own in every unused place, every byte compared "
        "with what it was, and guard pages or watched accesses around and inside the arrays.",
        (PLAN, LAYOUT),
    ),
    Statement(
        "calling",
        "Empty and tiny matrices, every kind of alpha and beta, strides of both signs; bad "
        "arguments are refused with nothing written.",
        "what the evaluator foretells from the plan, and the rules of the arguments.",
        (PLAN, LAYOUT),
    ),
)

CALLED = (
    "In every level the routine is called through its own prototype, whose list of parameters "
    "comes from the plan."
)
