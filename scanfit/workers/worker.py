"""The parent's end of one worker process."""

from __future__ import annotations

import os
import signal
from collections import deque
from contextlib import suppress
from multiprocessing import current_process
from typing import Any

from joblib.externals.loky.backend.context import get_context

from scanfit.posterior import Batch
from scanfit.priors import FloatArray
from scanfit.workers.child import THREADS, serve

DEAD = (EOFError, OSError)
"""What sending to a dead worker or receiving from it raises."""

_PATIENCE = 2.0


class Worker:
    """A process, the line to it, and the tasks that it has.

    Parameters
    ----------
    build : bytes
        The pickled function that builds the posterior.

    Attributes
    ----------
    ready : bool
        Whether it has built the posterior.
    tasks : deque of range
        Places of the points that it was given and has not answered, in order.
    begun : int
        How many of them it has begun, as far as known.
    silent : float
        Seconds for which it was watched at the same point.
    ending : str
        In words, how it ended.
    """

    def __init__(self, build: bytes) -> None:
        context = get_context("loky")
        self.line, far_line = context.Pipe()
        self._ticks, far_ticks = context.Pipe(duplex=False)
        self._process = context.Process(target=serve, args=(far_line, far_ticks, build), daemon=True, env=THREADS)
        _start(self._process)
        # Only the process may hold the far ends, or its death would not end the line.
        far_line.close()
        far_ticks.close()
        self.pid: int = self._process.pid
        self.ready = False
        self.tasks: deque[range] = deque()
        self.begun = 0
        self.silent = 0.0
        self.ending = ""

    @property
    def suspect(self) -> int | None:
        """Place of the point that it is working on; None before the first."""
        begun = self.begun
        for places in self.tasks:
            if begun <= len(places):
                return places[begun - 1] if begun else None
            begun -= len(places)
        return None

    def send(self, places: range, points: FloatArray) -> None:
        """Give it a task: these points, which have these places in the batch."""
        self.tasks.append(places)
        self.line.send(points)

    def greeting(self) -> str | None:
        """Take its first message: None, or why it cannot work."""
        complaint: str | None = self.line.recv()
        return complaint

    def answer(self) -> tuple[range, Batch, float]:
        """Take the answer to its first task: places, rows, and the seconds that it took."""
        batch, seconds = self.line.recv()
        self.count_ticks()
        places = self.tasks.popleft()
        self.begun -= len(places)
        self.silent = 0.0
        return places, batch, seconds

    def count_ticks(self) -> bool:
        """Bring `begun` up to date; return whether there was anything new."""
        before = self.begun
        with suppress(*DEAD):
            while self._ticks.poll():
                read = len(os.read(self._ticks.fileno(), 65536))
                if not read:
                    break
                self.begun += read
        return self.begun > before

    def dismiss(self) -> None:
        """Let it end by itself if it is idle."""
        with suppress(OSError):
            self.line.close()

    def kill(self) -> None:
        """End it, wait until it has ended, and note how."""
        if self._process is None:
            return
        if not self.tasks and self.line.closed:
            self._process.join(_PATIENCE)
        if self._process.exitcode is None:  # not reaped, so the number is still its own
            os.kill(self.pid, signal.SIGKILL)
        self._process.join()
        self.ending = _in_words(self._process.exitcode)
        self.line.close()
        self._ticks.close()
        self._process = None


def _start(process: Any) -> None:
    # A Dask worker is a daemon to multiprocessing, which denies it children lest they outlive it. Ours end with it.
    config: dict[str, Any] = current_process()._config  # type: ignore[attr-defined]  # there is no public way
    daemon = config.pop("daemon", None)
    try:
        process.start()
    finally:
        if daemon is not None:
            config["daemon"] = daemon


def _in_words(status: int | None) -> str:
    if status is None or status >= 0:
        return f"exit status {status}"
    name = signal.Signals(-status).name
    hint = ", often for want of memory" if name == "SIGKILL" else ""
    return f"ended by {name}{hint}"
