"""The worker processes of one pool, each replaced when it dies."""

from __future__ import annotations

from scanfit.errors import ScanfitError
from scanfit.workers.worker import Worker

FRUITLESS_ALLOWED = 3
"""Times that the whole crew may die before any of it has begun a point."""


class Crew:
    """A fixed number of workers.

    Parameters
    ----------
    build : bytes
        The pickled function that builds the posterior.
    count : int
        How many.

    Attributes
    ----------
    workers : list of Worker
        Those at work now.
    replaced : int
        How many were replaced so far.
    """

    def __init__(self, build: bytes, count: int) -> None:
        self.replaced = 0
        self._build = build
        self._fruitless = 0
        self.workers = [Worker(build) for _ in range(count)]

    def greet(self, worker: Worker) -> None:
        """Take a new worker's first message.

        Raises
        ------
        ScanfitError
            If it could not build the posterior.
        """
        complaint = worker.greeting()
        if complaint is not None:
            raise ScanfitError(f"a worker process could not build the model: {complaint}")
        worker.ready = True

    def replace(self, worker: Worker) -> str:
        """End a worker, start another one in its place, and say how the old one ended.

        Raises
        ------
        ScanfitError
            If workers keep dying before they have begun a single point.
        """
        worker.kill()
        self._fruitless = 0 if worker.begun else self._fruitless + 1
        if self._fruitless >= FRUITLESS_ALLOWED * len(self.workers):
            raise ScanfitError(f"worker processes end before they can begin a point: {worker.ending}")
        self.workers[self.workers.index(worker)] = Worker(self._build)
        self.replaced += 1
        return worker.ending

    def praise(self) -> None:
        """Note that a worker has answered."""
        self._fruitless = 0

    def dismiss(self) -> None:
        """End all workers: those that are idle by themselves, the others at once."""
        for worker in self.workers:
            worker.dismiss()
        for worker in self.workers:
            worker.kill()
        self.workers.clear()
