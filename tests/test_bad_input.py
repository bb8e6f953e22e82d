"""Bad input from the command line: one clear message, the right exit status, nothing half-written.

Specifications that cannot be, compilers that are missing, fail or lie, and Ctrl-C.
"""

from __future__ import annotations

import json
import os
import re
import shlex
import signal
import subprocess
import sys
import time

import pytest
from test_cli import GAUGE, environment, invoke, run, snapshot
from tools import need

from demilune import files
from demilune.toolchain import build as toolchain

HOW = "apt-get install gcc"


@pytest.fixture
def place(tmp_path):
    """A folder with output of an earlier run and a file of somebody else."""
    folder = tmp_path / "out"
    folder.mkdir()
    (folder / "notes.txt").write_text("the barrier's own notes")
    (folder / "gauge.py").write_text('"""\nMade by Demilune 0.0\n"""\n')
    return folder


def refused(command, content, place, status=2):
    """Runs a command on a specification that is refused; gives its messages."""
    path = place.parent / "gauges.toml"
    path.write_bytes(content if isinstance(content, bytes) else content.encode())
    before = snapshot(place.parent)
    more = ["-o", place] if command in ("build", "emit") else []
    result = invoke(command, path, *more)
    assert result.exit_code == status, result.output
    assert result.stdout == ""
    lines = result.stderr.splitlines()
    assert lines
    assert all(line.startswith("demilune: ") for line in lines)
    assert snapshot(place.parent) == before
    return lines


# --- files that cannot be read --------------------------------------------------------------------


@pytest.mark.parametrize(
    ("content", "parts"),
    [
        ("[kernel.gauge\nn = 3", ["gauges.toml", "not TOML", "line 1, column 14"]),
        ("[kernel.gauge]\nn = 3\nn = 4", ["gauges.toml", "not TOML", "overwrite a value"]),
        ("[kernel.gauge]\nn = three", ["gauges.toml", "not TOML", "line 2"]),
        (b"[kernel.gauge]\nn = 3 # \xff", ["gauges.toml", "not UTF-8", "byte 23"]),
        ("", ["gauges.toml", "no kernel", "[kernel.NAME]"]),
        ("# nothing but a comment", ["gauges.toml", "no kernel"]),
        ("[defaults]\nn = 3", ["gauges.toml", "no kernel"]),
        ("[kernel]", ["gauges.toml", "no kernel"]),
        ("kernel = 3", ["gauges.toml", "key kernel", "found 3", "table"]),
        ("[[kernel]]\nn = 3", ["gauges.toml", "key kernel", "table"]),
        ("[kernel]\ngauge = 3", ["gauges.toml", "kernel gauge", "found 3", "[kernel.gauge]"]),
        ("defaults = [1]\n" + GAUGE, ["gauges.toml", "key defaults", "found [1]", "table"]),
    ],
)
def test_a_file_that_is_no_specification(place, content, parts):
    (line,) = refused("build", content, place)
    assert all(part in line for part in parts), line


@pytest.mark.parametrize(
    ("table", "hint"), [("kernal", "kernel"), ("default", "defaults"), ("Kernel", "kernel")]
)
def test_a_misspelt_table(place, table, hint):
    (line,) = refused("emit", f"{GAUGE}[{table}.x1]\n", place)
    for part in ("gauges.toml", f'"{table}"', f'did you mean "{hint}"?', "allowed: [defaults]"):
        assert part in line


@pytest.mark.parametrize("command", ["plan", "emit", "verify", "build"])
def test_a_path_that_cannot_be_read(tmp_path, monkeypatch, command):
    monkeypatch.chdir(tmp_path)
    (tmp_path / "file").write_text("")
    for path, why in (
        (tmp_path / "none.toml", "No such file"),
        (tmp_path, "Is a directory"),
        (tmp_path / "file" / "x.toml", "Not a directory"),
        (tmp_path / ("x" * 300), "File name too long"),
        ("", "Is a directory"),
    ):
        result = invoke(command, path)
        assert result.exit_code == 2
        assert result.stdout == ""
        (line,) = result.stderr.splitlines()
        assert str(path) in line
        assert why in line
    assert [one.name for one in tmp_path.iterdir()] == ["file"]


