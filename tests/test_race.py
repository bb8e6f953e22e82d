"""Races: what may race and what is found, the command with its table and JSON, pictures.

Nothing here depends on how long anything takes.
"""

from __future__ import annotations

import builtins
import importlib.util
import json
import re
import struct

import pytest
from test_cli import invoke, run
from test_race_calls import OPEN, scipys
from tools import need

import demilune.isa
import demilune.race.contestants
import demilune.race.values
from demilune import CheckError, InputError, MissingError, expand, make_spec
from demilune.race import Race, Row, Timing, picture, race
from demilune.race.driver import Driver

TOML = """
[defaults]
n = "runtime"
language = "c"
[kernel.gauges]
layout = ["full", "packed"]
[kernel.footbridge]
layout = "band"
[kernel.buoy]
operation = "quadform"
n = 5
"""


@pytest.fixture(autouse=True)
def _compiler():
    need("gcc")


@pytest.fixture
def spec(tmp_path):
    path = tmp_path / "levels.toml"
    path.write_text(TOML)
    return path


# --- races ------------------------------------------------------------------------------------


def test_a_race_from_python():
    kernels = expand("gauges", {**OPEN, "layout": ["full", "packed", "rfp"]})
    kernels += expand("buoy", {"n": [4, 6], "language": "c", "dtype": "int32"})
    told = []
    found = race(
        kernels, [30, 24, 30], [scipys()], ld=31, rounds=3, slice_seconds=1e-5, whole=True,
        progress=lambda what, done, total: told.append(what),
    )  # fmt: skip
    places = [(row.kernel, row.n) for row in found.rows]
    names = ("gauges_full", "gauges_packed", "gauges_rfp")
    assert places == [("buoy_n4", 4), ("buoy_n6", 6), *((k, n) for n in (24, 30) for k in names)]
    assert found.status == 0
    assert found.left_out == []
    assert found.row("gauges_full", 24).sizes == {"ld": 31}
    assert found.libraries == ["scipy's"]
    row = found.row("gauges_packed", 30)
    assert len(row.time.seconds) == 3
    assert row.ratio("scipy's") == row.peers["scipy's"].median / row.time.median
    assert row.ratio("nobody's") is None
    assert row.gflops == pytest.approx(2 * 30 * 30 / row.time.median / 1e9)
    assert row.bytes == 465 * 8
    assert row.of_sum == row.sum.median / row.time.median
    assert 0 < row.of_peak < 1
    assert set(row.whole) == {"scipy's"}
    integers = found.row("buoy_n4", 4)
    assert (integers.sum, integers.peak, integers.peers, integers.whole) == (None, None, {}, {})
    rfp = found.row("gauges_rfp", 24)
    assert rfp.peers == {}
    assert found.ratio("gauges_rfp", "gauges_full", 24) == pytest.approx(
        found.row("gauges_full", 24).time.median / rfp.time.median
    )
    with pytest.raises(InputError, match="gauges_rfp was not raced at n = 25"):
        found.row("gauges_rfp", 25)
    assert {"n = 24", "n = 30", "n = 30, round 3 of 3", "done"} <= set(told)


def test_a_timing_tells_median_and_quartiles():
    one = Timing("gauges", "kernel", 8, 5, 0, (4.0, 1.0, 2.0, 3.0, 10.0))
    assert one.median == 3
    assert one.quartiles == (2, 4)
    assert one.spread == pytest.approx(2 / 3)


@pytest.mark.parametrize(
    ("sizes", "more", "message"),
    [
        ([0], {}, "sizes are whole numbers from 1, not 0"), ([], {}, "not none"),
        ([8], {"kd": 2}, "no kernel leaves kd open"), ([8], {"rounds": 0}, "at least one round"),
        ([8], {"ld": 7}, "gauges at n = 8: ld = 7; it must be at least"),
        ([10**7], {}, r"n = 10000000 takes \d+ GiB"),
    ],
)  # fmt: skip
def test_what_cannot_be_raced(sizes, more, message):
    with pytest.raises(InputError, match=message):
        race([make_spec("gauges", **OPEN)], sizes, [], **more)


def test_sizes_for_kernels_of_a_fixed_size_are_refused():
    with pytest.raises(InputError, match="every kernel has a fixed n"):
        race([make_spec("gauges", n=4, language="c")], [8], [])


