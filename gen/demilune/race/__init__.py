"""Kernels against the libraries of a machine and against its limits.

>>> from demilune import expand
>>> from demilune.race import libraries, race
>>> kernels = expand("gauges", {"layout": "packed", "isa": "native", "language": "c"})
>>> found = race(kernels, [256], libraries())          # doctest: +SKIP
>>> found.row("gauges", 256).gflops                    # doctest: +SKIP
41.7

Times are in seconds, speeds in operations a second unless a name says otherwise.
"""

from demilune.race.contest import race
from demilune.race.entrants import LeftOut
from demilune.race.peers import Library, libraries, library
from demilune.race.record import Race, Row, Timing

__all__ = ["LeftOut", "Library", "Race", "Row", "Timing", "libraries", "library", "race"]
