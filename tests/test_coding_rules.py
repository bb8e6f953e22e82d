"""Coding rules: checkers name nothing in emitted kernels for which there is no reason."""

from __future__ import annotations

import re

import pytest
from tools import need

from demilune.bench.recorded import record
from demilune.boards.selftest import selftest
from demilune.bundle import coding
from demilune.bundle.coding import CHECKERS, Findings, check, named, page
from demilune.bundle.reasons import REASONS
from demilune.pipeline import units_of
from demilune.spec import make_spec

BASE = {"environment": "freestanding", "n": "runtime", "dtype": "float32", "language": "c"}
LAYOUTS = ("full", "packed", "band", "rfp", "tiled", "skyline")
SCALARS = {
    "matvec": {"alpha": "runtime", "beta": "runtime"},
    "rank1": {"alpha": "runtime"},
    "quadform": {},
}
SAMPLE = {
    **{
        f"{operation}_{layout}": {"operation": operation, "layout": layout, **scalars}
        for operation, scalars in SCALARS.items()
        for layout in LAYOUTS
    },
    "fixed_n": {"layout": "packed", "n": 12},
    "two_at_a_time": {"layout": "packed", "n": 12, "block": 2},
    "written_out": {"layout": "packed", "n": 5, "unroll": "all"},
    "dot2": {"layout": "packed", "accumulator": "compensated"},
    "wide_sums": {"layout": "full", "accumulator": "wide"},
    "hermitian": {"layout": "packed", "dtype": "complex64", "structure": "hermitian"},
    "counts": {"layout": "packed", "dtype": "int16"},
    "strided": {"layout": "full", "incx": "runtime", "incy": "runtime"},
    "side_by_side": {"layout": "packed", "lanes": 4},
    "in_band_rows": {"layout": "band", "lanes": 4, "loop": "dot"},
}  # fmt: skip
UNAVOIDABLE = {
    "cppcheck": {
        "misra-c2012-2.3", "misra-c2012-5.9", "misra-c2012-12.1", "misra-c2012-12.3",
        "misra-c2012-15.5", "misra-c2012-18.4",
    },
    "clang-tidy": {"bugprone-easily-swappable-parameters"},
    "gcc": set(),
    "clang": set(),
}  # fmt: skip
"""What kernels may be named for, by checker: a rule that is new here is to be thought about."""


@pytest.fixture(scope="module")
def kernels():
    """Units of a sample of kernels: each operation and layout, and each kind of sum."""
    files = {name: name.split("_")[0] if name[:3] in ("mat", "ran", "qua") else "others"
             for name in SAMPLE}  # fmt: skip
    specs = [
        make_spec(name, **{**BASE, **keys, "file": files[name]}) for name, keys in SAMPLE.items()
    ]
    return units_of(specs)


@pytest.mark.parametrize("checker", CHECKERS, ids=[one.name for one in CHECKERS])
def test_kernels_are_clean_but_for_what_has_a_reason(checker, kernels, monkeypatch):
    need(checker.name)
    monkeypatch.setattr(coding, "CHECKERS", (checker,))
    monkeypatch.setattr(coding, "_own", lambda unit: [f"{unit.file}.c"])
    sources = {name: text for unit in kernels for name, text in unit.files.items()}
    (found,) = check(sources, kernels)
    assert re.search(r"\d+\.\d+", found.version)
    assert found.failed == {}
    assert found.unexplained == []
    assert set(found.found) <= UNAVOIDABLE[checker.name]
    # Of the rules that MISRA C:2012 requires (from memory), none.
    assert {REASONS[rule].category for rule in found.found} <= {"", "advisory"}


@pytest.mark.parametrize("checker", CHECKERS, ids=[one.name for one in CHECKERS])
def test_self_tests_are_clean_but_for_what_has_a_reason(checker, monkeypatch):
    need(checker.name)
    monkeypatch.setattr(coding, "CHECKERS", (checker,))
    names = ("matvec_skyline", "hermitian", "counts")
    units = units_of([make_spec(name, **{**BASE, **SAMPLE[name]}) for name in names])
    sources = {}
    for unit in units:
        sources |= unit.files | selftest(record(unit.file, unit.plans, budget=2500), "c")
    (found,) = check(sources, units)
    assert found.failed == {}
    assert found.unexplained == []


BAD = """#include <stddef.h>
int bad(const int *a);
int bad(const int *a)
{
    int used;
    if (a == NULL)
        goto end;
    return used;
end:
    return *a;
}
"""
EXPECTED = {
    "cppcheck": "misra-c2012-15.6",
    "clang-tidy": None,
    "gcc": "-Wanalyzer-null-dereference",
    "clang": "core.NullDereference",
}


@pytest.mark.parametrize("checker", CHECKERS, ids=[one.name for one in CHECKERS])
def test_a_bad_file_is_noticed(checker, monkeypatch):
    need(checker.name)
    monkeypatch.setattr(coding, "CHECKERS", (checker,))
    (unit,) = units_of([make_spec("bad", **{**BASE, "layout": "packed"})])
    text = BAD.replace("int used;", "int used; (void)sizeof(a + used);")
    if checker.name == "clang-tidy":
        text = "#define _Reserved 1\n" + BAD
    (found,) = check({"bad.c": text, "bad_selftest.c": "int unused_;\n"}, [unit])
    wanted = EXPECTED[checker.name]
    rules = {rule for rule in found.found if rule.strip("-") not in REASONS}
    assert found.unexplained
    if wanted is not None:
        assert wanted in rules
    else:
        assert any(rule.startswith(("bugprone-", "cert-")) for rule in rules)
    told = page([found])
    assert "None yet; look at it." in told


def test_a_file_that_cannot_be_checked_is_told(monkeypatch):
    need("gcc")
    (checker,) = (one for one in CHECKERS if one.name == "gcc")
    monkeypatch.setattr(coding, "CHECKERS", (checker,))
    (unit,) = units_of([make_spec("bad", **{**BASE, "layout": "packed"})])
    (found,) = check({"bad.c": "#error no\n", "bad_selftest.c": "int unused_;\n"}, [unit])
    assert list(found.failed) == ["bad.c"]
    assert "Not checked: bad.c: bad.c:1:2: error: #error no" in page([found])


def test_a_missing_checker_is_told_with_what_brings_it():
    told = page([Findings(CHECKERS[0])])
    assert "cppcheck is not on this machine" in told
    assert "apt-get install --no-install-recommends cppcheck" in told


def test_lines_of_checkers_are_understood():
    assert named("a.c:12: misra-c2012-12.1: misra violation (use ...)") == [
        ("a.c", "misra-c2012-12.1")
    ]
    assert named("a.c:3:7: warning: one [bugprone-x,cert-dcl37-c]") == [
        ("a.c", "bugprone-x"), ("a.c", "cert-dcl37-c"),
    ]  # fmt: skip
    assert named("a.c:3:7: warning: leak [CWE-401] [-Wanalyzer-malloc-leak]") == [
        ("a.c", "-Wanalyzer-malloc-leak")
    ]
    assert named("a.c:3:7: note: here") == []
    assert named("3 warnings generated.") == []


def test_every_reason_is_a_sentence():
    for rule, reason in REASONS.items():
        assert reason.why.endswith("."), rule
        assert len(reason.why) > 40, rule
        assert (reason.category in ("advisory", "required")) == rule.startswith("misra"), rule
