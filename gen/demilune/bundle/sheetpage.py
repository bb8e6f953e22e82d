"""The data sheet as a page for people: one HTML file that needs nothing else and prints."""

from __future__ import annotations

from functools import cache
from typing import Any

import jinja2

from demilune.languages import TEMPLATES

VERDICTS = {
    "agrees": ("✓", "good"), "verified": ("✓", "good"), "missing": ("–", "open"),
    "left out": ("–", "open"),
}  # fmt: skip
"""A sign and a class for each verdict; all others are failures."""


def sheet_page(record: dict[str, Any]) -> str:
    """The page that shows a data sheet."""
    text: str = _environment().get_template("bundle/datasheet.html.j2").render(_context(record))
    return text.strip() + "\n"


@cache
def _environment() -> jinja2.Environment:
    return jinja2.Environment(
        loader=jinja2.FileSystemLoader(TEMPLATES),
        undefined=jinja2.StrictUndefined,
        autoescape=True,
        trim_blocks=True,
        lstrip_blocks=True,
    )


def _context(record: dict[str, Any]) -> dict[str, Any]:
    costs = {(one["board"], one["routine"]): one for one in record["costs"]}
    stated = [one for one in record["costs"] if one.get("stack not counted")]
    outside = sorted({name for one in stated for name in one["stack not counted"]})
    return {
        "sheet": record,
        "costs": costs,
        "outside": outside,
        "state": lambda word: VERDICTS.get(word, ("✗", "bad")),
        "good": all(one["status"] == "verified" for one in record["here"])
        and all(one["verdict"] == "agrees" for one in record["boards"]),
    }
