"""What is computed: one module an operation, found by being here."""

from demilune.operations.base import Context, Operation, Strip
from demilune.registry import modules_of

OPERATIONS: dict[str, type[Operation]] = modules_of(__name__, __path__, Operation)

__all__ = ["OPERATIONS", "Context", "Operation", "Strip"]
