"""Kernels from Python: right results for arrays as people have them, and every wrong call refused.

Matrices are small whole numbers, so that the expected product is exact in every order.
"""

from __future__ import annotations

import inspect
import traceback

import numpy as np
import pytest
from tools import need

from demilune import CheckError, InputError, MissingError, SpecError, checked, kernel

N = 5
M = np.array([[(7 * i * j + i + j) % 11 - 5.0 for j in range(N)] for i in range(N)])
M = np.triu(M) + np.triu(M, 1).T
X = np.array([3.0, -1.0, 2.0, 5.0, -4.0])
LANGUAGES = ["c", "python"]


@pytest.fixture(params=LANGUAGES)
def language(request):
    if request.param == "c":
        need("gcc")
    return request.param


@pytest.fixture
def made(language):
    """A kernel that leaves all it can to run time."""
    open_values = dict.fromkeys(("n", "alpha", "beta", "incx", "incy"), "runtime")
    return kernel("gauge", layout="full", language=language, **open_values)


@pytest.fixture
def packed(language):
    return kernel("gauge", layout="packed", n=N, language=language)


def fortran(matrix=M):
    return np.asfortranarray(matrix)


# --- right results -------------------------------------------------------------------------------


@pytest.mark.parametrize("order", ["column-major", "row-major"])
@pytest.mark.parametrize("triangle", ["upper", "lower"])
def test_two_dimensional_arrays_and_views_of_larger_ones(language, triangle, order):
    product = kernel("gauge", n="runtime", triangle=triangle, order=order, language=language)
    large = np.full((N + 3, N + 3), np.nan, order="F" if order == "column-major" else "C")
    window = large[1 : N + 1, 2 : N + 2]
    stored = np.tri(N, dtype=bool) if triangle == "lower" else np.tri(N, dtype=bool).T
    window[stored] = M[stored]
    before = large.copy()
    assert np.array_equal(product(window, X), M @ X)
    assert np.array_equal(product(window, X, n=N), M @ X)
    assert np.array_equal(large, before, equal_nan=True)


def test_a_one_dimensional_array_with_its_leading_dimension(language):
    product = kernel("gauge", n="runtime", language=language)
    large = np.full((N + 2, N), np.nan, order="F")
    large[:N] = M
    assert np.array_equal(product(large.ravel("F"), X, ld=N + 2), M @ X)
    fixed = kernel("gauge", n=N, ld=N + 2, language=language)
    assert np.array_equal(fixed(large.ravel("F"), X), M @ X)
    assert np.array_equal(fixed(large[:N], X), M @ X)


@pytest.mark.parametrize("kd", [0, 1, 2, 4])
@pytest.mark.parametrize("triangle", ["upper", "lower"])
def test_a_two_dimensional_band(language, triangle, kd):
    band = np.where(abs(np.subtract.outer(range(N), range(N))) <= kd, M, 0)
    # LAPACK Users' Guide, 3rd ed., Band Storage: upper a_ij at (kd + i - j, j), lower (i - j, j).
    stored = np.full((kd + 3, N), np.nan, order="F")
    for i in range(N):
        for j in range(N):
            if (i <= j) == (triangle == "upper") or i == j:
                if abs(i - j) <= kd:
                    stored[kd + i - j if triangle == "upper" else i - j, j] = M[i, j]
    product = kernel("gauge", layout="band", triangle=triangle, language=language)
    assert np.array_equal(product(stored[: kd + 1], X), band @ X)
    assert np.array_equal(product(stored, X, kd=kd), band @ X)
    assert np.array_equal(product(stored.ravel("F"), X, kd=kd, ld=kd + 3), band @ X)
    fixed = kernel("gauge", layout="band", triangle=triangle, n=N, kd=kd, language=language)
    assert np.array_equal(fixed(fortran(stored[: kd + 1]), X), band @ X)


@pytest.mark.parametrize(("triangle", "kd"), [("upper", 1), ("upper", 4), ("lower", 4)])
def test_a_band_made_by_to_half(triangle, kd):
    band = np.where(abs(np.subtract.outer(range(N), range(N))) <= kd, M, 0)
    product = kernel("gauge", layout="band", triangle=triangle, language="python")
    for half in (product.to_half(band, kd=kd), product.to_half(band, **product.sizes_of(band))):
        assert half.shape == (kd + 1, N)
        assert np.array_equal(product(half, X), band @ X)
    wide = product.to_half(band, kd=kd, ld=kd + 3)
    assert wide.shape == (kd + 3, N)
    assert np.array_equal(product.to_full(wide, N, kd=kd), band)