def test_a_file_that_may_not_be_read(tmp_path):
    path = tmp_path / "gauge.toml"
    path.write_text(GAUGE)
    path.chmod(0)
    words = [sys.executable, "-m", "demilune", "plan", str(path)]
    if os.geteuid() == 0:  # whom permissions stop only without these
        rights = "--bounding-set=-dac_override,-dac_read_search"
        words = [need("setpriv"), rights, "--inh-caps=-all", *words]
    done = subprocess.run(words, capture_output=True, text=True, check=False)
    assert done.returncode == 2
    assert done.stdout == ""
    assert str(path) in done.stderr
    assert re.search("not readable|Permission denied", done.stderr)
    assert "Traceback" not in done.stderr


BIG = "1" * 400


@pytest.mark.parametrize("line", [f"alpha = {BIG}", f"beta = -{BIG}", f"alpha = [1, {BIG}]"])
def test_a_number_beyond_all_floats(place, line):
    (said,) = refused("build", f"{GAUGE}{line}\n", place)
    assert "key alpha" in said or "key beta" in said
    assert len(said) < 300


@pytest.mark.parametrize(
    "line", ["n = " + "1" * 5000, "n = " + "[" * 5000 + "]" * 5000], ids=["digits", "brackets"]
)
def test_what_the_reader_of_toml_itself_gives_up_on(place, line):
    (said,) = refused("build", f"[kernel.gauge]\n{line}\n", place)
    assert "gauges.toml" in said


@pytest.mark.parametrize("key", ["b\\nc", "b\\u001b[31mc"])
def test_a_message_is_one_line_whatever_a_key_holds(place, key):
    (line,) = refused("plan", f'[kernel.gauge]\n"{key}" = 3\n', place)
    assert "\x1b" not in line


# --- impossible combinations ----------------------------------------------------------------------

BAND, TILED, SKYLINE, RFP = (f'layout = "{one}"\n' for one in ("band", "tiled", "skyline", "rfp"))
RANK1, QUADFORM = (f'operation = "{one}"\n' for one in ("rank1", "quadform"))


def dtype(name):
    return f'dtype = "{name}"\n'


