"""The folder that is handed over: whole, reproducible, and built into a firmware."""

from __future__ import annotations

import hashlib
import json
import os
import re
import shutil
import subprocess
import sys
from html.parser import HTMLParser
from pathlib import Path

import pytest
from click.testing import CliRunner
from tools import need

from demilune.boards import check as board_check
from demilune.boards import find_board
from demilune.boards.emulate import Ran
from demilune.bundle import coding, make
from demilune.bundle.job import OPTIMISE
from demilune.bundle.sheet import error_bound
from demilune.bundle.sheetpage import sheet_page
from demilune.cli import main
from demilune.errors import InputError
from demilune.plan.build import make_plan
from demilune.spec import make_spec

EXAMPLES = Path(__file__).parents[1] / "examples"
FIRMWARE = EXAMPLES / "firmware"
BUOY = EXAMPLES / "buoy_estimator.toml"
BUDGET = 6000
HERE = """
title = "this machine"
compiler = "gcc"
emulator = ["env", "{program}"]
[floats]
float32 = "fused"
float64 = "fused"
"""
EMULATOR = [
    "qemu-system-arm", "-M", "mps2-an386", "-nographic", "-monitor", "none", "-serial", "none",
    "-chardev", "stdio,id=c0", "-semihosting-config", "enable=on,target=native,chardev=c0",
    "-kernel",
]  # fmt: skip


SMALL = """
[kernel.buoy]
layout = "packed"
n = 4
dtype = "float32"
language = "c"
"""


@pytest.fixture
def unchecked(monkeypatch):
    """No checkers of coding rules: for tests of something else."""
    monkeypatch.setattr(coding, "CHECKERS", ())


def bundled(*arguments: object) -> tuple[int, str, str]:
    result = CliRunner().invoke(main, ["bundle", *map(str, arguments)])
    return result.exit_code, result.stdout, result.stderr


@pytest.fixture(scope="module")
def folder(tmp_path_factory) -> Path:
    """The buoy's bundle, with the machine itself as a board and no emulator."""
    need("gcc")
    place = tmp_path_factory.mktemp("bundle")
    (place / "here.toml").write_text(HERE)
    status, out, err = bundled(
        BUOY, "-o", place / "buoy", "--board", place / "here.toml", "--budget", BUDGET
    )
    assert status == 0, out + err
    return place / "buoy"


def texts(place: Path) -> dict[str, bytes]:
    return {one.name: one.read_bytes() for one in sorted(place.iterdir())}


# --- the folder --------------------------------------------------------------------------------


def test_the_folder_is_whole(folder):
    assert set(texts(folder)) == {
        "buoy.c", "buoy.h", "buoy.py", "buoy_selftest.c", "buoy_selftest.py", "CMakeLists.txt",
        "kernels.mk", "meson.build", "evidence.json", "evidence.html", "deviations.md",
        "buoy_datasheet.html", "buoy_datasheet.json",
    }  # fmt: skip
    for name, data in texts(folder).items():
        assert b"Made by Demilune" in b"\n".join(data.split(b"\n")[:6]), name


def test_two_runs_give_the_same_bytes(folder, tmp_path):
    (tmp_path / "here.toml").write_text(HERE)
    status, _, err = bundled(
        BUOY, "-o", tmp_path / "again", "--board", tmp_path / "here.toml", "--budget", BUDGET
    )
    assert status == 0, err
    assert texts(tmp_path / "again") == texts(folder)
    for name, data in texts(folder).items():
        assert not re.search(rb"/(tmp|home|work|root|usr/lib)/", data), name
        assert not re.search(rb"20[23]\d-\d\d-\d\d", data), name


def test_the_self_test_keeps_to_the_budget(folder):
    sheet = json.loads((folder / "buoy_datasheet.json").read_text())
    assert [one["name"] for one in sheet["selftests"]] == ["buoy_selftest.c", "buoy_selftest.py"]
    for one in sheet["selftests"]:
        assert 0 < one["tables"] <= one["budget"] == BUDGET
        assert one["cases"] >= 21
    code = "import buoy_selftest; print(buoy_selftest.selftest())"
    done = subprocess.run(
        [sys.executable, "-B", "-c", code], cwd=folder, capture_output=True, text=True
    )
    assert done.stdout == "0\n", done.stderr