def test_a_skyline_with_its_diagonal(language):
    first = [0, 0, 2, 1, 3]  # the row at which column j begins
    profile = np.where(np.arange(N)[:, None] >= np.array(first), M, 0)
    profile = np.triu(profile) + np.triu(profile, 1).T
    stored = np.concatenate([M[first[j] : j + 1, j] for j in range(N)])
    diagonal = np.cumsum([j + 1 - first[j] for j in range(N)]) - 1
    product = kernel("gauge", layout="skyline", language=language)
    assert np.array_equal(product(stored, X, diagonal=diagonal), profile @ X)
    assert np.array_equal(product.to_half(profile, diagonal=diagonal), stored)
    assert np.array_equal(product.to_full(stored, N, diagonal=diagonal), profile)


@pytest.mark.parametrize(("incx", "incy"), [(1, 1), (2, 3), (-1, 1), (1, -1), (-3, -2)])
def test_strides_are_those_of_the_blas_standard(made, incx, incy):
    """BLAS Technical Forum Standard: with a negative stride a vector is passed backward."""
    x = np.full(1 + (N - 1) * abs(incx), np.nan)
    x[:: abs(incx)] = X if incx > 0 else X[::-1]
    y = made(fortran(), x, alpha=2, beta=0, incx=incx, incy=incy)
    expected = 2 * M @ X
    assert y.shape == (1 + (N - 1) * abs(incy),)
    assert np.array_equal(y[:: abs(incy)], expected if incy > 0 else expected[::-1])


def test_y_is_made_where_beta_is_0_and_changed_in_place_elsewhere(made):
    fresh = made(fortran(), X, alpha=1, beta=0)
    assert np.array_equal(fresh, M @ X)
    y = np.full(N, np.nan)
    assert made(fortran(), X, y, alpha=1, beta=0) is y
    assert np.array_equal(y, M @ X)
    assert made(fortran(), X, y, alpha=-1, beta=2) is y
    assert np.array_equal(y, M @ X)
    with pytest.raises(InputError, match=r"beta = 1\.0 reads y, and no y is passed"):
        made(fortran(), X, alpha=1, beta=1)


def test_results_of_each_operation(language):
    update = kernel("gauge", operation="rank1", layout="packed", alpha=2, language=language)
    half = update.to_half(M)
    assert update(half, X) is half  # changed in place
    assert np.array_equal(update.to_full(half, N), M + 2 * np.outer(X, X))
    form = kernel("gauge", operation="quadform", layout="packed", n=N, language=language)
    assert form(form.to_half(M), X) == X @ M @ X


def test_an_empty_matrix(made, language):
    empty = np.zeros((0, 0), order="F")
    assert made(empty, np.zeros(0), alpha=1, beta=0).shape == (0,)
    form = kernel("gauge", operation="quadform", layout="packed", language=language)
    assert form(np.zeros(0), np.zeros(0)) == 0


def test_nothing_is_copied(packed):
    """The routine gets the memory of the arrays themselves."""
    seen = {}
    real = packed.executable
    packed.executable = lambda arguments: seen.update(arguments) or real(arguments)
    half, y = packed.to_half(M), np.zeros(N)
    packed(half, X, y)
    for name, array in (("a", half), ("x", X), ("y", y)):
        assert seen[name].__array_interface__["data"] == array.__array_interface__["data"]


def test_a_workspace_of_the_caller_is_used(language):
    product = kernel("gauge", layout="packed", accumulator="compensated", language=language)
    work = np.full(2 * N, np.nan)
    assert np.array_equal(product(product.to_half(M), X, work=work), M @ X)
    assert not np.isnan(work).any()


# --- wrong calls ---------------------------------------------------------------------------------


def call(made, a=None, x=X, y=None, **given):
    """A call that is right but for what is passed."""
    values = {"alpha": 1, "beta": 0, **given}
    return made(fortran() if a is None else a, x, y, **values)


