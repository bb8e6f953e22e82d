"""The evidence report: the record, its schema, its seal, the replay, and the self-check.

What is refused is in ``test_evidence_reading.py``, the page in ``test_evidence_page.py``.
"""

from __future__ import annotations

import copy
import hashlib
import json
from pathlib import Path

import jsonschema
import numpy as np
import pytest
from test_cli import invoke, run, snapshot
from tools import need

import demilune
from demilune import pipeline
from demilune.bench import selfcheck as trying
from demilune.bench.faults import FAULTS, Fault
from demilune.bench.levels import LEVELS, Level
from demilune.contract import CAUTION
from demilune.evidence import record as recording
from demilune.evidence import replay as repeating
from demilune.evidence import shape
from demilune.evidence.reading import checked
from demilune.evidence.statements import STATEMENTS
from demilune.plan.tree import Comment

GAUGE = '[kernel.gauge]\ntriangle = "lower"\nlayout = "packed"\nn = 5\ndtype = "float64"\n'
PYTHON = f'{GAUGE}loop = "dot"\nlanguage = "python"\n'
BOTH = f"{GAUGE}language = ['c', 'python']\n"
SHIPPED = Path(demilune.__file__).with_name("evidence.schema.json")
FEW = ("nothing_computed", "input_changed", "order_reversed")


def resealed(record, change):
    """The record as somebody would change it who knows how it is sealed."""
    changed = copy.deepcopy(record)
    change(changed)
    return recording.sealed(changed)


@pytest.fixture
def asked(tmp_path):
    """Writes a specification; gives its path."""

    def write(text):
        path = tmp_path / "gauge.toml"
        path.write_text(text)
        return path

    return write


@pytest.fixture
def few_faults(monkeypatch):
    """A catalogue of three faults, so that planting takes no time."""
    few = {name: FAULTS[name] for name in FEW if name in FAULTS}
    assert len(few) >= 2
    monkeypatch.setattr(trying, "FAULTS", few)
    return few


@pytest.fixture
def liar(tmp_path, monkeypatch):
    """A compiler that subtracts where the source adds."""
    path = tmp_path / "liar"
    path.write_text(
        '#!/bin/sh\nif [ "$1" != --version ]; then sed -i "s/acc = acc + /acc = acc - /" *.c; fi\n'
        f'exec {need("gcc")} "$@"\n'
    )
    path.chmod(0o755)
    return lambda: monkeypatch.setenv("CC", str(path))


@pytest.fixture(scope="module")
def record():
    """A record of one small Python kernel."""
    return recording.evidence_of(pipeline.check(demilune.parse(PYTHON)))


def written(record, folder):
    path = folder / "evidence.json"
    path.write_bytes(recording.text_of(record).encode())
    return path


# --- what the record holds -----------------------------------------------------------------------


def test_the_schema_is_one_and_the_command_prints_it():
    # JSON Schema, draft 2020-12, as the package jsonschema implements it.
    schema = json.loads(SHIPPED.read_text())
    jsonschema.Draft202012Validator.check_schema(schema)
    assert json.loads(invoke("schema", "--evidence").stdout) == schema
    assert json.loads(invoke("schema").stdout) != schema


SPECS = {
    "python": PYTHON,
    "open": '[kernel.gauge]\nlayout = "band"\nbeta = "runtime"\nlanguage = "python"\nkd = 2\n',
    "integer": '[kernel.gauge]\nlayout = "packed"\nn = 3\ndtype = "int16"\nlanguage = "python"\n',
    "complex": (
        '[kernel.gauge]\nn = 3\ndtype = "complex64"\nstructure = "hermitian"\nalpha = 0.3\n'
        'language = "python"\n'
    ),
}


@pytest.mark.parametrize("text", SPECS.values(), ids=SPECS)
def test_records_have_the_shape_of_the_schema(text, few_faults):
    for planted in (False, True):
        made = recording.evidence_of(pipeline.check(demilune.parse(text), selfcheck=planted))
        jsonschema.Draft202012Validator(shape.schema()).validate(made)
        assert checked(json.loads(recording.text_of(made))) == made


