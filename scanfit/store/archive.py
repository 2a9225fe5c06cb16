"""Every point ever evaluated, in order of evaluation, in double precision.

The archive is the truth of a run: a sampler that is started again makes the same calls, and those already answered are
looked up here. Rows are added in memory and reach the disk as closed Parquet parts, so that any Parquet reader can open
the folder while the scan runs.
"""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from pathlib import Path

import numpy as np
import numpy.typing as npt
import pandas as pd
import pyarrow as pa

from scanfit.errors import RunFolderError
from scanfit.priors import FloatArray
from scanfit.store.atomic import ROW_GROUP, explaining, remove_unfinished, sync_folder
from scanfit.store.index import PointIndex, Rows
from scanfit.store.parts import Part, scan, write_merged, write_part

ANSWER = "log_likelihood"
"""The column that `PointsArchive.lookup` gives back."""


class PointsArchive:
    """The points of one run.

    Parameters
    ----------
    folder : Path
        Folder of the parts; made if missing.
    columns : sequence of str
        Names of all columns, free parameters first.
    dimension : int
        Number of free parameters.
    read_only : bool
        Change nothing on the disk: for readers beside a running scan.

    Attributes
    ----------
    notices : list of str
        What was found amiss and mended while opening, in sentences for the user.

    Raises
    ------
    RunFolderError
        If the folder holds points with other columns, cannot be read, or cannot be written (unless `read_only`).
    """

    def __init__(self, folder: Path, columns: Sequence[str], dimension: int, *, read_only: bool = False) -> None:
        self.folder = Path(folder)
        self.columns = tuple(columns)
        self.dimension = dimension
        self.notices: list[str] = []
        self._read_only = read_only
        self._place = {name: place for place, name in enumerate(self.columns)}
        self._pending: list[FloatArray] = []
        self._unflushed = 0
        self._index: PointIndex | None = None
        if not read_only:
            with explaining(self.folder):
                self.folder.mkdir(parents=True, exist_ok=True)
            remove_unfinished(self.folder)
        self._parts = self._open()

    @classmethod
    def reading(cls, folder: Path) -> PointsArchive:
        """Open an existing archive with the columns it has, changing nothing.

        Raises
        ------
        RunFolderError
            If there are no points in `folder`.
        """
        with explaining(Path(folder), reading=True):
            found = scan(Path(folder)).parts
        if not found:
            raise RunFolderError(f"{folder} holds no points")
        columns, dimension = found[0].layout()
        return cls(folder, columns, dimension, read_only=True)

    def __len__(self) -> int:
        return self._stored + self._unflushed

    @property
    def unflushed(self) -> int:
        """Number of rows that a crash would lose."""
        return self._unflushed

    @property
    def parts(self) -> tuple[Path, ...]:
        """The files, in order of their rows."""
        return tuple(part.path for part in self._parts)

    def lookup(self, points: FloatArray) -> tuple[FloatArray, npt.NDArray[np.bool_]]:
        """Answer points that were evaluated before.

        Parameters
        ----------
        points : ndarray, shape (n, dimension)
            Compared bit by bit.

        Returns
        -------
        log_likelihood : ndarray, shape (n,)
            NaN where unknown.
        known : ndarray of bool, shape (n,)
            Which points have a row.
        """
        index = self._indexed()
        rows = index.find(points)
        return index.answers(rows), rows >= 0

    def row_numbers(self, points: FloatArray) -> Rows:
        """Row numbers of points, shape ``(n,)``.

        Raises
        ------
        KeyError
            If one of them is not in the archive.
        """
        rows = self._indexed().find(points)
        if len(rows) and rows.min() < 0:
            raise KeyError(f"{int(np.count_nonzero(rows < 0))} of {len(rows)} points are not in the archive")
        return rows

    def append(self, rows: FloatArray) -> None:
        """Add rows in memory; `flush` brings them to the disk.

        Parameters
        ----------
        rows : ndarray, shape (n, len(columns))
            In order of evaluation.

        Raises
        ------
        ValueError
            If the shape is wrong or a point is already there; nothing is added then.
        """
        if self._read_only:
            raise ValueError("this archive was opened for reading")
        rows = np.array(rows, dtype=float)  # a copy: the caller may reuse its buffer
        if rows.ndim != 2 or rows.shape[1] != len(self.columns):
            raise ValueError(f"rows have shape {rows.shape}, not (n, {len(self.columns)})")
        repeated = self._indexed().add(rows[:, : self.dimension], rows[:, self._place[ANSWER]])
        if repeated >= 0:
            raise ValueError(f"the point of row {repeated} of {len(rows)} is in the archive already")
        if len(rows):
            self._pending.append(rows)
            self._unflushed += len(rows)

    def flush(self) -> None:
        """Write rows that are only in memory as one closed part.

        Raises
        ------
        RunFolderError
            If the disk is full or not writable. The rows stay in memory, and `flush` can be called again.
        """
        if not self._unflushed:
            return
        first = self._parts[-1].end if self._parts else 0
        self._parts.append(write_part(self.folder, first, self._tail(), self.columns, self.dimension))
        self._pending, self._unflushed = [], 0

    def compact(self, target: int = 8 * ROW_GROUP) -> None:
        """Merge neighbouring parts into parts of up to `target` rows; a crash at any instant loses nothing.

        A reader that lists the folder between the writing of a merged part and the deletion of the small ones sees rows
        twice, so this is for the end of a run or a pause.
        """
        for group in self._groups(target):
            merged = write_merged(
                self.folder, group[0].first, pa.concat_tables([part.read() for part in group]), self.dimension
            )
            place = self._parts.index(group[0])
            self._parts[place : place + len(group)] = [merged]
            self._delete(group)

    def take(self, numbers: Rows, columns: Sequence[str] | None = None) -> pd.DataFrame:
        """Rows by number, in the order of `numbers`.

        Parameters
        ----------
        numbers : ndarray of int, shape (n,)
            Row numbers, as from `row_numbers`; repetitions are allowed.
        columns : sequence of str, optional
            All by default.
        """
        names = self._names(columns)
        numbers = np.asarray(numbers, dtype=np.int64)
        if len(numbers) and not 0 <= numbers.min() <= numbers.max() < len(self):
            raise IndexError(f"row numbers must be from 0 to {len(self) - 1}")
        taken = np.empty((len(numbers), len(names)))
        begin = 0
        for part in self._parts:
            here = (numbers >= begin) & (numbers < begin + len(part))
            if here.any():
                taken[here] = part.array(names)[numbers[here] - begin]
            begin += len(part)
        here = numbers >= begin
        if here.any():
            taken[here] = self._tail(names)[numbers[here] - begin]
        return pd.DataFrame(taken, columns=list(names), copy=False)

    def frame(self, columns: Sequence[str] | None = None) -> pd.DataFrame:
        """Everything in memory; for millions of points prefer `batches`."""
        names = self._names(columns)
        whole = np.empty((len(self), len(names)))
        begin = 0
        for part in self._parts:
            whole[begin : begin + len(part)] = part.array(names)
            begin += len(part)
        whole[begin:] = self._tail(names)
        return pd.DataFrame(whole, columns=list(names), copy=False)

    def batches(self, columns: Sequence[str] | None = None, size: int = ROW_GROUP) -> Iterator[pd.DataFrame]:
        """Stream all rows in order, at most `size` at a time."""
        names = self._names(columns)
        for part in self._parts:
            for array in part.stream(names, size):
                yield pd.DataFrame(array, columns=list(names), copy=False)
        tail = self._tail(names)
        for begin in range(0, len(tail), size):
            yield pd.DataFrame(tail[begin : begin + size], columns=list(names))

    @property
    def _stored(self) -> int:
        return sum(map(len, self._parts))

    def _names(self, columns: Sequence[str] | None) -> tuple[str, ...]:
        names = self.columns if columns is None else tuple(columns)
        unknown = [name for name in names if name not in self._place]
        if unknown:
            raise KeyError(f"no such column: {', '.join(unknown)}")
        return names

    def _tail(self, names: Sequence[str] | None = None) -> FloatArray:
        """Rows that are only in memory, all columns or some."""
        if len(self._pending) > 1:
            self._pending = [np.concatenate(self._pending)]
        rows = self._pending[0] if self._pending else np.empty((0, len(self.columns)))
        return rows if names is None else rows[:, [self._place[name] for name in names]]

    def _open(self) -> list[Part]:
        found = scan(self.folder)
        for part, fault in found.damaged:
            self._set_aside(part, fault)
        if not self._read_only:
            self._delete(found.superseded)
        parts = list(found.parts)
        for part in parts:
            self._check_layout(part)
        self._notice_gaps(parts)
        return parts

    def _set_aside(self, part: Part, fault: str) -> None:
        kept = f"_damaged-{part.path.name}"
        if not self._read_only:
            with explaining(self.folder):
                part.path.replace(part.path.with_name(kept))
        self.notices.append(
            f"{part.path.name} is damaged ({fault}); it is set aside as {kept} and its points are evaluated again"
        )

    def _check_layout(self, part: Part) -> None:
        columns, dimension = part.layout()
        if columns == self.columns and dimension == self.dimension:
            return
        missing = [name for name in self.columns if name not in columns]
        extra = [name for name in columns if name not in self.columns]
        differences = []
        if missing:
            differences.append(f"without {', '.join(missing)}")
        if extra:
            differences.append(f"with {', '.join(extra)} that this run does not have")
        if not differences:
            differences.append(
                f"with {dimension} free parameters and not {self.dimension}"
                if dimension != self.dimension
                else "in another order"
            )
        raise RunFolderError(
            f"{self.folder} holds points of another run: its columns are {' and '.join(differences)}. "
            "Choose another folder with --out, or start over with --fresh."
        )

    def _notice_gaps(self, parts: Sequence[Part]) -> None:
        end = 0
        for part in parts:
            if part.first > end:
                self.notices.append(f"rows {end} to {part.first - 1} are missing; those points are evaluated again")
            end = part.end

    def _delete(self, parts: Sequence[Part]) -> None:
        if not parts:
            return
        with explaining(self.folder):
            for part in parts:
                part.path.unlink(missing_ok=True)
            sync_folder(self.folder)

    def _groups(self, target: int) -> list[list[Part]]:
        """Runs of neighbouring parts that together have at most `target` rows."""
        groups: list[list[Part]] = []
        for part in self._parts:
            group = groups[-1] if groups else []
            if group and group[-1].end == part.first and sum(map(len, group)) + len(part) <= target:
                group.append(part)
            else:
                groups.append([part])
        return [group for group in groups if len(group) > 1]

    def _indexed(self) -> PointIndex:
        """The index, loaded from the disk at first use."""
        if self._index is not None:
            return self._index
        index = PointIndex(self.dimension, self._stored)
        names = (*self.columns[: self.dimension], ANSWER)
        sound: list[Part] = []
        for part in self._parts:
            try:
                array = part.array(names)
            except RunFolderError:
                self._set_aside(part, "a checksum does not hold")
                continue
            if index.add(array[:, :-1], array[:, -1]) >= 0:
                raise RunFolderError(f"{part.path} holds a point that an earlier part holds too: the folder is damaged")
            sound.append(part)
        self._parts, self._index = sound, index
        return index