def read_only(array):
    array = array.copy()
    array.flags.writeable = False
    return array


def unaligned(size):
    return np.zeros(8 * size + 1, dtype=np.uint8)[1:].view(float)


def records():
    """Columns in records of 44 bytes: no whole number of elements apart."""
    table = np.zeros(N, dtype=[("column", float, N), ("gauge", "i4")])
    table["column"] = M
    return table["column"].T


WRONG = {
    "x of another type": ({"x": X.astype("f4")}, "x holds float32; float64 is needed"),
    "x of integers": ({"x": X.astype(int)}, "x holds int64; float64 is needed"),
    "x of the other byte order": ({"x": X.astype(">f8")}, "x holds >f8; float64 is needed"),
    "a list for x": ({"x": [1.0] * N}, "x is a list; a plain numpy array is needed"),
    "a list for a": ({"a": M.tolist()}, "a is a list; a plain numpy array is needed"),
    "a list for y": ({"y": [0.0] * N}, "y is a list; a plain numpy array is needed"),
    "complex a": ({"a": fortran(M.astype(complex))}, "a holds complex128; float64 is needed"),
    "y of another type": ({"y": np.zeros(N, "f4")}, "y holds float32; float64 is needed"),
    "a in the other order": ({"a": M.copy()}, "contiguous along its columns .*asfortranarray"),
    "a of three dimensions": ({"a": np.zeros((N, N, 1))}, r"a must be .*\(5, 5, 1\)"),
    "a that is not square": ({"a": fortran(M[:4])}, r"a has the shape \(4, 5\): 5 are needed"),
    "a of fewer columns": ({"a": fortran(M[:, :4])}, r"a has the shape \(5, 4\), and n is 5"),
    "a backward": ({"a": fortran()[:, ::-1]}, "contiguous along its columns"),
    "a upside down": ({"a": fortran()[::-1]}, "contiguous along its columns"),
    "a of one column repeated": (
        {"a": np.broadcast_to(M[:, :1], (N, N))},
        "contiguous along its columns",
    ),
    "every other row": ({"a": np.zeros((2 * N, N), order="F")[::2]}, "contiguous along its col"),
    "x of two dimensions": ({"x": X.reshape(1, N)}, r"x must be .* not of shape \(1, 5\)"),
    "x with gaps": ({"x": np.zeros(2 * N)[::2]}, "strides are told by incx"),
    "x backward": ({"x": X[::-1]}, "strides are told by incx"),
    "x too short for n": ({"x": X[:4], "n": N}, "x has 4 elements; 5 are needed"),
    "x too short for incx": ({"incx": 2, "n": N}, "x has 5 elements; 9 are needed"),
    "y too short": ({"y": np.zeros(4)}, "y has 4 elements; 5 are needed"),
    "y too short for incy": ({"y": np.zeros(8), "incy": -2}, "y has 8 elements; 9 are needed"),
    "a too short": ({"a": fortran().ravel("F")[:24], "ld": N}, "a has 24 elements; 25 are needed"),
    "y read-only": ({"y": read_only(X)}, "y is read-only, and gauge writes to it"),
    "y is x": ({"y": X}, "x and y overlap in memory"),
    "incx of 0": ({"incx": 0}, "incx = 0; a stride is other than 0"),
    "incy of 0": ({"incy": 0}, "incy = 0; a stride is other than 0"),
    "n below 0": ({"n": -1}, "n = -1; at least 0 is needed"),
    "n beyond the array": ({"n": 10**30}, "n is 1000000000000000000000000000000"),
    "another ld than the array's": ({"ld": 7}, "ld = 7, and a has 5"),
    "no ld": ({"a": fortran().ravel("F")}, "a is one-dimensional: ld must be passed"),
    "ld below n": ({"a": fortran().ravel("F"), "ld": 4}, "ld = 4; it must be at least max"),
    "ld below 0": ({"a": fortran().ravel("F"), "ld": -5}, "ld = -5; it must be at least"),
    "no alpha": ({"alpha": None}, "alpha must be passed: the specification leaves it open"),
    "complex alpha": ({"alpha": 1j}, "alpha = 1j; a real number is needed"),
    "a text for alpha": ({"alpha": "1"}, "alpha is a str; a number is needed"),
    "an array for beta": ({"beta": np.zeros(1)}, "beta is a ndarray; a number is needed"),
    "an unknown argument": ({"incz": 1}, r"takes no argument incz \(it takes: n, alpha, ld, incx"),
    "a leading dimension of no whole number": ({"a": records()}, "a is not aligned"),
    "unaligned x": ({"x": unaligned(N)}, "x is not aligned"),
    "unaligned y": ({"y": unaligned(N)}, "y is not aligned"),
    "a masked x": (
        {"x": np.ma.masked_array(X, mask=[1, 0, 0, 0, 0])},
        "x is a MaskedArray; a plain numpy array is needed",
    ),
    "incx of 1.5": ({"incx": 1.5}, r"incx is 1\.5; a whole number is needed"),
    "a text for incx": ({"incx": "one"}, "incx is 'one'; a whole number"),
    "n of 4.5": ({"n": 4.5, "a": fortran(M[:4, :4])}, r"n is 4\.5; a whole number"),
    "a text for n": ({"n": "four"}, "n is 'four'; a whole number"),
    "ld of 5.5": ({"a": fortran().ravel("F"), "ld": 5.5}, r"ld is 5\.5; a whole number"),
    "alpha beyond all floats": ({"alpha": 10**400}, "alpha is too large for float64"),
    "an unknown argument that is None": ({"incz": None}, "takes no argument incz"),
}