def test_a_record_of_what_fails_or_is_missing_has_that_shape(asked, tmp_path, monkeypatch, liar):
    path = asked(BOTH)
    liar()
    failed = json.loads(invoke("verify", path, "--selfcheck", "--json").stdout)
    monkeypatch.setenv("CC", str(tmp_path / "no-such-compiler"))
    missing = json.loads(invoke("verify", path, "--json").stdout)
    for made, states in ((failed, ["failed", "verified"]), (missing, ["left out", "verified"])):
        jsonschema.Draft202012Validator(shape.schema()).validate(made)
        assert [one["status"] for one in made["kernels"]] == states
        assert str(tmp_path) not in json.dumps(made)
    assert failed["verdict"].startswith("1 verified, 1 failed; ")
    assert failed["kernels"][0]["levels"][0]["failures"][0].startswith("n = 5, ")
    assert failed["planted_faults"]["untried"][0]["why"] == "the kernel itself is not verified"
    assert "planted_faults" not in failed["kernels"][0]
    assert missing["compiler"] is None
    gaps = {(one["kernel"], one["language"], one["what"]) for one in missing["not_checked"]}
    assert ("gauge", "c", "every level") in gaps


def test_what_was_asked_made_compiled_checked_and_left_out(asked, tmp_path):
    need("gcc")
    out = tmp_path / "out"
    assert invoke("build", asked(BOTH), "-o", out, "--seed", 3).exit_code == 0
    made = json.loads((out / "evidence.json").read_text())
    assert made["verdict"] == "2 verified"
    assert made["seed"] == 3
    assert made["caution"] == CAUTION
    assert made["replay"] == "demilune verify --replay evidence.json"
    for one in made["files"]:
        data = (out / one["name"]).read_bytes()
        assert (one["bytes"], one["sha256"]) == (len(data), hashlib.sha256(data).hexdigest())
    assert [one["name"] for one in made["files"]] == ["gauge.c", "gauge.h", "gauge.py"]
    assert "-ffp-contract=off" in made["compiler"]["flags"]["gauge"]
    (asked_for,) = demilune.parse(made["kernels"][0]["asked"].replace("'", '"'))[:1]
    for one in made["kernels"]:
        assert one["specification"] == {**asked_for.values, "language": one["language"]}
        assert [level["name"] for level in one["levels"]] == list(LEVELS)
        assert one["cases"] == sum(level["cases"] for level in one["levels"]) > 20
        assert one["sizes"] == [5]
        assert all(len(level["results"]) == 64 for level in one["levels"])
        error = one["levels"][2]["largest_error"]
        assert 0 < error["in_bounds"] <= 1
        assert error["in_ulps"] > 0
    # The same bits from C and Python: the contract of the arithmetic.
    first, second = (one["levels"] for one in made["kernels"])
    assert first[1]["results"] == second[1]["results"]
    assert {one["what"] for one in made["not_checked"]} >= {"other compilers, flags and processors"}


def test_every_level_says_what_it_shares_with_the_generator():
    assert [one.name for one in STATEMENTS] == list(LEVELS)
    shared = {one.name: set(one.shares) for one in STATEMENTS}
    # What foretells from the plan shares it; what multiplies whole matrices does not.
    for name in ("exact", "bound"):
        assert "the plan" not in shared[name]
    for name in ("faithful", "untouched", "calling"):
        assert "the plan" in shared[name]


def test_what_is_not_checked_has_its_reason():
    integer = recording.evidence_of(pipeline.check(demilune.parse(SPECS["integer"])))
    reasons = {one["what"]: one["why"] for one in integer["not_checked"]}
    assert reasons["level bound"] == "integer arithmetic has no rounding errors"
    assert "sizes, strides and scalars other than those tried" not in reasons
    assert any("--selfcheck" in why for why in reasons.values())
    open_ = recording.evidence_of(pipeline.check(demilune.parse(SPECS["open"])))
    assert any(one["what"].startswith("sizes, strides") for one in open_["not_checked"])


def test_what_a_run_could_not_look_at():
    outcome = pipeline.check(demilune.parse(PYTHON))
    (row,) = outcome.rows
    for level in row.verdict.levels[:2]:
        level.cases, level.skipped = 0, "slack water"
    row.verdict.levels[3].facts["guard pages"] = "no fork here"
    made = recording.evidence_of(outcome)
    assert made["verdict"] == "1 failed"
    assert made["kernels"][0]["reason"] == "no level that decides could be run"
    gaps = {one["what"]: one["why"] for one in made["not_checked"] if one["kernel"] == "gauge"}
    assert gaps == {
        "level exact": "slack water", "level faithful": "slack water",
        "guard pages around the arrays": "no fork here",
    }  # fmt: skip


