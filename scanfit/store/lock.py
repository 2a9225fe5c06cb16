"""One process per run folder.

The kernel's file lock decides on one machine: it ends with its process, however that dies, so a stale lock cannot
exist there. Some shared file systems keep such locks per machine or not at all; for those the lock file also says who
holds it, and the holder renews its time stamp. Ages are measured by the clock of the file server, not by ours.
"""

from __future__ import annotations

import errno
import fcntl
import json
import os
import socket
import tempfile
import threading
import time
from contextlib import suppress
from datetime import UTC, datetime
from pathlib import Path
from types import TracebackType
from typing import Any, ClassVar, Self

from scanfit.errors import RunFolderError
from scanfit.store.atomic import explaining

NAME = ".lock"
RENEWED_EVERY = 30.0
"""Seconds between signs of life."""
STALE_AFTER = 600.0
"""Seconds without a sign of life after which another machine's lock is taken over."""

_NO_LOCKS_HERE = (errno.ENOLCK, errno.ENOSYS, errno.EOPNOTSUPP)


class RunLock:
    """Hold a run folder for as long as the context lasts.

    Parameters
    ----------
    folder : Path
        An existing run folder.

    Attributes
    ----------
    notices : list of str
        Set on entering: whose lock was taken over, in a sentence for the user.

    Raises
    ------
    RunFolderError
        On entering, if another process holds the folder or it cannot be written.
    """

    FILES: ClassVar[frozenset[str]] = frozenset({NAME})
    """What a lock leaves in a folder."""

    def __init__(self, folder: Path) -> None:
        self.path = Path(folder) / NAME
        self.notices: list[str] = []
        self._handle: int | None = None
        self._released = threading.Event()

    def __enter__(self) -> Self:
        with explaining(self.path):
            handle = os.open(self.path, os.O_RDWR | os.O_CREAT, 0o666)
        try:
            self._claim(handle)
        except BaseException:
            os.close(handle)
            raise
        self._handle = handle
        self._released.clear()
        threading.Thread(target=self._renew, args=(handle,), name="run lock", daemon=True).start()
        return self

    def __exit__(
        self,
        kind: type[BaseException] | None,
        error: BaseException | None,
        traceback: TracebackType | None,
    ) -> None:
        self._released.set()
        handle, self._handle = self._handle, None
        if handle is not None:
            # The file stays, empty: deleting it would let two processes lock two files of one name.
            with suppress(OSError):
                os.ftruncate(handle, 0)
            os.close(handle)

    @staticmethod
    def holder(folder: Path) -> dict[str, Any] | None:
        """Who holds a folder, with ``host``, ``pid`` and ``since``; None if nobody does. Changes nothing."""
        path = Path(folder) / NAME
        try:
            handle = os.open(path, os.O_RDONLY)
        except OSError:
            return None
        try:
            holder = _holder(handle)
            if not holder:
                return None
            if holder.get("host") != socket.gethostname():
                # Without writing, the age can only be told by our own clock.
                return holder if time.time() - os.fstat(handle).st_mtime < STALE_AFTER else None
            return holder if _alive(holder) else None
        finally:
            os.close(handle)

    def _claim(self, handle: int) -> None:
        holder = _holder(handle)
        locked_by_kernel = True
        try:
            fcntl.flock(handle, fcntl.LOCK_EX | fcntl.LOCK_NB)
        except BlockingIOError:
            raise RunFolderError(self._refusal(holder)) from None
        except OSError as error:
            if error.errno not in _NO_LOCKS_HERE:
                raise RunFolderError(f"{self.path} cannot be locked: {error.strerror}") from error
            locked_by_kernel = False
        holder = _holder(handle)
        if holder:
            self._take_over(holder, locked_by_kernel)
        me = {
            "host": socket.gethostname(),
            "pid": os.getpid(),
            "process_started": _start_of(os.getpid()),
            "since": datetime.now(UTC).isoformat(timespec="seconds"),
        }
        with explaining(self.path):
            os.ftruncate(handle, 0)
            os.pwrite(handle, (json.dumps(me) + "\n").encode(), 0)
            os.fsync(handle)

    def _take_over(self, holder: dict[str, Any], locked_by_kernel: bool) -> None:
        if holder.get("host") == socket.gethostname():
            if not locked_by_kernel and _alive(holder):
                raise RunFolderError(self._refusal(holder))
            self.notices.append(f"the process that held this folder ({_describe(holder)}) ended without releasing it")
            return
        age = self._age()
        if age < STALE_AFTER:
            raise RunFolderError(
                f"{self._refusal(holder)} Its last sign of life was {max(age, 0.0):.0f} s ago; "
                f"the lock is taken over after {STALE_AFTER:.0f} s of silence. "
                f"If that process is gone for certain, delete {self.path}."
            )
        self.notices.append(f"taken over from {_describe(holder)}, silent for {age:.0f} s")

    def _refusal(self, holder: dict[str, Any]) -> str:
        who = _describe(holder) if holder else "another process"
        return (
            f"{self.path.parent} is in use by {who}. Wait until it ends, stop it, or give another folder with --out; "
            "one process at a time writes to a run folder."
        )

    def _age(self) -> float:
        """Seconds since the last sign of life."""
        with explaining(self.path), tempfile.TemporaryFile(dir=self.path.parent) as now:
            now.write(b" ")
            now.flush()
            return os.fstat(now.fileno()).st_mtime - self.path.stat().st_mtime

    def _renew(self, handle: int) -> None:
        while not self._released.wait(RENEWED_EVERY):
            with suppress(OSError):
                os.utime(handle)


def _holder(handle: int) -> dict[str, Any]:
    try:
        found = json.loads(os.pread(handle, 4096, 0) or b"{}")
    except ValueError:
        return {}
    return found if isinstance(found, dict) else {}


def _describe(holder: dict[str, Any]) -> str:
    return f"process {holder.get('pid')} on {holder.get('host')} since {holder.get('since')}"


def _alive(holder: dict[str, Any]) -> bool:
    """Whether the very process is alive: a process number may have been given to another one since."""
    pid = holder.get("pid")
    return isinstance(pid, int) and _start_of(pid) is not None and _start_of(pid) == holder.get("process_started")


def _start_of(pid: int) -> str | None:
    """When a process of this machine started, in clock ticks since boot; None if there is no such process."""
    try:
        stat = Path(f"/proc/{pid}/stat").read_text()
    except OSError:
        return None
    # The second field is the command in parentheses and may hold anything; the 22nd is the start.
    return stat.rpartition(")")[2].split()[19]
