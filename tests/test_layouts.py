"""Where the half lies: published pictures, LAPACK's own conversions, and what always holds."""

from __future__ import annotations

import re
from dataclasses import dataclass, replace
from itertools import pairwise, product
from math import prod
from typing import Any

import numpy as np
import pytest
from hypothesis import given, reject
from hypothesis import strategies as st
from scipy.linalg import lapack

from demilune import storage
from demilune.errors import SpecError
from demilune.index import symbol
from demilune.keys import RUNTIME, keys_of
from demilune.layouts import LAYOUTS, Diagonal, Layout
from demilune.spec import make_spec

TRIANGLES = ("upper", "lower")


def layout_of(name, **values) -> Layout:
    return make_spec("half", layout=name, dtype="complex128", **values).layout


# --- pictures ----------------------------------------------------------------------------------

# LAPACK Users' Guide, 3rd ed. (SIAM, 1999), section "Matrix Storage Schemes": packed storage of
# a matrix with n = 4 and band storage with n = 5, kd = 2 (from memory). Element a_ij is written
# ij, counted from 1; * is a place that is never touched. Left upper, right lower.

PACKED = "11 12 22 13 23 33 14 24 34 44    11 21 31 41 22 32 42 33 43 44"

BAND = """
     *  * 13 24 35    11 22 33 44 55
     * 12 23 34 45    21 32 43 54  *
    11 22 33 44 55    31 42 53  *  *
"""

# LAPACK's documentation of the RFP format (the comments of dtrttf.f), n = 6 and n = 5; the same
# as in Gustavson, Wasniewski, Dongarra, Langou, ACM TOMS 37(2), 2010 (from memory). Counted from
# 0; the rectangle is stored column by column. Left upper, right lower, as there.

RFP = {
    6: """
        03 04 05    33 43 53
        13 14 15    00 44 54
        23 24 25    10 11 55
        33 34 35    20 21 22
        00 44 45    30 31 32
        01 11 55    40 41 42
        02 12 22    50 51 52
    """,
    5: """
        02 03 04    00 33 43
        12 13 14    10 11 44
        22 23 24    20 21 22
        00 33 34    30 31 32
        01 11 44    40 41 42
    """,
}

RFP_TRANSPOSED = {
    6: """
        03 13 23 33 00 01 02    33 00 10 20 30 40 50
        04 14 24 34 44 11 12    43 44 11 21 31 41 51
        05 15 25 35 45 55 22    53 54 55 22 32 42 52
    """,
    5: """
        02 12 22 00 01    00 10 20 30 40
        03 13 23 33 11    33 11 21 31 41
        04 14 24 34 44    43 44 22 32 42
    """,
}


def codes(n: int, first: int) -> np.ndarray:
    """A matrix whose element ij is 1ij: what a picture's token ij stands for."""
    rows, columns = np.mgrid[first : first + n, first : first + n]
    return 100 + 10 * rows + columns


def drawn(picture: str, triangle: str) -> np.ndarray:
    """What is drawn on the left for upper, on the right for lower."""
    lines = [line.split() for line in picture.strip().splitlines()]
    both = np.array([[0 if token == "*" else 100 + int(token) for token in ln] for ln in lines])
    return np.hsplit(both, 2)[triangle == "lower"]


def check_picture(layout: Layout, first: int, stored: np.ndarray, **sizes: Any) -> None:
    """The half is what is drawn, and the table of indices that is shown to people agrees."""
    matrix = codes(int(layout.n), first)
    half = storage.to_half(matrix, layout, **sizes)
    assert np.array_equal(half, stored)
    in_memory = list(stored.ravel(order="F"))
    shown = storage.picture(layout)
    upper = layout.triangle == "upper"
    for (i, j), code in np.ndenumerate(matrix):
        named = (i <= j) if upper else (i >= j)
        expected = str(in_memory.index(code)) if named and code in in_memory else "."
        assert shown[i].split()[j] == expected, f"element ({i},{j}) in the picture"


