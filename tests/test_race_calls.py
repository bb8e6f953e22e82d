"""Races: the libraries that are found, calls from C, sizes and counts.

Right results are those of scipy.linalg.blas, which calls the BLAS standard's routines (Lawson and
others, ACM TOMS 5(3), 1979; Dongarra and others, ACM TOMS 14(1), 1988) through checks of its own.
"""

from __future__ import annotations

import ctypes
import importlib.util
import re
import sys

import numpy as np
import pytest
from scipy.linalg import blas
from tools import need

from demilune import InputError, make_plan, make_spec, render
from demilune.race import libraries, library
from demilune.race.contestants import (
    kernel_contestant,
    library_contestant,
    peak_contestant,
    sum_contestant,
    whole_contestant,
)
from demilune.race.driver import Driver
from demilune.race.entrants import entrants
from demilune.race.peers import routine_for
from demilune.race.values import Memory, sizes_at, stored, useful, values_for
from demilune.toolchain.build import executable_of

OPEN = {"n": "runtime", "language": "c"}
TABLES = [
    {"layout": layout, "triangle": triangle, "dtype": dtype, "alpha": "runtime", **more}
    for layout in ("full", "packed", "band")
    for triangle in ("upper", "lower")
    for dtype, more in (
        ("float32", {"beta": "runtime"}), ("float64", {"incx": -2, "incy": 3}),
        ("complex64", {"structure": "hermitian"}), ("complex128", {"structure": "hermitian"}),
    )
] + [
    {"operation": "rank1", "layout": layout, "triangle": triangle, "dtype": dtype, "alpha": 2, **h}
    for layout in ("full", "packed")
    for triangle in ("upper", "lower")
    for dtype, h in (
        ("float32", {}), ("float64", {"incx": 2}), ("complex128", {"structure": "hermitian"}),
    )
]  # fmt: skip


@pytest.fixture(autouse=True)
def _compiler():
    need("gcc")


def scipys():
    """scipy's own BLAS, which every wheel of scipy has beside it."""
    found = [one for one in libraries() if one.name == "scipy's"]
    if not found:
        pytest.skip("this scipy is no wheel with a BLAS of its own")
    return found[0]


def at(table, n, name="gauges", **shape):
    """A compiled kernel with values at a size: specification, library's path, values."""
    spec = make_spec(name, **{**OPEN, **table})
    [entrant], _ = entrants([spec])
    sizes = sizes_at(spec, n, shape)
    memory = Memory()
    memory.reserve_for(entrant.plan, sizes)
    return entrant, sizes, values_for(entrant.plan, sizes, memory)


# --- libraries --------------------------------------------------------------------------------


def test_the_libraries_of_this_python_are_found_through_their_symbols():
    found = {one.name: one for one in libraries()}
    assert found, "scipy and numpy come with a BLAS"
    for one in found.values():
        assert one.address("dsymv"), one
        assert one.address("dsbmv") != one.address("dspmv")
        assert one.address("dnothing") is None
        assert one.facts["core"] != ""
        assert one.facts["integer bits"] == one.bits
    names = {re.sub(r" \(\d+\)$", "", name) for name in found}
    for package in ("scipy_openblas64", "scipy_openblas32"):
        assert (package in names) == (importlib.util.find_spec(package) is not None)
    # The names of OpenBLAS's builds, https://github.com/MacPython/openblas-libs (from memory):
    # 64-bit integers have symbols that end with 64_, all of scipy's begin with scipy_.
    if "scipy_openblas64" in found:
        assert found["scipy_openblas64"].symbol("dsymv") == "scipy_dsymv_64_"
        assert found["scipy_openblas64"].bits == 64
    assert scipys().symbol("dsymv") in ("scipy_dsymv_", "dsymv_")
    assert scipys().bits == 32


def test_a_library_by_its_path_comes_once_and_first(tmp_path):
    one = scipys()
    link = tmp_path / "barrier_blas.so"
    link.symlink_to(one.path)
    found = libraries(link)
    assert found[0].name == "barrier_blas.so"
    assert [other.path for other in found].count(one.path) == 1
    assert len(found) == len(libraries())
    copies = [tmp_path / folder / "blas.so" for folder in ("east", "west")]
    for copy in copies:
        copy.parent.mkdir()
        copy.write_bytes(link.read_bytes())
    assert [other.name for other in libraries(*copies)[:2]] == ["blas.so", "blas.so (2)"]


