"""The record as a page for people: one HTML file that needs nothing else."""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass
from functools import cache
from typing import Any

import jinja2

from demilune.languages import TEMPLATES

STATUS = {
    "verified": ("✓", "good"),
    "passed": ("✓", "good"),
    "caught": ("✓", "good"),
    "failed": ("✗", "bad"),
    "error": ("✗", "bad"),
    "not caught": ("✗", "bad"),
    "left out": ("–", "open"),
    "skipped": ("–", "open"),
}
"""A sign and a class for each state; the word itself always stands beside."""

WIDTH, BOUND, HEIGHT = 200, 160, 12
"""Of a bar, in units of the picture: all of it, the place of the bound, and its height."""
MOST_SIZES = 16
"""Sizes that are listed one by one."""


def page(record: dict[str, Any]) -> str:
    """The page that shows a record."""
    context = {
        "record": record,
        "headline": headline(record),
        "good": _good(record),
        "kernels": record["kernels"],
        "reasons": [kernel for kernel in record["kernels"] if "reason" in kernel],
        "asked": _asked(record["kernels"]),
        "errors": [error for kernel in record["kernels"] for error in _errors(kernel)],
        "width": WIDTH, "bound": BOUND, "height": HEIGHT,
    }  # fmt: skip
    text: str = _environment().get_template("report/page.html.j2").render(context)
    return text.strip() + "\n"


@cache
def _environment() -> jinja2.Environment:
    env = jinja2.Environment(
        loader=jinja2.FileSystemLoader(TEMPLATES),
        undefined=jinja2.StrictUndefined,
        autoescape=True,
        trim_blocks=True,
        lstrip_blocks=True,
    )
    env.filters |= {"found": found, "sizes": sizes, "anchor": anchor}
    env.globals |= {"status": STATUS}
    return env


def _good(record: dict[str, Any]) -> bool:
    planted = record["planted_faults"]
    whole = all(kernel["status"] == "verified" for kernel in record["kernels"])
    return whole and (planted is None or not (planted["survivors"] or planted["untried"]))


def _asked(kernels: list[dict[str, Any]]) -> dict[str, list[dict[str, Any]]]:
    """The kernels of each specification: one for each language."""
    groups: dict[str, list[dict[str, Any]]] = {}
    for kernel in kernels:
        groups.setdefault(kernel["asked"], []).append(kernel)
    return groups


def headline(record: dict[str, Any]) -> str:
    """The verdict as a sentence."""
    kernels, planted = record["kernels"], record["planted_faults"]
    verified = sum(kernel["status"] == "verified" for kernel in kernels)
    if not kernels or verified < len(kernels):
        return f"Not verified: {verified} of {len(kernels)} kernels hold at every level."
    few = {1: "the kernel holds", 2: "both kernels hold"}
    which = few.get(len(kernels), f"all {len(kernels)} kernels hold")
    if planted is None:
        return f"Verified: {which} at every level that applies."
    if planted["survivors"]:
        count = len(planted["survivors"])
        return (
            f"Doubtful: {which} at every level, but {count} of {planted['planted']} planted "
            "faults were not caught."
        )
    if planted["untried"]:
        return (
            f"Doubtful: {which} at every level, but no faults could be planted into "
            f"{len(planted['untried'])} of {len(kernels)}."
        )
    return (
        f"Verified: {which} at every level that applies, and all {planted['planted']} planted "
        "faults were caught."
    )


# --- the largest errors --------------------------------------------------------------------------


@dataclass(frozen=True)
class Bar:
    """An error beside its bound."""

    label: str
    in_bounds: str
    length: float
    over: bool
    """Whether the error is larger than the bound."""


@dataclass(frozen=True)
class Error:
    """The largest errors of one kernel."""

    kernel: str
    language: str
    in_bounds: str
    in_ulps: str
    bars: tuple[Bar, ...]


def _errors(kernel: dict[str, Any]) -> Iterator[Error]:
    for level in kernel.get("levels", []):
        if "largest_error" in level:
            error = level["largest_error"]
            by_n = error.get("in_bounds_by_n") or {"": error["in_bounds"]}
            labels = sorted(by_n, key=lambda n: (len(n), n))
            bars = tuple(_bar(f"n = {n}" if n else "all n", by_n[n]) for n in labels)
            yield Error(
                kernel["name"], kernel["language"],
                _number(error["in_bounds"]), _number(error["in_ulps"]), bars,
            )  # fmt: skip


def _bar(label: str, ratio: float | str) -> Bar:
    size = ratio if isinstance(ratio, int | float) else float("inf")
    length = round(min(size * BOUND, WIDTH), 1)
    return Bar(label, _number(ratio), max(length, 1) if size else 0, size > 1)


def _number(value: float | str) -> str:
    return f"{value:.2g}" if isinstance(value, int | float) else value


# --- filters -------------------------------------------------------------------------------------


def sizes(values: list[int]) -> str:
    """A list of sizes as text, cut where it is long."""
    shown = [str(one) for one in values]
    if len(shown) > MOST_SIZES:
        shown = [*shown[: MOST_SIZES - 1], "...", shown[-1]]
    return ", ".join(shown)


def found(level: dict[str, Any]) -> list[str]:
    """What a level tells beside its failures, a line each."""
    lines = [level["skipped"]] if level["skipped"] else []
    ranges = {
        name.removeprefix("largest element for n = "): value
        for name, value in level["facts"].items()
        if name.startswith("largest element for n = ")
    }
    if ranges:
        each = ", ".join(f"{value} for n = {n}" for n, value in ranges.items())
        lines.append(f"largest whole number that is still exact: {each}")
    if "largest_error" in level:
        error = level["largest_error"]
        lines.append(
            f"largest error: {_number(error['in_bounds'])} of the bound, "
            f"{_number(error['in_ulps'])} ulps"
        )
    lines += [
        f"{name}: {value}"
        for name, value in level["facts"].items()
        if not name.startswith("largest element for n = ")
    ]
    return lines


def anchor(kernel: dict[str, Any]) -> str:
    """The name of a kernel's place on the page."""
    return f"kernel-{kernel['name']}-{kernel['language']}"