@pytest.mark.parametrize("name", WRONG)
def test_a_wrong_call_is_refused_and_changes_nothing(made, name):
    given, message = WRONG[name]
    arrays = [one for one in given.values() if isinstance(one, np.ndarray)]
    before = [one.copy() for one in arrays]
    with pytest.raises(InputError, match=message):
        call(made, **given)
    for array, old in zip(arrays, before, strict=True):
        assert np.array_equal(array, old)


def test_what_is_written_may_not_overlap_what_is_read(language):
    memory = np.arange(40.0)
    product = kernel("gauge", layout="packed", n=N, language=language)
    for y, other in (((19, 24), "x"), ((10, 15), "a")):
        with pytest.raises(InputError, match=f"{other} and y overlap in memory"):
            product(memory[:15], memory[15:20], memory[slice(*y)])
    product(memory[:15], memory[15:20], memory[20:25])  # side by side is right
    product(memory[:15], memory[10:15], memory[20:25])  # and so is what is only read
    update = kernel("gauge", operation="rank1", layout="packed", n=N, language=language)
    with pytest.raises(InputError, match="x and a overlap"):
        update(memory[:15], memory[14:19])
    with pytest.raises(InputError, match="a is read-only"):
        update(read_only(memory[:15]), memory[20:25])


def test_what_the_specification_fixes_is_no_argument(packed):
    half = packed.to_half(M)
    for name in ("alpha", "beta", "incx", "incy", "ld", "kd", "work", "diagonal"):
        with pytest.raises(InputError, match=f"takes no argument {name} .*none beside the arrays"):
            packed(half, X, **{name: 1})
    with pytest.raises(InputError, match="n = 4; the specification has n = 5"):
        packed(half, X, n=4)
    with pytest.raises(InputError, match="x has 4 elements; 5 are needed"):
        packed(half, X[:4])
    with pytest.raises(InputError, match="a must be a contiguous one-dimensional array"):
        packed(fortran(), X)


@pytest.mark.parametrize("operation", ["rank1", "quadform"])
def test_an_operation_without_y_takes_none(operation, language):
    made = kernel("gauge", operation=operation, layout="packed", n=N, language=language)
    with pytest.raises(InputError, match=f"{operation} has no y"):
        made(made.to_half(M), X, np.zeros(N))


@pytest.mark.parametrize(
    ("diagonal", "message"),
    [(None, "diagonal must be passed"), ([0, 2, 5, 9, 14], "numpy.intp"),
     (np.array([0, 2, 5, 9, 14], "i2"), "numpy.intp"), (np.array([[0, 2, 5, 9, 14]]), "one-dim"),
     (np.array([0, 2, 5, 9]), "must hold 5"), (np.array([1, 2, 5, 9, 14]), "begin with 0"),
     (np.array([0, 2, 2, 9, 14]), "ascend"), (np.array([0, 3, 5, 9, 14]), "within its triangle"),
     (np.array([0, 2, 5, 9, 13, 14])[::-1], "contiguous"),
     (np.array([0, 2, 5, 9, 14]), "a has 14 elements; 15 are needed")],
    ids=str,
)  # fmt: skip
def test_a_wrong_diagonal(language, diagonal, message):
    product = kernel("gauge", layout="skyline", n=N, language=language)
    with pytest.raises(InputError, match=message):
        product(np.zeros(14), X, diagonal=diagonal)


