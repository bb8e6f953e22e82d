"""Output: written whole or not at all, nothing of somebody else overwritten, nothing twice."""

from __future__ import annotations

import errno
import os
import shlex
import stat
import subprocess
import sys
from pathlib import Path

import pytest
from test_cli import EVIDENCE, GAUGE, environment, invoke, snapshot
from tools import need

from demilune import InputError, files

SOURCES = {f"gauge.{ending}" for ending in ("c", "h", "py")}
MARKED = f"# {files.MARK} 0.0\n"


@pytest.fixture
def gauge(tmp_path):
    path = tmp_path / "gauge.toml"
    path.write_text(GAUGE)
    return path


@pytest.fixture
def out(tmp_path):
    return tmp_path / "out"


def refused(*words, place, parts):
    """A command that is refused with one message and changes nothing below ``place``."""
    before = snapshot(place)
    result = invoke(*words)
    assert result.exit_code == 2
    assert result.stdout == ""
    (line,) = result.stderr.splitlines()
    assert all(part in line for part in parts), line
    assert snapshot(place) == before


# --- what is written ------------------------------------------------------------------------------


def test_the_folder_is_made_and_holds_the_files_and_nothing_else(gauge, tmp_path):
    deep = tmp_path / "a" / "b" / "c"
    assert invoke("emit", gauge, "-o", deep).exit_code == 0
    assert snapshot(deep).keys() == SOURCES
    assert invoke("build", gauge, "-o", deep).exit_code == 0
    assert snapshot(deep).keys() == SOURCES | EVIDENCE


def test_the_default_folder_is_build_out(gauge, tmp_path, monkeypatch):
    monkeypatch.chdir(tmp_path)
    assert invoke("emit", gauge).exit_code == 0
    assert snapshot(tmp_path / "build_out").keys() == SOURCES


def test_files_have_the_rights_that_new_files_have(gauge, out, tmp_path):
    before = os.umask(0o027)
    try:
        assert invoke("emit", gauge, "-o", out).exit_code == 0
    finally:
        os.umask(before)
    assert stat.S_IMODE((out / "gauge.c").stat().st_mode) == 0o640


@pytest.mark.parametrize("command", ["emit", "build"])
def test_a_second_run_writes_nothing_new(gauge, out, command):
    assert invoke(command, gauge, "-o", out).exit_code == 0
    before = snapshot(out)
    assert invoke(command, gauge, "-o", out).exit_code == 0
    assert snapshot(out) == before  # times of change included


def test_only_what_changed_is_written(gauge, out):
    assert invoke("emit", gauge, "-o", out).exit_code == 0
    before = snapshot(out)
    (out / "gauge.h").write_text(MARKED + "touched")
    assert invoke("emit", gauge, "-o", out).exit_code == 0
    after = snapshot(out)
    assert {name for name in before if before[name][1] != after[name][1]} == {"gauge.h"}
    assert {name: one[0] for name, one in after.items()} == {n: o[0] for n, o in before.items()}


def test_files_of_other_kernels_stay(gauge, out):
    assert invoke("emit", gauge, "-o", out).exit_code == 0
    other = gauge.with_name("other.toml")
    other.write_text(GAUGE.replace("kernel.gauge", "kernel.bridge"))
    before = snapshot(out)
    assert invoke("emit", other, "-o", out).exit_code == 0
    assert before.items() <= snapshot(out).items()


# --- check and diff -------------------------------------------------------------------------------


def test_check_and_diff_write_nothing_and_tell_what_would_change(gauge, out, tmp_path):
    for option in ("--check", "--diff"):
        result = invoke("emit", gauge, "-o", out, option)
        assert result.exit_code == 1
        assert not out.exists()
        assert all(name in result.output for name in SOURCES)
    assert invoke("emit", gauge, "-o", out).exit_code == 0
    for option in ("--check", "--diff"):
        result = invoke("emit", gauge, "-o", out, option)
        assert (result.exit_code, result.output) == (0, "")
    changed = (out / "gauge.c").read_text().replace("double acc = 0.0", "double acc = 1.0")
    (out / "gauge.c").write_text(changed)
    (out / "gauge.py").unlink()
    before = snapshot(tmp_path)
    result = invoke("emit", gauge, "-o", out, "--check")
    assert result.exit_code == 1
    assert result.stdout == ""
    assert result.stderr.splitlines() == [
        f"{out / n} would change" for n in ("gauge.c", "gauge.py")
    ]
    result = invoke("emit", gauge, "-o", out, "--diff")
    assert result.exit_code == 1
    lines = result.stdout.splitlines()
    assert "-        double acc = 1.0;" in lines
    assert "+        double acc = 0.0;" in lines
    assert "+def gauge(a, x, y):" in lines
    assert not any("gauge.h (new)" in line for line in lines)
    assert snapshot(tmp_path) == before