def test_files_of_somebody_else_are_left_alone(tmp_path):
    need("gcc")
    (tmp_path / "kernels.mk").write_text("mine\n")
    status, _, err = bundled(BUOY, "-o", tmp_path)
    assert status == 2
    assert "was not written by Demilune" in err
    assert texts(tmp_path) == {"kernels.mk": b"mine\n"}
    (tmp_path / "folder").write_text("")
    assert bundled(BUOY, "-o", tmp_path / "folder")[0] == 2


def test_bad_arguments_are_refused(tmp_path):
    status, _, err = bundled(BUOY, "-o", tmp_path / "out", "--board", "cortex-m44")
    assert status == 2
    assert 'unknown board "cortex-m44"; did you mean "cortex-m4f"?' in err
    status, _, err = bundled(BUOY, "-o", tmp_path / "out", "--budget", 200)
    assert status == 2
    assert "of the budget of 200 bytes" in err
    assert not (tmp_path / "out").exists()


def test_names_that_clash_are_refused():
    keys = {"layout": "packed", "n": 3, "dtype": "float32", "language": "c"}
    specs = [make_spec("one", **keys), make_spec("two", **keys, file="one_selftest")]
    with pytest.raises(InputError, match="two files"):
        make(specs)


def test_a_missing_tool_is_told_with_what_brings_it(tmp_path, unchecked):
    need("gcc")
    lacking = 'packages = ["gcc-absent"]' + HERE.replace('"gcc"', '"absent-gcc"')
    (tmp_path / "far.toml").write_text(lacking)
    (tmp_path / "spec.toml").write_text('boards = ["far.toml"]' + SMALL)
    status, out, _ = bundled(tmp_path / "spec.toml", "-o", tmp_path / "out", "--json")
    assert status == 3
    (board,) = json.loads(out)["sheets"][0]["boards"]
    assert board["verdict"] == "missing"
    assert "apt-get install --no-install-recommends gcc-absent" in board["message"]
    assert "absent-gcc is not on this machine" in (tmp_path / "out/buoy_datasheet.html").read_text()


def test_a_board_that_refuses_is_told(tmp_path, unchecked):
    need("gcc")
    (tmp_path / "soft.toml").write_text(HERE.replace('float32 = "fused"', 'float32 = "soft"'))
    text = SMALL + 'fma = true\nenvironment = "hosted"\n'
    (tmp_path / "spec.toml").write_text('boards = ["soft.toml"]' + text)
    status, out, _ = bundled(tmp_path / "spec.toml", "-o", tmp_path / "out", "--json")
    assert status == 1
    sheet = json.loads(out)["sheets"][0]
    assert sheet["boards"][0]["verdict"] == "refused"
    assert "fma = true in float32" in sheet["boards"][0]["message"]
    assert sheet["costs"] == []
    # A hosted file with fused multiply-adds needs the library that has them.
    assert "PUBLIC m)" in (tmp_path / "out/CMakeLists.txt").read_text()
    assert "buoy_LIBS := -lm" in (tmp_path / "out/kernels.mk").read_text()
    assert "find_library('m'" in (tmp_path / "out/meson.build").read_text()


def test_python_alone_has_no_build_rules():
    keys = {"layout": "packed", "n": 3, "dtype": "float64", "language": "python"}
    made = make([make_spec("buoy", **keys)], budget=3000)
    assert set(made.files) == {
        "buoy.py", "buoy_selftest.py", "evidence.json", "evidence.html", "deviations.md",
        "buoy_datasheet.html", "buoy_datasheet.json",
    }  # fmt: skip
    assert made.status == 0
    assert "There is no C file." in made.files["deviations.md"]


# --- the data sheet ----------------------------------------------------------------------------


class Tags(HTMLParser):
    """Whether every tag is closed, and what is fetched from elsewhere."""

    def __init__(self) -> None:
        super().__init__()
        self.open: list[str] = []
        self.fetched: list[str] = []
        self.text = ""

    def handle_starttag(self, tag, attrs):
        self.fetched += [value for name, value in attrs if name in ("src", "href")]
        if tag not in ("meta", "link", "br", "img"):
            self.open.append(tag)

    def handle_endtag(self, tag):
        assert self.open.pop() == tag

    def handle_data(self, data):
        self.text += data


