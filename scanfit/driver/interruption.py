"""Turn signals into an orderly end of the scan."""

from __future__ import annotations

import signal
from types import FrameType

from scanfit.errors import Interrupted


class Interruption:
    """Context in which Ctrl-C, SIGTERM and SIGUSR1 ask the scan to stop at the next batch of points.

    A second signal of the same kind acts as if scanfit had not been listening, so that a stuck scan can still be ended.
    """

    _SIGNALS = (signal.SIGINT, signal.SIGTERM, signal.SIGUSR1)

    def __init__(self) -> None:
        self._received: signal.Signals | None = None
        self._previous: dict[signal.Signals, object] = {}

    def __enter__(self) -> Interruption:
        for number in self._SIGNALS:
            try:
                self._previous[number] = signal.signal(number, self._receive)
            except ValueError:  # not the main thread: the host program keeps its own handlers
                break
        return self

    def __exit__(self, *_: object) -> None:
        for number, handler in self._previous.items():
            signal.signal(number, handler)  # type: ignore[arg-type]  # what signal.signal returned
        self._previous.clear()

    def _receive(self, number: int, _: FrameType | None) -> None:
        self._received = signal.Signals(number)
        signal.signal(number, self._previous[self._received])  # type: ignore[arg-type]  # as above

    def check(self) -> None:
        """Raise if a signal has arrived.

        Raises
        ------
        Interrupted
            Names the signal.
        """
        if self._received is not None:
            raise Interrupted(f"stopped by {self._received.name}; the same command carries on from here")
