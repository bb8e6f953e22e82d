"""Evidence files that are refused: damaged, changed, foreign, newer, or not of the shape."""

from __future__ import annotations

import copy
import json

import jsonschema
import pytest
from test_cli import invoke
from test_evidence import PYTHON, resealed, written

import demilune
from demilune import pipeline
from demilune.bench import selfcheck as trying
from demilune.bench.faults import FAULTS
from demilune.errors import InputError
from demilune.evidence import record as recording
from demilune.evidence import shape
from demilune.evidence.reading import read_record
from demilune.evidence.statements import STATEMENTS


@pytest.fixture(scope="module")
def record():
    """A record of one small Python kernel."""
    return recording.evidence_of(pipeline.check(demilune.parse(PYTHON)))


def wrong(change):
    """A way to break a record that leaves its sum as it was."""

    def broken(record):
        changed = copy.deepcopy(record)
        change(changed)
        return recording.text_of(changed)

    return broken


def by_hand(change):
    """A way to break a record together with its sum."""
    return lambda record: recording.text_of(resealed(record, change))


CHANGED, MALFORMED, NEWER = "changed since it was written", "malformed", "newer than this one"
FOREIGN = "not evidence that Demilune wrote"
BROKEN = {
    "seed": (wrong(lambda r: r.update(seed=2)), CHANGED),
    "verdict": (wrong(lambda r: r.update(verdict="7 verified")), CHANGED),
    "bit": (wrong(lambda r: r["kernels"][0]["levels"][0].update(results="0" * 64)), CHANGED),
    "note": (wrong(lambda r: r.update(note="fine")), CHANGED),
    "sum": (wrong(lambda r: r.update(sha256="0" * 64)), CHANGED),
    "no sum": (wrong(lambda r: r.pop("sha256")), MALFORMED),
    "sum of a number": (wrong(lambda r: r.update(sha256=7)), MALFORMED),
    "no kernels": (by_hand(lambda r: r.pop("kernels")), "kernels is missing"),
    "unknown": (by_hand(lambda r: r.update(note="fine")), "'note' is not known"),
    "status": (by_hand(lambda r: r["kernels"][0].update(status="fine")), "kernels[0].status"),
    "levels": (by_hand(lambda r: r["kernels"][0].update(levels=3)), "kernels[0].levels"),
    "whole": (by_hand(lambda r: r.update(seed=1.0)), "seed: found 1.0, allowed is integer"),
    "negative": (by_hand(lambda r: r.update(seed=-1)), "seed: found -1, allowed is at least 0"),
    "list": (by_hand(lambda r: r["kernels"][0]["specification"].update(n=[5])), MALFORMED),
    "name": (by_hand(lambda r: r["kernels"][0]["specification"].update(name="x")), MALFORMED),
    "twice": (by_hand(lambda r: r["kernels"].append(r["kernels"][0])), "is not clear"),
    "language": (by_hand(lambda r: r["kernels"][0].update(language="c")), "is not clear"),
    "value": (
        by_hand(lambda r: r["kernels"][0]["specification"].update(layout="paked")),
        'did you mean "packed"',
    ),
    "kernel name": (by_hand(lambda r: r["kernels"][0].update(name="a b\x1b[31m")), "begins with"),
    "newer program": (by_hand(lambda r: r.update(made_by="Made by Demilune 99.1")), NEWER),
    "newer form": (by_hand(lambda r: r.update(format=2)), NEWER),
    "odd form": (by_hand(lambda r: r.update(format="two")), MALFORMED),
    "odd version": (by_hand(lambda r: r.update(made_by="Made by Demilune moon")), MALFORMED),
    "foreign": (lambda _: '{"made_by": "the harbour office", "format": 1}', FOREIGN),
    "old form": (lambda _: '{"made_by": "Made by Demilune 0.0.1"}', FOREIGN),
    "array": (lambda _: "[]", FOREIGN),
    "text": (lambda _: "low water", MALFORMED),
    "empty": (lambda _: "", MALFORMED),
    "half": (lambda r: recording.text_of(r)[:-40], MALFORMED),
    "key twice": (
        lambda r: recording.text_of(r).replace("{", '{\n "seed": 9,', 1), "stands twice",
    ),
    "constant": (
        lambda r: recording.text_of(r).replace('"seed": 1', '"seed": NaN'), "NaN is no number",
    ),
    "no number": (
        lambda r: recording.text_of(r).replace('"seed": 1', '"seed": 1e999'), MALFORMED,
    ),
    "digits": (
        lambda r: recording.text_of(r).replace('"seed": 1', '"seed": ' + "1" * 5000), MALFORMED,
    ),
    "nested": (lambda _: "[" * 100_000, MALFORMED),
    "surrogate": (
        lambda r: json.dumps(resealed(r, lambda x: x["kernels"][0].update(status="\ud800"))),
        MALFORMED,
    ),
}  # fmt: skip


