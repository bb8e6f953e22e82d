"""The cache of compiled libraries: used again, rebuilt where it is broken, shared, replaceable."""

from __future__ import annotations

import ctypes
import json
import os
import shlex
import stat
import subprocess
import sys
import tempfile
from concurrent.futures import ThreadPoolExecutor
from pathlib import Path

import pytest
from test_cli import EVIDENCE, GAUGE, environment, invoke, run
from tools import need

from demilune import CheckError, InputError, kernel
from demilune.bench import watch
from demilune.toolchain import cache
from demilune.toolchain.compilers import Compiler, find_compiler, library_flags

SOURCE = {"level.c": "int level(void) { return 42; }\n"}
FLAGS = library_flags(False, "hosted")


class Counting:
    """A compiler that writes down each of its runs."""

    def __init__(self, folder):
        self.path, self.log = folder / "counting-cc", folder / "runs"
        self.log.touch()
        self.path.write_text(
            f'#!/bin/sh\n[ "$1" = --version ] || echo "$*" >> {shlex.quote(str(self.log))}\n'
            f'exec {need("gcc")} "$@"\n'
        )
        self.path.chmod(0o755)

    @property
    def runs(self):
        """How often it compiled, not counting the bench's own helper, made once a process."""
        lines = self.log.read_text().splitlines()
        return sum(watch.SOURCE.name not in line for line in lines)


@pytest.fixture
def folder(tmp_path, monkeypatch):
    """An empty cache."""
    place = tmp_path / "cache"
    monkeypatch.setenv("DEMILUNE_CACHE", str(place))
    return place


@pytest.fixture
def counting(tmp_path, monkeypatch):
    made = Counting(tmp_path)
    monkeypatch.setenv("CC", str(made.path))
    return made


def level(library):
    """What the routine in a library returns, asked in a process of its own."""
    code = f"import ctypes; print(ctypes.CDLL({str(library)!r}).level())"
    done = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, check=True)
    return int(done.stdout)


def entries(folder):
    return sorted(path.name for path in folder.iterdir())


# --- used again -----------------------------------------------------------------------------------


def test_a_library_is_compiled_once(folder, counting):
    first = cache.library(find_compiler(), FLAGS, SOURCE)
    assert level(first) == 42
    assert cache.library(find_compiler(), FLAGS, SOURCE) == first
    assert counting.runs == 1
    assert entries(folder) == [first.parent.name]


def test_a_whole_job_compiles_once(folder, counting, tmp_path):
    path = tmp_path / "gauge.toml"
    path.write_text(GAUGE)
    for _ in range(2):
        assert run("verify", path, env={"CC": str(counting.path)}).returncode == 0
    assert counting.runs == 1
    lines = counting.log.read_text().splitlines()
    assert len(set(lines)) == len(lines)  # the bench's helper neither


@pytest.mark.parametrize(
    "change",
    [{"sources": {"level.c": "int level(void) { return 43; }\n"}}, {"flags": (*FLAGS, "-O1")},
     {"sources": {**SOURCE, "level.h": "int level(void);\n"}},
     {"version": "another version"}, {"path": "gcc"}],
    ids=str,
)  # fmt: skip
def test_another_source_flag_or_compiler_is_another_entry(folder, counting, change):
    found = find_compiler()
    cache.library(found, FLAGS, SOURCE)
    path = need("gcc") if "path" in change else found.path
    other = Compiler(found.name, path, change.get("version", found.version))
    cache.library(other, change.get("flags", FLAGS), change.get("sources", SOURCE))
    assert len(entries(folder)) == 2


def test_a_failed_compilation_leaves_nothing_and_is_tried_again(folder, counting):
    for runs in (1, 2):
        with pytest.raises(CheckError, match="error"):
            cache.library(find_compiler(), FLAGS, {"level.c": "int level(void) { return }\n"})
        assert counting.runs == runs
        assert entries(folder) == []


# --- broken ---------------------------------------------------------------------------------------


def cut(place):
    library = place / cache.LIBRARY
    library.write_bytes(library.read_bytes()[:100])