SIZE = ['"runtime"', "whole number", "from 1 to 512"]
FINITE = ['"runtime"', "a finite number"]
COMBINATIONS = [
    ("n = 0", "n", ["found 0", *SIZE]),
    ("n = -1", "n", ["found -1", *SIZE]),
    (f"n = {10**30}", "n", [f"found {10**30}", *SIZE]),
    ("n = 513", "n", ["found 513", *SIZE]),
    ("n = true", "n", ["found true", *SIZE]),
    ("n = 1.5", "n", ["found 1.5", *SIZE]),
    ("n = 12.0", "n", ["found 12.0", *SIZE]),
    ('n = "12"', "n", ['found "12"', *SIZE]),
    ("n = {}", "n", ["found {}", *SIZE]),
    ("n = 2020-01-01", "n", ["found", *SIZE]),
    ("n = [[3]]", "n", ["found [3]", *SIZE]),
    ('n = "runtine"', "n", ['found "runtine"', 'did you mean "runtime"?']),
    ("n = []", "n", ["empty list"]),
    ("n = [3, 4, 3]", "n", ["[3, 4, 3]", "twice"]),
    ('n = 3\nloop = ["dot", "dot"]', "loop", ["twice"]),
    (BAND + "n = 4\nkd = 4", "kd", ["n = 4", "at most 3", "not 4"]),
    (BAND + "n = 4\nkd = -1", "kd", ["found -1", "from 0"]),
    (BAND + "n = 4\nkd = 2\nld = 2", "ld", ["2 is less than kd + 1 = 3"]),
    (BAND + "n = 4\nld = 2", "ld", ["needs a fixed kd", 'ld = "runtime"']),
    ("n = 4\nkd = 1", "kd", ['layout "full" has no key "kd"', "allowed"]),
    ("n = 4\nld = 3", "ld", ["3 is less than n = 4"]),
    ("n = 4\nld = 0", "ld", ["found 0", "from 1"]),
    ("ld = 9", "ld", ["needs a fixed n", 'ld = "runtime"']),
    (RFP + "n = 4\nld = 4", "ld", ['layout "rfp" has no key "ld"', "allowed"]),
    (RFP + 'n = 4\norder = "row-major"', "order", ['"rfp" is only ever column-major']),
    (TILED + "n = 4\ntile = 0", "tile", ["found 0", "from 1"]),
    (TILED + "n = 4\ntile = 5", "tile", ["tile of 5", "n = 4"]),
    (TILED + "n = 8\ntile = 2\nblock = 4", "block", ["block of 4", "a tile has, 2"]),
    ("n = 4\nblock = 5", "block", ["block of 5", "n = 4"]),
    ("n = 4\nblock = 0", "block", ["found 0", "from 1 to 16"]),
    ("block = 17", "block", ["found 17", "from 1 to 16"]),
    ("n = 4\nblock = true", "block", ["found true", "whole number"]),
    ('unroll = "all"', "unroll", ["fixed n of at most 32", '"runtime"']),
    ('unroll = "all"\nn = 33', "unroll", ["at most 32", "33"]),
    (SKYLINE + 'n = 4\nunroll = "all"', "unroll", ["only when the routine is called"]),
    (BAND + 'n = 4\nunroll = "all"', "unroll", ["only when the routine is called"]),
    ("n = 4\nunroll = true", "unroll", ["found true", '"all"']),
    ('structure = "hermitian"', "structure", ["complex dtype", "not float64", '"symmetric"']),
    (dtype("int16") + 'structure = "hermitian"', "structure", ["complex dtype", "not int16"]),
    (dtype("float64") + 'accumulator = "wide"', "accumulator", ["wider than float64"]),
    (dtype("complex128") + 'accumulator = "wide"', "accumulator", ["wider", '"compensated"']),
    (dtype("int16") + 'accumulator = "compensated"', "accumulator", ["integer sums have none"]),
    (dtype("float32") + 'accumulator = "int64"', "accumulator", ["for integers, not float32"]),
    (dtype("int32") + 'accumulator = "int16"', "accumulator", ['found "int16"', '"int32"']),
    (dtype("int32") + "fma = true", "fma", ["exact", "leave fma at false"]),
    ("alpha = 0", "alpha", ["no product to compute"]),
    (RANK1 + "alpha = 0.0", "alpha", ["no update to do"]),
    ("alpha = nan", "alpha", ["found nan", *FINITE]),
    ("alpha = inf", "alpha", ["found inf", *FINITE]),
    ("beta = -inf", "beta", ["found -inf", *FINITE]),
    ("alpha = true", "alpha", ["found true", *FINITE]),
    ('alpha = "1"', "alpha", ['found "1"', *FINITE]),
    (dtype("float32") + "alpha = 1e39", "alpha", ["too large for float32"]),
    (dtype("complex64") + "beta = -1e39", "beta", ["too large for float32"]),
    (dtype("float32") + "beta = 1e-60", "beta", ["too small for float32"]),
    (dtype("int16") + "alpha = 1.5", "alpha", ["no whole number", "int16"]),
    (dtype("int32") + f"alpha = {2**63}", "alpha", ["does not fit into int64"]),
    (dtype("int16") + f"beta = -{2**31}", "beta", ["does not fit into int32"]),
    (QUADFORM + 'loop = "axpy"', "loop", ['"axpy"', "one number", '"fused" or "dot"']),
    (QUADFORM + "alpha = 2", "alpha", ['"quadform"', 'no key "alpha"']),
    (RANK1 + 'loop = "dot"', "loop", ['"rank1"', "no sum", 'use "axpy"']),
    (RANK1 + 'loop = "fused"', "loop", ['"rank1"', 'use "axpy"']),
    (RANK1 + "incy = 2", "incy", ['no key "incy"']),
    (RANK1 + 'accumulator = "compensated"', "accumulator", ["no sum"]),
    ("incx = 0", "incx", ["found 0", "other than 0"]),
    ("incy = 1025", "incy", ["found 1025", "from -1024 to 1024"]),
    ('language = "pyton"', "language", ['"c" or "python"', 'did you mean "python"?']),
    ('environment = "freestandin"', "environment", ['did you mean "freestanding"?']),
    ("file = 3", "file", ["found 3", "a text"]),
    ('file = "../gauge"', "file", ['found "../gauge"', "begins with a letter"]),
    ('file = "int"', "file", ['"int" is a reserved word']),
]


