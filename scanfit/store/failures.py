"""Why points could not be evaluated: a few examples for every reason, one JSON object a line.

How many points failed is in the archive's ``status`` column; this file is for people. Lines are only ever added;
a last line that a crash cut off is dropped.
"""

from __future__ import annotations

import json
import re
from collections.abc import Mapping
from contextlib import suppress
from pathlib import Path
from typing import Any

from scanfit.store.atomic import explaining, plain

EXAMPLES_PER_REASON = 5
REASONS = 200

_NUMBER = re.compile(r"[-+]?(?:\d+\.?\d*|\.\d+)(?:[eE][-+]?\d+)?|\b(?:nan|inf)\b")


class FailureLog:
    """Examples of failures.

    A reason is who failed, with the message's numbers taken out, so that one mistake at a million points is one reason.

    Parameters
    ----------
    path : Path
        The file; read if it exists.

    Attributes
    ----------
    entries : list of dict
        Each with ``culprit``, ``message`` and ``values``.

    Raises
    ------
    RunFolderError
        If the file cannot be read.
    """

    def __init__(self, path: Path) -> None:
        self.path = Path(path)
        self.entries: list[dict[str, Any]] = []
        self._by_reason: dict[str, int] = {}
        self._latest: str | None = None
        if self.path.exists():
            with explaining(self.path, reading=True):
                content = self.path.read_bytes()
            whole = content[: content.rfind(b"\n") + 1]
            for line in whole.splitlines():
                with suppress(ValueError, KeyError, TypeError):
                    self._count(json.loads(line))
            if whole != content:
                with explaining(self.path), self.path.open("r+b") as file:
                    file.truncate(len(whole))

    def add(self, values: Mapping[str, float], culprit: str, message: str) -> None:
        """Keep a failure if its reason has few examples yet and this point is none of them.

        Parameters
        ----------
        values : mapping
            The point's parameters by name.
        culprit : str
            ``model`` or ``terms.<name>``.
        message : str
            What was raised.

        Raises
        ------
        RunFolderError
            If the file cannot be written.
        """
        self._latest = f"{culprit}: {message}"
        reason = self._reason(culprit, message)
        known = self._by_reason.get(reason, 0)
        if known >= EXAMPLES_PER_REASON or (known == 0 and len(self._by_reason) >= REASONS):
            return
        entry = plain({"culprit": culprit, "message": message, "values": dict(values)}, non_finite=repr)
        if entry in self.entries:
            return
        with explaining(self.path), self.path.open("ab") as file:
            file.write((json.dumps(entry, ensure_ascii=False, allow_nan=False) + "\n").encode())
        self._count(entry)

    def latest(self) -> str | None:
        """The latest failure as ``culprit: message``; None if there was none."""
        return self._latest

    def _count(self, entry: dict[str, Any]) -> None:
        reason = self._reason(entry["culprit"], entry["message"])
        self._by_reason[reason] = self._by_reason.get(reason, 0) + 1
        self._latest = f"{entry['culprit']}: {entry['message']}"
        self.entries.append(entry)

    @staticmethod
    def _reason(culprit: str, message: str) -> str:
        return f"{culprit}: {_NUMBER.sub('…', message)}"
