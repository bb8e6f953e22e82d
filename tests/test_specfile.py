"""Specification files: lists and defaults, every misspelling, all errors at once, the schema."""

from __future__ import annotations

import json
import keyword
import tomllib
from pathlib import Path

import jsonschema
import pytest
from hypothesis import given
from hypothesis import strategies as st
from test_cli import invoke

import demilune
from demilune import SpecError, parse, read, schema
from demilune.cli.starter import STARTER
from demilune.keys import defaults_of
from demilune.languages import LANGUAGES
from demilune.layouts import LAYOUTS
from demilune.operations import OPERATIONS
from demilune.spec import choices_for, known_keys

PROJECT = Path(__file__).parents[1]
EXAMPLES = sorted((PROJECT / "examples").glob("*.toml"))
SHIPPED = Path(demilune.__file__).with_name("specification.schema.json")


def problems(text):
    """The problems of a text that must be refused."""
    with pytest.raises(SpecError) as caught:
        parse(text, "gauges.toml")
    found = caught.value.problems
    assert found
    assert all(one.file == "gauges.toml" for one in found)
    assert len(set(found)) == len(found)
    return found


def toml(value):
    """A value as TOML; JSON's notation is the same for what specifications hold."""
    return json.dumps(value, ensure_ascii=False)


def kernel(**values):
    """The text of one kernel."""
    return "\n".join(["[kernel.gauge]", *(f"{k} = {toml(v)}" for k, v in values.items()), ""])


# --- what a file stands for ----------------------------------------------------------------------


def test_a_list_stands_for_each_of_its_values():
    specs = parse(kernel(n=8, loop=["dot", "fused"], block=[1, 4], language="c"))
    assert [(s.name, s.schedule.loop, s.schedule.block) for s in specs] == [
        ("gauge_dot_block1", "dot", 1),
        ("gauge_dot_block4", "dot", 4),
        ("gauge_fused_block1", "fused", 1),
        ("gauge_fused_block4", "fused", 4),
    ]


def test_names_of_variants_are_names():
    text = kernel(
        n=8, alpha=[-1, 0.5, 1e-3, 2e20], fma=[True, False], order=["row-major", "column-major"]
    )
    names = {spec.name for spec in parse(text)}
    assert len(names) == 4 * 2 * 2
    assert "gauge_alphaminus_1_fma_row_major" in names
    assert "gauge_alpha0p5_no_fma_column_major" in names
    assert all(name.isidentifier() and name.isascii() for name in names)


def test_without_a_language_a_kernel_is_made_in_each_under_one_name():
    specs = parse(kernel(n=3))
    assert [spec.language for spec in specs] == list(LANGUAGES)
    assert {spec.name for spec in specs} == {"gauge"}


def test_defaults_hold_where_a_kernel_says_nothing_and_has_use_for_them():
    text = '[defaults]\nlayout = "packed"\nn = 5\nlanguage = "c"\nbeta = 2\nkd = 1\ntile = 2\n'
    text += 'loop = ["dot", "fused"]\n'
    text += '[kernel.a1]\n[kernel.b1]\nn = 6\nlayout = "tiled"\nloop = "axpy"\n'
    text += '[kernel.c1]\noperation = "quadform"\n'
    specs = {spec.name: spec for spec in parse(text)}
    assert list(specs) == ["a1_dot", "a1_fused", "b1", "c1_dot", "c1_fused"]
    assert specs["a1_dot"].values["beta"] == 2
    assert specs["a1_dot"].layout.n == specs["c1_dot"].layout.n == 5
    assert (specs["b1"].layout.n, specs["b1"].layout.tile, specs["b1"].schedule.loop) == (
        6, 2, "axpy",
    )  # fmt: skip
    assert "kd" not in specs["a1_dot"].values
    assert "beta" not in specs["c1_dot"].values


def test_defaults_without_use_are_left_out_though_no_layout_is_named():
    (spec,) = parse('[defaults]\nn = 5\nkd = 1\n[kernel.gauge]\nlanguage = "c"\n')
    assert spec.layout.name == "full"


def test_a_specification_comes_back_from_its_own_values():
    for spec in parse(kernel(layout="band", n=9, kd=2, dtype="complex64", structure="hermitian")):
        assert demilune.make_spec(spec.name, **spec.values) == spec
        assert demilune.make_spec(spec.name, **spec.stated) == spec


def test_the_same_text_gives_the_same_specifications(tmp_path):
    path = tmp_path / "gauges.toml"
    path.write_text(STARTER)
    assert read(path).specs == read(str(path)).specs == parse(STARTER)
    assert read(path).text == STARTER


# --- all errors at once --------------------------------------------------------------------------