def test_a_wrong_half_bandwidth(language):
    product = kernel("gauge", layout="band", language=language)
    with pytest.raises(InputError, match="kd = -1; it must be at least 0"):
        product(np.zeros(15), X, kd=-1, ld=3)
    with pytest.raises(InputError, match="kd must be passed"):
        product(np.zeros(15), X, ld=3)
    with pytest.raises(InputError, match=r"ld = 2; it must be at least kd \+ 1"):
        product(np.zeros(15), X, kd=2, ld=2)
    fixed = kernel("gauge", layout="band", n=N, kd=2, language=language)
    with pytest.raises(InputError, match="leading dimension 4; 3 is needed"):
        fixed(np.zeros((4, N), order="F"), X)


def test_a_real_number_in_a_complex_type_is_a_real_number(made):
    assert np.array_equal(call(made, alpha=2 + 0j), 2 * M @ X)


@pytest.mark.parametrize("kd", ["runtime", 2])
def test_a_band_of_fewer_rows_than_kd_asks_for(language, kd):
    large = np.ones((3, N), order="F")
    n = N if kd == 2 else "runtime"
    product = kernel("gauge", layout="band", triangle="lower", n=n, kd=kd, language=language)
    with pytest.raises(InputError, match=r"shape \(2, 5\): 3 are needed along its strips"):
        product(large[:2], X, **({} if kd == 2 else {"kd": 2}))


@pytest.mark.parametrize("alpha", [2.5, 2**40, float("nan")])
def test_a_scalar_that_is_no_integer_of_the_kernel(language, alpha):
    product = kernel("gauge", layout="packed", dtype="int16", alpha="runtime", language=language)
    with pytest.raises(InputError, match="alpha"):
        product(np.ones(15, "i2"), np.ones(N, "i2"), alpha=alpha)


def test_the_diagonal_may_not_be_what_is_written(language):
    product = kernel("gauge", layout="skyline", dtype="int32", language=language)
    diagonal = np.array([0, 2], dtype=np.intp)
    with pytest.raises(InputError, match="overlap"):
        product(np.ones(3, "i4"), np.ones(2, "i4"), diagonal.view("i8"), diagonal=diagonal)


CONVERSIONS = {
    "a part that is lost": (lambda k: k["int16"].to_half(np.full((2, 2), 2.7)), "int16"),
    "a number too large": (lambda k: k["int16"].to_half(np.full((2, 2), 70000)), "int16"),
    "an unknown size": (lambda k: k["full"].to_half(M, kdd=2), "kdd"),
    "ld below n": (lambda k: k["full"].to_half(M, ld=2), "ld"),
    "kd below 0": (lambda k: k["band"].to_half(M, kd=-1), "kd"),
    "a bad diagonal": (lambda k: k["skyline"].to_half(M, diagonal=[0, 9, 1, 2, 3]), "diagonal"),
    "text": (lambda k: k["full"].to_half([["a"]]), "number"),
    "n below 0": (lambda k: k["full"].to_full(np.zeros((5, 5), order="F"), -1), "-1"),
    "an array of fewer rows": (lambda k: k["full"].to_full(np.zeros((4, 5), order="F"), 5), "ld"),
    "no n to count": (lambda k: k["full"].counts(-3), "-3"),
}


@pytest.mark.parametrize("name", CONVERSIONS)
def test_a_wrong_conversion_is_refused(name):
    kernels = {one: kernel("gauge", layout=one, language="python")
               for one in ("full", "band", "skyline")}  # fmt: skip
    kernels["int16"] = kernel("gauge", dtype="int16", language="python")
    wrong, part = CONVERSIONS[name]
    with pytest.raises(InputError, match=part):
        wrong(kernels)


