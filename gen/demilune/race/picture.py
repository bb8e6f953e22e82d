"""The picture of a race: speed, and the part of the limit that is reached, over n."""

from __future__ import annotations

import io
from collections.abc import Iterable
from pathlib import Path
from typing import TYPE_CHECKING, Any

from demilune import files
from demilune.errors import InputError, MissingError
from demilune.race.record import Race, Row, Timing
from demilune.version import __version__

if TYPE_CHECKING:
    from matplotlib.axes import Axes

KINDS = (".svg", ".png")
MARKERS = "osD^vP*X<>hd"
OWN = ("-", (0, (7, 1.5)), (0, (7, 1.5, 1.5, 1.5)))
DASHES = ("--", ":", "-.", (0, (5, 1, 1, 1, 1, 1)))
"""Styles of kernels, which are drawn bold, and of libraries."""
GREYS = ("0.0", "0.35", "0.6")
COLOURS = ("#0072b2", "#d55e00", "#009e73", "#cc79a7", "#e69f00", "#56b4e9")
"""Of unlike brightness and told apart by colour-blind eyes (Okabe and Ito, from memory)."""
MOST_LINES = 9
HEAD = 4096
"""Bytes of a file among which a mark of ours stands."""

Points = dict[int, tuple[float, float | None]]
"""By n: operations a nanosecond, and the part of the limit."""


def prepare(path: Path, force: bool = False) -> None:
    """Raises before any work is done if the picture could not be drawn or written."""
    if path.suffix.lower() not in KINDS:
        raise InputError(f"{path}: a picture is {' or '.join(KINDS)}, by the ending of its name")
    if not path.parent.is_dir():
        raise InputError(f"{path}: there is no folder {path.parent}")
    if path.is_dir():
        raise InputError(f"{path} is a folder, and a picture is to be written there")
    if path.exists() and not force and files.MARK.encode() not in files.contents(path)[:HEAD]:
        raise InputError(
            f"{path} was not written by Demilune and is left alone; choose another name, "
            "or pass --force"
        )
    try:
        import matplotlib  # noqa: F401
    except ImportError as error:
        raise MissingError(
            "pictures are drawn by matplotlib, which is not here; get it with: pip install "
            '"demilune[pictures]"'
        ) from error


def save(found: Race, path: Path) -> None:
    """Draws a race and writes it whole or not at all; see :func:`prepare`."""
    data = drawn(found, path.suffix.lower()[1:])
    waiting = path.with_name(f".{path.name}.new")
    with files.explained(path):
        try:
            waiting.write_bytes(data)
            waiting.replace(path)
        finally:
            waiting.unlink(missing_ok=True)


def drawn(found: Race, kind: str) -> bytes:
    """The picture as ``svg`` or ``png``; the same race gives the same bytes."""
    import matplotlib as mpl
    from matplotlib.figure import Figure

    with mpl.rc_context({"svg.hashsalt": "demilune", "svg.fonttype": "none", "font.size": 9}):
        count = len(_kernels(found.rows)) + len(_peers(found))
        figure = Figure(figsize=(7.2, 5.6 + 0.18 * ((count + 1) // 2)), layout="constrained")
        speed, part = figure.subplots(2, 1, sharex=True)
        _lines(found, speed, part)
        figure.suptitle(f"{found.machine['processor']}, {found.date[:10]}", fontsize=8)
        handles, labels = speed.get_legend_handles_labels()
        figure.legend(handles, labels, loc="outside lower center", ncols=2, frameon=False)
        made, data = f"{files.MARK} {__version__}", io.BytesIO()
        creator: dict[str, Any] = (
            {"Creator": made, "Date": None} if kind == "svg" else {"Software": made}
        )
        figure.savefig(data, format=kind, dpi=150, metadata=creator)
    return data.getvalue()


def _lines(found: Race, speed: Axes, part: Axes) -> None:
    kernels = _kernels(found.rows)
    peers = _peers(found)
    for number, (label, points) in enumerate(kernels.items()):
        look: dict[str, Any] = {
            "color": COLOURS[number % len(COLOURS)],
            "linestyle": OWN[number % len(OWN)],
            "linewidth": 1.8,
        }
        _draw(speed, part, label, points, number, look)
    for number, (label, points) in enumerate(peers.items()):
        look = {
            "color": GREYS[number % len(GREYS)], "linewidth": 1.0, "markerfacecolor": "white",
            "linestyle": DASHES[number % len(DASHES)],
        }  # fmt: skip
        _draw(speed, part, label, points, len(kernels) + number, look)
    sizes = sorted({row.n for row in found.rows})
    part.axhline(1, color="0.5", linewidth=0.8)
    part.set_xscale("log", base=2)
    part.set_xticks(_thinned(sizes), [str(n) for n in _thinned(sizes)])
    part.minorticks_off()
    part.set_xlabel("n (rows of the matrix)")
    speed.set_ylabel("speed (GFLOP/s)")
    part.set_ylabel("part of the limit\n(time to sum the stored half / time)")
    speed.set_ylim(bottom=0)
    part.set_ylim(bottom=0)
    for axes in (speed, part):
        axes.grid(color="0.9", linewidth=0.6)
        axes.set_axisbelow(True)
        axes.spines[["top", "right"]].set_visible(False)


def _draw(
    speed: Axes, part: Axes, label: str, points: Points, number: int, look: dict[str, Any]
) -> None:
    look |= {"marker": MARKERS[number % len(MARKERS)], "markersize": 4.5}
    ns = sorted(points)
    speed.plot(ns, [points[n][0] for n in ns], label=label, **look)
    parts = [(n, fraction) for n in ns if (fraction := points[n][1]) is not None]
    if parts:
        part.plot(*zip(*parts, strict=True), **look)


def _kernels(rows: Iterable[Row]) -> dict[str, Points]:
    """A line for each kernel; those that differ in a fixed n alone are one line."""
    lines: dict[str, Points] = {}
    for row in rows:
        name = row.kernel.replace(f"_n{row.n}", "")
        lines.setdefault(name, {})[row.n] = (row.gflops, row.of_sum)
    return lines


def _peers(found: Race) -> dict[str, Points]:
    """A line for each routine of each library, or of the first library if that is too many."""
    for names in (found.libraries, found.libraries[:1]):
        lines: dict[str, Points] = {}
        for row in found.rows:
            for name in names:
                if name in row.peers:
                    one = row.peers[name]
                    lines.setdefault(one.label, {})[row.n] = _point(row, one)
        if len(lines) + len(_kernels(found.rows)) <= MOST_LINES:
            break
    return lines


def _point(row: Row, one: Timing) -> tuple[float, float | None]:
    limit = None if row.sum is None else row.sum.median / one.median
    return row.operations / one.median / 1e9, limit


def _thinned(sizes: list[int]) -> list[int]:
    """Sizes to label: those that stand far enough from the one before."""
    kept: list[int] = []
    for n in sizes:
        if not kept or n >= kept[-1] * (sizes[-1] / sizes[0]) ** (1 / 14):
            kept.append(n)
    return kept
