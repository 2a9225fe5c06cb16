"""What evaluates points: in this process, in worker processes, or on a cluster.

Rows come back in the order of the points and do not depend on who computed them, so nothing here can change a result.
Every implementation is given a function that builds the posterior; each worker calls it once, and from then on only
parameter vectors travel.
"""

from __future__ import annotations

from abc import ABC, abstractmethod
from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass, replace
from types import TracebackType
from typing import Self

import numpy as np

from scanfit.posterior import Batch, Failure, Posterior, Status
from scanfit.priors import FloatArray

Build = Callable[[], Posterior]


class Workers(ABC):
    """Evaluators of points. A context manager: leaving it closes them."""

    @property
    def count(self) -> int:
        """How many points are evaluated at the same time at most."""
        return 1

    @property
    def restarts(self) -> int:
        """How many workers died or were ended, and were replaced."""
        return 0

    @abstractmethod
    def evaluate(self, points: FloatArray) -> Batch:
        """Evaluate points given as free-parameter values.

        Parameters
        ----------
        points : ndarray, shape (n, dimension)
            Values in declared units.

        Returns
        -------
        Batch
            One row per point in the same order.

        Raises
        ------
        ScanfitError
            If the workers cannot build the posterior.
        ValueError
            After `close`.
        """

    @abstractmethod
    def close(self) -> None:
        """End the workers; a second call does nothing."""

    def __enter__(self) -> Self:
        return self

    def __exit__(
        self,
        kind: type[BaseException] | None,
        error: BaseException | None,
        traceback: TracebackType | None,
    ) -> None:
        self.close()


@dataclass(frozen=True)
class Loss:
    """Why a point has no answer although nothing was raised: it took its worker down, or too long."""

    status: Status
    message: str


def lost_rows(posterior: Posterior, points: FloatArray, losses: Sequence[Loss]) -> Batch:
    """Rows of points that no worker can evaluate: likelihood zero, marked, everything else unknown."""
    rows = np.full((len(points), len(posterior.columns)), np.nan)
    for row, point, loss in zip(rows, points, losses, strict=True):
        row[: len(point)] = point
        row[posterior.column("log_prior")] = posterior.space.log_prior(point)
        row[posterior.column("log_likelihood")] = -np.inf
        row[posterior.column("status")] = loss.status
    return Batch(rows, tuple(Failure(number, "worker", loss.message) for number, loss in enumerate(losses)))


def assemble(count: int, pieces: Mapping[int, Batch]) -> Batch:
    """Put batches together in the order of their first points.

    Parameters
    ----------
    count : int
        Number of points.
    pieces : mapping of int to Batch
        Place of the first point to rows of consecutive points.
    """
    ordered = sorted(pieces.items())
    rows = np.concatenate([piece.rows for _, piece in ordered])
    if len(rows) != count:
        raise AssertionError(f"{len(rows)} rows for {count} points")
    failures = [replace(failure, row=failure.row + first) for first, piece in ordered for failure in piece.failures]
    return Batch(rows, tuple(failures))
