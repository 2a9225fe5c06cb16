"""The inside of a worker process: build the posterior once, then answer until the line goes dead."""

from __future__ import annotations

import contextlib
import ctypes
import os
import pickle
import signal
import time
from dataclasses import replace
from multiprocessing.connection import Connection

import numpy as np

from scanfit.posterior import Batch, Posterior
from scanfit.priors import FloatArray

THREADS = dict.fromkeys(
    (
        "OMP_NUM_THREADS",
        "OPENBLAS_NUM_THREADS",
        "MKL_NUM_THREADS",
        "BLIS_NUM_THREADS",
        "NUMEXPR_NUM_THREADS",
        "NUMBA_NUM_THREADS",
    ),
    "1",
)
"""Environment that holds libraries to one thread: the workers fill the cores already."""

_DIE_WITH_PARENT = 1  # PR_SET_PDEATHSIG of <sys/prctl.h>


def serve(line: Connection, ticks: Connection, build: bytes) -> None:
    """Answer batches of points that arrive on `line` until it is closed.

    Parameters
    ----------
    line : Connection
        Points come in, answers go out: first None, or in words why the posterior cannot be built; then for every array
        of points its `Batch` with the seconds it took.
    ticks : Connection
        Receives one byte before each point, so that the parent knows which point it is when this process dies or hangs.
    build : bytes
        The pickled function that builds the posterior.
    """
    _obey_parent_only()
    with contextlib.suppress(EOFError, ConnectionError):  # the parent has closed the line
        try:
            posterior: Posterior = pickle.loads(build)()
        except BaseException as error:  # whatever it is, the parent must say it
            line.send(f"{type(error).__name__}: {error}")
            return
        line.send(None)
        while True:
            points = line.recv()
            started = time.perf_counter()
            batch = _evaluate(posterior, points, ticks.fileno())
            line.send((batch, time.perf_counter() - started))


def _evaluate(posterior: Posterior, points: FloatArray, ticks: int) -> Batch:
    rows = np.empty((len(points), len(posterior.columns)))
    failures = []
    for number in range(len(points)):
        os.write(ticks, b".")
        batch = posterior.evaluate_many(points[number : number + 1])
        rows[number] = batch.rows[0]
        failures += [replace(failure, row=number) for failure in batch.failures]
    return Batch(rows, tuple(failures))


def _obey_parent_only() -> None:
    """Leave signals that reach a whole process group to the parent, and die with it even in the middle of a point."""
    for number in (signal.SIGINT, signal.SIGTERM, signal.SIGUSR1, signal.SIGHUP):
        signal.signal(number, signal.SIG_IGN)
    parent = os.getppid()
    with contextlib.suppress(OSError, AttributeError):
        ctypes.CDLL(None).prctl(_DIE_WITH_PARENT, signal.SIGKILL, 0, 0, 0)
    if os.getppid() != parent:  # it died before the call took effect
        os._exit(1)