def test_all_errors_of_a_file_are_told_at_once():
    text = """
    [defaults]
    dtipe = "float32"
    [kernel.one]
    n = 0
    lop = "dot"
    layout = "pakced"
    [kernel.two]
    structure = "hermitian"
    n = 3
    block = 4
    [kernel.while]
    n = "runtme"
    [kernel."a b"]
    n = 3
    [kernals]
    """
    found = {(one.kernel, one.key) for one in problems(text)}
    assert found == {
        (None, "kernals"), ("[defaults]", "dtipe"), ("one", "n"), ("one", "lop"),
        ("one", "layout"), ("two", "structure"), ("two", "block"), ("while", "name"),
        ("while", "n"), ("a b", "name"),
    }  # fmt: skip


def test_an_error_of_a_variant_is_told_once_and_of_the_table():
    (one,) = problems(kernel(n=3, loop=["dot", "axpy", "fused"], block=[1, 4]))
    assert (one.kernel, one.key) == ("gauge", "block")


@pytest.mark.parametrize("lists", ["loop = []\nblock = []", "block = [1, 1]\nincx = [2, 2]"])
def test_every_bad_list_and_all_else_is_told(lists):
    found = {one.key for one in problems(f"[kernel.gauge]\n{lists}\nn = 0\n")}
    assert found == {line.split()[0] for line in lists.split("\n")} | {"n"}


def test_a_wrong_value_hides_no_wrong_combination():
    found = {one.key for one in problems(kernel(layout="band", n=4, kd=9, lop="dot"))}
    assert found == {"kd", "lop"}


def test_a_wrong_value_is_not_told_again_as_a_wrong_combination_or_name():
    (one,) = problems(kernel(layout="tiled", n=4, tile=0))  # not: the default is too large
    assert one.key == "tile"
    (one,) = problems(kernel(n=4, alpha=[1, 10**400]))  # not: the variant's name is too long
    assert one.key == "alpha"


def test_a_wrong_value_hides_no_clash_of_names():
    text = "[kernel.one]\nn=3\n[kernel.ONE]\nn=3\n[kernel.two]\nn=0\n"
    assert {(one.kernel, one.key) for one in problems(text)} >= {("two", "n"), ("ONE", None)}


def test_a_wrong_default_is_told_though_no_kernel_takes_it():
    (one,) = problems('[defaults]\nkd = "wide"\n[kernel.gauge]\nlayout = "packed"\nn = 3\n')
    assert (one.kernel, one.key) == ("[defaults]", "kd")


def test_a_wrong_default_is_told_where_it_stands():
    (one,) = problems('[defaults]\nloop = "dott"\n[kernel.one]\nn = 3\n[kernel.two]\nn = 3\n')
    assert (one.kernel, one.key) == ("[defaults]", "loop")
    assert 'did you mean "dot"?' in one.message


def test_a_wrong_default_hides_no_other_error_and_no_own_value_of_a_kernel():
    text = '[defaults]\nloop = "dott"\n[kernel.one]\nblock = 0\n[kernel.two]\nloop = "axpi"\n'
    found = {(one.kernel, one.key) for one in problems(text)}
    assert found == {("[defaults]", "loop"), ("one", "block"), ("two", "loop")}


# --- misspelt keys and values --------------------------------------------------------------------

SETTING = {  # what must be said so that the key is one that the kernel has
    "ld": {"layout": "full"}, "kd": {"layout": "band"}, "tile": {"layout": "tiled"},
    "transposed": {"layout": "rfp"},
}  # fmt: skip


def misspelt(word):
    """The word with a letter in the middle doubled."""
    middle = len(word) // 2
    return word[:middle] + word[middle] + word[middle:]


@pytest.mark.parametrize("key", [key for key in known_keys() if key != "n"])
def test_the_nearest_key_is_offered(key):
    found = problems(kernel(**SETTING.get(key, {}), **{misspelt(key): 1}))
    (one,) = [problem for problem in found if problem.key == misspelt(key)]
    assert f'did you mean "{key}"?' in one.message
    assert f'unknown key "{misspelt(key)}"' in one.message
    assert "allowed: operation, layout" in one.message


@pytest.mark.parametrize(
    ("key", "word"), [(k, w) for k, key in known_keys().items() for w in key.words]
)
def test_the_nearest_value_is_offered_and_all_that_are_allowed(key, word):
    found = problems(kernel(**{**SETTING.get(key, {}), key: misspelt(word)}))
    (one,) = [problem for problem in found if problem.key == key]
    assert f'found "{misspelt(word)}"' in one.message
    assert f'did you mean "{word}"?' in one.message
    assert all(f'"{other}"' in one.message for other in known_keys()[key].words)


# --- names ---------------------------------------------------------------------------------------


def words(text):
    return text.split()