def test_the_difference_is_a_patch(gauge, out, tmp_path):
    """patch(1) makes of the old files what emit would write."""
    patch = need("patch")
    assert invoke("emit", gauge, "-o", out).exit_code == 0
    wanted = snapshot(out)["gauge.c"][0]
    (out / "gauge.c").write_bytes(wanted.replace(b"acc + ", b"acc - "))
    difference = invoke("emit", gauge, "-o", out, "--diff").stdout
    subprocess.run([patch, "-s", str(out / "gauge.c")], input=difference, text=True, check=True)
    assert (out / "gauge.c").read_bytes() == wanted


# --- files of somebody else -----------------------------------------------------------------------


@pytest.mark.parametrize(
    "content", [b"mine", b"", b"\xff\xfe", b"\n" * 9 + MARKED.encode()], ids=repr
)
@pytest.mark.parametrize("name", ["gauge.c", "gauge.py"])
def test_a_foreign_file_is_left_alone_and_no_other_is_written(gauge, out, name, content):
    out.mkdir()
    (out / name).write_bytes(content)
    for command in ("emit", "build"):
        parts = [str(out / name), "not written by Demilune", "--force"]
        refused(command, gauge, "-o", out, place=out, parts=parts)
    assert invoke("emit", gauge, "-o", out, "--force").exit_code == 0
    assert snapshot(out).keys() == SOURCES
    assert files.MARK.encode() in (out / name).read_bytes()


@pytest.mark.parametrize("name", sorted(EVIDENCE))
def test_a_foreign_evidence_file_is_left_alone(gauge, out, name):
    out.mkdir()
    (out / name).write_text("{}")
    parts = [name, "not written by Demilune"]
    refused("build", gauge, "-o", out, place=out, parts=parts)
    assert invoke("build", gauge, "-o", out, "--force").exit_code == 0


def test_an_older_file_of_ours_is_replaced(gauge, out):
    out.mkdir()
    for name in SOURCES:
        (out / name).write_text(MARKED)
    assert invoke("emit", gauge, "-o", out).exit_code == 0
    assert all(len(data) > 500 for data, _ in snapshot(out).values())


def test_a_folder_in_the_way_is_left_alone(gauge, out):
    (out / "gauge.h" / "inside").mkdir(parents=True)
    refused("emit", gauge, "-o", out, place=out, parts=[str(out / "gauge.h"), "is a folder"])


def test_a_folder_in_the_way_is_left_alone_even_with_force(gauge, out):
    (out / "gauge.h" / "inside").mkdir(parents=True)
    refused(
        "emit", gauge, "-o", out, "--force", place=out, parts=[str(out / "gauge.h"), "is a folder"]
    )


def test_a_link_is_replaced_and_not_what_it_points_to(gauge, out, tmp_path):
    kept = tmp_path / "kept.c"
    kept.write_text(MARKED)
    out.mkdir()
    (out / "gauge.c").symlink_to(kept)
    assert invoke("emit", gauge, "-o", out).exit_code == 0
    assert kept.read_text() == MARKED
    assert not (out / "gauge.c").is_symlink()


# --- folders that cannot be written to ------------------------------------------------------------


@pytest.mark.parametrize("command", ["emit", "build"])
def test_the_output_folder_is_a_file_or_below_one(gauge, tmp_path, command):
    taken = tmp_path / "taken"
    taken.write_text("mine")
    parts = [str(taken), "is a file", "folder"]
    refused(command, gauge, "-o", taken, place=tmp_path, parts=parts)
    parts = [str(taken / "x"), "Not a directory"]
    refused(command, gauge, "-o", taken / "x", place=tmp_path, parts=parts)
    parts = ["cannot be written", "File name too long"]
    refused(command, gauge, "-o", tmp_path / ("x" * 300), place=tmp_path, parts=parts)