def test_the_page_needs_nothing_else_and_shows_what_the_record_holds(folder):
    sheet = json.loads((folder / "buoy_datasheet.json").read_text())
    page = (folder / "buoy_datasheet.html").read_text()
    tags = Tags()
    tags.feed(page)
    assert tags.open == []
    assert tags.fetched == []
    assert "url(" not in page
    for one in sheet["routines"]:
        assert one["prototype"] in tags.text
        for line in one["arithmetic"]:
            assert line in tags.text
    for line in sheet["storage"][0]["picture"] + sheet["cautions"]:
        assert line in tags.text
    assert len(sheet["storage"]) == 1  # the three routines store alike
    assert "✓" in tags.text
    assert "✗" not in tags.text
    sheet["boards"][0]["verdict"] = "differs"
    assert '<span class="bad">' in sheet_page(sheet)


def test_the_sheet_agrees_with_its_sources(folder):
    sheet = json.loads((folder / "buoy_datasheet.json").read_text())
    header = (folder / "buoy.h").read_text()
    for one in sheet["routines"]:
        assert one["prototype"] in header
    for one in sheet["files"]:
        data = (folder / one["name"]).read_bytes()
        assert one["sha256"] == hashlib.sha256(data).hexdigest()
        assert one["bytes"] == len(data)
    predict = sheet["routines"][0]
    # 78 elements of 4 bytes, of 144; figures known by hand.
    assert predict["ram"] == {"half": 312, "full": 576, "saved": 264}
    assert [(one["name"], one["bytes"]) for one in predict["arrays"]] == [
        ("a", 312), ("x", 48), ("y", 48),
    ]  # fmt: skip
    (board,) = sheet["boards"]
    assert (board["verdict"], board["message"]) == ("agrees", "")
    assert [one["routine"] for one in sheet["costs"]] == [
        "buoy_predict", "buoy_gate", "buoy_update",
    ]  # fmt: skip
    assert all(one["code"] > 30 and one["data"] == 0 for one in sheet["costs"])
    assert sheet["flags of all"] == ["-std=c99", "-ffp-contract=off", OPTIMISE, "-ffreestanding"]
    assert re.search(r"\d+\.\d+", sheet["toolchains"][0]["compiler"])
    assert sheet["here"][0]["status"] == "verified"


def test_bounds_are_the_published_ones():
    """gamma(m) = m*u/(1 - m*u): Higham 2002, section 3.1; u = 2^-24 is that of binary32."""
    keys = {"layout": "packed", "n": 12, "dtype": "float32"}
    plan = make_plan(make_spec("buoy", **keys))
    plain = error_bound(plan, 12)
    m = plan.spec.operation.roundings(12, 1)
    u = 2.0**-24
    assert m >= 12  # no sum of 12 products has fewer roundings
    assert float(plain["values"]["gamma(m)"]) == pytest.approx(m * u / (1 - m * u), rel=5e-3)
    dot2 = error_bound(make_plan(make_spec("buoy", **keys, accumulator="compensated")), 12)
    gamma = m * u / (1 - m * u)
    assert float(dot2["values"]["2*gamma(m)^2"]) == pytest.approx(2 * gamma**2, rel=5e-3)
    wide = error_bound(make_plan(make_spec("buoy", **keys, accumulator="wide")), 12)
    v = 2.0**-53
    assert float(wide["values"]["2*gamma(m)"]) == pytest.approx(2 * m * v / (1 - m * v), rel=5e-3)
    whole = error_bound(make_plan(make_spec("buoy", **{**keys, "dtype": "int16"})), 12)
    assert "Largest M" in whole["formula"][0]


def test_a_failing_board_makes_the_sheet_say_so(monkeypatch, tmp_path, unchecked):
    need("gcc")
    (tmp_path / "here.toml").write_text(HERE)
    monkeypatch.setattr(board_check, "run", lambda board, path: Ran(3))
    keys = {"layout": "packed", "n": 3, "dtype": "float32", "language": "c"}
    made = make([make_spec("buoy", **keys)], [find_board(str(tmp_path / "here.toml"))], budget=3000)
    assert made.status == 1
    assert made.sheets[0]["boards"][0]["verdict"] == "differs"
    assert "on 0 of 1 boards" in made.files["buoy_datasheet.html"]


