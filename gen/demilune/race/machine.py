"""What was measured on: processor, caches, compiler, libraries and what steers them."""

from __future__ import annotations

import os
import platform
from collections.abc import Sequence
from pathlib import Path
from typing import Any

from demilune.isa import INSTRUCTION_SETS, native
from demilune.race.peers import Library
from demilune.toolchain.compilers import find_compiler

STEERING = ("OPENBLAS_", "BLIS_", "OMP_", "GOMP_", "GOTO_")
"""Variables that begin so change what libraries and threads do."""
CACHES = Path("/sys/devices/system/cpu/cpu0/cache")


def machine(libraries: Sequence[Library]) -> dict[str, Any]:
    """The machine as plain data; what cannot be told is left out or ``"unknown"``."""
    return {
        "processor": _processor(),
        "architecture": platform.machine(),
        "system": f"{platform.system()} {platform.release()}",
        "cores": os.cpu_count(),
        "instructions": native().name,
        "runs": [name for name, one in INSTRUCTION_SETS.items() if one.here],
        "caches": _caches(),
        "compiler": find_compiler().version,
        "python": platform.python_version(),
        "libraries": {one.name: one.facts for one in libraries},
        "variables": steering(),
    }


def steering() -> dict[str, str]:
    """The variables of the surroundings that change what libraries do."""
    return {name: os.environ[name] for name in sorted(os.environ) if name.startswith(STEERING)}


def _processor() -> str:
    try:
        text = Path("/proc/cpuinfo").read_text(encoding="ascii", errors="ignore")
    except OSError:
        text = ""
    lines = [line.partition(":") for line in text.splitlines()]
    fields = {name.strip(): value.strip() for name, _, value in lines}
    name = fields.get("model name") or platform.processor() or "unknown"
    family = [f"{key} {fields[key]}" for key in ("cpu family", "model") if key in fields]
    return f"{name} ({', '.join(family)})" if family else name


def _caches() -> dict[str, str]:
    found = {}
    for index in sorted(CACHES.glob("index*")):
        try:
            kind, level, size = (
                (index / name).read_text(encoding="ascii").strip()
                for name in ("type", "level", "size")
            )
        except OSError:
            continue
        if kind != "Instruction":
            found[f"level {level}"] = size
    return found
