"""Finds the classes that a folder of modules defines, so that adding one is adding a file."""

from __future__ import annotations

import importlib
import inspect
import pkgutil
from collections.abc import Iterable
from typing import Any, TypeVar

T = TypeVar("T")


def modules_of(package: str, path: Iterable[str], base: type[T]) -> dict[str, type[T]]:
    """The subclasses of ``base`` in the modules of ``package``, by their ``name``.

    They stand in the order of the class attribute ``rank`` where there is one, then of names.
    """
    found: list[Any] = []
    for module in pkgutil.iter_modules(path):
        members = vars(importlib.import_module(f"{package}.{module.name}")).values()
        found += [
            one
            for one in members
            if inspect.isclass(one) and issubclass(one, base) and "name" in vars(one)
        ]
    found = list(dict.fromkeys(found))
    return {one.name: one for one in sorted(found, key=lambda one: (one.rank, one.name))}