# From memory: the keywords of ISO/IEC 9899:1999, 6.4.1, and of ISO/IEC 14882:2017, [lex.key].
C_WORDS = words("""
auto break case char const continue default do double else enum extern float for goto
if inline int long register restrict return short signed sizeof static struct switch typedef union
unsigned void volatile while _Bool _Complex _Imaginary""")
CPP_WORDS = words("""
alignas alignof asm bool catch char16_t char32_t class const_cast constexpr decltype
delete dynamic_cast explicit export false friend mutable namespace new noexcept nullptr operator
private protected public reinterpret_cast static_assert static_cast template this thread_local throw
true try typeid typename using virtual wchar_t and and_eq bitand bitor compl not not_eq or or_eq xor
xor_eq""")
PYTHON_WORDS = [*keyword.kwlist, *(word for word in keyword.softkwlist if word != "_")]


@pytest.mark.parametrize("where", ["kernel", "file"])
def test_reserved_words_of_every_language_are_no_names(where):
    words = dict.fromkeys(C_WORDS + CPP_WORDS + PYTHON_WORDS)
    if where == "kernel":
        text = "".join(f"[kernel.{word}]\nn = 3\n" for word in words)
        found = {one.kernel: one for one in problems(text)}
    else:
        text = "".join(f'[kernel.k{word}]\nn = 3\nfile = "{word}"\n' for word in words)
        found = {one.kernel.removeprefix("k"): one for one in problems(text)}
    assert found.keys() == words.keys()
    for word, one in found.items():
        assert f'"{word}"' in one.message
        assert word.startswith("_") or "reserved" in one.message
        assert one.key == ("name" if where == "kernel" else "file")


# From memory: functions and types of the standard library of C (ISO/IEC 9899:1999, Annex B), whose
# names are reserved as external identifiers (7.1.3). gcc and clang refuse or warn of them.
LIBRARY_WORDS = words("""
acos asin atan atan2 cbrt ceil copysign cos cosh erf exp exp2 expm1 fabs fdim
floor fma fmax fmin fmod frexp hypot ilogb ldexp lgamma log log10 log1p log2 logb lrint lround modf
nan nearbyint nextafter pow remainder remquo rint round scalbn sin sinh sqrt tan tanh tgamma trunc
abort abs atexit atof atoi bsearch calloc div exit free getenv malloc qsort rand realloc srand
strtod system memchr memcmp memcpy memmove memset strcat strchr strcmp strcpy strlen strncmp printf
puts fprintf sprintf scanf fopen fclose int8_t uint8_t int16_t int64_t intptr_t uintmax_t size_t""")


def test_names_of_the_c_library_are_no_names():
    text = "".join(f"[kernel.{word}]\nn = 3\n" for word in LIBRARY_WORDS)
    assert {one.kernel for one in problems(text)} == set(LIBRARY_WORDS)


@pytest.mark.parametrize("name", ["two_sum_float64", "two_product_float64"])
def test_names_of_emitted_helpers_are_no_names(name):
    problems(f'[kernel.{name}]\nn = 3\naccumulator = "compensated"\n')


@pytest.mark.parametrize("name", ["a", "x", "y"])
def test_names_of_parameters_are_no_names(name):
    found = problems(f"[kernel.{name}]\nn = 3\n[kernel.other]\nn = 0\n")
    assert {(one.kernel, one.key) for one in found} == {(name, "name"), ("other", "n")}


@pytest.mark.parametrize(
    "name",
    ["../x", "..", ".", "a/b", "a\\b", "/etc/x", "", " ", "a b", "é", "ａ", "x" * 64, "1a", "_a",
     "a-b", "a.b", "a\nb", "a\x00b"],
)  # fmt: skip
def test_what_could_escape_the_folder_or_is_no_identifier_is_no_name(name):
    quoted = toml(name)
    (one,) = problems(f"[kernel.{quoted}]\nn = 3\n")
    assert (one.kernel, one.key) == (name, "name")
    assert "begins with a letter" in one.message
    (one,) = problems(f"[kernel.gauge]\nn = 3\nfile = {quoted}\n")
    assert (one.kernel, one.key) == ("gauge", "file")
    assert "at most 63 characters" in one.message


def test_the_longest_name_is_a_name():
    assert parse(f"[kernel.{'x' * 63}]\nn = 3\n")


def test_a_variant_whose_name_is_too_long_is_told():
    (one,) = problems(f"[kernel.{'x' * 60}]\nn = 3\nloop = ['dot', 'axpy']\n".replace("'", '"'))
    assert "63" in one.message