def test_two_kernels_of_one_name_are_refused():
    with pytest.raises(InputError, match='two kernels are called "gauges"'):
        race([make_spec("gauges", **OPEN), make_spec("gauges", layout="packed", **OPEN)], [8], [])


def plant(monkeypatch, name):
    """Changes the source of the kernel called ``name``: its products are halved."""
    pipeline = demilune.pipeline
    real = pipeline.render

    def wrong(plans, file, language, **options):
        made = real(plans, file, language, **options)
        if any(plan.spec.name == name for plan in plans):
            changed = {
                key: re.sub(r"(y\[[^]]*\] = )", r"\g<1>0.5*", text) for key, text in made.items()
            }
            assert changed != made
            return changed
        return made

    monkeypatch.setattr(pipeline, "render", wrong)


def test_a_wrong_kernel_is_not_raced(monkeypatch):
    plant(monkeypatch, "wrong")
    right, wrong = (make_spec(name, layout="packed", n=7, language="c") for name in ("ok", "wrong"))
    found = race([right, wrong], libraries=[], rounds=1, slice_seconds=1e-6)
    assert [row.kernel for row in found.rows] == ["ok"]
    [left] = found.left_out
    assert (left.name, left.fault, found.status) == ("wrong", True, 1)
    assert "not verified: level exact" in left.reason
    with pytest.raises(CheckError, match="no kernel races: wrong: not verified"):
        race([wrong], libraries=[])


def test_what_this_machine_cannot_run_is_missing(monkeypatch):
    monkeypatch.setattr(demilune.isa.InstructionSet, "here", property(lambda one: not one.flags))
    foreign = make_spec("gauges", isa="avx2", lanes=4, **OPEN)
    with pytest.raises(MissingError, match="no kernel races: gauges: not verified: compiled, not"):
        race([foreign], [8], [])


def test_a_library_that_does_another_job_is_noticed(monkeypatch):
    """Here it is called with the wrong triangle."""
    monkeypatch.setattr(demilune.race.contestants, "triangle_for_fortran", lambda spec: "L")
    kernels = expand("gauges", {**OPEN, "layout": "packed", "triangle": ["upper", "lower"]})
    found = race(kernels, [20], [scipys()], rounds=1, slice_seconds=1e-6)
    assert found.row("gauges_lower", 20).peers
    assert not found.row("gauges_upper", 20).peers
    [left] = found.left_out
    assert left.fault
    assert found.status == 1
    assert left.name == "scipy's dspmv L"
    assert "its result is not that of gauges_upper at n = 20" in left.reason


def test_a_full_product_that_is_another_is_noticed(monkeypatch):
    kernel = make_spec("gauges", **OPEN)
    real = demilune.race.contestants._fortran

    def transposed(where, words, *rest):
        return real(where, ["dgemv", "T"] if words[0] == "dgemv" else words, *rest)

    monkeypatch.setattr(demilune.race.contestants, "_fortran", transposed)
    found = race([kernel], [20], [scipys()], rounds=1, slice_seconds=1e-6, whole=True)
    assert found.rows[0].whole == {}
    assert found.rows[0].peers
    assert [one.name for one in found.left_out] == ["scipy's dgemv T"]


def test_a_result_of_zeros_is_alike(monkeypatch):
    monkeypatch.setitem(demilune.race.values.SCALARS, "alpha", 0.0)
    kernel = make_spec("gauges", alpha="runtime", **OPEN)
    found = race([kernel], [20], [scipys()], rounds=1, slice_seconds=1e-6)
    assert found.left_out == []
    assert found.rows[0].peers


def test_bits_that_threads_change_are_noticed(monkeypatch):
    kernel = make_spec("gauges", threads=2, **OPEN)
    found = race([kernel], [40], [scipys()], rounds=1, slice_seconds=1e-6)
    assert found.left_out == []
    assert found.rows[0].peers["scipy's"].label == "scipy's dsymv U threads=2"
    real, asked = Driver.results, []

    def other(driver, entry):
        asked.append(entry)
        return real(driver, entry) * (1 + (asked.count(0) > 1) * 2.0**-40)

    monkeypatch.setattr(Driver, "results", other)
    found = race([kernel], [40], [scipys()], rounds=1, slice_seconds=1e-6)
    assert [one.reason for one in found.left_out] == ["its bits change with threads at n = 40"]
    assert found.rows == []


# --- the command ------------------------------------------------------------------------------

