"""The command line: help, results and messages, JSON, colour, exit status, whole jobs.

``run``, ``invoke`` and ``snapshot`` are used by the other tests of the command line, too.
"""

from __future__ import annotations

import hashlib
import json
import os
import re
import shlex
import subprocess
import sys
from pathlib import Path

import pytest
from click.testing import CliRunner
from tools import need

import demilune
from demilune.cli import main
from demilune.cli.starter import STARTER

PROJECT = Path(__file__).parents[1]
GAUGE = '[kernel.gauge]\nlayout = "packed"\nn = 4\ndtype = "float64"\n'
PAIR = '[kernel.gauge]\nlayout = "packed"\nn = 3\nloop = ["dot", "axpy"]\nlanguage = "python"\n'
EVIDENCE = {"evidence.json", "evidence.html"}
PLAIN = {"FORCE_COLOR": None, "TTY_COMPATIBLE": None, "TTY_INTERACTIVE": None, "CC": None}
"""Variables of the surroundings that would change what is shown or made."""


def environment(**changes):
    """This process's environment with changes; None takes a variable out."""
    env = {**os.environ, **PLAIN, **changes}
    return {name: value for name, value in env.items() if value is not None}


def run(*arguments, env=None, **options):
    """The command line in a process of its own, with pipes."""
    return subprocess.run(
        [sys.executable, "-m", "demilune", *map(str, arguments)],
        **{"capture_output": True, "text": True, "stdin": subprocess.DEVNULL, "timeout": 120,
           "check": False, "env": environment(**(env or {})), **options},
    )  # fmt: skip


def invoke(*arguments):
    """The command line in this process; an exception that gets out is a failure."""
    plain = {name: value for name, value in PLAIN.items() if name != "CC"}
    result = CliRunner().invoke(main, [str(one) for one in arguments], env=plain)
    if not isinstance(result.exception, SystemExit | None):
        raise result.exception
    assert "Traceback" not in result.output
    assert "\x1b" not in result.output
    return result


def snapshot(folder):
    """Every file below a folder: its bytes and the time of its last change."""
    return {
        str(path.relative_to(folder)): (path.read_bytes(), path.stat().st_mtime_ns)
        for path in Path(folder).rglob("*")
        if path.is_file()
    }


@pytest.fixture
def gauge(tmp_path):
    path = tmp_path / "gauge.toml"
    path.write_text(GAUGE)
    return path


@pytest.fixture
def pair(tmp_path):
    path = tmp_path / "pair.toml"
    path.write_text(PAIR)
    return path


# --- help ----------------------------------------------------------------------------------------


@pytest.mark.parametrize("name", list(main.commands))
def test_every_command_has_an_example_that_parses(name):
    result = invoke(name, "--help")
    assert result.exit_code == 0
    line = re.search(r"^ *Example: demilune (.*)$", result.stdout, re.MULTILINE)
    assert line, result.stdout
    command, *words = shlex.split(line[1].split(">")[0])
    assert command == name
    main.commands[name].make_context(name, words)  # raises if an option is not known
    for word in words:
        if word.startswith("examples/"):
            assert (PROJECT / word).is_file(), word


def test_help_tells_every_command_and_the_exit_statuses():
    result = invoke("--help")
    for name in main.commands:
        assert f"\n  {name} " in result.stdout
    assert re.search(r"0 done, 1 a check failed, 2 bad\s+input, 3 something", result.stdout)
    assert invoke("build", "-h").stdout == invoke("build", "--help").stdout


def test_version():
    assert invoke("--version").stdout.strip().endswith(demilune.__version__)
    assert run("--version").stdout == invoke("--version").stdout


def test_the_console_script_is_the_module(tmp_path):
    script = Path(sys.executable).with_name("demilune")
    if not script.is_file():
        pytest.skip("the package is not installed beside this Python")
    done = subprocess.run([script, "--version"], capture_output=True, text=True, check=True)
    assert done.stdout == run("--version").stdout


