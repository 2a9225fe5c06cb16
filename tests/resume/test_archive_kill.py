"""Kill a process that fills and merges an archive, at any instant: no row that it reported is lost, none is doubled."""

from __future__ import annotations

import random
import subprocess
import sys
import threading
from pathlib import Path

import numpy as np
import pytest

from scanfit.priors import FloatArray
from scanfit.store.archive import PointsArchive

COLUMNS = ("x", "y", "log_likelihood", "status", "radius")
BATCH = 40

WRITER = f"""
import sys
from pathlib import Path
import numpy as np
from scanfit.store.archive import PointsArchive

def row_block(first):
    draws = np.random.default_rng(first).random(({BATCH}, {len(COLUMNS)}))
    draws[:, 0] = np.arange(first, first + {BATCH})
    return draws

archive = PointsArchive(Path(sys.argv[1]), {COLUMNS!r}, 2)
while True:
    archive.append(row_block(len(archive)))
    archive.flush()
    print(len(archive), flush=True)
    if len(archive) % {7 * BATCH} == 0:
        archive.compact({200 * BATCH})
"""


def expected(number: int) -> FloatArray:
    blocks = []
    for first in range(0, number, BATCH):
        draws = np.random.default_rng(first).random((BATCH, len(COLUMNS)))
        draws[:, 0] = np.arange(first, first + BATCH)
        blocks.append(draws)
    return np.concatenate([np.empty((0, len(COLUMNS))), *blocks])


def run_and_kill(folder: Path, seconds: float) -> int:
    """Let a writer work for some time after its first report; return the last number of rows that it reported."""
    process = subprocess.Popen([sys.executable, "-c", WRITER, str(folder)], stdout=subprocess.PIPE, text=True)
    assert process.stdout is not None
    reported = int(process.stdout.readline())
    timer = threading.Timer(seconds, process.kill)
    timer.start()
    for line in process.stdout:
        if line.endswith("\n"):
            reported = int(line)
    timer.join()
    process.communicate()
    return reported


def kill_often(folder: Path, times: int) -> tuple[int, int]:
    """Return the number of rows in the end, and how many kills hit while something was being written."""
    dice = random.Random(times)
    torn = 0
    for _ in range(times):
        reported = run_and_kill(folder, dice.uniform(0.0, 0.25))
        found = sorted(path.name for path in folder.iterdir())
        archive = PointsArchive(folder, COLUMNS, 2)
        torn += found != sorted(path.name for path in folder.iterdir())
        assert archive.notices == []
        assert reported <= len(archive) <= reported + BATCH
        assert archive.frame().to_numpy().tobytes() == expected(len(archive)).tobytes()
        assert archive.row_numbers(expected(len(archive))[:, :2]).tolist() == list(range(len(archive)))
    return len(archive), torn


def test_an_archive_survives_kills(tmp_path: Path) -> None:
    rows, _ = kill_often(tmp_path / "points", 6)
    assert rows > 6 * BATCH


@pytest.mark.soak
def test_an_archive_survives_two_hundred_kills(tmp_path: Path) -> None:
    rows, torn = kill_often(tmp_path / "points", 200)
    assert rows > 200 * BATCH
    assert torn > 20, "too few kills hit while something was being written: the test proves little"