@pytest.mark.parametrize(
    ("lines", "key", "parts"), COMBINATIONS, ids=lambda one: one.replace("\n", ",")[:50]
    if isinstance(one, str) else "",
)  # fmt: skip
def test_an_impossible_combination(place, lines, key, parts):
    (line,) = refused("build", f"[kernel.gauge]\n{lines}\n", place)
    assert line.startswith(f"demilune: gauges.toml, kernel gauge, key {key}: ")
    assert all(part in line for part in parts), line


def test_too_many_combinations(place):
    numbers = list(range(1, 401))
    (line,) = refused("build", f"[kernel.gauge]\nalpha = {numbers}\nbeta = {numbers}\n", place)
    assert re.search(r"gauges.toml, kernel gauge: \d+ combinations are more than 100000", line)


def test_all_problems_are_told_each_on_its_line(place):
    text = '[kernel.gauge]\nn = 0\nlop = "dot"\n[kernel.int]\nlayout = "pakced"\n'
    lines = refused("build", text, place)
    heads = [line.split(": ")[1] for line in lines]
    assert heads == [
        "gauges.toml, kernel gauge, key n",
        "gauges.toml, kernel gauge, key lop",
        "gauges.toml, kernel int, key name",
        "gauges.toml, kernel int, key layout",
    ]


# --- compilers ------------------------------------------------------------------------------------


@pytest.fixture
def compiler(tmp_path, monkeypatch):
    """Sets CC to a program that does ``lines`` when it is to compile; the cache is empty."""
    monkeypatch.setenv("DEMILUNE_CACHE", str(tmp_path / "cache"))

    def make(lines, version="echo a compiler 1.0"):
        path = tmp_path / "some-cc"
        asked = f'if [ "$1" = --version ]; then {version}; exit 0; fi'
        path.write_text(f"#!/bin/sh\n{asked}\n{lines}\n")
        path.chmod(0o755)
        monkeypatch.setenv("CC", str(path))
        return path

    return make


def job(tmp_path, status, *words):
    """A whole job with C and Python kernels; gives the result and what became of each."""
    path = tmp_path / "gauge.toml"
    path.write_text(GAUGE)
    result = invoke("build", path, "-o", tmp_path / "out", *words)
    assert result.exit_code == status, result.output
    evidence = json.loads((tmp_path / "out" / "evidence.json").read_text())
    assert not [one for one in (tmp_path / "out").iterdir() if one.name.startswith(".")]
    cache = tmp_path / "cache"
    assert not cache.exists() or not list(cache.glob("making-*"))
    return result, {one["language"]: one for one in evidence["kernels"]}


