"""Boards: routines cross-compiled, run in an emulator on recorded vectors, sized and counted."""

from demilune.boards.board import Board, find_board, known_boards, read_board, refusals
from demilune.boards.check import Figures, Report, check_all, check_on

__all__ = [
    "Board", "Figures", "Report", "check_all", "check_on", "find_board", "known_boards",
    "read_board", "refusals",
]  # fmt: skip
