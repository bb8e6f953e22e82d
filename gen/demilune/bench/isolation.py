"""Runs something in a child process that may crash or hang, and gives what it got done."""

from __future__ import annotations

import faulthandler
import os
import pickle
import select
import signal
import sys
import time
import warnings
from collections.abc import Iterable, Iterator
from typing import Any, BinaryIO, TypeVar

T = TypeVar("T")

AVAILABLE = hasattr(os, "fork") and sys.platform.startswith("linux")


class Ended(Exception):  # noqa: N818 - it says how the child ended
    """The child ended before it was done; the message says how."""


def results(work: Iterable[T], seconds: float) -> Iterator[T]:
    """What ``work`` gives, computed in a child process.

    Raises :class:`Ended` if that process ends before ``work`` does.
    """
    sys.stdout.flush()
    sys.stderr.flush()
    reading, writing = os.pipe()
    with warnings.catch_warnings():  # the child runs none of the threads that there may be
        warnings.simplefilter("ignore", DeprecationWarning)
        child = os.fork()
    if child == 0:  # pragma: no cover - measured in the parent only
        _child(work, reading, writing)
    os.close(writing)
    state = "running"
    deadline = time.monotonic() + seconds
    try:
        with os.fdopen(reading, "rb") as pipe:
            for kind, value in _messages(pipe, deadline):
                if kind == "result":
                    yield value
                elif kind == "error":
                    raise value
                else:
                    state = kind  # done, gone or late
    finally:
        if state in ("running", "late"):  # nobody waits for the rest of it
            os.kill(child, signal.SIGKILL)
        _, status = os.waitpid(child, 0)
    if state == "late":
        raise Ended(f"did not end within {seconds:.0f} s")
    if state == "gone":
        name = signal.Signals(os.WTERMSIG(status)).name if os.WIFSIGNALED(status) else "exit"
        raise Ended(f"ended the process ({name})")


def _messages(pipe: BinaryIO, deadline: float) -> Iterator[tuple[str, Any]]:
    kind = "result"
    while kind == "result":
        ready, _, _ = select.select([pipe], [], [], max(0.0, deadline - time.monotonic()))
        if not ready:
            yield "late", None
            return
        try:
            kind, value = pickle.load(pipe)  # noqa: S301 - from our own child
        except (EOFError, pickle.UnpicklingError):
            yield "gone", None
            return
        yield kind, value


def _child(work: Iterable[T], reading: int, writing: int) -> None:  # pragma: no cover
    try:
        os.close(reading)
        faulthandler.disable()  # a crash is told by the parent
        signal.signal(signal.SIGINT, signal.SIG_DFL)
        with os.fdopen(writing, "wb", buffering=0) as pipe:
            try:
                for one in work:
                    pipe.write(pickle.dumps(("result", one)))
                pipe.write(pickle.dumps(("done", None)))
            except Exception as error:
                pipe.write(pickle.dumps(("error", error)))
    finally:
        os._exit(0)