@pytest.mark.parametrize("triangle", TRIANGLES)
def test_packed_is_the_users_guides(triangle):
    layout = layout_of("packed", n=4, triangle=triangle)
    check_picture(layout, 1, drawn(PACKED, triangle)[0])


@pytest.mark.parametrize("triangle", TRIANGLES)
def test_band_is_the_users_guides(triangle):
    layout = layout_of("band", n=5, kd=2, triangle=triangle)
    check_picture(layout, 1, drawn(BAND, triangle))


@pytest.mark.parametrize("triangle", TRIANGLES)
def test_band_keeps_its_picture_in_a_taller_array(triangle):
    layout = layout_of("band", triangle=triangle)
    half = storage.to_half(codes(5, 1), layout, kd=2, ld=4)
    assert np.array_equal(half[:3], drawn(BAND, triangle))
    assert not half[3].any()


@pytest.mark.parametrize("transposed", [False, True])
@pytest.mark.parametrize("n", [5, 6])
@pytest.mark.parametrize("triangle", TRIANGLES)
def test_rfp_is_lapacks(triangle, n, transposed):
    layout = layout_of("rfp", n=n, triangle=triangle, transposed=transposed)
    pictures = RFP_TRANSPOSED if transposed else RFP
    check_picture(layout, 0, drawn(pictures[n], triangle).ravel(order="F"))


# --- LAPACK's conversions ----------------------------------------------------------------------

DTYPES = {"s": np.float32, "d": np.float64, "c": np.complex64, "z": np.complex128}
SIZES = (1, 2, 3, 4, 5, 6, 7, 8, 9, 16, 33, 64)
LETTERS = tuple(DTYPES)


def triangle_of(letter: str, triangle: str, n: int, structure: str) -> np.ndarray:
    """A random triangle, as LAPACK takes it; the other one is NaN and must never be read."""
    draw = np.random.default_rng(n)
    matrix = draw.standard_normal((n, n)).astype(DTYPES[letter])
    if letter in "cz":
        matrix.imag = draw.standard_normal((n, n))
    if structure == "hermitian":
        np.fill_diagonal(matrix, matrix.diagonal().real)
    other = np.tri(n, k=-1, dtype=bool)
    matrix[other if triangle == "upper" else other.T] = np.nan
    return np.asfortranarray(matrix)


def routine(letter: str, stem: str):
    """LAPACK's conversion, without its status, which must be 0."""

    def call(*arguments, **options):
        *results, status = getattr(lapack, letter + stem)(*arguments, **options)
        assert status == 0
        return results[0]

    return call


def named(matrix: np.ndarray, triangle: str) -> np.ndarray:
    return np.triu(matrix) if triangle == "upper" else np.tril(matrix)


def structures(letter: str) -> tuple[str, ...]:
    return ("symmetric", "hermitian") if letter in "cz" else ("symmetric",)


@pytest.mark.parametrize("letter", LETTERS)
@pytest.mark.parametrize("triangle", TRIANGLES)
def test_packed_converts_as_lapack_does(letter, triangle):
    """trttp and tpttr, which copy elements and never conjugate them."""
    uplo = triangle[0].upper()
    for structure, n in product(structures(letter), SIZES):
        layout = layout_of("packed", triangle=triangle, structure=structure)
        matrix = triangle_of(letter, triangle, n, structure)
        packed = routine(letter, "trttp")(matrix, uplo=uplo)
        half = storage.to_half(matrix, layout)
        assert half.dtype == packed.dtype
        assert np.array_equal(half, packed)
        whole = storage.to_full(packed, layout, n)
        back = routine(letter, "tpttr")(n, packed, uplo=uplo)
        assert np.array_equal(named(whole, triangle), named(back, triangle))
        mirror = whole.conj() if structure == "hermitian" else whole
        assert np.array_equal(whole, mirror.T)