@pytest.mark.parametrize(
    ("text", "name", "hint"),
    [
        ("[kernel.gauge]\nn=3\n[kernel.Gauge]\nn=3", "Gauge", "two kernels"),
        ('[kernel.b]\nn=3\nloop=["dot","axpy"]\n[kernel.b_dot]\nn=3', "b_dot", "two kernels"),
        ('[kernel.b]\nn=3\nfile="p"\n[kernel.B]\nn=3\nfile="q"', "B", "two kernels"),
        ('[kernel.b]\nn=3\nfile="gauge"\n[kernel.gauge]\nn=3', "gauge", 'file "gauge"'),
        ('[kernel.b]\nn=3\nfile="p"\n[kernel.c]\nn=3\nfile="P"', "c", 'file "P"'),
        ('[kernel.b]\nn=3\nfile="p"\n[kernel.c]\nn=3\nfile="p"\nenvironment="freestanding"', "c",
         "both environments"),
    ],
)  # fmt: skip
def test_names_that_clash(text, name, hint):
    found = problems(text)
    assert {one.kernel for one in found} == {name}
    assert any(hint in one.message for one in found)


def test_routines_may_share_a_file():
    specs = parse('[defaults]\nn=3\nfile="gauges"\n[kernel.one]\n[kernel.two]\n')
    assert {spec.file for spec in specs} == {"gauges"}


# --- the schema ----------------------------------------------------------------------------------

VALIDATOR = jsonschema.Draft202012Validator(schema())


def test_the_shipped_schema_is_what_the_program_prints():
    jsonschema.Draft202012Validator.check_schema(schema())
    shipped = SHIPPED.read_text(encoding="utf-8")
    assert json.loads(shipped) == schema()
    assert invoke("schema").stdout == shipped


def test_the_schema_has_every_key_with_its_meaning_and_default():
    properties = schema()["$defs"]["table"]["properties"]
    assert properties.keys() == known_keys().keys()
    assert all(one["description"] for one in properties.values())
    assert properties["n"]["default"] == "runtime"
    for choice in {c for o in OPERATIONS for la in LAYOUTS for c in choices_for(o, la)}:
        for key, default in defaults_of(choice).items():
            if default is not None:
                VALIDATOR.validate({"kernel": {"gauge": {key: default}}})


def test_there_are_examples():
    assert EXAMPLES


@pytest.mark.parametrize("path", EXAMPLES, ids=lambda path: path.stem)
def test_the_schema_accepts_the_examples_which_name_it(path):
    text = path.read_text(encoding="utf-8")
    first = text.splitlines()[0]
    assert first.startswith("#:schema ")
    assert (path.parent / first.removeprefix("#:schema ")).resolve() == SHIPPED.resolve()
    VALIDATOR.validate(tomllib.loads(text))
    assert read(path).specs
    VALIDATOR.validate(tomllib.loads(STARTER))


WRONG = [
    {}, {"kernel": {}}, {"kernals": {"b": {}}}, {"kernel": {"b": {"n": 3}}, "default": {}},
    {"kernel": {"../b": {"n": 3}}}, {"kernel": {"b" * 64: {"n": 3}}}, {"kernel": {"b": 3}},
    {"defaults": [], "kernel": {"b": {}}},
    *({"kernel": {"b": {"n": n}}} for n in (0, -1, 10**30, True, 1.5, "12", "runtme", [], [3, 3])),
    *({"kernel": {"b": {misspelt(key): 1}}} for key in known_keys() if key != "n"),
    *({"kernel": {"b": {k: misspelt(w)}}} for k, key in known_keys().items() for w in key.words),
]  # fmt: skip


@pytest.mark.parametrize("document", WRONG, ids=lambda document: toml(document)[:60])
def test_the_schema_and_the_program_refuse_what_is_misspelt(document):
    assert not VALIDATOR.is_valid(document)
    lines = []
    for table, content in document.items():
        if table == "kernel" and isinstance(content, dict):
            lines.append("[kernel]")
            for name, values in content.items():
                inline = (
                    ", ".join(f"{k} = {toml(v)}" for k, v in values.items())
                    if isinstance(values, dict)
                    else None
                )
                lines.append(f"{toml(name)} = " + (f"{{{inline}}}" if inline is not None else "3"))
        else:
            lines.insert(0, f"{table} = " + ("[]" if content == [] else "{}"))
    assert problems("\n".join(lines))


VALUES = {
    key: st.sampled_from([*one.words, "runtime", "dott", 0, 1, 2, 3, 9, 513, -1, True, False, 0.5])
    for key, one in known_keys().items()
}


@st.composite
def tables(draw):
    keys = draw(st.lists(st.sampled_from([*VALUES, "lop"]), unique=True, max_size=5))
    table = {key: draw(VALUES.get(key, VALUES["n"])) for key in keys}
    return table | draw(st.sampled_from([{}, {"n": 5}, {"n": 5, "layout": "band", "kd": 2}]))


@given(tables())
def test_any_table_is_taken_or_refused_and_the_schema_agrees(table):
    valid = VALIDATOR.is_valid({"kernel": {"gauge": table}})
    try:
        specs = parse(kernel(**table))
    except SpecError:  # nothing else may come out
        assert problems(kernel(**table))
    else:
        assert specs
        assert valid
