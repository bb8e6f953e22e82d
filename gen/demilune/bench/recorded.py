"""Recorded vectors: inputs of kernels and the bits they must give, for where no bench runs.

Everything is kept as bit patterns. A row of a table tells one case: which sizes it has, and where
its scalars, inputs and results stand among the words; equal runs of words are kept once, so that
many vectors share a matrix. Maps have one bit for each part of each element: whether it is given,
or is a result. What is neither holds poison and must still hold it afterwards.
"""

from __future__ import annotations

import itertools
from collections.abc import Iterator, Mapping, Sequence
from dataclasses import dataclass, field, replace
from typing import Any

import numpy as np

from demilune.bench.evaluator import Evaluator
from demilune.bench.problem import (
    BITS,
    KINDS,
    PAD,
    POISON,
    Draw,
    Lanes,
    Problem,
    Setting,
    all_magnitudes,
    draw_setting,
    integers,
    make_problem,
    sizes_to_try,
    uniform,
)
from demilune.bench.run import foretell
from demilune.dtypes import REAL_DIGITS, REAL_SIZE
from demilune.errors import InputError
from demilune.keys import RUNTIME
from demilune.plan.build import Plan
from demilune.plan.tree import Parameter, Reject, walk
from demilune.render import argument_position

BUDGET = 32 * 1024
"""Bytes of flash for the vectors of a file, unless told otherwise."""
MEMORY = 8 * 1024
"""Bytes that the half of a matrix may take where n is not fixed."""
SHARED = 16
"""Vectors that share a matrix."""
MOST = 2000
"""Cases of a routine, however large the budget is."""
SCALARS = (0.0, 1.0, -1.0, 2.5, 0.3, -0.7)
WHOLE_SCALARS = (0.0, 1.0, -1.0, 2.0, -3.0)
SPECIAL: tuple[dict[str, complex], ...] = (
    {}, {"beta": 0}, {"alpha": 0}, {"alpha": 1, "beta": 1}, {}, {"alpha": 0, "beta": 0},
    {"alpha": 0, "beta": 1},
)  # fmt: skip
"""Scalars that a routine may treat apart, in turn where the caller passes them."""
ORDER = (6, 5, 3, 2, 1, 0, 4)
"""Kinds of values, those first that tell most: sums that cancel; subnormals and signed zeros;
specials; every exponent; half of them; ordinary numbers; numbers near one."""
assert len(ORDER) == KINDS


class Pool:
    """Runs of numbers, one behind the other; an equal run is kept once."""

    def __init__(self, size: int) -> None:
        self.size = size
        """Bytes of a number."""
        self.numbers: list[int] = []
        self._places: dict[tuple[int, ...], int] = {(): 0}

    def cost(self, run: tuple[int, ...]) -> int:
        """Bytes that the run would add."""
        return 0 if run in self._places else self.size * len(run)

    def place(self, run: tuple[int, ...]) -> int:
        """Where the run stands; it is added if it is not there yet."""
        if run not in self._places:
            self._places[run] = len(self.numbers)
            self.numbers += run
        return self._places[run]

    @property
    def bytes(self) -> int:
        return self.size * len(self.numbers)


@dataclass
class RoutineCases:
    """The recorded cases of one routine, and the columns that its tables have."""

    plan: Plan
    shapes: list[tuple[int, ...]] = field(default_factory=list)
    """A row: status, sizes, then for places and arrays a length and where the maps are."""
    cases: list[tuple[int, ...]] = field(default_factory=list)
    """A row: shape, then where scalars, inputs and results are."""
    lengths: dict[str, int] = field(default_factory=dict)
    """The longest array of each parameter, in words."""

    def shape_columns(self) -> dict[str, int]:
        """Columns of a shape by what they hold."""
        names = ["status"]
        for one in self.plan.parameters:
            if one.kind == "size":
                names.append(one.name)
            elif one.kind == "places":
                names += [f"length {one.name}", f"places {one.name}"]
            elif one.kind == "array":
                names += [f"length {one.name}", f"given {one.name}", f"results {one.name}"]
        return {name: column for column, name in enumerate(names)}

    def case_columns(self) -> dict[str, int]:
        """Columns of a case by what they hold."""
        names = ["shape"]
        for one in self.plan.parameters:
            if one.kind == "scalar":
                names.append(f"scalar {one.name}")
            elif one.kind == "array" and one.use != "scratch":
                names += [f"given {one.name}"] if one.use != "out" else []
                names += [f"results {one.name}"] if one.use != "in" else []
        return {name: column for column, name in enumerate(names)}

    @property
    def reports(self) -> bool:
        """Whether the routine can refuse an argument."""
        return any(isinstance(one, Reject) for one in walk(self.plan.routine.body))


