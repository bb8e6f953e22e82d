"""The command line: a thin layer over the library."""

from demilune.cli.commands import main

__all__ = ["main"]