@pytest.mark.parametrize(
    ("words", "hint"),
    [
        (["buidl"], "build"),
        (["build", "--jsn", "x.toml"], "--json"),
        (["build"], "SPEC"),
        (["build", "a.toml", "b.toml"], "b.toml"),
        (["build", "x.toml", "--seed", "-1"], "-1"),
        (["build", "x.toml", "--seed", "many"], "many"),
        (["build", "x.toml", "-o"], "-o"),
    ],
)
def test_a_wrong_call_is_bad_input_with_a_hint(words, hint):
    result = invoke(*words)
    assert result.exit_code == 2
    assert hint in result.stderr
    assert result.stdout == ""


# --- init ----------------------------------------------------------------------------------------


def test_the_starter_builds_and_states_the_defaults(tmp_path):
    path = tmp_path / "new" / "my_matrix.toml"
    result = invoke("init", path)
    assert result.exit_code == 0
    assert str(path) in result.stderr
    assert path.read_text() == STARTER
    built = invoke("build", path, "-o", tmp_path / "out")
    assert built.exit_code == 0, built.output
    four = '[kernel.product]\noperation="matvec"\nlayout="packed"\nn=12\ndtype="float32"'
    assert demilune.parse(STARTER) == demilune.parse(four)


def test_init_leaves_what_is_there(tmp_path):
    path = tmp_path / "mine.toml"
    path.write_text("mine")
    before = snapshot(tmp_path)
    result = invoke("init", path)
    assert result.exit_code == 2
    assert str(path) in result.stderr
    assert "exists" in result.stderr
    assert snapshot(tmp_path) == before


def test_init_without_a_name_writes_here(tmp_path, monkeypatch):
    monkeypatch.chdir(tmp_path)
    assert invoke("init").exit_code == 0
    assert [path.name for path in tmp_path.iterdir()] == ["demilune.toml"]


def test_init_below_a_file(tmp_path):
    (tmp_path / "file").write_text("")
    result = invoke("init", tmp_path / "file" / "new.toml")
    assert result.exit_code == 2
    assert str(tmp_path / "file") in result.stderr


def test_init_with_a_name_that_is_too_long(tmp_path):
    result = invoke("init", tmp_path / ("x" * 300))
    assert result.exit_code == 2
    assert "File name too long" in result.stderr


# --- plan, targets, schema -----------------------------------------------------------------------


def test_plan_shows_picture_formula_pseudo_code_and_counts(gauge, tmp_path):
    result = invoke("plan", gauge)
    assert result.exit_code == 0
    assert result.stderr == ""
    # The LAPACK Users' Guide (3rd ed., Packed Storage): a_ij at AP(i + j(j-1)/2), from 1.
    for row in ("0 1 3 6", ". 2 4 7", ". . 5 8", ". . . 9"):
        assert f"    {row}\n" in result.stdout
    assert "A(i,j) with i <= j is a[i + j*(j + 1)/2]" in result.stdout
    assert result.stdout.startswith("gauge: y := A*x\n")
    assert re.search(r"for k from 0 to 3\n +", result.stdout)
    assert re.search(r"^ +loads of a +10$", result.stdout, re.MULTILINE)
    assert snapshot(tmp_path).keys() == {"gauge.toml"}


def test_plan_makes_nothing_and_tells_each_kernel_once(tmp_path, pair):
    result = invoke("plan", pair)
    heads = re.findall(r"^(gauge_\w+): ", result.stdout, re.MULTILINE)
    assert heads == ["gauge_dot", "gauge_axpy"]
    assert snapshot(tmp_path).keys() == {"pair.toml"}


def test_plan_counts_at_several_sizes_where_n_is_open(tmp_path):
    path = tmp_path / "open.toml"
    path.write_text('[kernel.gauge]\nlayout="packed"\nlanguage="c"\nloop="fused"\n')
    (record,) = json.loads(invoke("plan", path, "--json").stdout)
    for key, counts in record["counts"].items():
        n = int(key.removeprefix("n = "))
        assert counts["loads of a"] == n * (n + 1) // 2
    assert len(record["counts"]) == 3