@pytest.mark.parametrize("letter", LETTERS)
@pytest.mark.parametrize("triangle", TRIANGLES)
@pytest.mark.parametrize("transposed", [False, True])
def test_rfp_converts_as_lapack_does(letter, triangle, transposed):
    """trttf, tfttr, tpttf, tfttp; complex ones fold and transpose with conjugation."""
    uplo = triangle[0].upper()
    transr = ("C" if letter in "cz" else "T") if transposed else "N"
    options = {"transr": transr, "uplo": uplo}
    structure = structures(letter)[-1]
    layout = layout_of("rfp", triangle=triangle, structure=structure, transposed=transposed)
    packed_layout = layout_of("packed", triangle=triangle, structure=structure)
    for n in SIZES:
        matrix = triangle_of(letter, triangle, n, structure)
        folded = routine(letter, "trttf")(matrix, **options)
        half = storage.to_half(matrix, layout)
        assert half.dtype == folded.dtype
        assert np.array_equal(half, folded)
        whole = storage.to_full(folded, layout, n)
        back = routine(letter, "tfttr")(n, folded, **options)
        assert np.array_equal(named(whole, triangle), named(back, triangle))
        packed = routine(letter, "tfttp")(n, folded, **options)
        assert np.array_equal(storage.to_half(whole, packed_layout), packed)
        unpacked = storage.to_full(packed, packed_layout, n)
        again = routine(letter, "tpttf")(n, packed, **options)
        assert np.array_equal(storage.to_half(unpacked, layout), again)


@pytest.mark.parametrize("letter", "cz")
@pytest.mark.parametrize("triangle", TRIANGLES)
@pytest.mark.parametrize("transposed", [False, True])
def test_complex_symmetric_rfp_is_that_of_its_parts(letter, triangle, transposed):
    """LAPACK's complex RFP is Hermitian; a symmetric one is its two parts, each a real RFP."""
    options = {"transr": "T" if transposed else "N", "uplo": triangle[0].upper()}
    real = routine({"c": "s", "z": "d"}[letter], "trttf")
    layout = layout_of("rfp", triangle=triangle, transposed=transposed)
    for n in SIZES:
        matrix = triangle_of(letter, triangle, n, "symmetric")
        half = storage.to_half(matrix, layout)
        for found, part in ((half.real, matrix.real), (half.imag, matrix.imag)):
            assert np.array_equal(found, real(np.nan_to_num(part), **options))
        whole = storage.to_full(half, layout, n)
        assert np.array_equal(whole, whole.T)
        assert np.array_equal(named(whole, triangle), named(np.nan_to_num(matrix), triangle))


# --- what holds for every layout ---------------------------------------------------------------


@dataclass(frozen=True)
class Case:
    """A layout and sizes for it."""

    layout: Layout
    sizes: dict[str, Any]
    seed: int

    @property
    def n(self) -> int:
        return int(self.sizes["n"])

    @property
    def given(self) -> dict[str, Any]:
        return {name: value for name, value in self.sizes.items() if name != "n"}

    def folded(self, i: int, j: int) -> tuple[int, int]:
        """The element of the named triangle that (i, j) is or mirrors."""
        return (min(i, j), max(i, j)) if self.layout.triangle == "upper" else (max(i, j), min(i, j))

    @property
    def pattern(self) -> set[tuple[int, int]]:
        """The elements that ought to be stored, from the layout's own words."""
        n, layout = self.n, self.layout
        kd: Any = n
        if layout.name == "band":
            kd = layout.kd if layout.kd != RUNTIME else self.sizes["kd"]
        every = {self.folded(i, j) for i in range(n) for j in range(n) if abs(i - j) <= kd}
        if layout.name != "skyline":
            return every
        fixed = 1 if layout.order == "column-major" else 0
        steps = np.diff(self.sizes["diagonal"])
        lengths = list(steps) if layout.tail else [1, *steps]
        return {at for at in every if abs(at[0] - at[1]) < lengths[at[fixed]]}

    def matrix(self) -> np.ndarray:
        """Small whole numbers, none 0, with the layout's structure and within its pattern."""
        draw = np.random.default_rng(self.seed)
        matrix = np.zeros((self.n, self.n), dtype=complex)
        for i, j in self.pattern:
            value = complex(*draw.integers(1, 100, 2))
            if self.layout.hermitian:
                value = complex(value.real) if i == j else value
                matrix[j, i] = value.conjugate()
            else:
                matrix[j, i] = value
            matrix[i, j] = value
        return matrix


