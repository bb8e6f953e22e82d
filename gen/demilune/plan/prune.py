"""Leaves out what a plan declares and never uses."""

from __future__ import annotations

from dataclasses import replace

from demilune.index import Compare
from demilune.plan.tree import (
    Declare,
    For,
    If,
    Integer,
    Load,
    Local,
    Reject,
    Statement,
    Store,
    Where,
    leaves,
    values,
)


def pruned(body: tuple[Statement, ...]) -> tuple[Statement, ...]:
    """The statements without declarations whose names nobody reads."""
    return _block(body, set())


def _block(body: tuple[Statement, ...], used: set[str]) -> tuple[Statement, ...]:
    """``body``, of which ``used`` is read afterwards; adds to it what the block reads itself."""
    kept: list[Statement] = []
    for one in reversed(body):
        if isinstance(one, Declare | Integer):
            if one.name not in used:
                continue
            used.discard(one.name)
        if isinstance(one, For):
            inside = set(used)
            for _ in range(2):  # what a pass reads, the one before it may have written
                shorter = _block(one.body, inside)
            one = replace(one, body=shorter)
            used |= inside | one.low.names | one.high.names
        elif isinstance(one, If):
            then, otherwise = set(used), set(used)
            one = replace(
                one, then=_block(one.then, then), otherwise=_block(one.otherwise, otherwise)
            )
            used |= then | otherwise
        used |= _reads(one)
        kept.append(one)
    return tuple(reversed(kept))


def _reads(one: Statement) -> set[str]:
    names: set[str] = set()
    for value in values(one):
        for leaf in leaves(value):
            if isinstance(leaf, Local):
                names.add(leaf.name)
            elif isinstance(leaf, Load | Where):
                names |= leaf.names
    if isinstance(one, Store):
        names |= one.names
    elif isinstance(one, Integer):
        names |= one.value.names
    elif isinstance(one, If | Reject) and isinstance(one.condition, Compare):
        names |= one.condition.names
    return names