@dataclass
class Recording:
    """The recorded cases of the routines of one file."""

    file: str
    budget: int
    seed: int
    routines: list[RoutineCases] = field(default_factory=list)
    words: dict[str, Pool] = field(default_factory=dict)
    """Bit patterns of numbers, by real type."""
    maps: Pool = field(default_factory=lambda: Pool(1))
    places: Pool = field(default_factory=lambda: Pool(4))

    @property
    def column_bits(self) -> int:
        """The width of a number in a table."""
        return 16 if self.budget <= 0x10000 else 32

    @property
    def cases(self) -> int:
        return sum(len(one.cases) for one in self.routines)

    @property
    def bytes(self) -> int:
        """The bytes of all tables."""
        rows = [row for one in self.routines for row in (*one.shapes, *one.cases)]
        pools = (self.maps, self.places, *self.words.values())
        return sum(map(len, rows)) * self.column_bits // 8 + sum(one.bytes for one in pools)

    @property
    def memory(self) -> int:
        """The largest number of bytes that the arrays of one routine take."""
        return max(sum(self._memory(one).values()) for one in self.routines)

    def _memory(self, routine: RoutineCases) -> dict[str, int]:
        found = {}
        for one in routine.plan.parameters:
            if one.kind == "places":
                found[one.name] = 8 * routine.lengths[one.name]
            elif one.kind == "array":
                found[one.name] = REAL_SIZE[one.type] * (routine.lengths[one.name] + 2 * PAD)
        return found


@dataclass(frozen=True)
class Case:
    """One call: lane ``lane`` of a problem, what is expected, and the status it ends with."""

    problem: Problem
    expected: Mapping[str, Lanes]
    lane: int
    status: int = 0