def test_targets_tells_what_is_missing_and_how_to_get_it(monkeypatch):
    found = {row["what"]: row for row in json.loads(invoke("targets", "--json").stdout)}
    assert found["python"]["found"]
    monkeypatch.setenv("PATH", "")
    monkeypatch.delenv("CC", raising=False)
    result = invoke("targets")
    assert result.exit_code == 0
    for name in ("gcc", "clang"):
        line = next(one for one in result.stdout.splitlines() if f"c ({name})" in one)
        assert "missing" in line
        assert "apt-get install" in line


def test_targets_tells_of_a_compiler_that_cc_names_in_vain(monkeypatch):
    monkeypatch.setenv("CC", "no-such-compiler")
    rows = {row["what"]: row for row in json.loads(invoke("targets", "--json").stdout)}
    assert not rows["c (no-such-compiler)"]["found"]
    assert "from CC" in rows["c (no-such-compiler)"]["detail"]
    assert "no-such-compiler" in invoke("targets").stdout


def test_targets_goes_on_past_a_compiler_that_cannot_be_run(monkeypatch, tmp_path):
    broken = tmp_path / "broken-compiler"
    broken.write_bytes(b"\x7fELF no program")
    broken.chmod(0o755)
    monkeypatch.setenv("CC", str(broken))
    result = invoke("targets")
    assert result.exit_code == 0
    assert "python" in result.stdout


# --- JSON ----------------------------------------------------------------------------------------


def test_json_of_plan_holds_what_the_text_holds(gauge):
    (record,) = json.loads(invoke("plan", gauge, "--json").stdout)
    text = invoke("plan", gauge).stdout
    for name in ("index formula", "storage", "arithmetic", "pseudo-code"):
        assert record[name]
        # Sentences are wrapped in the text.
        assert " ".join(" ".join(record[name]).split()) in " ".join(text.split())
    for what, count in record["counts"]["n = 4"].items():
        assert re.search(rf"^ +{what} +{count}$", text, re.MULTILINE)


@pytest.mark.parametrize("command", ["verify", "build"])
def test_json_of_a_job_holds_what_the_table_holds(gauge, tmp_path, command):
    more = ["-o", tmp_path / "out"] if command == "build" else []
    record = json.loads(invoke(command, gauge, *more, "--json").stdout)
    table = invoke(command, gauge, *more).stdout
    assert [one["language"] for one in record["kernels"]] == ["c", "python"]
    for one in record["kernels"]:
        row = rf"^{one['name']} +{one['language']} +{one['status']} +{one['cases']} "
        assert re.search(row, table, re.MULTILINE)
    assert "2 kernels: 2 verified" in table
    if command == "build":
        assert json.loads((tmp_path / "out" / "evidence.json").read_text()) == record


def test_json_of_emit_and_init(gauge, tmp_path):
    out = tmp_path / "out"
    record = json.loads(invoke("emit", gauge, "-o", out, "--json").stdout)
    assert record["files"] == record["changed"] == ["gauge.c", "gauge.h", "gauge.py"]
    assert json.loads(invoke("emit", gauge, "-o", out, "--json").stdout)["changed"] == []
    listed = invoke("emit", gauge, "-o", out).stdout.split()
    assert listed == [str(out / name) for name in record["files"]]
    (out / "gauge.h").unlink()
    for option in ("--check", "--diff"):
        result = invoke("emit", gauge, "-o", out, option, "--json")
        assert result.exit_code == 1
        assert json.loads(result.stdout)["would change"] == ["gauge.h"]
    new = tmp_path / "new.toml"
    assert json.loads(invoke("init", new, "--json").stdout) == {"written": str(new)}


def test_json_of_targets_holds_what_the_text_holds():
    text = invoke("targets").stdout.splitlines()
    records = json.loads(invoke("targets", "--json").stdout)
    assert len(text) == len(records)
    for line, record in zip(text, records, strict=True):
        assert line.startswith(record["what"])
        assert line.endswith(record["detail"])
        assert (" found " in line) == record["found"]