def test_equal_runs_give_equal_bytes_and_another_seed_another_record(asked, tmp_path):
    need("gcc")
    path, texts = asked(BOTH), []
    for place, seed in (("a", 7), ("b", 7), ("c", 8)):
        words = ["--selfcheck"] if seed == 7 and place == "b" else []
        done = run("verify", path, "-o", tmp_path / place, "--seed", seed, *words)
        assert done.returncode == 0, done.stdout
        texts.append({p.name: p.read_bytes() for p in (tmp_path / place).iterdir()})
    again = run("verify", path, "-o", tmp_path / "a", "--seed", 7, "--json")
    assert json.loads(again.stdout) == json.loads(texts[0]["evidence.json"])
    assert {p.name: p.read_bytes() for p in (tmp_path / "a").iterdir()} == texts[0]
    planted = json.loads(texts[1]["evidence.json"])
    assert planted["planted_faults"]["planted"] > 20
    assert (
        run("verify", path, "--seed", 7, "--selfcheck", "--json").stdout.encode()
        == (texts[1]["evidence.json"])
    )
    first, other = (json.loads(texts[k]["evidence.json"])["kernels"][0]["levels"] for k in (0, 2))
    assert all(a["results"] != b["results"] for a, b in zip(first, other, strict=True))


def test_the_sum_is_that_of_the_canonical_form(record):
    # The rule is the one that the schema publishes, written out again here.
    rest = {key: value for key, value in record.items() if key != "sha256"}
    text = json.dumps(rest, sort_keys=True, separators=(",", ":"))
    assert record["sha256"] == hashlib.sha256(text.encode("ascii")).hexdigest()


def test_errors_without_end_and_other_facts_become_json():
    level = Level("bound", cases=1, facts={
        "largest error / bound": float("inf"), "largest error in ulps": 2.0,
        "error / bound for n = 3": 0.25, "sizes": (3, 5), "other": {"x": float("-inf")},
        "none": None, "count": np.int64(7), "folder": Path("/tide/gate"),
    })  # fmt: skip
    made = recording._level(level)
    assert made["largest_error"] == {
        "in_bounds": "infinite", "in_ulps": 2.0, "in_bounds_by_n": {"3": 0.25},
    }  # fmt: skip
    assert made["sizes"] == [3, 5]
    assert made["facts"] == {"other": {"x": "-inf"}, "none": None, "count": 7, "folder": "gate"}
    json.dumps(made, allow_nan=False)


@pytest.mark.parametrize(
    ("text", "expected"),
    [
        ("compiler /opt/tide/bin/cc cannot be run", "compiler cc cannot be run"),
        ("/gate: missing", "gate: missing"),
        ("in '/opt/a b/c.h' and (/usr/include/math.h)", "in 'a b/c.h' and (math.h)"),
        ("the error is 3 times 1/8 of the bound / n", "the error is 3 times 1/8 of the bound / n"),
        ("caf\udce9", "caf?"),
    ],
)
def test_texts_lose_their_folders(text, expected):
    assert recording.clean(text) == expected


# --- writing -------------------------------------------------------------------------------------


@pytest.mark.parametrize("words", [[], ["-o", "out"]])
def test_verify_writes_the_evidence_and_no_sources(asked, tmp_path, words):
    folder = tmp_path / (words[1] if words else "build_out")
    told = invoke("verify", asked(PYTHON), *words).stdout
    assert f"evidence.json and evidence.html are in {folder.name}" in told
    assert {one.name for one in folder.iterdir()} == {"evidence.json", "evidence.html"}


@pytest.mark.parametrize("name", ["evidence.json", "evidence.html"])
@pytest.mark.parametrize("command", ["verify", "build"])
def test_the_report_of_somebody_else_is_left_alone(asked, tmp_path, name, command, monkeypatch):
    path, out = asked(PYTHON), tmp_path / "out"
    out.mkdir()
    (out / name).write_text("mine")
    before = snapshot(tmp_path)
    with monkeypatch.context() as patched:  # it is refused before anything is compiled
        patched.setattr(pipeline, "check_units", lambda *_, **__: pytest.fail("work was done"))
        result = invoke(command, path, "-o", out)
    assert result.exit_code == 2
    assert "not written by Demilune" in result.stderr
    assert snapshot(tmp_path) == before
    assert invoke(command, path, "-o", out, "--force").exit_code == 0
    assert invoke(command, path, "-o", out).exit_code == 0  # its own it may write over


