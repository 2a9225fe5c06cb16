"""Shared by all tests: a folder of one's own with the toy run file in it."""

from __future__ import annotations

import shutil
from collections.abc import Callable
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