def record(
    file: str,
    plans: Sequence[Plan],
    *,
    budget: int = BUDGET,
    seed: int = 1,
    memory: int = MEMORY,
) -> Recording:
    """Vectors for the routines of ``file``, in at most ``budget`` bytes of tables.

    The same plans, budget and seed give the same vectors. Raises
    :class:`~demilune.errors.InputError` if a routine is left without any.
    """
    recording = Recording(file, budget, seed)
    room = min(memory, budget // len(plans) // (KINDS - 1))
    running = {
        number: (_begin(recording, plan), itertools.islice(_cases(plan, seed, room), MOST))
        for number, plan in enumerate(plans)
    }
    missed: dict[int, list[int]] = {number: [] for number in running}
    while running:  # a case of each routine in turn
        for number, (routine, cases) in list(running.items()):
            case = next(cases, None)
            needed = 0 if case is None else _add(recording, routine, case)
            missed[number] = [*missed[number], needed] if needed else []
            if case is None or len(missed[number]) >= KINDS:
                del running[number]
    for number, routine in enumerate(recording.routines):
        if not routine.cases:
            raise InputError(
                f"{routine.plan.spec.name}: a vector needs {min(missed[number])} bytes, and "
                f"{budget - recording.bytes} of the budget of {budget} bytes are left for it"
            )
    return recording


def one_call(file: str, plans: Sequence[Plan], n: int, *, seed: int = 1) -> Recording:
    """One call of each routine with ordinary numbers, strides of 1 and general scalars.

    ``n`` is used where the specification leaves it open. This is what is counted.
    """
    recording = Recording(file, 1 << 30, seed)
    for plan in plans:
        generator = np.random.default_rng(seed)
        fixed = plan.spec.layout.n
        setting = draw_setting(plan, n if fixed == RUNTIME else int(fixed), generator, (0.0,))
        sizes = setting.sizes | _smallest(plan, setting.n)
        whole = plan.spec.arithmetic.type.integer
        scalars = {
            one.name: (3 if whole else complex(0.75, -0.5 if one.complex else 0))
            for one in plan.parameters
            if one.kind == "scalar"
        }
        setting = Setting(sizes, setting.scalars | scalars)
        draw = _whole(plan, setting) if whole else uniform
        problem = make_problem(plan, setting, draw, generator, 1)
        expected = foretell(Evaluator(plan), problem)
        _add(recording, _begin(recording, plan), Case(problem, expected, 0))
    return recording


def _smallest(plan: Plan, n: int) -> dict[str, Any]:
    """Sizes with nothing between the elements, of those that are not fixed."""
    sizes = dict(plan.spec.layout.sample(n))
    for name in ("incx", "incy"):
        if getattr(plan.spec.operation, name, 1) == RUNTIME:
            sizes[name] = 1
    return sizes


# --- cases -------------------------------------------------------------------------------------


def _cases(plan: Plan, seed: int, room: int) -> Iterator[Case]:
    """Cases without end: all kinds of values, and early on the arguments that are refused."""
    evaluator = Evaluator(plan)
    sizes = _sizes(plan, room)
    scalars = WHOLE_SCALARS if plan.spec.arithmetic.type.integer else SCALARS
    for number in itertools.count():
        n = sizes[number % len(sizes)]
        generator = np.random.default_rng([seed, number])
        setting = draw_setting(plan, n, generator, scalars)
        special = SPECIAL[number % len(SPECIAL)]
        passed = {name: special[name] for name in special if _passed(plan, name)}
        setting = replace(setting, scalars={**setting.scalars, **passed})
        matrix = (seed, n, number // (len(sizes) * SHARED))
        problem = make_problem(plan, setting, _draw(plan, setting, matrix), generator, KINDS)
        _hide_unread(problem)
        expected = foretell(evaluator, problem)
        yield from (Case(problem, expected, lane) for lane in ORDER)
        if number == 0:
            yield from _refused(problem)
            if plan.spec.layout.n == RUNTIME:
                empty = draw_setting(plan, 0, generator, scalars)
                problem = make_problem(plan, empty, _draw(plan, empty, matrix), generator, 1)
                yield Case(problem, foretell(evaluator, problem), 0)


def _passed(plan: Plan, name: str) -> bool:
    """Whether the caller passes this scalar."""
    return any(one.kind == "scalar" and one.name == name for one in plan.parameters)


def _sizes(plan: Plan, room: int) -> list[int]:
    """The n whose half fits into the room, the largest first: small ones tell less."""
    found = sorted(set(sizes_to_try(plan)), reverse=True)
    size = plan.spec.arithmetic.type.size
    return [n for n in found if n * (n + 1) // 2 * size <= room] or found[-1:]


def _draw(plan: Plan, setting: Setting, matrix: tuple[int, ...]) -> Draw:
    """Draws vectors anew each time, and the same matrix for the same ``matrix``."""
    arithmetic = plan.spec.arithmetic
    kinds = _whole(plan, setting) if arithmetic.type.integer else all_magnitudes(arithmetic.real)

    def draw(generator: np.random.Generator, shape: tuple[int, ...], name: str) -> Lanes:
        return kinds(np.random.default_rng(matrix) if name == "A" else generator, shape, name)

    return draw


def _whole(plan: Plan, setting: Setting) -> Draw:
    """Whole numbers with which no sum overflows."""
    operation, arithmetic = plan.spec.operation, plan.spec.arithmetic
    scalars = {name: max(1, int(abs(value))) for name, value in setting.scalars.items()}
    digits = REAL_DIGITS[operation.narrowest(arithmetic)]
    largest = operation.limit(max(setting.n, 1), digits, scalars)
    return integers(max(1, min(largest, 2 ** REAL_DIGITS[arithmetic.real] - 1)))


def _hide_unread(problem: Problem) -> None:
    """Poisons what must not be read because a scalar is zero."""
    scalars, plan = problem.setting.scalars, problem.plan
    hidden = list(plan.spec.operation.unread) if scalars.get("alpha", 1) == 0 else []
    hidden += ["y"] if scalars.get("beta", 1) == 0 and "y" in problem.buffers else []
    for name in hidden:
        _hide(problem, name)


def _hide(problem: Problem, name: str) -> None:
    type = problem.plan.arrays[name].type
    problem.buffers[name].view(BITS[type])[...] = POISON[type]
    problem.readable[name] = problem.readable[name] & False


def _refused(problem: Problem) -> Iterator[Case]:
    """Calls with a bad argument each, which may neither read nor write."""
    plan, sizes = problem.plan, problem.setting.sizes
    blank = replace(
        problem, buffers={name: one.copy() for name, one in problem.buffers.items()},
        readable=dict(problem.readable),
        writable={name: one & False for name, one in problem.writable.items()},
    )  # fmt: skip
    for name in blank.buffers:
        _hide(blank, name)
    bad = [("n", -1)] if plan.spec.layout.n == RUNTIME else []
    for condition, name, _ in (*plan.spec.layout.rules(), *plan.spec.operation.stride_rules()):
        values = range(max(0, int(sizes[name])), -3, -1)
        refused = (value for value in values if condition.holds({**sizes, name: value}))
        bad += [(name, value) for value in itertools.islice(refused, 1)]
    for name, value in bad:
        setting = replace(problem.setting, sizes={**sizes, name: value})
        case = replace(blank, setting=setting)
        yield Case(case, blank.buffers, 0, argument_position(plan, name))


# --- tables ------------------------------------------------------------------------------------


def _begin(recording: Recording, plan: Plan) -> RoutineCases:
    routine = RoutineCases(plan)
    recording.routines.append(routine)
    for one in plan.parameters:
        if one.kind in ("array", "scalar"):
            recording.words.setdefault(one.type, Pool(REAL_SIZE[one.type]))
        if one.kind in ("array", "places"):
            routine.lengths[one.name] = 0
    return routine


def _add(recording: Recording, routine: RoutineCases, case: Case) -> int:
    """Adds a case if the tables then keep to the budget; gives the bytes it needs if not."""
    runs: dict[str, tuple[Pool, tuple[int, ...]]] = {}
    shape: dict[str, int] = {"status": case.status}
    for one in routine.plan.parameters:
        if one.kind == "size":
            shape[one.name] = int(case.problem.setting.sizes[one.name])
        elif one.kind == "places":
            places = tuple(int(value) for value in case.problem.setting.sizes[one.name])
            shape[f"length {one.name}"] = len(places)
            runs[f"places {one.name}"] = (recording.places, places)
        elif one.kind == "scalar":
            run = _scalar_words(one, case.problem.setting.scalars[one.name])
            runs[f"scalar {one.name}"] = (recording.words[one.type], run)
        else:
            length, maps, words = _array(case, one)
            shape[f"length {one.name}"] = length
            runs |= {f"map {name}": (recording.maps, run) for name, run in maps.items()}
            runs |= {name: (recording.words[one.type], run) for name, run in words.items()}
    rows = len(routine.shape_columns()) + len(routine.case_columns())
    needed = sum(pool.cost(run) for pool, run in runs.values()) + rows * recording.column_bits // 8
    largest = max(*shape.values(), *(len(pool.numbers) for pool, _ in runs.values()))
    if recording.bytes + needed > recording.budget or largest >= 2 ** (recording.column_bits - 1):
        return needed
    at = {name: pool.place(run) for name, (pool, run) in runs.items()}
    shaped = shape | at | {name[4:]: where for name, where in at.items() if name[:4] == "map "}
    row = tuple(shaped[name] for name in routine.shape_columns())
    if row not in routine.shapes:
        routine.shapes.append(row)
    at["shape"] = routine.shapes.index(row)
    routine.cases.append(tuple(at[name] for name in routine.case_columns()))
    for name in routine.lengths:
        routine.lengths[name] = max(routine.lengths[name], shape[f"length {name}"])
    return 0


def _array(
    case: Case, one: Parameter
) -> tuple[int, dict[str, tuple[int, ...]], dict[str, tuple[int, ...]]]:
    """Length, maps and words of an array, by what they are."""
    problem, name, bits = case.problem, one.name, BITS[one.type]
    inside = slice(PAD, problem.buffers[name].shape[0] - PAD)

    def cut(mask: Lanes) -> Lanes:
        return np.asarray(mask[inside].reshape(-1))

    def words(buffers: Mapping[str, Lanes], mask: Lanes) -> tuple[int, ...]:
        values = np.ascontiguousarray(buffers[name][inside, :, case.lane]).reshape(-1)
        patterns = values.view(bits).copy()
        if one.type.startswith("float"):
            with np.errstate(all="ignore"):
                patterns[np.isnan(values)] = np.full(1, np.nan, one.type).view(bits)
        return tuple(int(pattern) for pattern in patterns[mask])

    given, results = cut(problem.readable[name]), cut(problem.writable[name])
    maps, runs = {}, {}
    for label, mask, buffers in (
        ("given", given, problem.buffers), ("results", results, case.expected),
    ):  # fmt: skip
        packed = np.packbits(mask, bitorder="little").tolist()
        maps[f"{label} {name}"] = tuple(packed)
        runs[f"{label} {name}"] = words(buffers, mask)
    return len(given), maps, runs


def _scalar_words(one: Parameter, value: complex) -> tuple[int, ...]:
    parts = (value.real, value.imag)[: one.parts]
    with np.errstate(all="ignore"):
        numbers = np.array(parts).astype(one.type)
    return tuple(int(bits) for bits in numbers.view(BITS[one.type]))