@st.composite
def cases(draw, name: str) -> Case:
    """The layout with any of its keys, for small matrices."""
    values = {}
    for key, allowed in keys_of(LAYOUTS[name]).items():
        words = LAYOUTS[name].orders if key == "order" else allowed.words
        options = [st.just(None), *map(st.just, words)]
        if allowed.whole:
            options.append(st.integers(allowed.minimum or 0, 11))
        if allowed.flag:
            options.append(st.booleans())
        values[key] = draw(st.one_of(options))
    stated = {key: value for key, value in values.items() if value is not None}
    try:
        layout = layout_of(name, **stated)
    except SpecError:
        reject()
    n = draw(st.integers(1, 11)) if layout.n == RUNTIME else int(layout.n)
    seed = draw(st.integers(0, 2**16))
    return Case(layout, layout.sample(n, np.random.default_rng(seed)), seed)


def for_every_layout(test):
    """The test as a property of each layout, with cases drawn for it."""

    def of_layout(name, data):
        test(data.draw(cases(name)))

    of_layout.__name__ = test.__name__
    return pytest.mark.parametrize("name", sorted(LAYOUTS))(given(data=st.data())(of_layout))


def passes(ranges, env):
    """The environments of nested loops."""
    if not ranges:
        yield env
        return
    one, *inner = ranges
    for value in range(one.low.value(env), one.high.value(env)):
        here = {**env, one.variable: value}
        for name, meaning in one.integers:
            here[name] = meaning.value(here)
        yield from passes(inner, here)


def visits(case: Case):
    """Each row k in turn, as its runs of (own, the pairs of index m and place)."""
    env, k, m = case.layout.environment(case.sizes), symbol("k"), symbol("m")
    for group in case.layout.groups():
        for outer in passes(group.around, env):
            for fixed in range(group.low.value(outer), group.high.value(outer)):
                here, runs = {**outer, "k": fixed}, []
                for piece in group.row:
                    if isinstance(piece, Diagonal):
                        runs.append((True, [(fixed, piece.place(k).value(here))]))
                        continue
                    for inner in passes(piece.around, here):
                        run = []
                        for index in range(*(b(k).value(inner) for b in (piece.low, piece.high))):
                            at = {**inner, "m": index}
                            if piece.when is None or piece.when(k, m).holds(at):
                                run.append((index, piece.at(k, m).value(at)))
                        runs.append((piece.own, run))
                yield fixed, runs


@for_every_layout
def test_each_element_is_stored_once(case):
    at = [
        (case.folded(int(i), int(j)), int(place))
        for rows, columns, places in storage.indices(
            case.layout, case.layout.environment(case.sizes)
        )
        for i, j, place in zip(rows, columns, places, strict=True)
    ]
    elements, places = [element for element, _ in at], [place for _, place in at]
    assert len(set(elements)) == len(elements), "an element is stored twice"
    assert set(elements) == case.pattern
    assert len(set(places)) == len(places), "two elements share a place"


@for_every_layout
def test_extent_is_tight(case):
    env = case.layout.environment(case.sizes)
    places = np.concatenate([at for _, _, at in storage.indices(case.layout, env)])
    assert places.min() >= 0
    assert places.max() + 1 == case.layout.extent.value(env)
    assert prod(case.layout.shape(env)) >= case.layout.extent.value(env)


@for_every_layout
def test_strips_are_contiguous(case):
    stored = {}
    for k, runs in visits(case):
        for own, run in runs:
            if own:
                stored |= {(k, m): place for m, place in run}
                assert all((q[0] - p[0], q[1] - p[1]) == (1, 1) for p, q in pairwise(run))
    told = {
        (k, low + step): first + step
        for k, low, high, first in case.layout.strips(case.sizes)
        for step in range(high - low)
    }
    assert told == stored