def test_json_of_an_error_holds_the_messages(tmp_path):
    path = tmp_path / "bad.toml"
    path.write_text('[kernel.gauge]\nn = 0\nlop = "dot"\n')
    for command in ("plan", "emit", "verify", "build"):
        result = invoke(command, path, "--json")
        assert result.exit_code == 2
        record = json.loads(result.stdout)
        assert record["status"] == 2
        assert [f"demilune: {one}" for one in record["errors"]] == result.stderr.splitlines()
        assert len(record["errors"]) == 2


def test_schema_takes_json_as_every_command_does():
    assert invoke("schema", "--json").exit_code == 0


# --- where it goes: results to stdout, messages to stderr, no colour in a pipe ------------------


def test_a_pipe_gets_no_progress_and_no_colour(gauge, tmp_path):
    done = run("build", gauge, "-o", tmp_path / "out")
    assert done.returncode == 0
    assert done.stderr == ""
    assert "\x1b" not in done.stdout
    assert "verified" in done.stdout
    assert json.loads(run("verify", gauge, "--json").stdout)["kernels"]


def on_a_terminal(*arguments, **env):
    """What the command line shows on a terminal."""
    pty = pytest.importorskip("pty")
    master, slave = pty.openpty()
    shown = b""
    try:
        started = subprocess.Popen(
            [sys.executable, "-m", "demilune", *map(str, arguments)],
            stdin=subprocess.DEVNULL, stdout=slave, stderr=slave,
            env=environment(TERM="xterm-256color", COLUMNS="100", **env),
        )  # fmt: skip
        os.close(slave)
        while True:
            try:
                piece = os.read(master, 65536)
            except OSError:  # Linux tells the end of a terminal so
                break
            if not piece:
                break
            shown += piece
        assert started.wait(60) == 0
    finally:
        os.close(master)
    return shown.decode()


COLOUR = re.compile(r"\x1b\[[0-9;]*\b(3[0-7]|38;[0-9;]+|9[0-7])[0-9;]*m")


def test_a_terminal_gets_progress_and_colour_unless_no_color(pair):
    coloured = on_a_terminal("verify", pair, NO_COLOR=None)
    assert COLOUR.search(coloured)
    assert "verifying" in coloured  # the bar
    plain = on_a_terminal("verify", pair, NO_COLOR="1")
    assert not COLOUR.search(plain)
    assert "2 verified" in plain
    assert "verifying" not in on_a_terminal("verify", pair, "--quiet")


@pytest.mark.parametrize("words", [["schema"], ["targets"], ["--help"]])
def test_a_closed_pipe_is_no_error(words):
    reading, writing = os.pipe()
    os.close(reading)
    try:
        done = run(*words, capture_output=False, stdout=writing, stderr=subprocess.PIPE)
    finally:
        os.close(writing)
    assert "Traceback" not in done.stderr
    assert done.stderr == ""


@pytest.mark.parametrize("words", [["schema"], ["targets"]])
def test_stdout_on_a_full_disk(words):
    if not Path("/dev/full").exists():
        pytest.skip("this system has no /dev/full")
    with Path("/dev/full").open("w") as full:
        done = run(*words, capture_output=False, stdout=full, stderr=subprocess.PIPE)
    assert done.returncode == 2
    assert "Traceback" not in done.stderr
    assert "No space left" in done.stderr


def test_json_where_the_terminal_has_ascii_only(tmp_path):
    done = run("plan", tmp_path / "flußpegel.toml", "--json", env={"PYTHONIOENCODING": "ascii"})
    assert done.returncode == 2
    assert "Traceback" not in done.stderr
    assert "flußpegel" in json.loads(done.stdout)["errors"][0]


# --- choosing and repeating ----------------------------------------------------------------------


