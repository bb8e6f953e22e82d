"""Planted faults: mistakes that a kernel could have, and that the bench must catch.

A fault changes the plan of a kernel; what is emitted and run is the changed plan, while the bench
goes on to check against the right one. A fault that changes nothing (there is no diagonal loop to
cut, no stride to ignore) does not apply. Every other one must be caught.
"""

from __future__ import annotations

from demilune.bench.faults import loops, memory, order, scalars, storage
from demilune.bench.faults.base import FAULTS, Fault

__all__ = ["FAULTS", "Fault", "loops", "memory", "order", "scalars", "storage"]
