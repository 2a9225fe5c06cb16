"""Evaluate in worker processes of this machine.

The processes are joblib's (started afresh, never forked; functions travel by cloudpickle), the lines to them are ours.
Measured with two workers and points that cost nothing: a batch takes 0.13 ms over a pipe for each worker, 0.6 ms
through joblib's shared queue, and 10 ms through `joblib.Parallel`, which polls. A line of its own also tells which
point killed a worker, and leaves the other workers alone when one dies.
"""

from __future__ import annotations

from multiprocessing.util import Finalize

import numpy as np
from joblib.externals.loky.backend.reduction import dumps

from scanfit.errors import InputError, Problem
from scanfit.posterior import Batch, Posterior
from scanfit.priors import FloatArray
from scanfit.workers.assignment import Assignment
from scanfit.workers.contract import Build, Workers, assemble, lost_rows
from scanfit.workers.crew import Crew


class ProcessWorkers(Workers):
    """Worker processes that survive what points do to them.

    A worker that dies is replaced and its points are done again; a point that takes down three workers is marked as
    failed. A point beyond the time limit is marked as timed out, and its worker is replaced.

    The processes end with the thread that made this object, however it ends, so that no kill leaves any behind.

    Parameters
    ----------
    build : callable
        Gives the posterior; called once in each process.
    count : int
        Number of processes.
    time_limit : float, optional
        Seconds that a point may take.

    Raises
    ------
    InputError
        If `build` cannot be sent to another process.
    """

    def __init__(self, build: Build, count: int, time_limit: float | None = None) -> None:
        if count < 1:
            raise ValueError(f"at least one worker is needed, not {count}")
        self._count = count
        self._build = build
        self._posterior: Posterior | None = None
        self._time_limit = time_limit
        self._seconds_per_point = 0.0
        self._closed = False
        try:
            pickled = bytes(dumps(build))
        except Exception as error:  # pickling runs the user's code
            rule = f"the model or a term cannot be sent to worker processes: {type(error).__name__}: {error}"
            raise InputError([Problem("compute.workers", rule)]) from error
        self._crew = Crew(pickled, count)
        # With a priority it runs before multiprocessing's own clean-up, which waits for processes that ignore SIGTERM.
        self._finalize = Finalize(self, self._crew.dismiss, exitpriority=100)

    @property
    def count(self) -> int:
        """See `Workers`."""
        return self._count

    @property
    def restarts(self) -> int:
        """See `Workers`."""
        return self._crew.replaced

    @property
    def process_numbers(self) -> tuple[int, ...]:
        """Of the workers at work now."""
        return tuple(worker.pid for worker in self._crew.workers)

    def evaluate(self, points: FloatArray) -> Batch:
        """See `Workers.evaluate`."""
        if self._closed:
            raise ValueError("these workers are closed")
        points = np.ascontiguousarray(points, dtype=float)
        if len(points) == 0:
            return self._here().evaluate_many(points)
        assignment = Assignment(self._crew, points, self._time_limit, self._seconds_per_point)
        try:
            assignment.run()
        except Exception:
            self.close()
            raise
        except BaseException:
            # An interrupt. What busy workers still send would be taken for answers to the next batch.
            for worker in [worker for worker in self._crew.workers if worker.tasks]:
                self._crew.replace(worker)
            raise
        self._seconds_per_point = assignment.seconds_per_point
        lost = {
            place: lost_rows(self._here(), points[place : place + 1], [loss])
            for place, loss in assignment.losses.items()
        }
        return assemble(len(points), {**assignment.answers, **lost})

    def close(self) -> None:
        """See `Workers.close`."""
        self._closed = True
        self._finalize()

    def _here(self) -> Posterior:
        if self._posterior is None:
            self._posterior = self._build()
        return self._posterior
