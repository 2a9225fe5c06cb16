"""Evaluate on a Dask cluster.

A round trip costs some ten milliseconds, so points travel in few and large tasks. Each thread of a Dask worker builds
the posterior at its first task and keeps it. What is lost with a worker is computed again elsewhere by Dask; evaluating
is pure, so that changes nothing.
"""

from __future__ import annotations

import math
import pickle
import signal
import threading
import time
import uuid
from concurrent.futures import CancelledError
from contextlib import suppress
from functools import partial
from typing import Any

import numpy as np
from distributed import Client, KilledWorker, LocalCluster
from joblib.externals.loky.backend.reduction import dumps

from scanfit.errors import InputError, Problem, ScanfitError
from scanfit.posterior import Batch, Posterior, Status
from scanfit.priors import FloatArray
from scanfit.workers.child import THREADS
from scanfit.workers.contract import Build, Loss, Workers, assemble, lost_rows
from scanfit.workers.processes import ProcessWorkers
from scanfit.workers.serial import SerialWorkers

LOCAL = "local"

# Neither has type information.
_CLIENT: Any = Client
_LOCAL_CLUSTER: Any = LocalCluster

_PATIENCE = 60.0
"""Seconds to wait for a scheduler and for a first worker."""
_TASK = 0.1
"""Seconds that a task should take, where there are points enough: ten times the round trip."""
_TASKS_PER_WORKER = 4
_REFRESHED_EVERY = 2.0
_RUNS_KEPT = 16
"""Runs that a worker remembers; one that is killed cannot say that it has ended."""


