"""The page of the evidence report: well-formed, self-contained, accessible, verdict first."""

from __future__ import annotations

import copy
import itertools
import re
from html.parser import HTMLParser

import pytest

import demilune
from demilune import pipeline
from demilune.bench import selfcheck as trying
from demilune.bench.faults import FAULTS
from demilune.evidence import record as recording
from demilune.evidence.page import BOUND, WIDTH, page

PYTHON = (
    '[kernel.gauge]\ntriangle = "lower"\nlayout = "packed"\nn = 5\ndtype = "float64"\n'
    'loop = "dot"\nlanguage = "python"\n'
)
VOID = {"meta", "link", "br", "hr", "img", "input"}
"""Elements without an end (HTML Living Standard, 13.1.2 Elements; those that may be used here)."""
HOSTILE = "</style></table><script>alert(1)</script>\"'&<img src=http://tide.example/x>"


class Reader(HTMLParser):
    """Walks a page; an end that is not that of the innermost open element is an error."""

    def __init__(self, text):
        super().__init__(convert_charrefs=True)
        self.open, self.elements, self.texts = [], [], []
        self.feed(text)
        self.close()
        assert self.open == []

    def handle_starttag(self, tag, attrs):
        names = [name for name, _ in attrs]
        assert len(names) == len(set(names)), (tag, names)
        self.elements.append((tag, dict(attrs), list(self.open)))
        if tag not in VOID:
            self.open.append(tag)

    def handle_startendtag(self, tag, attrs):
        self.elements.append((tag, dict(attrs), list(self.open)))

    def handle_endtag(self, tag):
        assert self.open, f"</{tag}> closes nothing"
        assert self.open.pop() == tag, self.getpos()

    def handle_data(self, data):
        if data.strip():
            self.texts.append((data.strip(), list(self.open)))

    def all(self, tag):
        return [attributes for name, attributes, _ in self.elements if name == tag]

    def visible(self):
        return [text for text, inside in self.texts if "body" in inside]


@pytest.fixture(scope="module")
def record():
    few = {name: FAULTS[name] for name in list(FAULTS)[:3]}
    with pytest.MonkeyPatch.context() as patch:
        patch.setattr(trying, "FAULTS", few)
        return recording.evidence_of(pipeline.check(demilune.parse(PYTHON), selfcheck=True))


def everywhere(value, text):
    """The record with a text put into every string of it that is not checked for its form."""
    if isinstance(value, dict):
        fixed = ("made_by", "status", "verdict")
        return {k: v if k in fixed else everywhere(v, text) for k, v in value.items()}
    if isinstance(value, list):
        return [everywhere(one, text) for one in value]
    return f"{value}{text}" if isinstance(value, str) else value


def variants(record):
    """Records of every kind of outcome."""
    failed, bare, hostile = (copy.deepcopy(record) for _ in range(3))
    failed["verdict"] = "1 failed"
    failed["kernels"][0] |= {"status": "failed", "reason": "level exact: other bits"}
    failed["kernels"][0]["levels"][0] |= {"verdict": "failed", "failed": 9, "failures": ["low"]}
    failed["kernels"][0]["levels"][1] |= {"verdict": "skipped", "skipped": "slack water"}
    bare |= {"planted_faults": None, "files": []}
    bare["compiler"] = {"name": "cc", "version": "cc 1.0", "flags": {"gauge": ["-O2"]}}
    gone = ("levels", "cases", "sizes", "planted_faults")
    kernel = {k: v for k, v in bare["kernels"][0].items() if k not in gone}
    bare["kernels"] = [{**kernel, "status": "left out", "reason": "no compiler"}]
    return {
        "whole": record, "failed": failed, "bare": bare, "hostile": everywhere(hostile, HOSTILE),
    }  # fmt: skip


@pytest.fixture(params=["whole", "failed", "bare", "hostile"])
def reader(request, record):
    return Reader(page(variants(record)[request.param]))


def test_tags_are_balanced_and_names_unique(reader):
    ids = [one["id"] for _, one, _ in reader.elements if "id" in one]
    assert len(ids) == len(set(ids)) > 8
    assert reader.all("html") == [{"lang": "en"}]
    for link in reader.all("a"):
        assert link["href"].removeprefix("#") in ids
    for section in reader.all("section"):
        assert section["aria-labelledby"] in ids


def test_nothing_is_fetched_and_nothing_runs(reader, record):
    for tag, attributes, _ in reader.elements:
        assert tag not in {"script", "link", "img", "iframe", "object", "embed", "form", "base"}
        assert not {"src", "srcset", "data", "style", "action"} & attributes.keys()
        assert not [name for name in attributes if name.startswith("on")]
        assert attributes.get("href", "#").startswith("#")
    (policy,) = [m["content"] for m in reader.all("meta") if "http-equiv" in m]
    assert policy.startswith("default-src 'none'")
    text = page(record)
    assert not re.search(r"https?:|url\(|@import|//[a-z]", text)


def test_words_of_others_are_escaped(record):
    reader = Reader(page(everywhere(record, HOSTILE)))
    shown = "".join(reader.visible())
    assert shown.count("<script>alert(1)</script>") > 20
    assert len(reader.all("style")) == 1


