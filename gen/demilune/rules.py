"""What is chosen where a specification names an instruction set and leaves the rest open.

Rules of thumb, from measurements (see the page on speed in examples/): whoever measures on the
machine at hand and names lanes, block and unroll gets just those.
"""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

from demilune.dtypes import DTYPES
from demilune.isa import INSTRUCTION_SETS, PORTABLE, chosen_at_run_time, native
from demilune.keys import RUNTIME, defaults_of
from demilune.layouts import LAYOUTS
from demilune.schedules import ALL, LARGEST_UNROLLED

WIDEST_BLOCK = 8
"""Strips at a time: more need more registers than there are."""
TILE = defaults_of(LAYOUTS["tiled"])["tile"]
SMALL = 16
"""Fixed sizes up to which lanes that do not divide them cost more than they gain."""


def filled(values: Mapping[str, Any]) -> dict[str, Any]:
    """``values`` with what they leave open; nothing is changed without an instruction set."""
    found = dict(values)
    isa = found.get("isa", PORTABLE)
    dtype = DTYPES.get(found.get("dtype", "float64"))
    if isa == PORTABLE or dtype is None or dtype.integer or "lanes" in found:
        return found
    if not _plain(found):
        return found
    sets = chosen_at_run_time() if isa == RUNTIME else [INSTRUCTION_SETS[isa]]
    widths = sorted({width for one in sets for width in one.widths(dtype.real)})
    n = found.get("n", RUNTIME)
    found["lanes"] = _lanes(widths, n)
    tiled = found.get("layout") == "tiled"
    small = isinstance(n, int) and n <= LARGEST_UNROLLED
    if small and found.get("layout") != "skyline" and found.get("kd") != RUNTIME:
        found.setdefault("unroll", ALL)
    if found["lanes"] > 1:
        most = [WIDEST_BLOCK, n, found.get("tile", TILE) if tiled else None]
        block = min([found["lanes"], *(one for one in most if isinstance(one, int))])
        found.setdefault("block", block)
    return found


def _plain(values: Mapping[str, Any]) -> bool:
    """Whether the rest of what is asked for can be done with lanes."""
    band = values.get("layout") == "band"
    update = values.get("operation") == "rank1"
    loop = values.get("loop") or "fused"
    return (
        values.get("accumulator") in (None, "plain")
        and values.get("direction", "forward") == "forward"
        and (loop == "fused" or update or (band and loop == "dot"))
    )


def _lanes(widths: list[int], n: int | str) -> int:
    """The widest register that a fixed n fills without a rest, else the widest, or none at all."""
    if n == RUNTIME or not isinstance(n, int):
        return widths[-1]
    fitting = [width for width in widths if 2 < width <= n and n % width == 0]
    if fitting:
        return fitting[-1]
    return 1 if n <= SMALL else widths[-1]


def resolved(isa: str) -> str:
    """The instruction set that a word stands for."""
    return native().name if isa == "native" else isa