# --- replay --------------------------------------------------------------------------------------


def test_a_replay_agrees_and_gives_the_same_record(asked, tmp_path):
    need("gcc")
    out, again = tmp_path / "out", tmp_path / "again"
    assert invoke("build", asked(BOTH), "-o", out, "--seed", 5).exit_code == 0
    result = invoke("verify", "--replay", out / "evidence.json", "-o", again)
    assert result.exit_code == 0
    assert result.stdout.splitlines()[-1] == (
        "every bit agreed in 2 of 2 kernels; 3 of 3 source files agreed"
    )
    for name in ("evidence.json", "evidence.html"):
        assert (again / name).read_bytes() == (out / name).read_bytes()
    told = json.loads(invoke("verify", "--replay", out / "evidence.json", "--json").stdout)
    assert told["agrees"]
    assert [one["found"] for one in told["kernels"]] == ["every bit agreed"] * 2
    assert told["surroundings"] == []


def test_a_replay_plants_the_faults_again(few_faults, monkeypatch, tmp_path):
    made = recording.evidence_of(pipeline.check(demilune.parse(PYTHON), selfcheck=True))
    path = written(made, tmp_path)
    assert invoke("verify", "--replay", path).exit_code == 0
    gone = next(iter(few_faults))
    monkeypatch.delitem(few_faults, gone)
    result = invoke("verify", "--replay", path)
    assert result.exit_code == 1
    assert f"planted fault {gone}: recorded caught (levels: " in result.stdout
    assert "here not planted" in result.stdout


@pytest.mark.parametrize(
    ("change", "sources"),
    [
        (lambda r: r.update(seed=2), False),
        (lambda r: r["kernels"][0]["specification"].update(direction="backward"), True),
        (lambda r: r["kernels"][0]["levels"][1].update(results="0" * 64), False),
    ],
    ids=["seed", "specification", "bits"],
)
def test_a_replay_of_something_else_differs(record, tmp_path, change, sources):
    path = written(resealed(record, change), tmp_path)
    result = invoke("verify", "--replay", path)
    assert result.exit_code == 1
    assert "gauge (python): level faithful: other bits (SHA-256 recorded " in result.stdout
    assert ("gauge.py: other bytes" in result.stdout) == sources
    assert "every bit agreed in 0 of 1 kernels; differs: 1" in result.stdout
    told = json.loads(invoke("verify", "--replay", path, "--json").stdout)
    assert not told["agrees"]
    assert bool(told["files"]) == sources


def test_a_replay_with_a_compiler_that_lies_differs(asked, tmp_path, liar):
    out = tmp_path / "out"
    need("gcc")
    assert invoke("build", asked(BOTH), "-o", out).exit_code == 0
    liar()
    result = invoke("verify", "--replay", out / "evidence.json")
    assert result.exit_code == 1
    lines = result.stdout.splitlines()
    assert any(one.startswith("gauge (c): level exact: other bits") for one in lines)
    assert any("level exact: recorded passed, here failed: n = 5, " in one for one in lines)
    assert not any(one.startswith("gauge (python): ") for one in lines)
    assert "every bit agreed in 1 of 2 kernels; differs: 1; 3 of 3 source files agreed" in lines


def test_a_replay_says_what_else_is_not_as_it_was(record, tmp_path):
    def change(made):
        made["machine"]["numpy"] = "1.0.0\x1b[31m"
        made["made_by"] = "Made by Demilune 0.0.1"
        made["files"].append({"name": "tide.c", "bytes": 1, "sha256": "0" * 64})
        made["kernels"][0]["levels"][4]["name"] = "ebbing"

    result = invoke("verify", "--replay", written(resealed(record, change), tmp_path))
    assert result.exit_code == 1
    assert "  numpy: recorded 1.0.0?[31m, here " in result.stdout
    assert "  made by: recorded Made by Demilune 0.0.1, here " in result.stdout
    assert "tide.c was recorded and is not made here" in result.stdout
    assert "level calling was not recorded" in result.stdout
    assert "level ebbing is not run here" in result.stdout