@for_every_layout
def test_rows_are_whole_and_mirrored_pieces_agree(case):
    place, order = {}, []
    for k, runs in visits(case):
        order.append(k)
        row = [at for _, run in runs for at in run]
        assert [m for m, _ in row] == sorted({m for m, _ in row}), "m does not ascend"
        place |= {(k, m): at for m, at in row}
    assert order == list(range(case.n))
    assert set(place) == {at for i, j in case.pattern for at in ((i, j), (j, i))}
    assert all(place[m, k] == at for (k, m), at in place.items())


@for_every_layout
def test_to_full_undoes_to_half(case):
    matrix, layout = case.matrix(), case.layout
    one_triangle = matrix.copy()
    other = np.tri(case.n, k=-1, dtype=bool)
    one_triangle[other if layout.triangle == "upper" else other.T] = np.nan
    half = storage.to_half(one_triangle, layout, **case.given)
    assert np.count_nonzero(half) == len(case.pattern)
    whole = storage.to_full(half, layout, case.n, **case.given)
    assert np.array_equal(whole, matrix)


@for_every_layout
def test_row_major_is_the_other_triangle_column_major(case):
    """An array kept by rows is, in memory, the transpose kept by columns (as CBLAS uses it)."""
    layout, matrix = case.layout, case.matrix()
    if len(layout.orders) == 1:
        return
    twin = replace(
        layout,
        triangle="lower" if layout.triangle == "upper" else "upper",
        order="row-major" if layout.order == "column-major" else "column-major",
    )
    one = storage.flat(layout, storage.to_half(matrix, layout, **case.given))
    other = storage.flat(twin, storage.to_half(matrix, twin, **case.given))
    assert np.array_equal(one, other.conj() if layout.hermitian else other)


# --- the formulas in the headers ---------------------------------------------------------------

ELEMENT = re.compile(
    r"(conj )?A\(i,j\)(?: with ([^,\n]+?))?(?:,? in tile p = (.+?), q = (.+?),)?\s+is\s+"
    r"(?:a\[(.+)\]|at \((.+), (.+)\))"
)


def reader(case: Case):
    """The place of an element, and whether it is conjugated, as the words of the header have it."""
    text = "\n".join(case.layout.formula).replace("/", "//").replace(" (rounded down)", "")
    n = case.n
    space: dict[str, Any] = {"n": n, "min": min, **case.sizes}
    if case.layout.name == "rfp":
        assert "rounded down; even = 1 if" in text
        space |= {"columns": (n + 1) // 2, "even": 1 - n % 2}
    if "strip 0 is the diagonal element alone" in text:
        space["diagonal"] = {-1: -1, **dict(enumerate(case.sizes["diagonal"]))}
    for name, arguments, body in re.findall(r"^(\w+)\((.+?)\) = (.+?)(?: is .*)?$", text, re.M):
        space[name] = eval(f"lambda {arguments}: {body}", space)
    for name, body in re.findall(r"^(cut) = (.+)$", text, re.M):
        space[name] = eval(body, space)
    rectangle = re.search(r"element \(row, column\) is a\[(.+)\]", text)
    turned = "every element is stored conjugated" in text

    def place(i: int, j: int) -> tuple[int, bool]:
        here = {**space, "i": i, "j": j}
        for bar, when, p, q, index, row, column in ELEMENT.findall(text):
            if when and not eval(when, here):
                continue
            if p:
                here |= {"p": eval(p, here), "q": eval(q, here)}
            if not index:
                here |= {"row": eval(row, here), "column": eval(column, here)}
                index = rectangle[1]
            return eval(index, here), bool(bar) != turned
        raise AssertionError(f"nothing is said of A({i},{j})")

    return place


@for_every_layout
def test_header_formula_is_true(case):
    place = reader(case)
    for rows, columns, places in storage.indices(case.layout, case.layout.environment(case.sizes)):
        for i, j, at in zip(rows, columns, places, strict=True):
            element = case.folded(int(i), int(j))
            conjugated = case.layout.hermitian and element != (i, j)
            told, bar = place(*element)
            assert told == at
            assert bar == conjugated or i == j
