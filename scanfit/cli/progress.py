"""Show progress: a live bar on a terminal, plain timed lines in a batch log."""

from __future__ import annotations

import time

from rich.console import Console
from rich.progress import BarColumn, Progress, SpinnerColumn, TaskID, TextColumn, TimeElapsedColumn

from scanfit.driver.reporter import Reporter, Tally

# A batch log gets a line this often at first, and ever more rarely as the scan grows long.
_FIRST_LINE_SECONDS = 10.0
_LINE_GROWTH = 1.25
_LONGEST_SILENCE_SECONDS = 600.0

# Numbers of an explorer that say nothing about how far it is.
_LEFT_OUT = ("calls", "steps", "log_evidence")


def reporter_for(console: Console) -> Reporter:
    """The reporter that suits where the output goes."""
    return LiveBar(console) if console.is_terminal else PlainLines(console)


class LiveBar:
    """One line that redraws itself."""

    def __init__(self, console: Console) -> None:
        self._console = console
        self._bar: Progress | None = None
        self._task: TaskID | None = None
        self._explorer = ""

    def note(self, text: str) -> None:
        """Print a sentence above the bar."""
        self._console.print(text, highlight=False, soft_wrap=True)

    def progress(self, tally: Tally) -> None:
        """Redraw the bar."""
        if self._bar is None or tally.explorer != self._explorer:
            self.close()
            self._explorer = tally.explorer
            self._bar = Progress(
                SpinnerColumn(),
                TextColumn("[bold]{task.description}"),
                BarColumn(bar_width=16),
                TimeElapsedColumn(),
                TextColumn("{task.fields[numbers]}"),
                console=self._console,
                transient=True,
                refresh_per_second=4,
            )
            self._bar.start()
            self._task = self._bar.add_task(tally.explorer, total=None, numbers="")
        assert self._task is not None  # made together with the bar
        fraction = tally.progress.fraction
        self._bar.update(
            self._task,
            description=_what(tally),
            total=None if fraction is None else 1.0,
            completed=fraction or 0.0,
            numbers=_numbers(tally),
        )

    def close(self) -> None:
        """Remove the bar."""
        if self._bar is not None:
            self._bar.stop()
            self._bar = None


class PlainLines:
    """A line now and then, each whole by itself."""

    def __init__(self, console: Console) -> None:
        self._console = console
        self._started = time.monotonic()
        self._next, self._pause = self._started + _FIRST_LINE_SECONDS, _FIRST_LINE_SECONDS

    def note(self, text: str) -> None:
        """Print a timed sentence."""
        self._line(text)

    def progress(self, tally: Tally) -> None:
        """Print a line if the last one is old enough."""
        now = time.monotonic()
        if now < self._next:
            return
        self._pause = min(self._pause * _LINE_GROWTH, _LONGEST_SILENCE_SECONDS)
        self._next = now + self._pause
        fraction = tally.progress.fraction
        share = "" if fraction is None else f" {100.0 * fraction:.0f} %"
        self._line(f"{_what(tally)}{share}, {_numbers(tally)}")

    def close(self) -> None:
        """Nothing to remove."""

    def _line(self, text: str) -> None:
        elapsed = int(time.monotonic() - self._started)
        clock = f"{elapsed // 3600:d}:{elapsed // 60 % 60:02d}:{elapsed % 60:02d}"
        self._console.print(f"[{clock}] {text}", markup=False, highlight=False, soft_wrap=True)


def _what(tally: Tally) -> str:
    phase = tally.progress.phase
    return phase if phase.startswith(tally.explorer) else f"{tally.explorer} {phase}"


def _numbers(tally: Tally) -> str:
    """What a glance needs; the rest is in ``scanfit status``."""
    parts = [f"{tally.archived:,} points", f"{tally.rate:,.0f}/s"]
    if tally.seconds_left is not None:
        parts.append(f"about {_duration(tally.seconds_left)} left")
    if tally.failed:
        parts.append(f"{tally.failed:,} failed")
    shown = tally.progress.numbers.items()
    parts += [f"{name.replace('_', ' ')} {value:.3g}" for name, value in shown if name not in _LEFT_OUT]
    parts.append(f"best ln L {tally.best:.2f}")
    return ", ".join(parts)


def _duration(seconds: float) -> str:
    if seconds < 90:
        return f"{seconds:.0f} s"
    return f"{seconds / 60:.0f} min" if seconds < 5400 else f"{seconds / 3600:.1f} h"