def test_a_replay_where_something_is_missing_or_was(asked, tmp_path, monkeypatch):
    need("gcc")
    path = asked(BOTH)
    invoke("build", path, "-o", tmp_path / "with")
    monkeypatch.setenv("CC", "no-such-compiler")
    invoke("build", path, "-o", tmp_path / "without")
    result = invoke("verify", "--replay", tmp_path / "with" / "evidence.json")
    assert result.exit_code == 3
    assert "every bit agreed in 1 of 2 kernels; left out: 1" in result.stdout
    assert "no-such-compiler" in result.stdout
    assert "  compiler: recorded " in result.stdout
    monkeypatch.delenv("CC")
    result = invoke("verify", "--replay", tmp_path / "without" / "evidence.json")
    assert result.exit_code == 0
    assert "every bit agreed in 1 of 2 kernels; nothing to compare: 1" in result.stdout


def test_a_failing_kernel_that_fails_again_alike_still_fails(asked, tmp_path, liar):
    liar()
    assert invoke("build", asked(BOTH), "-o", tmp_path / "out").exit_code == 1
    result = invoke("verify", "--replay", tmp_path / "out" / "evidence.json")
    assert "every bit agreed in 2 of 2 kernels" in result.stdout
    assert result.exit_code == 1


def test_a_replay_in_the_library(record):
    found = repeating.replay(record)
    assert found.agrees
    assert found.record == record
    assert found.status == 0


# --- planted faults ------------------------------------------------------------------------------


def test_selfcheck_on_a_small_kernel_catches_every_fault(asked, tmp_path):
    out = tmp_path / "out"
    result = invoke("verify", "--selfcheck", asked(PYTHON), "-o", out)
    assert result.exit_code == 0, result.stdout
    made = json.loads((out / "evidence.json").read_text())
    sums, trials = made["planted_faults"], made["kernels"][0]["planted_faults"]
    assert sums["planted"] == sums["caught"] == len(trials) > 15
    assert sums["survivors"] == sums["untried"] == []
    assert f"planted faults: {len(trials)} planted, {len(trials)} caught" in result.stdout
    assert made["verdict"] == f"1 verified; {len(trials)} of {len(trials)} planted faults caught"
    for trial in trials:
        levels = FAULTS[trial["fault"]].levels
        assert trial["meaning"] == FAULTS[trial["fault"]].meaning
        assert set(trial["caught_by"]) & set(levels)
        assert trial["message"]
    assert not any("selfcheck" in one["why"] for one in made["not_checked"])


def test_a_fault_that_survives_is_the_debt_of_the_bench(asked, tmp_path, few_faults, monkeypatch):
    """A change that changes no bit cannot be caught: it stands for a bench that is blind."""

    def remark(plan):
        body = (*plan.routine.body[:-1], Comment("slack water"), plan.routine.body[-1])
        return trying.replace(plan, routine=trying.replace(plan.routine, body=body))

    meaning = "a remark <b>changes nothing"
    monkeypatch.setitem(few_faults, "remark", Fault("remark", meaning, ("exact",), remark))
    result = invoke("verify", "--selfcheck", asked(PYTHON), "-o", tmp_path / "out")
    assert result.exit_code == 1
    count = len(few_faults)
    assert f"planted faults: {count} planted, {count - 1} caught" in result.stdout
    assert f"the bench's debt: remark in gauge (python): {meaning}" in result.stdout
    made = json.loads((tmp_path / "out" / "evidence.json").read_text())
    assert made["planted_faults"]["survivors"] == [
        {"kernel": "gauge", "language": "python", "fault": "remark"}
    ]
    page = (tmp_path / "out" / "evidence.html").read_text()
    assert f"Doubtful: the kernel holds at every level, but 1 of {count} planted faults" in page


def test_faults_that_cannot_be_built_are_told_and_fail(asked, tmp_path, monkeypatch):
    def broken(*_):
        raise demilune.CheckError("low water")

    monkeypatch.setattr(pipeline, "plant", broken)
    result = invoke("verify", "--selfcheck", asked(PYTHON), "-o", tmp_path / "out")
    assert result.exit_code == 1
    page = (tmp_path / "out" / "evidence.html").read_text()
    assert "no faults could be planted into 1 of 1" in page
    assert "planted faults: 0 planted, 0 caught" in result.stdout
    assert "could not be built: low water" in result.stdout
