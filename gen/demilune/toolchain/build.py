"""From source files to executables: one at a time, or many on all cores."""

from __future__ import annotations

import os
from collections.abc import Callable, Iterable, Mapping
from concurrent.futures import ThreadPoolExecutor
from dataclasses import dataclass, field
from pathlib import Path

from demilune.errors import CheckError, DemiluneError, MissingError
from demilune.languages import LANGUAGES
from demilune.plan.build import Plan
from demilune.plan.tree import uses_fma
from demilune.toolchain import cache
from demilune.toolchain.compilers import Compiler, find_compiler, has_fma, library_flags
from demilune.toolchain.executables import CExecutable, Executable, PythonExecutable


def executable_of(plan: Plan, files: Mapping[str, str]) -> Executable:
    """The routine of ``plan`` from the files that hold it."""
    unit = Unit(plan.spec.file, plan.spec.language, [plan], dict(files))
    build_units([unit])
    if unit.error is not None:
        raise unit.error
    return unit.executables[0]


def flags_for(compiler: Compiler, plans: list[Plan]) -> tuple[str, ...]:
    """The compiler flags for a file that holds these routines; all have one environment."""
    fma = any(uses_fma(plan.routine) for plan in plans)
    threads = any(plan.spec.schedule.threads > 1 for plan in plans)
    environment = plans[0].spec.target.environment
    if fma and environment == "freestanding" and not has_fma():
        raise MissingError(
            "this machine has no fused multiply-add instruction, which a freestanding routine "
            'with fma = true needs; use environment = "hosted" or another machine'
        )
    return library_flags(fma, environment) + (compiler.threads_flags if threads else ())


def compiled(compiler: Compiler, plans: list[Plan], files: Mapping[str, str]) -> Path:
    """The library of some files, compiled or from the cache."""
    return cache.library(compiler, flags_for(compiler, plans), files)


def _loaded(compiler: Compiler, unit: Unit) -> list[Executable]:
    sets = unit.plans[0].spec.target.instruction_sets
    titles = " or ".join(one.title for one in sets)
    if not any(one.compiles_here for one in sets):
        raise MissingError(f"sources are written, neither compiled nor run here: for {titles}")
    library = compiled(compiler, unit.plans, unit.files)
    if not any(one.here for one in sets):
        raise MissingError(f"compiled, not run: this machine has no {titles}")
    try:
        return [CExecutable(plan, library) for plan in unit.plans]
    except (OSError, AttributeError) as error:
        cache.forget(library)
        raise CheckError(
            f"{compiler.name} made a library of {unit.file} that cannot be loaded: {error}"
        ) from error


@dataclass
class Unit:
    """A file with its routines, and what became of it."""

    file: str
    language: str
    plans: list[Plan]
    files: dict[str, str]
    executables: list[Executable] = field(default_factory=list)
    error: DemiluneError | None = None


def build_units(
    units: Iterable[Unit], done: Callable[[Unit], None] = lambda unit: None
) -> list[Unit]:
    """Makes the executables of all units; what fails is kept in ``error``.

    C units are compiled on all cores; ``done`` is told of each as it is ready.
    """
    units = list(units)
    try:
        compiler: Compiler | MissingError = find_compiler()
    except MissingError as error:
        compiler = error

    def make(unit: Unit) -> None:
        try:
            runs = LANGUAGES[unit.language].runs
            if runs == "python":
                source = unit.files[f"{unit.file}.py"]
                unit.executables = [PythonExecutable(plan, source) for plan in unit.plans]
            elif runs == "nothing":
                title = LANGUAGES[unit.language].title
                unit.error = MissingError(f"sources in {title} are written, not run")
            elif isinstance(compiler, MissingError):
                unit.error = compiler
            else:
                unit.executables = _loaded(compiler, unit)
        except DemiluneError as error:
            unit.error = error

    with ThreadPoolExecutor(os.cpu_count() or 1) as pool:
        for unit, _ in zip(units, pool.map(make, units), strict=True):
            done(unit)
    return units
