"""The points archive: exact, ordered, never twice, readable beside a running scan, and whole after any crash."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pandas as pd
import pyarrow.parquet as pq
import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st
from hypothesis.extra import numpy as numbers

from scanfit.errors import RunFolderError
from scanfit.priors import FloatArray
from scanfit.store import archive as archive_module
from scanfit.store.archive import PointsArchive
from scanfit.store.index import PointIndex

COLUMNS = ("x", "y", "log_prior", "log_likelihood", "status", "radius", "flag_far")


def rows(number: int, seed: int = 1) -> FloatArray:
    draws = np.random.default_rng(seed).normal(size=(number, len(COLUMNS)))
    draws[:, 4] = 0.0
    draws[:, 6] = draws[:, 5] > 0.0
    draws[::7, 3:] = np.nan
    draws[::7, 3] = -np.inf
    return draws


def opened(folder: Path) -> PointsArchive:
    return PointsArchive(folder, COLUMNS, 2)


def filled(folder: Path, *sizes: int) -> PointsArchive:
    """An archive with one closed part for each size."""
    archive = opened(folder)
    for seed, size in enumerate(sizes):
        archive.append(rows(size, seed))
        archive.flush()
    return archive


def content(*sizes: int) -> FloatArray:
    return np.concatenate([rows(0), *(rows(size, seed) for seed, size in enumerate(sizes))])


def assert_holds(archive: PointsArchive, expected: FloatArray) -> None:
    """Every way of reading gives `expected`, bit by bit."""
    assert len(archive) == len(expected)
    assert archive.frame().to_numpy().tobytes() == expected.tobytes()
    streamed = [batch.to_numpy() for batch in archive.batches(size=13)]
    assert all(len(batch) <= 13 for batch in streamed)
    assert np.concatenate([np.empty((0, len(COLUMNS))), *streamed]).tobytes() == expected.tobytes()
    if archive._read_only or not len(expected):
        return
    answers, known = archive.lookup(expected[:, :2])
    assert known.all()
    assert answers.tobytes() == np.ascontiguousarray(expected[:, 3]).tobytes()
    assert archive.row_numbers(expected[:, :2]).tolist() == list(range(len(expected)))


def test_rows_come_back_exactly_in_order_from_memory_and_from_disk(tmp_path: Path) -> None:
    archive = opened(tmp_path)
    assert_holds(archive, content())
    archive.append(rows(10, 0))
    archive.append(rows(20, 1))
    assert archive.unflushed == 30
    assert_holds(archive, content(10, 20))
    archive.flush()
    assert archive.unflushed == 0
    archive.append(rows(5, 2))
    assert_holds(archive, content(10, 20, 5))
    archive.flush()
    assert_holds(archive, content(10, 20, 5))
    again = opened(tmp_path)
    assert again.notices == []
    assert_holds(again, content(10, 20, 5))


def test_unknown_points_are_unknown(tmp_path: Path) -> None:
    archive = filled(tmp_path, 10)
    points = np.concatenate([rows(10, 0)[:, :2], rows(10, 99)[:, :2]])
    answers, known = archive.lookup(points)
    assert known.tolist() == [True] * 10 + [False] * 10
    assert np.isnan(answers[10:]).all()
    with pytest.raises(KeyError, match="10 of 20 points are not in the archive"):
        archive.row_numbers(points)


def test_a_point_differs_from_another_in_its_last_bit(tmp_path: Path) -> None:
    archive = opened(tmp_path)
    near = np.zeros((3, len(COLUMNS)))
    near[:, 0] = [1.0, np.nextafter(1.0, 2.0), np.nextafter(1.0, 0.0)]
    near[:, 3] = [10.0, 20.0, 30.0]
    archive.append(near)
    assert archive.lookup(near[:, :2])[0].tolist() == [10.0, 20.0, 30.0]
    signed = near[:1].copy()
    signed[0, 1] = -0.0
    assert not archive.lookup(signed[:, :2])[1].any()


def test_a_point_cannot_be_added_twice_and_nothing_of_its_batch_is(tmp_path: Path) -> None:
    archive = filled(tmp_path, 10)
    twice = np.concatenate([rows(5, 50), rows(10, 0)[3:4], rows(5, 51)])
    with pytest.raises(ValueError, match="row 5 of 11"):
        archive.append(twice)
    itself = np.concatenate([rows(5, 50), rows(5, 50)[2:3]])
    with pytest.raises(ValueError, match="row 5 of 6"):
        archive.append(itself)
    assert_holds(archive, content(10))
    assert not archive.lookup(rows(5, 50)[:, :2])[1].any()
    archive.append(rows(5, 50))
    assert len(archive) == 15


def test_the_caller_may_reuse_its_buffer(tmp_path: Path) -> None:
    archive, buffer = opened(tmp_path), rows(4, 0)
    archive.append(buffer)
    buffer[:] = 0.0
    assert_holds(archive, content(4))


def test_rows_are_taken_by_number_in_any_order_with_repetitions(tmp_path: Path) -> None:
    archive = filled(tmp_path, 10, 20)
    archive.append(rows(5, 2))
    wanted = np.array([34, 0, 12, 12, 9, 10, 30])
    taken = archive.take(wanted, ["radius", "x"])
    assert list(taken.columns) == ["radius", "x"]
    assert taken.to_numpy().tobytes() == content(10, 20, 5)[wanted][:, [5, 0]].tobytes()
    assert len(archive.take(np.array([], dtype=np.int64))) == 0
    for wrong in (35, -1):
        with pytest.raises(IndexError, match="from 0 to 34"):
            archive.take(np.array([wrong]))
    with pytest.raises(KeyError, match="no such column: mass"):
        archive.take(wanted, ["mass"])


@pytest.mark.parametrize("target", [1, 25, 40, 10_000])
def test_merging_parts_changes_no_row(tmp_path: Path, target: int) -> None:
    sizes = (10, 20, 5, 30, 1, 2)
    archive = filled(tmp_path, *sizes)
    archive.append(rows(3, 6))
    archive.compact(target)
    assert_holds(archive, content(*sizes, 3))
    archive.flush()
    assert_holds(opened(tmp_path), content(*sizes, 3))
    assert (len(archive.parts) < 7) == (target > 1)
    assert sorted(tmp_path.iterdir()) == list(archive.parts)


def test_equal_points_make_equal_files(tmp_path: Path) -> None:
    for name in ("one", "two"):
        filled(tmp_path / name, 10, 20).compact()
    one, two = (next((tmp_path / name).iterdir()) for name in ("one", "two"))
    assert one.name == two.name
    assert one.read_bytes() == two.read_bytes()


def test_a_crash_between_merging_and_deleting_is_seen_and_finished(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    archive = filled(tmp_path, 10, 20, 5)

    def crash(*_: object) -> None:
        raise SystemExit

    with monkeypatch.context() as patch:
        patch.setattr(archive_module.PointsArchive, "_delete", crash)
        with pytest.raises(SystemExit):
            archive.compact()
    assert len(list(tmp_path.iterdir())) == 4
    assert_holds(PointsArchive.reading(tmp_path), content(10, 20, 5))
    assert len(list(tmp_path.iterdir())) == 4, "a reader changed the folder"
    assert_holds(opened(tmp_path), content(10, 20, 5))
    assert len(list(tmp_path.iterdir())) == 1


def test_a_crash_after_some_deletions_is_seen_and_finished(tmp_path: Path) -> None:
    archive = filled(tmp_path, 10, 20, 5)
    first, *_ = (path.read_bytes() for path in archive.parts)
    name = archive.parts[1]
    middle = name.read_bytes()
    archive.compact()
    name.write_bytes(middle)
    assert_holds(opened(tmp_path), content(10, 20, 5))
    assert not name.exists()
    assert first


@pytest.mark.parametrize("keep", [0, 3, 0.5, -1])
def test_a_last_part_cut_short_is_set_aside_and_its_points_are_new_again(tmp_path: Path, keep: float) -> None:
    last = filled(tmp_path, 10, 20).parts[-1]
    whole = last.read_bytes()
    last.write_bytes(whole[: int(len(whole) * keep) if isinstance(keep, float) else keep])
    archive = opened(tmp_path)
    assert len(archive.notices) == 1
    assert last.name in archive.notices[0]
    assert "is damaged" in archive.notices[0]
    assert_holds(archive, content(10))
    archive.append(rows(20, 1))
    archive.flush()
    assert last.read_bytes() == whole
    assert_holds(opened(tmp_path), content(10, 20))
    assert len(pd.read_parquet(tmp_path)) == 30, "the damaged part is in the way of ordinary readers"


def test_flipped_bytes_inside_a_part_are_found_by_checksum(tmp_path: Path) -> None:
    last = filled(tmp_path, 100, 200).parts[-1]
    whole = bytearray(last.read_bytes())
    whole[len(whole) // 20] ^= 0x10  # within the pages of the first column
    last.write_bytes(bytes(whole))
    archive = opened(tmp_path)
    assert not archive.lookup(rows(200, 1)[:, :2])[1].any()
    assert len(archive.notices) == 1
    assert_holds(archive, content(100))


def test_damage_in_a_column_that_only_readers_need_is_named_with_the_way_out(tmp_path: Path) -> None:
    part = filled(tmp_path, 100).parts[0]
    whole = bytearray(part.read_bytes())
    metadata = pq.read_metadata(part).row_group(0).column(COLUMNS.index("radius"))
    whole[metadata.data_page_offset + 300] ^= 0x10
    part.write_bytes(bytes(whole))
    archive = opened(tmp_path)
    assert archive.lookup(rows(100, 0)[:, :2])[1].all()
    for read in (archive.frame, lambda: archive.take(np.array([3])), lambda: list(archive.batches())):
        with pytest.raises(RunFolderError, match=rf"{part.name} is damaged .* Delete it"):
            read()
    assert len(archive.frame(["x", "log_likelihood"])) == 100


def test_a_missing_part_in_the_middle_is_told_and_the_others_are_kept(tmp_path: Path) -> None:
    archive = filled(tmp_path, 10, 20, 5)
    archive.parts[1].unlink()
    again = opened(tmp_path)
    assert again.notices == ["rows 10 to 29 are missing; those points are evaluated again"]
    assert_holds(again, np.concatenate([rows(10, 0), rows(5, 2)]))
    again.append(rows(20, 1))
    again.flush()
    again.compact()
    assert_holds(opened(tmp_path), np.concatenate([rows(10, 0), rows(5, 2), rows(20, 1)]))


def test_what_a_killed_writer_left_is_removed(tmp_path: Path) -> None:
    filled(tmp_path, 10)
    left = tmp_path / ".rows-000000000010-000000000020.parquet.17.unfinished"
    left.write_bytes(b"PAR1")
    assert_holds(opened(tmp_path), content(10))
    assert not left.exists()


def test_points_of_another_run_are_refused_with_the_difference(tmp_path: Path) -> None:
    filled(tmp_path, 10)
    others = (*COLUMNS[:5], "omega_h2", *COLUMNS[6:])
    with pytest.raises(RunFolderError, match="without omega_h2 and with radius that this run does not have"):
        PointsArchive(tmp_path, others, 2)
    with pytest.raises(RunFolderError, match="in another order"):
        PointsArchive(tmp_path, (COLUMNS[1], COLUMNS[0], *COLUMNS[2:]), 2)
    with pytest.raises(RunFolderError, match="with 2 free parameters and not 3"):
        PointsArchive(tmp_path, COLUMNS, 3)


def test_a_reader_beside_the_scan_sees_closed_parts_and_changes_nothing(tmp_path: Path) -> None:
    archive = filled(tmp_path, 10)
    archive.append(rows(20, 1))
    (tmp_path / ".x.1.unfinished").write_bytes(b"being written")
    before = sorted(tmp_path.iterdir())
    reader = PointsArchive.reading(tmp_path)
    assert (reader.columns, reader.dimension) == (COLUMNS, 2)
    assert_holds(reader, content(10))
    assert pd.read_parquet(tmp_path).to_numpy().tobytes() == content(10).tobytes()
    with pytest.raises(ValueError, match="opened for reading"):
        reader.append(rows(1, 3))
    assert sorted(tmp_path.iterdir()) == before


def test_a_folder_without_points_cannot_be_read(tmp_path: Path) -> None:
    with pytest.raises(RunFolderError, match="holds no points"):
        PointsArchive.reading(tmp_path)
    with pytest.raises(RunFolderError, match="cannot be read"):
        PointsArchive.reading(tmp_path / "none")


def test_a_full_disk_keeps_rows_in_memory_and_flush_can_be_tried_again(small_disk: Path) -> None:
    archive = filled(small_disk / "points", 10)
    ballast = small_disk / "ballast"
    ballast.write_bytes(bytes(200_000))
    archive.append(rows(2000, 1))
    for _ in range(2):
        with pytest.raises(RunFolderError, match="the disk is full"):
            archive.flush()
        assert archive.unflushed == 2000
        assert_holds(archive, content(10, 2000))
    assert_holds(opened(small_disk / "points"), content(10))
    ballast.unlink()
    archive.flush()
    assert_holds(opened(small_disk / "points"), content(10, 2000))


def test_a_full_disk_while_merging_loses_nothing(small_disk: Path) -> None:
    archive = filled(small_disk / "points", 1000, 1000)
    (small_disk / "ballast").write_bytes(bytes(256_000 - 2 * 60_000))
    with pytest.raises(RunFolderError, match="the disk is full"):
        archive.compact()
    assert_holds(archive, content(1000, 1000))
    assert_holds(opened(small_disk / "points"), content(1000, 1000))


@settings(max_examples=60, deadline=None, suppress_health_check=[HealthCheck.too_slow])
@given(
    numbers.arrays(
        np.uint64,
        st.tuples(st.integers(0, 60), st.just(3)),
        elements=st.one_of(st.sampled_from([0, 1 << 63, 0x7FF8 << 48, 1]), st.integers(0, 2**64 - 1)),
    )
)
def test_the_index_agrees_with_a_dictionary_whatever_the_bits(words: np.ndarray) -> None:
    """Against a Python dictionary of the points' bytes: NaN payloads, signed zeros and denormals included."""
    points = words.view(np.float64)
    index, reference = PointIndex(3), dict[bytes, int]()
    for point in points:
        key = point.tobytes()
        repeated = index.add(point[None, :], np.array([float(len(reference))]))
        assert repeated == (0 if key in reference else -1)
        reference.setdefault(key, len(reference))
    assert len(index) == len(reference)
    assert index.find(points).tolist() == [reference[point.tobytes()] for point in points]


def test_the_index_grows_and_spreads_points_that_differ_in_few_bits() -> None:
    grid = np.stack(np.meshgrid(np.arange(200.0), np.arange(200.0)), axis=-1).reshape(-1, 2)
    index = PointIndex(2)
    for begin in range(0, len(grid), 777):
        assert index.add(grid[begin : begin + 777], np.arange(begin, min(begin + 777, len(grid)), dtype=float)) == -1
    assert index.find(grid).tolist() == list(range(len(grid)))
    assert index.answers(index.find(grid)).tolist() == list(range(len(grid)))
    assert (index.find(grid + 0.5) == -1).all()