@pytest.mark.parametrize(("breaking", "message"), BROKEN.values(), ids=BROKEN)
def test_a_broken_record_is_refused_in_one_line(record, tmp_path, breaking, message):
    text = breaking(record)
    assert text != recording.text_of(record)
    path = tmp_path / "evidence.json"
    path.write_bytes(text.encode())
    result = invoke("verify", "--replay", path, "-o", tmp_path / "out")
    assert result.exit_code == 2
    assert result.stdout == ""
    (line,) = result.stderr.splitlines()
    assert line.startswith(f"demilune: {path}: ")
    assert message in line
    assert len(line) - len(str(path)) < 350
    assert not (tmp_path / "out").exists() or not list((tmp_path / "out").iterdir())
    told = json.loads(invoke("verify", "--replay", path, "--json").stdout)
    assert told == {"status": 2, "errors": [line.removeprefix("demilune: ")]}


def test_files_that_are_none_are_refused(tmp_path):
    (tmp_path / "latin").write_bytes(b'{"made_by": "caf\xe9"}')
    for name, part in (("latin", "not UTF-8"), ("none", "No such file"), (".", "directory")):
        result = invoke("verify", "--replay", tmp_path / name)
        assert result.exit_code == 2
        assert part in result.stderr
    with pytest.raises(InputError, match="No such file"):
        read_record(tmp_path / "none")


def test_options_that_do_not_go_together(record, tmp_path):
    path, spec = written(record, tmp_path), tmp_path / "gauge.toml"
    for words in ([spec], ["-k", "gauge"], ["--seed", 1], ["--selfcheck"]):
        result = invoke("verify", "--replay", path, *words)
        assert result.exit_code == 2
        assert "do not go with it" in result.stderr
    assert invoke("verify").exit_code == 2


def mutants(value):
    """Every part of a record, taken out or replaced by something else."""
    others = (None, True, -1, 2.5, "x", [], {}, [3], {"x": 3})
    if isinstance(value, dict):
        for key, inner in value.items():
            yield {name: one for name, one in value.items() if name != key}
            for changed in (*others, *mutants(inner)):
                yield {**value, key: changed}
        yield {**value, "unknown": 1}
    elif isinstance(value, list):
        for place, inner in enumerate(value[:2]):
            for changed in (*others, *mutants(inner)):
                yield [*value[:place], changed, *value[place + 1 :]]


def test_the_reader_accepts_what_the_schema_accepts(monkeypatch):
    """Against the package jsonschema, on every small change of a record."""
    monkeypatch.setattr(recording, "STATEMENTS", STATEMENTS[:1])
    monkeypatch.setattr(trying, "FAULTS", dict(list(FAULTS.items())[:2]))
    made = recording.evidence_of(pipeline.check(demilune.parse(PYTHON), selfcheck=True))
    (kernel,) = made["kernels"]
    kernel["levels"] = [kernel["levels"][2]]
    validator = jsonschema.Draft202012Validator(shape.schema())
    counts = {True: 0, False: 0}
    for number, changed in enumerate(mutants(made)):
        if number % 3 == 0:
            right = not list(shape.problems(changed))
            assert right == validator.is_valid(changed), json.dumps(changed)
            counts[right] += 1
    assert counts[True] > 10
    assert counts[False] > 100
