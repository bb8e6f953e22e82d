"""The five choices meet: from a specification to a plan."""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property
from typing import TYPE_CHECKING

from demilune.operations import Context
from demilune.plan.bands import BandWalk
from demilune.plan.diagonals import DiagonalWalk
from demilune.plan.lanes import LaneWalk
from demilune.plan.prune import pruned
from demilune.plan.tree import Parameter, Routine
from demilune.plan.walk import Walk
from demilune.plan.writer import PARTS, Writer

if TYPE_CHECKING:
    from demilune.spec import Spec


@dataclass(frozen=True)
class Plan:
    """What a kernel does, step by step, in no language.

    From it come the sources, the order of arithmetic, the counts and the pseudo-code.
    """

    spec: Spec
    routine: Routine
    order: tuple[str, ...]
    """The order of arithmetic in sentences."""

    @property
    def parameters(self) -> tuple[Parameter, ...]:
        return self.routine.parameters

    @cached_property
    def arrays(self) -> dict[str, Parameter]:
        """The parameters that are arrays of numbers."""
        return {one.name: one for one in self.parameters if one.kind == "array"}


def make_plan(spec: Spec) -> Plan:
    """The plan of a specification that has been checked."""
    order = spec.schedule.order
    parameters = spec.operation.all_parameters(
        spec.layout, spec.arithmetic, order, spec.schedule.threads
    )
    names = [one.name for one in parameters if one.kind != "scalar" or not one.complex]
    names += [one.name + part for one in parameters if one.complex for part in PARTS]
    w = Writer((*names, spec.name), unroll=spec.schedule.written_out)
    c = Context(w, spec.layout, spec.arithmetic, order)
    c.holds = spec.schedule.written_out and spec.arithmetic.lanes == 1
    c.scattered = spec.operation.scattered if order.scatter and spec.arithmetic.in_place else ""
    walk = walk_for(spec)(spec, c)
    walk.all()
    sentences = walk.statement()
    functions = tuple(w.functions.values())
    return Plan(
        spec,
        Routine(spec.name, parameters, pruned(w.body), functions),
        (*spec.arithmetic.statement, *sentences, *([order.remark] if order.remark else [])),
    )


def walk_for(spec: Spec) -> type[Walk]:
    """How strips are visited: one element at a time, or lanes along a strip or across rows."""
    if spec.arithmetic.lanes == 1:
        return Walk
    across = spec.schedule.order.mirrored and spec.operation.mirrored
    if across:
        return DiagonalWalk
    return LaneWalk if spec.layout.diagonals is None else BandWalk
