"""Kill a scan at any instant; the same command must end in the same bytes."""

from __future__ import annotations

import os
import random
import signal
import subprocess
import sys
import time
from collections.abc import Callable
from pathlib import Path

import pytest

from tests.engine.test_scan import without_times

Toy = Callable[..., Path]


def start(path: Path, out: Path) -> subprocess.Popen[str]:
    command = [sys.executable, "-m", "scanfit.cli", "run", str(path), "--out", str(out)]
    return subprocess.Popen(command, stdout=subprocess.PIPE, stderr=subprocess.PIPE, text=True)


def count_parts(out: Path) -> int:
    return sum(1 for _ in out.glob("points/rows-*.parquet"))


def slow(toy: Toy, explorer: str) -> Path:
    options = {
        "nested": "live_points = 50",
        "ensemble": "ensembles = 2\nsteps_maximum = 150",
    }[explorer]
    return toy(
        ('use = "nested"\nlive_points = 100', f'use = "{explorer}"\n{options}'),
        ("sigma = 0.2", "sigma = 0.2\nmilliseconds = 1.0"),
        ("workers = 1", "workers = 1\ncheckpoint_seconds = 0.2"),
    )


@pytest.mark.parametrize("explorer", ["nested", "ensemble"])
def test_killed_runs_end_in_the_same_bytes(toy: Toy, tmp_path: Path, explorer: str) -> None:
    path = slow(toy, explorer)
    whole, broken = tmp_path / "whole", tmp_path / "broken"
    reference = start(path, whole)
    _, errors = reference.communicate(timeout=120)
    assert reference.returncode == 0, errors
    dice = random.Random(explorer)
    killed = 0
    for _ in range(4):
        parts = count_parts(broken)
        process = start(path, broken)
        while process.poll() is None and count_parts(broken) == parts:
            time.sleep(0.01)
        time.sleep(dice.uniform(0.0, 0.4))
        killed += process.poll() is None
        process.kill()
        process.communicate()
    last = start(path, broken)
    output, errors = last.communicate(timeout=120)
    assert last.returncode == 0, errors
    assert killed, "the scan ended before it could be killed: the test proves nothing"
    assert "carrying on" in output
    for name in ("posterior.parquet", "profile.parquet", f"explorers/{explorer}/posterior.parquet"):
        assert (broken / name).read_bytes() == (whole / name).read_bytes()
    assert without_times(broken / "summary.json") == without_times(whole / "summary.json")


def test_sigterm_checkpoints_and_says_how_to_carry_on(toy: Toy, tmp_path: Path) -> None:
    process = start(slow(toy, "nested"), tmp_path / "out")
    deadline = time.monotonic() + 60.0
    while not (tmp_path / "out" / "status.json").exists() and time.monotonic() < deadline:
        time.sleep(0.05)
    os.kill(process.pid, signal.SIGTERM)
    _, errors = process.communicate(timeout=60)
    assert process.returncode == 5
    assert errors.strip().endswith("stopped by SIGTERM; the same command carries on from here")
    assert "Traceback" not in errors