def test_what_is_no_library(tmp_path):
    with pytest.raises(InputError, match="there is no such library"):
        library(tmp_path / "nothing.so")
    text = tmp_path / "text.so"
    text.write_text("water")
    with pytest.raises(InputError, match="no library of this machine with the routine dsymv"):
        library(text)
    with pytest.raises(InputError, match="no library of this machine"):
        library(sys.modules["_cffi_backend"].__file__)


@pytest.mark.parametrize(
    ("table", "routine"),
    [
        ({}, "dsymv"), ({"dtype": "float32"}, "ssymv"), ({"layout": "packed"}, "dspmv"),
        ({"layout": "band"}, "dsbmv"), ({"operation": "rank1"}, "dsyr"),
        ({"operation": "rank1", "layout": "packed"}, "dspr"),
        ({"dtype": "complex64", "structure": "hermitian"}, "chemv"),
        ({"dtype": "complex128", "structure": "hermitian", "layout": "packed"}, "zhpmv"),
        ({"dtype": "complex128", "structure": "hermitian", "layout": "band"}, "zhbmv"),
        ({"dtype": "complex64", "structure": "hermitian", "operation": "rank1"}, "cher"),
        ({"dtype": "complex64"}, None), ({"operation": "quadform"}, None),
        ({"layout": "rfp"}, None), ({"dtype": "int32"}, None), ({"layout": "skyline"}, None),
        ({"operation": "rank1", "layout": "band"}, None),
        ({"dtype": "complex64", "structure": "hermitian", "order": "row-major"}, None),
    ],
)  # fmt: skip
def test_the_routine_of_the_standard(table, routine):
    assert routine_for(make_spec("gauges", **{**OPEN, **table})) == routine


# --- calls ------------------------------------------------------------------------------------


@pytest.mark.parametrize("table", TABLES, ids=lambda t: "-".join(map(str, t.values())))
def test_the_driver_calls_kernels_and_libraries_as_others_do(table):
    entrant, sizes, values = at(table, 13)
    spec, result = entrant.plan.spec, entrant.plan.spec.operation.result
    values |= {"alpha": values["alpha"] * 1.5, "beta": 0.25} if table["alpha"] == "runtime" else {}
    values["beta"] = 0.25 if table.get("beta") == "runtime" else 0.0
    before = values[result].copy()
    contestants = [kernel_contestant(entrant.plan, entrant.path, values)]
    contestants += [library_contestant(one, spec, values) for one in libraries()]
    driver = Driver(contestants)
    found = [driver.results(place) for place in range(len(contestants))]
    assert np.array_equal(values[result], before)
    # the same through cffi: bit for bit
    executable_of(entrant.plan, render([entrant.plan], spec.file, "c"))(values)
    assert values[result].tobytes() == found[0].tobytes()
    values[result][:] = before
    right = expected(spec, sizes, values)
    tolerance = 40 * np.finfo(spec.arithmetic.dtype).eps * np.abs(right).max()
    for one in found:
        assert np.abs(one - right).max() <= tolerance
    assert np.abs(before - right).max() > 10 * tolerance, "a call that does nothing is noticed"