# --- the firmware ------------------------------------------------------------------------------


@pytest.fixture
def firmware(folder, tmp_path) -> Path:
    """The firmware's project with the bundle in it."""
    place = tmp_path / "firmware"
    shutil.copytree(FIRMWARE, place, ignore=shutil.ignore_patterns("build*", "buoy"))
    shutil.copytree(folder, place / "buoy", ignore=shutil.ignore_patterns("__pycache__"))
    return place


def ran(place: Path, *command: object) -> None:
    environment = {k: v for k, v in os.environ.items() if k not in ("CC", "CFLAGS", "MAKEFLAGS")}
    done = subprocess.run(
        list(map(str, command)), cwd=place, capture_output=True, text=True, env=environment,
        stdin=subprocess.DEVNULL,
    )  # fmt: skip
    assert done.returncode == 0, done.stdout + done.stderr
    assert "warning" not in done.stderr.lower(), done.stderr


STEPS = {
    "make": (
        ["make", "-s", "BUILD=out", "CFLAGS=-O2 -Wall -Wextra"],
        ["make", "-s", "BUILD=out", "CROSS=cortex-m4f"],
    ),
    "cmake": (
        ["cmake", "-S", ".", "-B", "out", "-DCMAKE_C_FLAGS=-Wall -Wextra"],
        ["cmake", "-S", ".", "-B", "out", "--toolchain", "cortex-m4f.cmake"],
    ),
    "meson": (
        ["meson", "setup", "out", "-Dwarning_level=2"],
        ["meson", "setup", "out", "--cross-file", "cortex-m4f.ini"],
    ),
}
THEN = {"cmake": ["cmake", "--build", "out"], "meson": ["ninja", "-C", "out"]}


@pytest.mark.parametrize("cross", [False, True], ids=["here", "cortex-m4f"])
@pytest.mark.parametrize("tool", STEPS)
def test_the_firmware_is_built_and_runs(tool, cross, firmware):
    need(tool)
    if tool == "meson":
        need("ninja")
    for program in ("arm-none-eabi-gcc", "qemu-system-arm") if cross else ("gcc",):
        need(program)
    steps = [*STEPS[tool][cross]]
    if steps[-1] == "cortex-m4f.cmake":
        steps[-1] = str(firmware / "cortex-m4f.cmake")
    ran(firmware, *steps)
    if tool in THEN:
        ran(firmware, *THEN[tool])
    program = [firmware / "out/firmware"]
    ran(firmware, *(EMULATOR + program if cross else program))


def test_the_firmware_notices_a_changed_routine(firmware):
    need("make")
    need("gcc")
    source = firmware / "buoy/buoy.c"
    changed = source.read_text().replace("acc + akm * x[i]", "acc + x[i] * akm + 0.0f * t")
    assert changed != source.read_text()
    source.write_text(changed.replace("+ 0.0f * t", "+ 1e-9f"))
    ran(firmware, "make", "-s", "BUILD=out")
    done = subprocess.run([firmware / "out/firmware"])
    assert 1 <= done.returncode <= 99


def test_the_counts_of_one_board_are_shown():
    for tool in ("arm-none-eabi-gcc", "qemu-system-arm"):
        need(tool)
    code = (
        "import counts; counts.SIZES = range(3, 6); from demilune.boards import find_board;"
        "b = find_board('cortex-m4f'); print('\\n'.join(counts.table(b, counts.count_on(b))))"
    )
    environment = {**os.environ, "PYTHONPATH": os.pathsep.join([str(FIRMWARE), *sys.path])}
    done = subprocess.run(
        [sys.executable, "-c", code], capture_output=True, text=True, env=environment
    )
    assert "Compact: fewer for every n; unrolled: fewer for every n." in done.stdout, done.stderr
    cells = [line.split(" | ") for line in done.stdout.splitlines() if line.startswith("| 5 |")]
    # A product of 5 rows has at least 25 multiplications and 20 additions.
    assert all(int(one) >= 45 for one in (cells[0][1], cells[0][2], cells[0][4], cells[0][5]))
