"""Answer an explorer's questions: from the archive where the point is known, from the workers where it is not."""

from __future__ import annotations

import math
import time
from collections.abc import Callable

import numpy as np

from scanfit.contracts import Progress
from scanfit.driver.interruption import Interruption
from scanfit.driver.reporter import Reporter, Tally
from scanfit.errors import ScanStopped
from scanfit.posterior import FAILURES, Posterior
from scanfit.priors import FloatArray
from scanfit.store.archive import PointsArchive
from scanfit.store.failures import FailureLog
from scanfit.workers.contract import Workers

# Before this many points a high failed fraction says little.
_FEWEST_POINTS_TO_JUDGE = 200
_SECONDS_BETWEEN_REPORTS = 0.2


class Recorder:
    """The driver's side of `contracts.Evaluate`.

    Parameters
    ----------
    posterior : Posterior
        Gives the space and the layout of rows.
    archive : PointsArchive
        Receives every point evaluated.
    failures : FailureLog
        Keeps examples of failures by reason.
    workers : Workers
        Evaluate unknown points.
    reporter : Reporter
        Is told the counts.
    interruption : Interruption
        Is asked before every batch.
    flush_seconds : float
        At most this long a point stays in memory only.
    failed_fraction_maximum : float
        Stop rule.
    on_flush : callable
        Called with the tally after each flush.
    """

    def __init__(
        self,
        posterior: Posterior,
        archive: PointsArchive,
        failures: FailureLog,
        workers: Workers,
        reporter: Reporter,
        interruption: Interruption,
        *,
        flush_seconds: float,
        failed_fraction_maximum: float,
        on_flush: Callable[[Tally], None],
    ) -> None:
        self._space = posterior.space
        self._likelihood_column = posterior.column("log_likelihood")
        self._status_column = posterior.column("status")
        self._archive, self._failures, self._workers = archive, failures, workers
        self._reporter, self._interruption, self._on_flush = reporter, interruption, on_flush
        self._flush_seconds, self._failed_fraction_maximum = flush_seconds, failed_fraction_maximum
        known = archive.frame(["log_likelihood", "status"])
        self._best = float(known["log_likelihood"].max()) if len(known) else -math.inf
        self._failed = int(known["status"].isin(FAILURES).sum())
        self._started = self._flushed = self._reported = time.monotonic()
        self._evaluated = self._answered = 0
        self._explorer, self._progress = "", Progress("start")

    def begin(self, explorer: str) -> None:
        """Count and time a new explorer."""
        self._explorer, self._progress = explorer, Progress("start")
        self._started = time.monotonic()
        self._evaluated = self._answered = 0

    def note_progress(self, progress: Progress) -> None:
        """Keep what the explorer says of itself for the next report."""
        self._progress = progress
        self._reporter.progress(self.tally())

    def tally(self) -> Tally:
        """Present counts."""
        return Tally(
            self._explorer,
            self._progress,
            self._evaluated,
            self._answered,
            len(self._archive),
            self._failed,
            self._best,
            time.monotonic() - self._started,
            self._workers.count,
        )

    def __call__(self, unit_points: FloatArray) -> FloatArray:
        """Log-likelihoods of points of the unit cube, shape ``(n, dimension)`` to ``(n,)``; see `contracts.Evaluate`.

        Raises
        ------
        ScanStopped
            If a stop rule holds or a signal has arrived.
        """
        self._interruption.check()
        points = self._space.from_unit(unit_points) + 0.0  # no negative zero: the archive compares bytes
        log_likelihood, known = self._archive.lookup(points)
        self._answered += int(known.sum())
        if not known.all():
            self._evaluate(points[~known])
            log_likelihood, _ = self._archive.lookup(points)
            self._judge_failures()
        now = time.monotonic()
        if now - self._flushed > self._flush_seconds:
            self.flush()
        if now - self._reported > _SECONDS_BETWEEN_REPORTS:
            self._reported = now
            self._reporter.progress(self.tally())
        return log_likelihood

    def flush(self) -> None:
        """Bring everything known to disk."""
        self._archive.flush()
        self._flushed = time.monotonic()
        self._on_flush(self.tally())

    def _evaluate(self, points: FloatArray) -> None:
        # An explorer may ask for a point twice in one batch; it is evaluated once, in order of first appearance.
        _, first = np.unique(points, axis=0, return_index=True)
        batch = self._workers.evaluate(points[np.sort(first)])
        self._archive.append(batch.rows)
        self._evaluated += len(batch.rows)
        self._best = max(self._best, float(batch.rows[:, self._likelihood_column].max()))
        self._failed += int(np.isin(batch.rows[:, self._status_column], FAILURES).sum())
        for failure in batch.failures:
            values = self._space.values(batch.rows[failure.row, : self._space.dimension])
            self._failures.add(values, failure.culprit, failure.message)

    def _judge_failures(self) -> None:
        total = len(self._archive)
        if total < _FEWEST_POINTS_TO_JUDGE or self._failed <= self._failed_fraction_maximum * total:
            return
        latest = self._failures.latest()
        rule = f"run.failed_fraction_maximum = {self._failed_fraction_maximum:g}"
        raise ScanStopped(
            f"{self._failed} of {total} points could not be evaluated, more than {rule} allows"
            + (f"; the latest: {latest}" if latest else "")
        )