def expected(spec, sizes, values):
    """What scipy.linalg.blas makes of the same arrays, as one array of the result's length."""
    layout, n = spec.layout, sizes["n"]
    x, lower = values["x"], int(layout.triangle == "lower")
    steps = {"incx": sizes["incx"]}
    if spec.operation.name == "matvec":
        steps["incy"] = sizes["incy"]
        steps |= {"y": values["y"].copy(), "beta": values["beta"]}
    call = getattr(blas, routine_for(spec))
    alpha, a = values["alpha"], values["a"]
    if layout.name == "packed":
        rest = [x] if spec.operation.name == "matvec" else []
        if not rest:
            return call(n, alpha, x, a[: n * (n + 1) // 2], lower=lower, **steps)
        return call(n, alpha, a[: n * (n + 1) // 2], *rest, lower=lower, **steps)
    square = np.zeros((sizes["ld"], n), dtype=a.dtype, order="F")
    square.reshape(-1, order="A")[: len(a)] = a
    if spec.operation.name == "rank1":
        after = call(alpha, x, n=n, a=square, lower=lower, **steps)
        return after.reshape(-1, order="F")[: len(a)]
    width = [sizes["kd"]] if layout.name == "band" else []
    return call(*width, alpha, square, x, lower=lower, **steps)


@pytest.mark.parametrize("real", ["float32", "float64"])
@pytest.mark.parametrize("count", [1, 7, 16, 63, 128, 1000])
def test_the_limits_sum_every_number_and_multiply_and_add(real, count):
    array = np.ones(count + 8, dtype=real)
    one = sum_contestant(real, array, count)
    peak, operations = peak_contestant(real)
    # The limits return a number, which a call from here shows.
    form = ctypes.CFUNCTYPE(ctypes.c_double, ctypes.c_void_p, ctypes.c_int64)
    assert form(one.address)(array.ctypes.data, count) == count
    [factor, _] = numbers = peak.arguments[0][1]
    # s := s*p + q goes to q/(1 - p) in each lane of each chain.
    lanes = operations / 2 / peak.arguments[1][1]
    limit = float(numbers[1] / (1 - factor)) * lanes
    assert form(peak.address)(numbers.ctypes.data, 1000) == pytest.approx(limit)


def test_the_limits_leave_subnormal_numbers_alone():
    peak_contestant("float64")
    tiny = np.array([2.0**-1060])
    assert (tiny * 0.5 + tiny).tobytes() == np.array([1.5 * 2.0**-1060]).tobytes() != bytes(8)


def test_the_product_with_the_whole_matrix():
    entrant, sizes, values = at({}, 9)
    matrix = np.arange(81.0).reshape(9, 9, order="F")
    values["whole"] = matrix.reshape(-1, order="F").copy()
    for one in libraries():
        driver = Driver([whole_contestant(one, entrant.plan.spec, values)])
        assert np.allclose(driver.results(0), matrix @ values["x"], rtol=1e-12)
    assert sizes["ld"] == 9


def test_slices_and_rounds_count_their_calls():
    """A routine that counts what is called: every slice has one call before it, and no other."""
    calls = []
    form = ctypes.CFUNCTYPE(ctypes.c_double, ctypes.c_void_p, ctypes.c_int64)
    counting = form(lambda pointer, size: calls.append(size) or 0.0)
    contestants = [sum_contestant("float64", np.ones(9), size) for size in (3, 8)]
    for one in contestants:
        one.address = ctypes.cast(counting, ctypes.c_void_p).value
    prepared = []
    contestants[1].prepare = lambda: prepared.append(len(calls))
    driver = Driver(contestants)
    assert driver.seconds(1, 4, before=2) > 0
    assert calls == [8] * 6
    assert prepared == [0]
    calls.clear()
    seconds, disturbed = driver.interleaved([2, 5], 3)
    assert seconds.shape == (3, 2)
    assert (seconds > 0).all()
    assert len(disturbed) == 2
    runs = re.findall("3+|8+", "".join(map(str, calls)))
    assert [run[0] for run in runs] == ["3", "8"] * 3
    assert all(len(run) % (3 if run[0] == "3" else 6) == 0 for run in runs), runs
    assert driver.calls(0, 1e-9) == 5


# --- sizes and counts -------------------------------------------------------------------------


@pytest.mark.parametrize("layout", ["full", "packed", "band", "rfp", "tiled", "skyline"])
def test_stored_elements_and_needed_operations(layout):
    n, kd = 11, 3
    plan = make_plan(make_spec("gauges", layout=layout, **OPEN))
    sizes = sizes_at(plan.spec, n, {"kd": kd})
    half = sum(high - low for _, low, high, _ in plan.spec.layout.strips(sizes))
    assert stored(plan, sizes) == half
    kept = [(i, j) for i in range(n) for j in range(n) if layout != "band" or abs(i - j) <= kd]
    assert useful(plan, sizes) == 2 * len(kept)


@pytest.mark.parametrize(
    ("table", "operations"),
    [
        ({"operation": "rank1"}, 2 * 66), ({"operation": "quadform"}, 2 * (66 + 11)),
        ({"dtype": "complex64"}, 8 * 121), ({"dtype": "int32"}, 2 * 121),
    ],
)  # fmt: skip
def test_needed_operations_of_other_jobs(table, operations):
    plan = make_plan(make_spec("gauges", **OPEN, **table))
    assert useful(plan, sizes_at(plan.spec, 11, {})) == operations


def test_memory_is_shared_aligned_and_not_more_than_there_is():
    spec = make_spec("gauges", layout="packed", **OPEN)
    plan, memory = make_plan(spec), Memory()
    for n in (5, 40):
        memory.reserve_for(plan, sizes_at(spec, n, {}))
    small, large = (values_for(plan, sizes_at(spec, n, {}), memory) for n in (5, 40))
    assert len(small["a"]) == 15
    assert len(large["a"]) == 820
    for name in ("a", "x", "y"):
        address = large[name].ctypes.data
        assert small[name].ctypes.data == address
        assert address % 64 == 0
        assert len(np.unique(large[name])) > len(large[name]) // 2
    memory.reserve("a", "float64", 1 << 50)
    with pytest.raises(InputError, match=r"n = 7 takes \d+ GiB of arrays, and this machine has"):
        memory.check(7)
