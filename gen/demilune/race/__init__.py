"""Kernels against the libraries of a machine and against its limits."""

from demilune.race.contest import Entry, Race, race

__all__ = ["Entry", "Race", "race"]