def test_only_some_kernels(pair, tmp_path):
    out = tmp_path / "out"
    assert invoke("emit", pair, "-o", out, "-k", "gauge_a").exit_code == 0
    assert [path.name for path in out.iterdir()] == ["gauge_axpy.py"]
    both = invoke("verify", pair, "-k", "gauge_axpy", "-k", "gauge_dot", "--json")
    names = [one["name"] for one in json.loads(both.stdout)["kernels"]]
    assert names == ["gauge_dot", "gauge_axpy"]
    none = invoke("emit", pair, "-o", tmp_path / "none", "-k", "bridge")
    assert none.exit_code == 2
    assert none.stdout == ""
    for word in ("pair.toml", "bridge", "gauge_dot", "gauge_axpy"):
        assert word in none.stderr
    assert not (tmp_path / "none").exists()


def test_kernels_that_share_a_file_with_a_chosen_one_are_written_with_it(tmp_path):
    """A file is written whole, or a second run would take routines out of it."""
    path = tmp_path / "barrier.toml"
    path.write_text(
        '[defaults]\nn = 3\nlanguage = "python"\n[kernel.gate]\nfile = "barrier"\n'
        '[kernel.lock]\nfile = "barrier"\n[kernel.pump]\n'
    )
    out = tmp_path / "out"
    assert invoke("emit", path, "-o", out, "-k", "gate").exit_code == 0
    assert [one.name for one in out.iterdir()] == ["barrier.py"]
    assert re.findall(r"^def (\w+)", (out / "barrier.py").read_text(), re.MULTILINE) == [
        "gate", "lock",
    ]  # fmt: skip
    shown = json.loads(invoke("plan", path, "-k", "gate", "--json").stdout)
    assert [one["kernel"] for one in shown] == ["gate"]  # nothing is written here


def test_the_same_seed_gives_the_same_evidence_and_another_another(gauge, tmp_path):
    texts = []
    for place, seed in (("a", 7), ("b", 7), ("c", 8)):
        assert run("build", gauge, "-o", tmp_path / place, "--seed", seed).returncode == 0
        texts.append({p.name: p.read_bytes() for p in (tmp_path / place).iterdir()})
    assert texts[0] == texts[1]
    assert {name for name in texts[0] if texts[0][name] != texts[2][name]} == EVIDENCE


def test_evidence_names_the_files_with_their_hashes(gauge, tmp_path):
    out = tmp_path / "out"
    assert invoke("build", gauge, "-o", out).exit_code == 0
    evidence = json.loads((out / "evidence.json").read_text())
    told = {one["name"]: (one["bytes"], one["sha256"]) for one in evidence["files"]}
    found = {p.name: p.read_bytes() for p in out.iterdir() if p.name not in EVIDENCE}
    assert told == {n: (len(d), hashlib.sha256(d).hexdigest()) for n, d in found.items()}
    assert not any(str(tmp_path) in (out / name).read_text() for name in EVIDENCE)


# --- exit status 1: what is made is wrong --------------------------------------------------------


def test_a_kernel_that_is_wrong_fails_the_job(gauge, tmp_path, monkeypatch):
    """A compiler that subtracts where the source adds."""
    liar = tmp_path / "liar"
    liar.write_text(
        '#!/bin/sh\nif [ "$1" != --version ]; then sed -i "s/acc = acc + /acc = acc - /" *.c; fi\n'
        f'exec {need("gcc")} "$@"\n'
    )
    liar.chmod(0o755)
    monkeypatch.setenv("CC", str(liar))
    for command, more in (("verify", []), ("build", ["-o", tmp_path / "out"])):
        result = invoke(command, gauge, *more)
        assert result.exit_code == 1
        assert re.search(r"^gauge +c +failed ", result.stdout, re.MULTILINE)
        assert re.search(r"^gauge +python +verified ", result.stdout, re.MULTILINE)
        assert re.search(r"gauge \(c\): level exact: .* expected .*, found ", result.stdout)
    evidence = json.loads((tmp_path / "out" / "evidence.json").read_text())
    assert evidence["verdict"] == "1 verified, 1 failed"
    assert [one["status"] for one in evidence["kernels"]] == ["failed", "verified"]
