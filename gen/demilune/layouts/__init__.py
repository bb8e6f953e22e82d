"""Where the half lies: one module a layout, found by being here."""

from demilune.layouts.base import Diagonal, Group, Layout, Piece, Range
from demilune.registry import modules_of

LAYOUTS: dict[str, type[Layout]] = modules_of(__name__, __path__, Layout)

__all__ = ["LAYOUTS", "Diagonal", "Group", "Layout", "Piece", "Range"]