FEW = ("--rounds", 1, "--sizes", "8,20", "--kd", 3)


def test_the_table(spec):
    result = invoke("race", spec, *FEW)
    assert result.exit_code == 0, result.output
    lines = result.stdout.splitlines()
    assert re.match(r"kernel +n +time +GFLOP/s +of sum +of peak +spread .*/ ours", lines[0])
    kernels = [line.split()[:2] for line in lines[1:] if re.match(r"(gauges|foot|buoy)", line)]
    names = ("gauges_full", "gauges_packed", "footbridge")
    assert kernels == [["buoy", "5"], *([name, n] for n in ("8", "20") for name in names)]
    assert "medians of 1 rounds" in result.stdout
    assert "scipy's: OpenBLAS" in result.stdout


def test_the_record(spec):
    result = invoke("race", spec, *FEW, "--json", "-k", "gauges", "-k", "footbridge")
    record = json.loads(result.stdout)
    assert result.exit_code == 0
    assert set(record) == {
        "made by", "date", "machine", "rounds", "slice seconds", "kernels", "rows", "timings",
        "left out",
    }  # fmt: skip
    assert {"processor", "caches", "compiler", "libraries", "variables"} <= set(record["machine"])
    for facts in record["machine"]["libraries"].values():
        assert set(facts) == {"version", "core", "says", "integer bits", "file"}
    assert re.fullmatch(r"\d{4}-\d\d-\d\dT\d\d:\d\d:\d\d\+00:00", record["date"])
    assert record["kernels"]["footbridge"]["layout"] == "band"
    assert "-ffp-contract=off" in record["kernels"]["footbridge"]["compiler flags"]
    labels = {(one["label"], one["n"]): one for one in record["timings"]}
    assert len(labels) == len(record["timings"])
    assert len(record["rows"]) == 6
    for row in record["rows"]:
        own = labels[row["kernel"], row["n"]]
        assert own["kind"] == "kernel"
        assert row["seconds"] == own["median"]
        assert len(own["samples"]) == 1
        for peer in row["libraries"].values():
            other = labels[peer["timing"], row["n"]]
            assert peer["ratio"] == pytest.approx(other["median"] / own["median"])
        assert row["sum"] is None or labels[row["sum"], row["n"]]["kind"] == "sum"
    assert record["rows"][2]["sizes"] == {"kd": 3, "ld": 4}


def test_a_kernel_in_python_is_left_out_with_a_word(tmp_path):
    path = tmp_path / "gauge.toml"
    path.write_text('[kernel.gauge]\nn = 3\nlanguage = ["c", "python"]\n')
    result = invoke("race", path, "--rounds", 1)
    assert result.exit_code == 0
    assert result.stderr == ("demilune: left out: gauge (python): only kernels in C are raced\n")
    path.write_text('[kernel.gauge]\nn = [3, 4, 5]\nlanguage = ["c", "python"]\n')
    result = invoke("race", path, "--rounds", 1)
    assert result.stderr.count("\n") == 1
    assert "left out: gauge_n3 and 2 more (python)" in result.stderr
    path.write_text('[kernel.gauge]\nn = 3\nlanguage = "python"\n')
    result = invoke("race", path)
    assert result.exit_code == 2
    assert result.stderr.count("\n") == 1
    assert "no kernel is in C" in result.stderr


@pytest.mark.parametrize(
    ("arguments", "message"),
    [
        (["--sizes", "8,x"], "--sizes: 'x' is no size"), (["--sizes", ""], "'' is no size"),
        (["--sizes", "0"], "'0' is no size"), (["--sizes", "-4"], "'-4' is no size"),
        (["--sizes", "8,,9"], "'' is no size"), (["--sizes", "1e3"], "'1e3' is no size"),
        (["--sizes", "9" * 12], "is no size"), (["--blas", "nowhere.so"], "no such library"),
        (["--picture", "x.jpeg"], "x.jpeg: a picture is .svg or .png"),
        (["--picture", "nowhere/x.svg"], "there is no folder nowhere"),
        (["-k", "nothing"], 'no kernel begins with "nothing"'),
        (["--ld", "3", "--sizes", "8"], "ld = 3; it must be at least"),
    ],
)  # fmt: skip
def test_bad_input_is_one_message(spec, arguments, message):
    result = invoke("race", spec, *arguments)
    assert result.exit_code == 2
    assert message in result.stderr
    assert result.stderr.count("\n") == 1
    assert result.stdout == ""


