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
"""Points; a pipe holds 65536 ticks, enough for two tasks."""
_LARGEST_RESERVE = 32_768
"""Bytes, which fit the line's buffer: else we could wait for a worker to read that waits for us to read."""
_CHECKS_PER_LIMIT = 10


class Assignment:
    """The state of a batch in work.

    Tasks get smaller towards the end, so that workers finish together although points differ in cost; each worker has
    a task in reserve, so that it need not wait for us. That decides who does what, never what comes out.

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
        self._waiting = deque([range(len(points))])
        self._deaths: Counter[int] = Counter()
        self._checked = time.monotonic()

    def run(self) -> None:
        """Work until every point has an answer or is given up."""
        interval = None if self._limit is None else self._limit / _CHECKS_PER_LIMIT
        while True:
            for reserve in (0, 1):
                for worker in list(self._crew.workers):
                    if worker.ready and len(worker.tasks) == reserve and self._waiting:
                        self._give_task(worker, in_reserve=reserve > 0)
            if not self._waiting and not any(worker.tasks for worker in self._crew.workers):
                return
            heard = wait([worker.line for worker in self._crew.workers], interval)
            for worker in [worker for worker in self._crew.workers if worker.line in heard]:
                self._listen(worker)
            if self._limit is not None:
                self._watch(self._limit)

    def _give_task(self, worker: Worker, in_reserve: bool) -> None:
        places = self._waiting[0]
        share = math.ceil(sum(map(len, self._waiting)) / (2 * len(self._crew.workers)))
        shortest = math.ceil(_SHORTEST_TASK / self.seconds_per_point) if self.seconds_per_point > 0.0 else 1
        size = min(max(share, shortest), _LONGEST_TASK)
        points = self._points[places.start : places[:size].stop]
        if in_reserve and points.nbytes > _LARGEST_RESERVE:
            return
        self._waiting.popleft()
        self._do_again(places[size:])
        try:
            worker.send(places[:size], points)
        except DEAD:
            self._bury(worker)

    def _listen(self, worker: Worker) -> None:
        try:
            if not worker.ready:
                self._crew.greet(worker)
                return
            places, batch, seconds = worker.answer()
        except DEAD:
            self._bury(worker)
            return
        self._crew.praise()
        self.answers[places.start] = batch
        self.seconds_per_point = seconds / len(places)

    def _bury(self, worker: Worker) -> None:
        """Replace a dead worker, and have its points done again."""
        worker.count_ticks()
        suspect = worker.suspect
        ending = self._crew.replace(worker)
        self._take_back(worker, suspect)
        if suspect is None:
            return
        self._deaths[suspect] += 1
        if self._deaths[suspect] < DEATHS_ALLOWED:
            self._do_again(range(suspect, suspect + 1))
        else:
            message = f"took down {DEATHS_ALLOWED} worker processes, the last {ending}"
            self.losses[suspect] = Loss(Status.FAILED, message)

    def _watch(self, limit: float) -> None:
        """End workers that have been at one point for too long."""
        interval = limit / _CHECKS_PER_LIMIT
        now = time.monotonic()
        passed = now - self._checked
        if passed < interval:
            return
        self._checked = now
        for worker in [worker for worker in self._crew.workers if worker.tasks]:
            if worker.count_ticks():
                worker.silent = 0.0
                continue
            # When this process was stopped (a suspended job), so were the workers: that time does not count.
            worker.silent += min(passed, 2.0 * interval)
            if worker.silent > limit:
                suspect = worker.suspect
                self._crew.replace(worker)
                self._take_back(worker, suspect)
                if suspect is not None:
                    self.losses[suspect] = Loss(Status.TIMED_OUT, f"took longer than {limit:g} s")

    def _take_back(self, worker: Worker, suspect: int | None) -> None:
        """Put the points of a worker that is gone back among the waiting, except the one that it was at."""
        for places in reversed(worker.tasks):
            if suspect is None or suspect not in places:
                self._do_again(places)
            else:
                self._do_again(range(suspect + 1, places.stop))
                self._do_again(range(places.start, suspect))

    def _do_again(self, places: range) -> None:
        if places:
            self._waiting.appendleft(places)
