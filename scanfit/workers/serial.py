"""Evaluate in this process."""

from __future__ import annotations

from scanfit.posterior import Batch, Posterior
from scanfit.priors import FloatArray
from scanfit.workers.contract import Build, Workers


class SerialWorkers(Workers):
    """One worker: this process.

    Parameters
    ----------
    build : callable
        Gives the posterior; called once, at the first evaluation.
    """

    def __init__(self, build: Build) -> None:
        self._build = build
        self._posterior: Posterior | None = None
        self._closed = False

    def evaluate(self, points: FloatArray) -> Batch:
        """See `Workers.evaluate`."""
        if self._closed:
            raise ValueError("these workers are closed")
        if self._posterior is None:
            self._posterior = self._build()
        return self._posterior.evaluate_many(points)

    def close(self) -> None:
        """See `Workers.close`."""
        self._closed = True
        self._posterior = None