class ClusterWorkers(Workers):
    """The workers of a Dask scheduler, however many there are at the moment.

    Parameters
    ----------
    build : callable
        Gives the posterior; everything that it reads must be readable by the workers.
    address : str
        ``tcp://host:port`` of a scheduler, or ``"local"`` for a cluster on this machine.
    count : int
        Number of worker processes of a local cluster.
    time_limit : float, optional
        Seconds that a point may take. Each thread of a worker then evaluates in a process of its own.

    Raises
    ------
    InputError
        If `build` cannot be sent, or no scheduler or no worker answers.
    """

    def __init__(self, build: Build, address: str, count: int = 1, time_limit: float | None = None) -> None:
        try:
            pickled = bytes(dumps(build))
        except Exception as error:  # pickling runs the user's code
            rule = f"the model or a term cannot be sent to a cluster: {type(error).__name__}: {error}"
            raise InputError([Problem("compute.cluster", rule)]) from error
        self._build = build
        self._posterior: Posterior | None = None
        self._run = uuid.uuid4().hex
        self._tasks = 0
        self._count = count
        self._gone = 0
        self._seconds_per_point = 0.0
        self._cluster: Any = None
        self._client: Any = None
        self._seen: set[str] = set()
        self._refreshed = -math.inf
        try:
            if address == LOCAL:
                self._cluster = _LOCAL_CLUSTER(
                    n_workers=count, threads_per_worker=1, dashboard_address=":0", env=THREADS, host="127.0.0.1"
                )
            self._client = _CLIENT(self._cluster or address, timeout=_PATIENCE, set_as_default=False)
            self._client.wait_for_workers(1, timeout=_PATIENCE)
        except (OSError, RuntimeError, TimeoutError, ValueError) as error:
            self.close()
            rule = f"no Dask scheduler with workers answers there within {_PATIENCE:g} s: {error}"
            raise InputError([Problem("compute.cluster", rule, address)]) from error
        setup = partial(_remember, self._run, pickled, time_limit, ignore_interrupts=address == LOCAL)
        self._client.register_worker_callbacks(setup=setup)
        self._refresh()

    @property
    def count(self) -> int:
        """Threads of all workers when last looked, which is every few seconds."""
        return self._count

    @property
    def restarts(self) -> int:
        """Workers that were there once and are gone."""
        return self._gone

    def evaluate(self, points: FloatArray) -> Batch:
        """See `Workers.evaluate`."""
        if self._client is None:
            raise ValueError("these workers are closed")
        points = np.ascontiguousarray(points, dtype=float)
        if len(points) == 0:
            return self._here().evaluate_many(points)
        if time.monotonic() - self._refreshed > _REFRESHED_EVERY:
            self._refresh()
        answers, suspects = self._submit(self._split(points))
        # Dask blames all tasks that a dead worker had before it. So the points of tasks given up go again one by one,
        # and those blamed once more go again alone: then there is no doubt.
        answered, suspects = self._submit({place: points[place : place + 1] for place in _places(suspects)})
        answers.update(answered)
        for place in _places(suspects):
            answered, lost = self._submit({place: points[place : place + 1]})
            answers.update(answered)
            if lost:
                loss = Loss(Status.FAILED, "took down several cluster workers")
                answers[place] = lost_rows(self._here(), points[place : place + 1], [loss])
        return assemble(len(points), answers)

    def close(self) -> None:
        """See `Workers.close`."""
        client, self._client = self._client, None
        cluster, self._cluster = self._cluster, None
        if client is not None:
            if cluster is None:
                with suppress(Exception):  # a scheduler that is gone has nothing to forget
                    client.run(_forget, self._run)
            client.close()
        if cluster is not None:
            cluster.close()

    def _split(self, points: FloatArray) -> dict[int, FloatArray]:
        share = len(points) * self._seconds_per_point / self._count
        tasks = self._count * min(max(1, round(share / _TASK)), _TASKS_PER_WORKER)
        size = math.ceil(len(points) / tasks)
        return {first: points[first : first + size] for first in range(0, len(points), size)}

    def _submit(self, tasks: dict[int, FloatArray]) -> tuple[dict[int, Batch], list[range]]:
        """Answers by place, and the ranges of points in tasks that took down their workers."""
        self._tasks += 1
        futures = {
            first: self._client.submit(_evaluate, self._run, task, key=f"scanfit-{self._run}-{self._tasks}-{first}")
            for first, task in tasks.items()
        }
        answers: dict[int, Batch] = {}
        suspects: list[range] = []
        try:
            for first, future in futures.items():
                error = future.exception()
                if error is None:
                    answers[first], seconds = future.result()
                    self._seconds_per_point = seconds / len(tasks[first])
                elif isinstance(error, KilledWorker):
                    suspects.append(range(first, first + len(tasks[first])))
                else:
                    raise ScanfitError(f"a cluster worker cannot evaluate: {type(error).__name__}: {error}")
        except CancelledError as error:
            raise ScanfitError("the cluster gave up a task: is its scheduler alive?") from error
        finally:
            for future in futures.values():
                future.release()
        return answers, suspects

    def _refresh(self) -> None:
        """Look how many threads there are now, and which workers have gone."""
        threads: dict[str, int] = self._client.nthreads()
        self._gone += len(self._seen - threads.keys())
        self._seen = set(threads)
        self._count = max(1, sum(threads.values()))
        self._refreshed = time.monotonic()

    def _here(self) -> Posterior:
        if self._posterior is None:
            self._posterior = self._build()
        return self._posterior


def _places(ranges: list[range]) -> list[int]:
    return [place for places in ranges for place in places]


# What follows runs in the Dask workers.

_BUILDS: dict[str, tuple[bytes, float | None]] = {}
_EVALUATORS: dict[tuple[str, int], Workers] = {}
"""By run and thread: models need not be fit for use in two threads at once."""


def _remember(run: str, build: bytes, time_limit: float | None, ignore_interrupts: bool) -> None:
    _BUILDS[run] = (build, time_limit)
    for forgotten in list(_BUILDS)[:-_RUNS_KEPT]:
        _forget(forgotten)
    if ignore_interrupts:
        with suppress(ValueError):  # not the main thread
            signal.signal(signal.SIGINT, signal.SIG_IGN)


def _forget(run: str) -> None:
    _BUILDS.pop(run, None)
    for key in [key for key in list(_EVALUATORS) if key[0] == run]:
        _EVALUATORS.pop(key).close()


def _evaluate(run: str, points: FloatArray) -> tuple[Batch, float]:
    key = (run, threading.get_ident())
    if key not in _EVALUATORS:
        pickled, time_limit = _BUILDS[run]
        build: Build = pickle.loads(pickled)
        _EVALUATORS[key] = SerialWorkers(build) if time_limit is None else ProcessWorkers(build, 1, time_limit)
    started = time.perf_counter()
    batch = _EVALUATORS[key].evaluate(points)
    return batch, time.perf_counter() - started