@pytest.mark.parametrize("how", ["CC", "PATH"])
def test_without_a_compiler_the_python_kernels_are_made(tmp_path, monkeypatch, how):
    if how == "CC":
        monkeypatch.setenv("CC", "no-such-compiler")
    else:
        monkeypatch.delenv("CC", raising=False)
        monkeypatch.setenv("PATH", "")
    result, kernels = job(tmp_path, 3)
    assert kernels["python"]["status"] == "verified"
    assert kernels["c"]["status"] == "left out"
    assert HOW in kernels["c"]["reason"]
    assert "left out: gauge" in result.stdout
    assert HOW in result.stdout
    assert ("no-such-compiler (from CC, which names a program" in result.stdout) == (how == "CC")
    assert (tmp_path / "out" / "gauge.py").is_file()
    assert json.loads((tmp_path / "out" / "evidence.json").read_text())["compiler"] is None
    assert invoke("verify", tmp_path / "gauge.toml").exit_code == 3
    assert invoke("emit", tmp_path / "gauge.toml", "-o", tmp_path / "sources").exit_code == 0


def test_a_compiler_that_is_no_program_is_left_out(tmp_path, monkeypatch):
    broken = tmp_path / "broken-cc"
    broken.write_bytes(b"\x7fELF no program")
    broken.chmod(0o755)
    monkeypatch.setenv("CC", str(broken))
    _, kernels = job(tmp_path, 3)
    assert "broken-cc cannot be run" in kernels["c"]["reason"]


def test_a_machine_without_fused_multiply_add(tmp_path, monkeypatch):
    monkeypatch.setattr(toolchain, "has_fma", lambda: False)
    path = tmp_path / "gauge.toml"
    path.write_text(f'{GAUGE}fma = true\nenvironment = "freestanding"\n')
    result = invoke("verify", path)
    assert result.exit_code == 3
    assert "no fused multiply-add instruction" in result.stdout
    assert 'environment = "hosted"' in result.stdout


@pytest.mark.parametrize(
    ("lines", "parts"),
    [
        ('echo "gauge.c:1: error: low water" >&2; exit 1', ["exit 1", "error: low water"]),
        ('echo "gauge.c:1: error: low water"; exit 7', ["exit 7", "error: low water"]),
        ("exit 1", ["failed (exit 1)"]),
        ("kill -9 $$", ["ended by signal 9"]),
        ("kill -11 $$", ["ended by signal 11"]),
    ],
)
def test_a_compiler_that_fails(tmp_path, compiler, lines, parts):
    compiler(lines)
    result, kernels = job(tmp_path, 1)
    assert kernels["python"]["status"] == "verified"
    assert kernels["c"]["status"] == "error"
    for part in ("some-cc", *parts):
        assert part in kernels["c"]["reason"]
        assert part in result.stdout
    assert "2 kernels: 1 verified, 1 error" in result.stdout
    assert list((tmp_path / "cache").iterdir()) == []


OUTPUT = 'while [ "$1" != -o ]; do shift; done; '


@pytest.mark.parametrize(
    "lines",
    [OUTPUT + 'echo no library > "$2"',
     f'echo "int other;" > other.c; gcc -shared -fPIC -o library.so other.c; {OUTPUT}:'],
    ids=["garbage", "no-symbol"],
)  # fmt: skip
def test_a_compiler_whose_library_cannot_be_loaded(tmp_path, compiler, lines):
    need("gcc")
    compiler(lines)
    _, kernels = job(tmp_path, 1)
    assert kernels["python"]["status"] == "verified"
    assert kernels["c"]["status"] == "error"
    assert "some-cc" in kernels["c"]["reason"]
    assert list((tmp_path / "cache").iterdir()) == []  # or it would be used again


def test_a_compiler_that_writes_nothing(tmp_path, compiler):
    compiler("exit 0")
    _, kernels = job(tmp_path, 1)
    assert "some-cc" in kernels["c"]["reason"]
    assert "cache folder" not in kernels["c"]["reason"]


