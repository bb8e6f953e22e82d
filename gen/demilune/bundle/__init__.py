"""Bundles: a folder with all that a firmware needs of its routines, and with the proof."""

from demilune.bundle.job import Bundle, make

__all__ = ["Bundle", "make"]