def test_the_verdict_is_first(record):
    for name, made in variants(record).items():
        reader = Reader(page(made))
        after_title = reader.visible()[reader.visible().index("Demilune evidence") + 1 :]
        words = [text for text in after_title if text not in "✓✗"]
        good = name in ("whole", "hostile")
        assert words[0].startswith("Verified: the kernel holds" if good else "Not verified: 0 of 1")
        title = next(text for text, inside in reader.texts if inside[-1] == "title")
        assert title.startswith(words[0])
        assert words.index(words[0]) < words.index("What was asked")


def test_the_parts_come_in_order(record):
    reader = Reader(page(record))
    parts = [text for text, inside in reader.texts if inside[-1] == "h2"]
    assert parts == [
        "What was asked", "What was made", "How it was compiled", "What was checked",
        "Largest errors", "Planted faults", "What was not checked", "Versions", "Replay",
        "Caution",
    ]  # fmt: skip
    shown = " ".join(reader.visible())
    for text in (
        record["caution"], record["replay"], record["sha256"], record["machine"]["numpy"],
        *(one["sha256"] for one in record["files"]),
        *(one["against"] for one in record["levels"]),
        *(one["message"] for one in record["kernels"][0]["planted_faults"]),
        *(one["why"] for one in record["not_checked"]),
    ):  # fmt: skip
        assert text in shown


def test_headings_and_tables_make_sense_without_eyes(reader):
    levels = [int(tag[1]) for tag, _, _ in reader.elements if re.fullmatch(r"h[1-6]", tag)]
    assert levels[0] == 1
    assert levels.count(1) == 1
    assert all(b - a <= 1 for a, b in itertools.pairwise(levels))
    assert len(reader.all("table")) == len(reader.all("caption")) > 2
    for cell in reader.all("th"):
        assert cell["scope"] in ("col", "row")
    for picture in reader.all("svg"):
        assert picture["role"] == "img"
        assert "of the bound" in picture["aria-label"]
    for box in [one for one in reader.all("div") if one.get("class") == "wide"]:
        assert (box["role"], box["tabindex"]) == ("region", "0")  # can be scrolled by keys
        assert box["aria-label"]
    for name in ("main", "header", "nav"):
        assert len(reader.all(name)) == 1


def test_a_state_is_a_word_and_never_colour_alone(reader):
    states = [inside for tag, one, inside in reader.elements if "state" in one.get("class", "")]
    words = {"verified", "failed", "passed", "skipped", "left out", "caught", "not caught"}
    told = [t for t, inside in reader.texts if t in words and inside[-1] == "span"]
    assert len(told) == len(states) > 0


def luminance(colour):
    """Relative luminance of ``#rgb`` or ``#rrggbb`` (WCAG 2.1, definitions)."""
    digits = colour[1:] if len(colour) == 7 else "".join(2 * c for c in colour[1:])
    parts = [int(digits[k : k + 2], 16) / 255 for k in (0, 2, 4)]
    linear = [c / 12.92 if c <= 0.03928 else ((c + 0.055) / 1.055) ** 2.4 for c in parts]
    return 0.2126 * linear[0] + 0.7152 * linear[1] + 0.0722 * linear[2]


def test_contrast_is_enough_in_light_dark_and_print(record):
    # WCAG 2.1, 1.4.3: text 4.5 to 1; 1.4.11: parts of pictures 3 to 1.
    style = re.search(r"<style>(.*?)</style>", page(record), re.DOTALL)[1]
    palettes = [
        dict(re.findall(r"--(\w+): (#[0-9a-f]+)", block))
        for block in re.findall(r":root \{(.*?)\}", style, re.DOTALL)
    ]
    assert len(palettes) == 3
    for palette in palettes:
        for back in ("page", "box"):
            for name in ("text", "soft", "good", "bad", "open", "link", "bar"):
                pair = sorted(luminance(palette[one]) for one in (name, back))
                assert (pair[1] + 0.05) / (pair[0] + 0.05) >= 4.5, (name, palette[name])


@pytest.mark.parametrize(
    ("error", "lengths", "said"),
    [
        ({"in_bounds": 0.5, "in_ulps": 1.0}, [BOUND / 2], "all n: 0.5 of the bound"),
        ({"in_bounds": 0, "in_ulps": 0}, [0], "all n: 0 of the bound"),
        ({"in_bounds": 1.5, "in_ulps": 9.0}, [WIDTH], "all n: 1.5 of the bound, over it"),
        ({"in_bounds": "infinite", "in_ulps": "infinite"}, [WIDTH], "infinite of the bound, over"),
        (
            {"in_bounds": 0.5, "in_ulps": 1.0, "in_bounds_by_n": {"12": 0.5, "3": 0.25}},
            [BOUND / 4, BOUND / 2],
            "n = 3: 0.25 of the bound",
        ),
    ],
    ids=["half", "none", "over", "infinite", "by size"],
)
def test_a_bar_is_as_long_as_the_error(record, error, lengths, said):
    made = copy.deepcopy(record)
    made["kernels"][0]["levels"][2]["largest_error"] = error
    reader = Reader(page(made))
    bars = [one for one in reader.all("rect") if one["class"] in ("bar", "over")]
    assert [float(one["width"]) for one in bars] == lengths
    assert [one["class"] == "over" for one in bars] == [length > BOUND for length in lengths]
    assert said in reader.all("svg")[0]["aria-label"]


def test_many_sizes_are_cut(record):
    made = copy.deepcopy(record)
    made["kernels"][0]["sizes"] = list(range(1, 40))
    text = page(made)
    assert "n tried: 1, 2, 3" in text
    assert "15, ..., 39<" in text