@pytest.mark.parametrize("where", ["error", "version"])
def test_a_compiler_that_does_not_speak_utf_8(tmp_path, compiler, where):
    said = "printf 'caf\\351: error: low water\\n'"
    if where == "error":
        compiler(f"{said} >&2; exit 1")
    else:
        compiler("exit 1", version=said)
    _, kernels = job(tmp_path, 1)
    assert kernels["c"]["status"] == "error"


# --- Ctrl-C ---------------------------------------------------------------------------------------

MANY = """[kernel.gauge]
layout = "packed"
n = 32
direction = ["forward", "backward"]
block = [1, 2, 3, 4]
loop = ["dot", "axpy", "fused"]
"""


def interrupted(tmp_path, language, ready, group, env=None):
    """Starts a long build, waits for ``ready``, presses Ctrl-C; nothing may be half done."""
    path, out, cache = (tmp_path / name for name in ("many.toml", "out", "cache"))
    path.write_text(f'{MANY}language = "{language}"\n')
    started = subprocess.Popen(
        [sys.executable, "-m", "demilune", "build", str(path), "-o", str(out)],
        stdin=subprocess.DEVNULL, stdout=subprocess.PIPE, stderr=subprocess.PIPE, text=True,
        start_new_session=True, env=environment(DEMILUNE_CACHE=str(cache), **(env or {})),
        preexec_fn=lambda: signal.signal(signal.SIGINT, signal.default_int_handler),
    )  # fmt: skip
    while not ready():
        assert started.poll() is None, "it ended before it could be interrupted"
        time.sleep(0.01)
    (os.killpg if group else os.kill)(started.pid, signal.SIGINT)
    said, complained = started.communicate(timeout=60)
    assert started.returncode == 130, (said, complained)
    assert complained == "demilune: interrupted; no file was left half-written\n"
    assert said == ""
    assert not out.exists() or list(out.iterdir()) == []
    assert not list(cache.glob("making-*"))
    return path, out, cache


@pytest.mark.parametrize("group", [True, False], ids=["terminal", "process"])
@pytest.mark.parametrize("compiled", [1, 6])
def test_ctrl_c_while_compiling(tmp_path, compiled, group):
    gcc, slow, log = need("gcc"), tmp_path / "slow-cc", tmp_path / "log"
    log.touch()
    slow.write_text(
        '#!/bin/sh\n[ "$1" = --version ] || { echo >> ' + shlex.quote(str(log)) + "; sleep 0.2; }\n"
        f'exec {gcc} "$@"\n'
    )
    slow.chmod(0o755)
    path, out, cache = interrupted(
        tmp_path, "c", lambda: log.stat().st_size >= compiled, group, {"CC": str(slow)}
    )
    assert log.stat().st_size < 24  # the rest was not compiled
    again = run("build", path, "-o", out, "-k", "gauge_forward_block1",
                env={"CC": str(slow), "DEMILUNE_CACHE": str(cache)})  # fmt: skip
    assert again.returncode == 0


@pytest.mark.parametrize("delay", [0, 0.1, 0.3])
def test_ctrl_c_while_verifying(tmp_path, delay):
    def ready():  # the folder is made before kernels are
        if not (tmp_path / "out").exists():
            return False
        time.sleep(delay)
        return True

    interrupted(tmp_path, "python", ready, group=True)


@pytest.mark.parametrize("moment", [1, 2, 4])
def test_ctrl_c_while_writing(tmp_path, place, monkeypatch, moment):
    path = tmp_path / "gauge.toml"
    path.write_text(GAUGE)
    before = snapshot(place)
    calls = []
    real = os.fsync

    def fsync(handle):
        calls.append(handle)
        if len(calls) == moment:
            raise KeyboardInterrupt
        real(handle)

    monkeypatch.setattr(files.os, "fsync", fsync)
    result = invoke("build", path, "-o", place)
    assert len(calls) == moment
    assert result.exit_code == 130
    assert result.stderr == "demilune: interrupted; no file was left half-written\n"
    assert snapshot(place) == before