@pytest.mark.parametrize("command", ["emit", "build"])
def test_the_output_folder_is_not_writable(gauge, out, command, monkeypatch):
    out.mkdir()
    real = os.access
    monkeypatch.setattr(files.os, "access", lambda path, mode: path != out and real(path, mode))
    refused(command, gauge, "-o", out, place=out, parts=[str(out), "not writable"])


def test_no_folder_can_be_made_in_proc(gauge):
    if not Path("/proc/self").exists():
        pytest.skip("this system has no /proc")
    result = invoke("emit", gauge, "-o", "/proc/gauges")
    assert result.exit_code == 2
    assert "/proc/gauges: cannot be written" in result.stderr


@pytest.mark.parametrize("moment", [1, 2, 3])
@pytest.mark.parametrize(
    ("number", "text"), [(errno.ENOSPC, "No space left"), (errno.EIO, "Input/output error"),
                         (errno.EDQUOT, "quota exceeded")],
)  # fmt: skip
def test_the_disk_fails_at_the_first_second_or_third_file(
    gauge, out, monkeypatch, moment, number, text
):
    out.mkdir()
    (out / "gauge.c").write_text(MARKED)
    calls = []

    def fsync(handle):
        calls.append(handle)
        if len(calls) == moment:
            raise OSError(number, os.strerror(number))

    monkeypatch.setattr(files.os, "fsync", fsync)
    refused("emit", gauge, "-o", out, place=out, parts=[str(out), "cannot be written", text])
    assert len(calls) == moment


def mounted(mount, *words, folder):
    """Runs the command line where ``mount`` holds, which nobody else sees; lists the files."""
    unshare = [need("unshare"), "-rm", "sh", "-c"]
    if subprocess.run([*unshare, mount], capture_output=True, check=False).returncode:
        pytest.skip("this process may not mount in a namespace of its own")
    command = shlex.join([sys.executable, "-m", "demilune", *map(str, words)])
    line = f"{mount} && {command}; status=$?; find {shlex.quote(str(folder))} -type f; exit $status"
    return subprocess.run(
        [*unshare, line], env=environment(), text=True, capture_output=True, check=False, timeout=60
    )


def test_a_real_full_disk(gauge, out):
    out.mkdir()
    mount = f"mount -t tmpfs -o size=8k tmpfs {shlex.quote(str(out))}"
    done = mounted(mount, "emit", gauge, "-o", out, folder=out)
    assert done.returncode == 2
    assert "cannot be written: No space left on device" in done.stderr
    assert len(done.stderr.splitlines()) == 1
    assert done.stdout == ""  # no file, neither half-written nor temporary


def test_a_real_read_only_folder(gauge, out):
    out.mkdir()
    where = shlex.quote(str(out))
    mount = f"mount -o bind {where} {where} && mount -o remount,ro,bind {where}"
    done = mounted(mount, "build", gauge, "-o", out, folder=out)
    assert done.returncode == 2
    assert done.stderr.splitlines() == [f"demilune: {out} is not writable"]
    assert done.stdout == ""


# --- the library ----------------------------------------------------------------------------------


def test_write_all_tells_what_changed(tmp_path):
    texts = {"a.c": MARKED, "b.c": MARKED + "é"}
    assert files.write_all(tmp_path, texts) == ["a.c", "b.c"]
    assert files.write_all(tmp_path, texts) == []
    texts["b.c"] += "more"
    assert files.write_all(tmp_path, texts) == ["b.c"]
    assert (tmp_path / "b.c").read_bytes() == (MARKED + "émore").encode()


def test_line_ends_are_written_as_they_are(tmp_path):
    files.write_all(tmp_path, {"a.c": MARKED + "one\ntwo\n"})
    assert (tmp_path / "a.c").read_bytes() == (MARKED + "one\ntwo\n").encode()


def test_an_error_of_the_library_says_where(tmp_path):
    (tmp_path / "file").write_text("")
    with pytest.raises(InputError, match="is a file"):
        files.write_all(tmp_path / "file", {"a.c": MARKED})
    with pytest.raises(InputError, match="Not a directory"):
        files.write_all(tmp_path / "file" / "below", {"a.c": MARKED})
