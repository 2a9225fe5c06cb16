"""Files are written whole or not at all, and equal content gives equal bytes."""

from __future__ import annotations

import json
import math
import os
import subprocess
from datetime import date
from pathlib import Path

import numpy as np
import pandas as pd
import pyarrow as pa
import pytest

from scanfit.errors import RunFolderError
from scanfit.store import atomic


def test_an_exception_while_writing_leaves_the_old_file_and_nothing_else(tmp_path: Path) -> None:
    path = tmp_path / "file"
    atomic.write_bytes(path, b"old")

    def write_half() -> None:
        with atomic.replacing(path) as file:
            file.write(b"half of the n")
            raise ZeroDivisionError

    with pytest.raises(ZeroDivisionError):
        write_half()
    assert path.read_bytes() == b"old"
    assert list(tmp_path.iterdir()) == [path]


def test_a_reader_sees_the_old_file_until_the_new_one_is_whole(tmp_path: Path) -> None:
    path = tmp_path / "file"
    atomic.write_bytes(path, b"old")
    with atomic.replacing(path) as file:
        file.write(b"new")
        file.flush()
        assert path.read_bytes() == b"old"
    assert path.read_bytes() == b"new"


def test_content_is_on_the_disk_before_its_name(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    events: list[str] = []
    sync, rename = os.fsync, Path.replace

    def watched_sync(handle: int) -> None:
        events.append("sync folder" if os.path.isdir(f"/proc/self/fd/{handle}") else "sync file")  # noqa: PTH112 - a link
        sync(handle)

    def watched_rename(self: Path, target: Path) -> Path:
        events.append("rename")
        return rename(self, target)

    monkeypatch.setattr(os, "fsync", watched_sync)
    monkeypatch.setattr(Path, "replace", watched_rename)
    atomic.write_bytes(tmp_path / "file", b"content")
    assert events == ["sync file", "rename", "sync folder"]


def test_what_a_killed_writer_left_is_removed(tmp_path: Path) -> None:
    (tmp_path / f".part.parquet.123{atomic.UNFINISHED}").write_bytes(b"half")
    (tmp_path / "notes.unfinished").write_bytes(b"the user's own")
    assert atomic.remove_unfinished(tmp_path) == [f".part.parquet.123{atomic.UNFINISHED}"]
    assert [path.name for path in tmp_path.iterdir()] == ["notes.unfinished"]


def test_json_keeps_order_and_numbers_and_has_no_nan(tmp_path: Path) -> None:
    path = tmp_path / "file.json"
    atomic.write_json(
        path,
        {
            "z": 0.1 + 0.2,
            "a": np.float64(5e-324),
            "nan": math.nan,
            "infinity": [-math.inf, np.inf],
            "array": np.array([[1, 2]]),
            "path": Path("a/b"),
            "flag": np.bool_(True),
            "day": date(2026, 12, 1),
            "text": "σv",
        },
    )
    found = json.loads(path.read_text(encoding="utf-8"), parse_constant=lambda name: pytest.fail(name))
    assert list(found)[:2] == ["z", "a"]
    assert (found["z"], found["a"]) == (0.1 + 0.2, 5e-324)
    assert (found["nan"], found["infinity"], found["array"]) == (None, [None, None], [[1, 2]])
    assert (found["path"], found["flag"], found["day"], found["text"]) == ("a/b", True, "2026-12-01", "σv")
    assert atomic.read_json(path) == found


def test_what_json_cannot_hold_is_refused_by_type(tmp_path: Path) -> None:
    with pytest.raises(TypeError, match="set cannot be written as JSON"):
        atomic.write_json(tmp_path / "file.json", {"a": {1, 2}})
    assert not list(tmp_path.iterdir())


def test_damaged_json_is_named(tmp_path: Path) -> None:
    (tmp_path / "file.json").write_text('{"a": ')
    with pytest.raises(RunFolderError, match=r"file\.json is damaged"):
        atomic.read_json(tmp_path / "file.json")


def table() -> pa.Table:
    draws = np.random.default_rng(1).normal(size=(1000, 2))
    draws[3, 0], draws[4, 0], draws[5, 0] = math.nan, -math.inf, -0.0
    return pa.table({"x": draws[:, 0], "status": np.zeros(1000), "flag_far": (draws[:, 1] > 0.0).astype(float)})


def test_parquet_is_exact_and_equal_tables_give_equal_bytes(tmp_path: Path) -> None:
    one, two = tmp_path / "one.parquet", tmp_path / "two.parquet"
    atomic.write_table(one, table())
    atomic.write_table(two, table())
    assert one.read_bytes() == two.read_bytes()
    back = pd.read_parquet(one)
    for name in back:
        assert back[name].to_numpy().tobytes() == table()[name].to_numpy().tobytes()
    frame = back.set_index(np.arange(1000)[::-1] + 5)
    atomic.write_parquet(two, frame)
    assert one.read_bytes() == two.read_bytes(), "the index or pandas' own notes got into the file"


def test_arrays_are_exact_and_equal_ones_give_equal_bytes(tmp_path: Path) -> None:
    arrays = {"a": np.arange(5.0), "b": np.array([[True, False]])}
    atomic.write_npz(tmp_path / "one.npz", arrays)
    os.utime(tmp_path / "one.npz", (0, 0))
    atomic.write_npz(tmp_path / "two.npz", dict(arrays))
    assert (tmp_path / "one.npz").read_bytes() == (tmp_path / "two.npz").read_bytes()
    with np.load(tmp_path / "one.npz") as back:
        assert all(np.array_equal(back[name], array) for name, array in arrays.items())


def test_a_full_disk_is_explained_and_the_old_file_kept(small_disk: Path) -> None:
    path = small_disk / "file"
    atomic.write_bytes(path, b"old")
    with pytest.raises(RunFolderError, match=r"the disk is full \(about 1\.0 MB needed, 0\.\d MB free\)\. Make room"):
        atomic.write_bytes(path, bytes(1_000_000))
    wide = pa.table({"x": np.random.default_rng(1).random(100_000)})
    with pytest.raises(RunFolderError, match="the disk is full"):
        atomic.write_table(path, wide)
    assert path.read_bytes() == b"old"
    assert list(small_disk.iterdir()) == [path]


def test_a_read_only_folder_is_explained(small_disk: Path) -> None:
    subprocess.run(["mount", "-o", "remount,ro", str(small_disk)], check=True)
    with pytest.raises(RunFolderError, match="the folder is read-only for this user"):
        atomic.write_bytes(small_disk / "file", b"content")
