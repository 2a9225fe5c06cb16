"""Every error that scanfit raises on purpose, in one tree.

::

    ScanfitError
    ├── InputError          the user's input breaks a rule; carries every Problem found      (exit status 2)
    ├── PointError          one point cannot be evaluated; the point is marked, the scan goes on
    │   └── MissingPrediction   a term asks for something that the model does not predict
    ├── RunFolderError      a run folder holds another run, is locked, damaged or read-only  (exit status 3)
    └── ScanStopped         a stated rule ended the scan; what was computed is kept          (exit status 4)
        └── Interrupted         a signal ended it; the same command carries on               (exit status 5)
"""

from __future__ import annotations

import difflib
from collections.abc import Iterable, Sequence
from dataclasses import dataclass, field


class ScanfitError(Exception):
    """Base of all errors raised on purpose; ``exit_status`` is what the command line returns for it."""

    exit_status = 1


@dataclass(frozen=True)
class Problem:
    """One broken rule in the user's input.

    Parameters
    ----------
    where : str
        Path of the field, for example ``parameters.mass.from``.
    rule : str
        What must hold, in words.
    given : object
        What was given; omitted from the message when ``None``.
    choices : sequence of str
        Allowed names, where the rule is a choice.
    """

    where: str
    rule: str
    given: object = None
    choices: Sequence[str] = field(default=())

    def __str__(self) -> str:
        text = f"{self.where}: {self.rule}" if self.where else self.rule
        if self.given is not None:
            text += f" (given: {self.given!r})"
        if self.choices:
            wrong = self.given if isinstance(self.given, str) else self.where.rpartition(".")[2]
            near = nearest_name(wrong, self.choices)
            if near is not None:
                text += f"; did you mean {near!r}?"
            text += "; allowed: " + ", ".join(self.choices)
        return text


class InputError(ScanfitError):
    """The user's input breaks one or more rules.

    Parameters
    ----------
    problems : iterable of Problem
        All of them: a user mends a file once, not once per mistake.
    source : str
        The file or the command that held the input.
    """

    exit_status = 2

    def __init__(self, problems: Iterable[Problem], source: str = "") -> None:
        self.problems = tuple(problems)
        self.source = source
        lines = [str(problem) for problem in self.problems]
        prefix = f"{source}: " if source else ""
        text = prefix + (lines[0] if len(lines) == 1 else f"{len(lines)} problems\n  " + "\n  ".join(lines))
        super().__init__(text)


class PointError(ScanfitError):
    """A model or a term cannot say anything at one point of parameter space."""


class MissingPrediction(PointError):  # noqa: N818 - reads as what it is
    """A term asks the model for a prediction that it does not make.

    Parameters
    ----------
    prediction : str
        What is missing, in words.
    """

    def __init__(self, prediction: str) -> None:
        super().__init__(f"the model does not predict {prediction}")


class RunFolderError(ScanfitError):
    """A run folder cannot be used: another run's, locked, damaged or not writable."""

    exit_status = 3


class ScanStopped(ScanfitError):  # noqa: N818 - not an error of the program
    """A stated rule ended the scan; everything computed so far is in the archive."""

    exit_status = 4


class Interrupted(ScanStopped):
    """A signal ended the scan at a batch boundary; the same command carries on."""

    exit_status = 5


def nearest_name(name: str, choices: Iterable[str]) -> str | None:
    """Return the choice that looks most like `name`, or None when none is close."""
    found = difflib.get_close_matches(name, list(choices), n=1, cutoff=0.6)
    return found[0] if found else None
