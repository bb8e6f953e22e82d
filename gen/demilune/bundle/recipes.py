"""Build rules for the sources of a bundle: for CMake, Make and Meson."""

from __future__ import annotations

from collections.abc import Iterable
from typing import Any

from demilune.expressions import templates
from demilune.files import MARK
from demilune.toolchain.build import Unit
from demilune.toolchain.compilers import CONTRACT_FLAGS
from demilune.version import __version__

RECIPES = ("CMakeLists.txt", "kernels.mk", "meson.build")


def names(units: Iterable[Unit]) -> tuple[str, ...]:
    """The files with build rules; none where nothing is to be compiled."""
    return RECIPES if any(unit.language == "c" for unit in units) else ()


def recipes(units: Iterable[Unit]) -> dict[str, str]:
    """The build rules by file name."""
    libraries = [_library(unit) for unit in units if unit.language == "c"]
    context = {"made_by": f"{MARK} {__version__} (demilune bundle)", "libraries": libraries}
    return {
        name: templates().get_template(f"bundle/{name}.j2").render(context).strip("\n") + "\n"
        for name in (RECIPES if libraries else ())
    }


def _library(unit: Unit) -> dict[str, Any]:
    """What is compiled of one file of routines, and how.

    The standard is told apart from the other flags: build systems have an option of their own.
    """
    standard, *flags = CONTRACT_FLAGS
    if unit.plans[0].spec.target.environment == "freestanding":
        flags.append("-ffreestanding")
    return {
        "file": unit.file,
        "standard": standard,
        "flags": flags,
        "math": any("#include <math.h>" in text for text in unit.files.values()),
    }