@pytest.mark.parametrize("arguments", [["--rounds", "0"], ["--kd", "-1"], ["--ld", "0"]])
def test_numbers_out_of_range(spec, arguments):
    result = invoke("race", spec, *arguments)
    assert result.exit_code == 2
    assert f"Invalid value for '{arguments[0]}'" in result.stderr


def test_a_pipe_gets_no_progress(spec):
    result = run("race", spec, "-k", "buoy", "--rounds", 1)
    assert result.returncode == 0
    assert result.stderr == ""
    assert "\x1b" not in result.stdout


# --- pictures ---------------------------------------------------------------------------------


def invented(names=("scipy's",), kernels=2):
    """A race that nobody ran."""
    timing = {n: Timing("scipy's dsymv U", "library", n, 5, 0, (2e-6 * n,)) for n in (8, 64, 512)}
    rows = []
    for number in range(kernels):
        for n in timing:
            own = Timing(f"gauges{number}", "kernel", n, 5, 0, (1e-6 * n,))
            limit = None if n == 8 else Timing("sum", "sum", n, 5, 0, (5e-7 * n,))
            peers = {
                name: Timing(f"{name} dsymv U", "library", n, 5, 0, timing[n].seconds)
                for name in names
            }
            rows.append(Row(own.label, n, {}, 2 * n * n, 8 * n, own, limit, None, peers, {}))
    machine = {"processor": "a clockwork", "libraries": {}, "variables": {}}
    return Race(machine, "2026-11-05T10:00:00+00:00", 1, 0.002, {}, rows)


def test_a_picture_of_every_kind(tmp_path):
    need_matplotlib()
    found = invented()
    for name, head in (("speed.svg", b"<?xml"), ("speed.png", b"\x89PNG")):
        path = tmp_path / name
        picture.prepare(path)
        picture.save(found, path)
        first = path.read_bytes()
        assert first.startswith(head)
        picture.prepare(path)  # our own may be written over
        picture.save(found, path)
        assert path.read_bytes() == first
    text = (tmp_path / "speed.svg").read_text()
    for words in ("n (rows of the matrix)", "speed (GFLOP/s)", "gauges0", "gauges1", "a clockwork",
                  "scipy's dsymv U", "(time to sum the stored half / time)"):  # fmt: skip
        assert words in text
    width, height = struct.unpack(">II", (tmp_path / "speed.png").read_bytes()[16:24])
    assert width > 800
    assert height > 800
    assert sorted(path.name for path in tmp_path.iterdir()) == ["speed.png", "speed.svg"]


def test_many_lines_keep_one_library():
    need_matplotlib()
    few = picture.drawn(invented(("east", "west"), 3), "svg").decode()
    many = picture.drawn(invented(("east", "west"), 8), "svg").decode()
    assert "east dsymv U" in few
    assert "west dsymv U" in few
    assert "east dsymv U" in many
    assert "west dsymv U" not in many


def test_a_picture_of_somebody_else_is_left_alone(tmp_path, spec):
    need_matplotlib()
    path = tmp_path / "tide.png"
    path.write_bytes(b"\x89PNG of a tide")
    result = invoke("race", spec, *FEW, "--picture", path)
    assert result.exit_code == 2
    assert "was not written by Demilune and is left alone" in result.stderr
    assert path.read_bytes() == b"\x89PNG of a tide"
    result = invoke("race", spec, *FEW, "--picture", path, "--force")
    assert result.exit_code == 0, result.stderr
    assert path.stat().st_size > 10_000


def test_without_matplotlib_nothing_is_measured(spec, monkeypatch, tmp_path):
    real = builtins.__import__

    def without(name, *rest):
        if name.partition(".")[0] == "matplotlib":
            raise ImportError(name)
        return real(name, *rest)

    monkeypatch.setattr(builtins, "__import__", without)
    result = invoke("race", spec, *FEW, "--picture", tmp_path / "x.svg")
    assert result.exit_code == 3
    assert result.stderr == (
        "demilune: pictures are drawn by matplotlib, which is not here; get it with: "
        'pip install "demilune[pictures]"\n'
    )
    assert result.stdout == ""


def need_matplotlib():
    if importlib.util.find_spec("matplotlib") is None:
        pytest.skip("matplotlib is not on this machine")