def test_wrong_conversions(packed):
    for matrix in (np.zeros((N, 4)), np.zeros(N), np.zeros((2, 2, 2)), 3.0):
        with pytest.raises(InputError, match="square matrix"):
            packed.to_half(matrix)
    with pytest.raises(InputError, match="n = 5, the matrix has 4 rows"):
        packed.to_half(np.zeros((4, 4)))
    with pytest.raises(InputError, match="n = 5 has 15 elements, not 14"):
        packed.to_full(np.zeros(14), N)
    square = kernel("gauge", language="python")
    with pytest.raises(InputError, match="not contiguous in the layout's order"):
        square.to_full(M, N)


# --- what a kernel tells -------------------------------------------------------------------------


def test_picture_pseudo_code_counts_and_source(language):
    made = kernel("gauge", layout="packed", n=3, language=language)
    # LAPACK Users' Guide, 3rd ed., Packed Storage, upper: a11 a12 a22 a13 a23 a33.
    assert made.picture == "0 1 3\n. 2 4\n. . 5"
    assert made.pseudo_code.startswith("gauge(a, x, y)\n")
    assert made.formula == "y := A*x"
    assert repr(made) == f"<kernel gauge ({language}): y := A*x>"
    assert kernel("gauge", alpha=2, beta="runtime").formula == "y := 2*A*x + beta*y"
    assert made.counts() == made.counts(3)
    assert made.counts()["loads of a"] == 6
    assert "gauge" in made.source
    assert set(made.files) == {f"gauge.{e}" for e in (["c", "h"] if language == "c" else ["py"])}
    with pytest.raises(InputError, match="n = 4; the specification has 3"):
        made.counts(4)
    with pytest.raises(InputError, match="say for which n"):
        kernel("gauge").counts()
    assert kernel("gauge", layout="packed").counts(9)["loads of a"] == 45


def test_a_python_kernel_shows_its_source():
    made = kernel("gauge", layout="packed", n=3, language="python")
    assert inspect.getsource(made.function) in made.source
    with pytest.raises(TypeError) as caught:
        made.function([1.0] * 6, [1.0, None, 2.0], [0.0] * 3)
    shown = "".join(traceback.format_exception(caught.value))
    assert "float(x[" in shown
    assert "demilune gauge" in shown
    with pytest.raises(InputError, match="written in c"):
        _ = kernel("gauge", n=3, language="c").function


def test_every_problem_of_a_kernel_at_once():
    with pytest.raises(SpecError) as caught:
        kernel("int", layout="pakced", n=0, lop="dot", alpha=None)
    assert [one.key for one in caught.value.problems] == ["name", "layout", "n", "lop", "alpha"]
    assert 'did you mean "packed"' in str(caught.value)


@pytest.mark.parametrize("values", [{"alpha": 10**400}, {"name": 5}], ids=["number", "name"])
def test_values_that_only_python_can_hold(values):
    with pytest.raises(SpecError):
        kernel(**{"name": "gauge", **values})


def test_without_a_compiler(monkeypatch):
    monkeypatch.setenv("CC", "no-such-compiler")
    made = kernel("gauge", layout="packed", n=N)
    assert made.source  # is there all the same
    with pytest.raises(MissingError, match=r"no-such-compiler .*apt-get install gcc"):
        made(np.zeros(15), X)
    with pytest.raises(MissingError):
        made.verify()


# --- checked -------------------------------------------------------------------------------------


def test_a_right_kernel_is_given_back(packed):
    assert checked(packed, seed=3) is packed
    assert packed.verify(seed=3).record() == packed.verify(seed=3).record()


@pytest.mark.parametrize("fault", ["result", "matrix", "nothing"])
def test_a_broken_kernel_is_told(packed, fault):
    real = packed.executable

    class Broken(type(real)):
        def __init__(self):
            self.__dict__.update(real.__dict__)

        def __call__(self, arguments):
            if fault == "nothing":
                return None
            status = real(arguments)
            array = arguments["y" if fault == "result" else "a"]
            array[0] = array[0] + 1
            return status

    packed.executable = Broken()
    with pytest.raises(CheckError, match=r"gauge is not verified: .*expected .*, found ") as caught:
        checked(packed)
    assert caught.value.status == 1
