"""The command line: a thin layer over the library."""

from demilune.cli import bundle as _bundle  # noqa: F401 - its command joins the others
from demilune.cli import race as _race  # noqa: F401 - its command joins the others
from demilune.cli.commands import main

__all__ = ["main"]