def change_one_bit(place):
    library = place / cache.LIBRARY
    data = bytearray(library.read_bytes())
    data[len(data) // 2] ^= 1
    library.write_bytes(data)


def empty(place):
    (place / cache.LIBRARY).write_bytes(b"")


def without_library(place):
    (place / cache.LIBRARY).unlink()


def library_is_folder(place):
    without_library(place)
    (place / cache.LIBRARY).mkdir()


def without_record(place):
    (place / cache.RECORD).unlink()


def foreign_record(text):
    return lambda place: (place / cache.RECORD).write_bytes(text)


def remove(place):
    for path in place.iterdir():
        path.unlink()
    place.rmdir()


def a_file(place):
    remove(place)
    place.write_text("not a folder")


def a_folder_of_somebody(place):
    remove(place)
    (place / "deep" / "deeper").mkdir(parents=True)
    (place / "deep" / "file").write_text("")


def an_empty_folder(place):
    remove(place)
    place.mkdir()


def a_dangling_link(place):
    remove(place)
    place.symlink_to(place.parent / "nowhere")


def a_link_to_a_folder(place):
    remove(place)
    other = place.parent.parent / "other"
    other.mkdir()
    (other / "kept").write_text("")
    place.symlink_to(other)


@pytest.mark.parametrize(
    "damage",
    [cut, change_one_bit, empty, without_library, library_is_folder, without_record,
     foreign_record(b"{}"), foreign_record(b"[]"), foreign_record(b"no JSON"),
     foreign_record(b"\xff"), foreign_record(b'{"sha256": 3}'), foreign_record(b'{"sha256": null}'),
     a_file, a_folder_of_somebody, an_empty_folder, a_dangling_link, a_link_to_a_folder],
    ids=lambda damage: damage.__name__.strip("<>"),
)  # fmt: skip
def test_a_broken_or_foreign_entry_is_rebuilt(folder, counting, damage):
    library = cache.library(find_compiler(), FLAGS, SOURCE)
    whole = library.read_bytes()
    damage(library.parent)
    assert cache.library(find_compiler(), FLAGS, SOURCE) == library
    assert counting.runs == 2
    assert library.read_bytes() == whole
    assert not library.parent.is_symlink()
    assert cache.library(find_compiler(), FLAGS, SOURCE) == library
    assert counting.runs == 2
    assert entries(folder) == [library.parent.name]
    other = folder.parent / "other"
    assert not other.exists() or [one.name for one in other.iterdir()] == ["kept"]


def test_a_broken_entry_does_no_harm_to_a_whole_job(folder, tmp_path):
    need("gcc")
    path = tmp_path / "gauge.toml"
    path.write_text(GAUGE)
    first = run("build", path, "-o", tmp_path / "a")
    made = list(folder.iterdir())
    assert [entry for entry in made if (entry / "gauge.c").is_file()]
    for entry in made:
        cut(entry)
    again = run("build", path, "-o", tmp_path / "b")
    assert first.returncode == again.returncode == 0
    assert (tmp_path / "a" / "evidence.json").read_bytes() == (
        tmp_path / "b" / "evidence.json"
    ).read_bytes()
    for entry in made:
        ctypes.CDLL(str(entry / cache.LIBRARY))


# --- shared ---------------------------------------------------------------------------------------


def test_many_processes_at_once(folder, tmp_path):
    need("gcc")
    path = tmp_path / "gauges.toml"
    path.write_text(GAUGE + 'loop = ["dot", "axpy", "fused"]\nlanguage = "c"\n')
    started = [
        subprocess.Popen(
            [sys.executable, "-m", "demilune", "build", str(path), "-o", str(tmp_path / "out")],
            stdin=subprocess.DEVNULL, stdout=subprocess.PIPE, stderr=subprocess.PIPE, text=True,
            env=environment(),
        )
        for _ in range(4)
    ]  # fmt: skip
    said = [one.communicate(timeout=120) for one in started]
    assert [one.returncode for one in started] == [0] * 4, said
    assert all("3 kernels: 3 verified" in out and error == "" for out, error in said)
    assert not list(folder.glob("making-*"))  # none is half made
    assert len(list(folder.glob("*/gauge_*.c"))) == 3
    names = {f"gauge_{loop}.{e}" for loop in ("dot", "axpy", "fused") for e in ("c", "h")}
    assert set(entries(tmp_path / "out")) == names | EVIDENCE


@pytest.mark.parametrize("damage", [None, cut, a_file, a_folder_of_somebody])
def test_many_at_once_with_a_broken_entry(folder, counting, damage):
    place = cache.library(find_compiler(), FLAGS, SOURCE).parent
    (damage or remove)(place)
    with ThreadPoolExecutor(8) as pool:
        jobs = [pool.submit(cache.library, find_compiler(), FLAGS, SOURCE) for _ in range(8)]
        assert {job.result() for job in jobs} == {place / cache.LIBRARY}
    assert level(place / cache.LIBRARY) == 42
    assert entries(folder) == [place.name]


# --- its folder -----------------------------------------------------------------------------------


@pytest.fixture
def spare(tmp_path, monkeypatch):
    """Where temporary files go; no folder of this process is there yet."""
    place = tmp_path / "temporary"
    place.mkdir()
    monkeypatch.setattr(tempfile, "tempdir", str(place))
    cache._own_folder.cache_clear()
    yield place
    cache._own_folder.cache_clear()


def below_a_file(tmp_path):
    (tmp_path / "file").write_text("")
    return tmp_path / "file" / "cache"


def is_a_file(tmp_path):
    (tmp_path / "file").write_text("")
    return tmp_path / "file"


def in_proc(tmp_path):
    return Path("/proc/demilune")


def too_long(tmp_path):
    return tmp_path / ("x" * 300)


@pytest.mark.parametrize("where", [below_a_file, is_a_file, in_proc, too_long])
def test_a_folder_that_cannot_be_made_is_replaced_by_a_temporary_one(
    tmp_path, spare, counting, monkeypatch, where
):
    monkeypatch.setenv("DEMILUNE_CACHE", str(where(tmp_path)))
    library = cache.library(find_compiler(), FLAGS, SOURCE)
    assert spare in library.parents
    assert level(library) == 42
    assert cache.library(find_compiler(), FLAGS, SOURCE) == library
    assert counting.runs == 1
    (made,) = spare.iterdir()
    assert stat.S_IMODE(made.stat().st_mode) == 0o700  # what is run from it is one's own


def test_a_folder_that_is_not_writable_is_replaced_by_a_temporary_one(
    folder, spare, counting, monkeypatch
):
    real = os.access
    monkeypatch.setattr(cache.os, "access", lambda path, mode: path != folder and real(path, mode))
    assert spare in cache.library(find_compiler(), FLAGS, SOURCE).parents


def test_where_nothing_is_writable_the_message_says_so(tmp_path, spare, monkeypatch, counting):
    (tmp_path / "file").write_text("")
    monkeypatch.setenv("DEMILUNE_CACHE", str(tmp_path / "file" / "cache"))
    monkeypatch.setattr(tempfile, "tempdir", str(tmp_path / "file"))
    with pytest.raises(InputError, match="no folder for compiled libraries: Not a directory"):
        cache.library(find_compiler(), FLAGS, SOURCE)


def test_a_temporary_folder_that_others_may_write_to_is_not_used(
    tmp_path, spare, counting, monkeypatch
):
    monkeypatch.setenv("DEMILUNE_CACHE", str(below_a_file(tmp_path)))
    planted = spare / f"demilune-{os.getuid()}"
    planted.mkdir()
    planted.chmod(0o777)
    assert planted not in cache.library(find_compiler(), FLAGS, SOURCE).parents
    assert list(planted.iterdir()) == []


def test_targets_tells_the_folder_that_is_used(tmp_path, spare, monkeypatch):
    monkeypatch.setenv("DEMILUNE_CACHE", str(below_a_file(tmp_path)))
    rows = json.loads(invoke("targets", "--json").stdout)
    (row,) = [row for row in rows if row["what"] == "compiled libraries"]
    assert Path(row["detail"]).parent == spare


def test_the_users_own_folder_unless_another_is_named(monkeypatch, tmp_path):
    monkeypatch.delenv("DEMILUNE_CACHE")
    monkeypatch.setenv("XDG_CACHE_HOME", str(tmp_path / "own"))
    if sys.platform.startswith("linux"):  # XDG Base Directory Specification
        assert cache.cache_folder() == tmp_path / "own" / "demilune"
    monkeypatch.setenv("DEMILUNE_CACHE", str(tmp_path / "named"))
    assert cache.cache_folder() == tmp_path / "named"


def test_kernels_of_the_library_use_it_too(folder, counting):
    for _ in range(2):
        made = kernel("gauge", n=3, layout="packed")
        assert made.verify().verified
    assert counting.runs == 1


def test_a_full_disk_under_the_cache(folder, counting, monkeypatch):
    def full(*arguments, **options):
        raise OSError(28, os.strerror(28))

    monkeypatch.setattr(cache.tempfile, "mkdtemp", full)
    with pytest.raises(InputError, match=r"cache folder .* No space left on device"):
        cache.library(find_compiler(), FLAGS, SOURCE)
