"""What the driver says while it works; the command line decides how it looks."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Protocol

from scanfit.contracts import Progress


@dataclass(frozen=True)
class Tally:
    """Counts of a running scan.

    Parameters
    ----------
    explorer : str
        Who is exploring.
    progress : Progress
        What it says of itself.
    evaluated : int
        Points evaluated by this process.
    answered : int
        Points answered from the archive.
    archived : int
        Points in the archive.
    failed : int
        Archived points that could not be evaluated.
    best : float
        Highest log-likelihood archived.
    seconds : float
        Since this process began to explore.
    workers : int
        Number of workers.
    """

    explorer: str
    progress: Progress
    evaluated: int
    answered: int
    archived: int
    failed: int
    best: float
    seconds: float
    workers: int

    @property
    def rate(self) -> float:
        """Points evaluated per second."""
        return self.evaluated / self.seconds if self.seconds > 0.0 else 0.0

    @property
    def seconds_left(self) -> float | None:
        """Rough time to the end of this explorer, where it knows its fraction."""
        fraction = self.progress.fraction
        if fraction is None or fraction <= 0.02 or self.seconds <= 0.0:
            return None
        return self.seconds * (1.0 - fraction) / fraction


class Reporter(Protocol):
    """Receives everything worth telling."""

    def note(self, text: str) -> None:
        """One sentence that stays on the screen."""
        ...

    def progress(self, tally: Tally) -> None:
        """The present counts; called often, shown as often as suits."""
        ...

    def close(self) -> None:
        """No more progress of the present explorer."""
        ...


class Silent:
    """Says nothing."""

    def note(self, text: str) -> None:
        """Drop the sentence."""

    def progress(self, tally: Tally) -> None:
        """Drop the counts."""

    def close(self) -> None:
        """Do nothing."""
