"""`manifest.json`: which run a folder holds, and where and when it was computed."""

from __future__ import annotations

import os
import platform
import socket
import sys
from collections.abc import Collection, Iterable, Mapping
from dataclasses import asdict, dataclass
from datetime import UTC, datetime
from pathlib import Path
from typing import Any

from scanfit.errors import RunFolderError
from scanfit.store.atomic import read_json, write_json
from scanfit.store.fingerprint import Fingerprint, compare, take_fingerprint

MANIFEST = "manifest.json"
FORMAT = 1


@dataclass(frozen=True)
class Manifest:
    """Identity and provenance.

    Parameters
    ----------
    fingerprint : Fingerprint
        Must hold for the run to be carried on.
    sessions : tuple of mapping
        Machine, time and command of every process that worked on it, for the record.
    """

    fingerprint: Fingerprint
    sessions: tuple[Mapping[str, Any], ...]

    @classmethod
    def of_run(
        cls,
        run: Mapping[str, Any],
        harmless: Collection[str],
        data_files: Iterable[Path],
        classes: Mapping[str, type],
    ) -> Manifest:
        """Describe a run that this process is about to start or to carry on; see `take_fingerprint`."""
        return cls(take_fingerprint(run, harmless, data_files, classes), (describe_session(),))

    @classmethod
    def read(cls, path: Path) -> Manifest:
        """Read a manifest.

        Raises
        ------
        RunFolderError
            If it is damaged, altered or of an unknown format.
        """
        value = read_json(path)
        if not isinstance(value, dict) or value.get("format") != FORMAT:
            raise RunFolderError(f"{path} is not of format {FORMAT}: it was written by another version of scanfit")
        fingerprint = Fingerprint.from_json(value.get("fingerprint"))
        if fingerprint.digest != value.get("fingerprint_sha256"):
            raise RunFolderError(f"{path} was altered: its fingerprint does not match its checksum")
        return cls(fingerprint, tuple(value.get("sessions", ())))

    def write(self, path: Path) -> None:
        """Write the manifest; sessions that the file already holds for this run are kept before the new one.

        Raises
        ------
        RunFolderError
            If it cannot be written, or if what is there is damaged.
        """
        earlier = Manifest.read(path) if path.exists() else None
        kept = earlier.sessions if earlier is not None and earlier.fingerprint == self.fingerprint else ()
        write_json(
            path,
            {
                "format": FORMAT,
                "fingerprint_sha256": self.fingerprint.digest,
                "fingerprint": asdict(self.fingerprint),
                "sessions": [*kept, *self.sessions],
            },
        )

    def changes(self, new: Manifest) -> list[str]:
        """Sentences that say how `new` is another run than this one; empty if it is the same."""
        return compare(self.fingerprint, new.fingerprint)


def describe_session() -> dict[str, Any]:
    """Where this process works and since when."""
    return {
        "started": datetime.now(UTC).isoformat(timespec="seconds"),
        "host": socket.gethostname(),
        "platform": platform.platform(),
        "cpus": os.cpu_count(),
        "python": platform.python_version(),
        "command": list(sys.argv),
    }
