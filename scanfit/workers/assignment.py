"""How one batch of points is shared among worker processes, whatever becomes of them."""

from __future__ import annotations

import math
import time
from collections import Counter, deque
from multiprocessing.connection import wait

from scanfit.posterior import Batch, Status
from scanfit.priors import FloatArray
from scanfit.workers.contract import Loss
from scanfit.workers.crew import Crew
from scanfit.workers.worker import DEAD, Worker

DEATHS_ALLOWED = 3
"""Workers that a point may take down before it is given up."""

_SHORTEST_TASK = 1e-3
"""Seconds; below, the way there and back (0.1 ms) would count."""
_LONGEST_TASK = 4096
"""Points; a pipe holds 65536 ticks."""
_CHECKS_PER_LIMIT = 10


class Assignment:
    """The state of a batch in work.

    Tasks get smaller towards the end, so that workers finish together although points differ in cost. That decides who
    does what, never what comes out.

    Parameters
    ----------
    crew : Crew
        Who does it.
    points : ndarray, shape (n, dimension)
        What to evaluate.
    time_limit : float or None
        Seconds that a point may take.
    seconds_per_point : float
        What a point costs as far as known.

    Attributes
    ----------
    answers : dict of int to Batch
        Rows of consecutive points by the place of the first.
    losses : dict of int to Loss
        Points given up.
    seconds_per_point : float
        What a point cost lately.
    """

    def __init__(self, crew: Crew, points: FloatArray, time_limit: float | None, seconds_per_point: float) -> None:
        self.answers: dict[int, Batch] = {}
        self.losses: dict[int, Loss] = {}
        self.seconds_per_point = seconds_per_point
        self._crew = crew
        self._points = points
        self._limit = time_limit
        self._waiting = deque([(0, len(points))])
        self._deaths: Counter[int] = Counter()
        self._checked = time.monotonic()

    def run(self) -> None:
        """Work until every point has an answer or is given up."""
        interval = None if self._limit is None else self._limit / _CHECKS_PER_LIMIT
        while True:
            for worker in list(self._crew.workers):
                if worker.ready and not worker.busy and self._waiting:
                    self._give_task(worker)
            if not self._waiting and not any(worker.busy for worker in self._crew.workers):
                return
            lines = [worker.line for worker in self._crew.workers]
            heard = wait(lines, interval)
            for worker in [worker for worker in self._crew.workers if worker.line in heard]:
                self._listen(worker)
            if self._limit is not None:
                self._watch(self._limit)

    def _give_task(self, worker: Worker) -> None:
        first, end = self._waiting.popleft()
        left = end - first + sum(end - first for first, end in self._waiting)
        share = math.ceil(left / (2 * len(self._crew.workers)))
        cost = self.seconds_per_point
        shortest = math.ceil(_SHORTEST_TASK / cost) if cost > 0.0 else 1
        stop = min(end, first + min(max(share, shortest), _LONGEST_TASK))
        if stop < end:
            self._waiting.appendleft((stop, end))
        try:
            worker.send(first, self._points[first:stop])
        except DEAD:
            self._bury(worker)

    def _listen(self, worker: Worker) -> None:
        try:
            if not worker.ready:
                self._crew.greet(worker)
                return
            first, count = worker.first, worker.end - worker.first
            batch, seconds = worker.receive()
        except DEAD:
            self._bury(worker)
            return
        self._crew.praise()
        self.answers[first] = batch
        self.seconds_per_point = seconds / count

    def _bury(self, worker: Worker) -> None:
        """Replace a dead worker, and have its points done again."""
        worker.count_ticks()
        first, end, suspect = worker.first, worker.end, worker.suspect
        ending = self._crew.replace(worker)
        if suspect is None:
            self._do_again(first, end)
            return
        self._deaths[suspect] += 1
        self._do_again(suspect + 1, end)
        if self._deaths[suspect] < DEATHS_ALLOWED:
            self._do_again(suspect, suspect + 1)
        else:
            message = f"took down {DEATHS_ALLOWED} worker processes, the last {ending}"
            self.losses[suspect] = Loss(Status.FAILED, message)
        self._do_again(first, suspect)

    def _watch(self, limit: float) -> None:
        """End workers that have been at one point for too long."""
        interval = limit / _CHECKS_PER_LIMIT
        now = time.monotonic()
        passed = now - self._checked
        if passed < interval:
            return
        self._checked = now
        for worker in [worker for worker in self._crew.workers if worker.busy]:
            if worker.count_ticks():
                worker.silent = 0.0
                continue
            # When this process was stopped (a suspended job), so were the workers: that time does not count.
            worker.silent += min(passed, 2.0 * interval)
            if worker.silent > limit:
                self._give_up(worker, limit)

    def _give_up(self, worker: Worker, limit: float) -> None:
        first, end, suspect = worker.first, worker.end, worker.suspect
        self._crew.replace(worker)
        if suspect is None:
            self._do_again(first, end)
            return
        self._do_again(suspect + 1, end)
        self._do_again(first, suspect)
        self.losses[suspect] = Loss(Status.TIMED_OUT, f"took longer than {limit:g} s")

    def _do_again(self, first: int, end: int) -> None:
        if first < end:
            self._waiting.appendleft((first, end))
