"""Shared by all tests: the toy run file in a folder of one's own, and a disk that is soon full."""

from __future__ import annotations

import shutil
import subprocess
from collections.abc import Callable, Iterator
from pathlib import Path

import pytest

TOY = Path(__file__).parent / "toy"


@pytest.fixture
def toy(tmp_path: Path) -> Callable[..., Path]:
    """Return a function that writes the toy run file with some text replaced, and gives its path."""

    def write(*replacements: tuple[str, str], name: str = "toy.toml") -> Path:
        folder = tmp_path / "toy"
        folder.mkdir(exist_ok=True)
        shutil.copy(TOY / "toy.py", folder)
        text = (TOY / "toy.toml").read_text(encoding="utf-8")
        for old, new in replacements:
            assert old in text, f"{old!r} is not in the toy run file"
            text = text.replace(old, new)
        path = folder / name
        path.write_text(text, encoding="utf-8")
        return path

    return write


@pytest.fixture
def small_disk(tmp_path: Path) -> Iterator[Path]:
    """A file system of its own with 256 kB; needs the right to mount one."""
    folder = tmp_path / "disk"
    folder.mkdir()
    command = ["mount", "-t", "tmpfs", "-o", "size=256k", "tmpfs", str(folder)]
    try:
        subprocess.run(command, check=True, capture_output=True)
    except (OSError, subprocess.CalledProcessError):
        pytest.skip("no right to mount a small file system here")
    try:
        yield folder
    finally:
        subprocess.run(["umount", str(folder)], check=True)
