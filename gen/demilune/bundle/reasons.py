"""Why rules of coding guidelines are deviated from: the one table of reasons.

The numbers are those that cppcheck prints for MISRA C:2012, and the names of clang-tidy's and
cppcheck's own checks. What a rule is about is told in our own words and, like its category, from
memory: the text of the guidelines decides.
"""

from __future__ import annotations

from dataclasses import dataclass


@dataclass(frozen=True)
class Reason:
    """What a rule is about, and why emitted files deviate from it."""

    about: str
    why: str
    category: str = ""
    """Of MISRA C:2012."""


ADVISORY, REQUIRED = "advisory", "required"

REASONS: dict[str, Reason] = {
    "misra-c2012-2.2": Reason(
        "operations that change nothing",
        "The first register of several lies 0 elements behind the first element; the 0 is written "
        "so that all registers read alike.",
        REQUIRED,
    ),
    "misra-c2012-2.3": Reason(
        "a type that is declared and not used",
        "The array type NAME_checks_TYPE has a negative size, and so refuses to be compiled, where "
        "a type has not the size that the contract states. C99 has no static assertion.",
        ADVISORY,
    ),
    "misra-c2012-5.6": Reason(
        "a typedef name that stands twice",
        "Files that use the same kind of lanes declare it each for itself, so that every file can "
        "be used alone. It never leaves its file.",
        REQUIRED,
    ),
    "misra-c2012-5.7": Reason(
        "a tag that stands twice",
        "As for typedef names: the structures of lanes belong to their files.",
        REQUIRED,
    ),
    "misra-c2012-5.8": Reason(
        "a name with external linkage that is used for something else, too",
        "A local of one file has the name of a routine of another. They never meet: no file "
        "includes both.",
        REQUIRED,
    ),
    "misra-c2012-5.9": Reason(
        "a name with internal linkage that stands in several files",
        "Static functions of the same purpose have the same name in every file, and locals of "
        "routines have the names of the contract (a, x, y). Files can be used alone.",
        ADVISORY,
    ),
    "misra-c2012-8.9": Reason(
        "an object at file scope that only one function uses",
        "The tables of recorded vectors stand together before the functions, where their size can "
        "be seen and a linker script can place them.",
        ADVISORY,
    ),
    "misra-c2012-10.4": Reason(
        "operands of different essential types",
        "A byte of a map is shifted by a number of the type size_t, and masked with 1; all values "
        "are from 0 to 255.",
        REQUIRED,
    ),
    "misra-c2012-11.5": Reason(
        "a pointer to void that becomes one to an object",
        "The self-test compares numbers bit by bit and copies their bytes, which are unsigned "
        "char: the one type by which every object may be read.",
        ADVISORY,
    ),
    "misra-c2012-12.1": Reason(
        "precedence that brackets do not show",
        "Sums of products (a * b + c) and index formulas are written as mathematics writes them. "
        "No other operators are mixed without brackets.",
        ADVISORY,
    ),
    "misra-c2012-12.3": Reason(
        "the comma operator",
        "There is none: the checker takes the comma between two variables that are declared "
        "together for it.",
        ADVISORY,
    ),
    "misra-c2012-13.3": Reason(
        "an increment beside another effect",
        "The self-test takes the next recorded word where it steps over it.",
        ADVISORY,
    ),
    "misra-c2012-14.4": Reason(
        "a controlling expression that is no comparison",
        "Functions of the self-test that answer yes or no give int, 1 or 0: C99's own bool needs a "
        "header that a freestanding file of routines does without.",
        REQUIRED,
    ),
    "misra-c2012-15.5": Reason(
        "more than one return",
        "A bad argument is refused at the top, before anything is read or written, and what has "
        "nothing to do ends early. The body is not wrapped into conditions for that.",
        ADVISORY,
    ),
    "misra-c2012-17.8": Reason(
        "a parameter that is changed",
        "The self-test steps a pointer to recorded words along.",
        ADVISORY,
    ),
    "misra-c2012-18.4": Reason(
        "addition to a pointer",
        "The functions that load and store neighbouring elements are given an array and an index, "
        "as instructions for that are; the index is that of the contract.",
        ADVISORY,
    ),
    "knownConditionTrueFalse": Reason(
        "a condition that is always the same",
        "Strips in parts are visited by one text for every part; for one part a comparison is "
        "decided when it is compiled.",
    ),
    "unreadVariable": Reason(
        "a value that is not used",
        "The self-test of integer routines keeps the variable that the one for floating-point "
        "numbers, whose NaN are compared apart, reads.",
    ),
    "variableScope": Reason(
        "a variable that could be declared further inside",
        "As above: the same text serves all types of numbers.",
    ),
    "bugprone-easily-swappable-parameters": Reason(
        "neighbouring parameters of one type",
        "The parameters and their order are those of the routine's contract, and follow the BLAS "
        "standard where that has such a routine; functions inside a file are called by it alone.",
    ),
}
