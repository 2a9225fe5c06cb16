"""One process per run folder: refused, released, inherited from the dead, and respected across machines."""

from __future__ import annotations

import errno
import fcntl
import json
import os
import socket
import subprocess
import sys
import time
from pathlib import Path

import pytest

from scanfit.errors import RunFolderError
from scanfit.store import lock
from scanfit.store.lock import RunLock

HOLDER = """
import sys, time
from pathlib import Path
from scanfit.store.lock import RunLock
with RunLock(Path(sys.argv[1])):
    print("held", flush=True)
    time.sleep(3600)
"""


def hold(folder: Path) -> subprocess.Popen[str]:
    process = subprocess.Popen([sys.executable, "-c", HOLDER, str(folder)], stdout=subprocess.PIPE, text=True)
    assert process.stdout is not None
    assert process.stdout.readline() == "held\n"
    return process


def leave_foreign_lock(folder: Path, silent_for: float) -> None:
    content = {"host": "node-17", "pid": 4711, "since": "2026-12-01T04:00:00+00:00"}
    path = folder / lock.NAME
    path.write_text(json.dumps(content))
    then = time.time() - silent_for
    os.utime(path, (then, then))


def test_a_second_process_is_refused_until_the_first_is_killed(tmp_path: Path) -> None:
    process = hold(tmp_path)
    try:
        with pytest.raises(RunFolderError, match=f"in use by process {process.pid} on {socket.gethostname()} since 20"):
            RunLock(tmp_path).__enter__()
        holder = RunLock.holder(tmp_path)
        assert holder is not None
        assert holder["pid"] == process.pid
    finally:
        process.kill()
        process.communicate()
    assert RunLock.holder(tmp_path) is None
    with RunLock(tmp_path) as mine:
        assert len(mine.notices) == 1
        assert f"process {process.pid} on" in mine.notices[0]


def test_the_same_process_cannot_hold_a_folder_twice(tmp_path: Path) -> None:
    with RunLock(tmp_path), pytest.raises(RunFolderError, match=f"process {os.getpid()} on"):
        RunLock(tmp_path).__enter__()


def test_a_released_folder_is_free_and_shows_no_holder(tmp_path: Path) -> None:
    assert RunLock.holder(tmp_path) is None
    with RunLock(tmp_path):
        held = RunLock.holder(tmp_path)
        assert held is not None
        assert held["pid"] == os.getpid()
    assert RunLock.holder(tmp_path) is None
    with RunLock(tmp_path) as again:
        assert again.notices == []
    assert {path.name for path in tmp_path.iterdir()} <= RunLock.FILES


def test_a_lock_of_another_machine_with_signs_of_life_is_respected(tmp_path: Path) -> None:
    leave_foreign_lock(tmp_path, silent_for=40.0)
    with pytest.raises(RunFolderError, match=r"process 4711 on node-17 .* 4\d s ago; .* delete .*\.lock"):
        RunLock(tmp_path).__enter__()
    holder = RunLock.holder(tmp_path)
    assert holder is not None
    assert holder["host"] == "node-17"


def test_a_silent_lock_of_another_machine_is_taken_over(tmp_path: Path) -> None:
    leave_foreign_lock(tmp_path, silent_for=lock.STALE_AFTER + 5.0)
    assert RunLock.holder(tmp_path) is None
    with RunLock(tmp_path) as mine:
        (notice,) = mine.notices
        assert notice.startswith(
            "taken over from process 4711 on node-17 since 2026-12-01T04:00:00+00:00, silent for 60"
        )


def test_the_holder_gives_signs_of_life(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(lock, "RENEWED_EVERY", 0.05)
    with RunLock(tmp_path):
        path = tmp_path / lock.NAME
        os.utime(path, (0.0, 0.0))
        deadline = time.monotonic() + 5.0
        while path.stat().st_mtime == 0.0 and time.monotonic() < deadline:
            time.sleep(0.02)
        assert abs(path.stat().st_mtime - time.time()) < 5.0


def test_without_locks_of_the_kernel_the_written_holder_decides(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    """Some cluster file systems know no flock; simulated, since none is at hand."""
    process = hold(tmp_path)

    def refuse(handle: int, operation: int) -> None:
        raise OSError(errno.ENOLCK, "No locks available")

    monkeypatch.setattr(fcntl, "flock", refuse)
    try:
        with pytest.raises(RunFolderError, match=f"in use by process {process.pid}"):
            RunLock(tmp_path).__enter__()
    finally:
        process.kill()
        process.communicate()
    with RunLock(tmp_path) as mine:
        assert len(mine.notices) == 1


def test_a_process_number_given_to_another_process_does_not_hold_the_folder(tmp_path: Path) -> None:
    content = {"host": socket.gethostname(), "pid": os.getpid(), "process_started": "1", "since": "then"}
    (tmp_path / lock.NAME).write_text(json.dumps(content))
    assert RunLock.holder(tmp_path) is None
    with RunLock(tmp_path) as mine:
        assert len(mine.notices) == 1


def test_a_lock_file_cut_short_by_a_crash_is_no_obstacle(tmp_path: Path) -> None:
    (tmp_path / lock.NAME).write_text('{"host": "no')
    with RunLock(tmp_path):
        assert RunLock.holder(tmp_path) is not None
