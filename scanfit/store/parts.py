"""The files of a points archive: closed Parquet parts named by the rows they hold.

``rows-000000000000-000000004096.parquet`` holds rows 0 to 4095. Merging parts writes the larger file first and deletes
the smaller ones afterwards; after a crash in between, their ranges lie within the larger one's, and that is how they
are known. Unfinished files and damaged parts have names that start with ``.`` or ``_``, which readers of a Parquet
folder skip.
"""

from __future__ import annotations

import re
from collections.abc import Iterator, Sequence
from contextlib import contextmanager
from dataclasses import dataclass
from pathlib import Path
from typing import cast

import numpy as np
import pyarrow as pa
import pyarrow.parquet as pq

from scanfit.errors import RunFolderError
from scanfit.priors import FloatArray
from scanfit.store.atomic import explaining, write_table

_NAME = re.compile(r"rows-(\d{12})-(\d{12})\.parquet")
_DIMENSION = b"scanfit.dimension"

UNREADABLE = (OSError, pa.ArrowException, EOFError)
"""What reading a damaged Parquet file raises."""


@dataclass(frozen=True, order=True)
class Part:
    """One closed file with rows ``first`` to ``end - 1``, counted from the beginning of the scan."""

    first: int
    end: int
    folder: Path

    def __len__(self) -> int:
        return self.end - self.first

    @property
    def path(self) -> Path:
        """Where it is."""
        return self.folder / f"rows-{self.first:012d}-{self.end:012d}.parquet"

    def contains(self, other: Part) -> bool:
        """Whether the range of `other` lies within this one's."""
        return self.first <= other.first and other.end <= self.end

    def fault(self) -> str | None:
        """What is wrong with the file as far as its footer tells; None if nothing is."""
        try:
            held = pq.read_metadata(self.path).num_rows
        except UNREADABLE as error:
            return _first_line(error)
        return None if held == len(self) else f"it holds {held} rows and not {len(self)}"

    def read(self, columns: Sequence[str] | None = None) -> pa.Table:
        """Read columns, all by default; page checksums are verified.

        Raises
        ------
        RunFolderError
            If the file is damaged.
        """
        with self.naming_damage():
            return pq.read_table(
                self.path,
                columns=None if columns is None else list(columns),
                use_threads=False,
                page_checksum_verification=True,
                partitioning=None,
            )

    def stream(self, columns: Sequence[str], size: int) -> Iterator[FloatArray]:
        """Arrays of at most `size` rows; see `read`."""
        with self.naming_damage(), pq.ParquetFile(self.path, page_checksum_verification=True) as file:
            for batch in file.iter_batches(batch_size=size, columns=list(columns), use_threads=False):
                yield as_array(pa.Table.from_batches([batch]), columns)

    @contextmanager
    def naming_damage(self) -> Iterator[None]:
        """Turn what a damaged file raises into a `RunFolderError` that names it."""
        try:
            yield
        except UNREADABLE as error:
            raise RunFolderError(
                f"{self.path} is damaged ({_first_line(error)}). Delete it: the same run command then evaluates its "
                "points again."
            ) from error

    def array(self, columns: Sequence[str]) -> FloatArray:
        """Columns as an array of shape ``(len(self), len(columns))``."""
        return as_array(self.read(columns), columns)

    def layout(self) -> tuple[tuple[str, ...], int]:
        """Names of all columns, and the number of free parameters among them."""
        schema = pq.read_schema(self.path)
        return tuple(schema.names), int((schema.metadata or {}).get(_DIMENSION, b"0"))


def _first_line(error: Exception) -> str:
    return str(error).partition("\n")[0]


def write_part(folder: Path, first: int, rows: FloatArray, columns: Sequence[str], dimension: int) -> Part:
    """Write rows as a closed part."""
    arrays = [pa.array(rows[:, column]) for column in range(len(columns))]
    return write_merged(folder, first, pa.Table.from_arrays(arrays, names=list(columns)), dimension)


def write_merged(folder: Path, first: int, table: pa.Table, dimension: int) -> Part:
    """Write a table as a closed part."""
    part = Part(first, first + table.num_rows, folder)
    write_table(part.path, table.combine_chunks().replace_schema_metadata({_DIMENSION: str(dimension)}))
    return part


def as_array(table: pa.Table, columns: Sequence[str]) -> FloatArray:
    """Columns of a table as an array of doubles with one row per row."""
    array = np.empty((table.num_rows, len(columns)))
    for place, name in enumerate(columns):
        array[:, place] = table[name].to_numpy()
    return cast(FloatArray, array)


@dataclass(frozen=True)
class Scan:
    """What a folder holds: parts in order, parts that a larger one replaces, and parts that cannot be read."""

    parts: tuple[Part, ...]
    superseded: tuple[Part, ...]
    damaged: tuple[tuple[Part, str], ...]


def scan(folder: Path) -> Scan:
    """List the parts in `folder` without changing anything.

    Raises
    ------
    RunFolderError
        If two parts overlap without one holding the other: no crash leaves that behind.
    """
    with explaining(folder, reading=True):
        names = [match for match in map(_NAME.fullmatch, sorted(path.name for path in folder.iterdir())) if match]
    found = sorted((Part(int(m[1]), int(m[2]), folder) for m in names), key=lambda part: (part.first, -part.end))
    parts: list[Part] = []
    superseded: list[Part] = []
    damaged: list[tuple[Part, str]] = []
    for part in found:
        if parts and parts[-1].contains(part):
            superseded.append(part)
            continue
        fault = part.fault()
        if fault is not None:
            damaged.append((part, fault))
        elif parts and part.first < parts[-1].end:
            raise RunFolderError(
                f"{parts[-1].path} and {part.path.name} hold some of the same rows: "
                "files of two runs are mixed in this folder. Start again in an empty one with --out."
            )
        else:
            parts.append(part)
    return Scan(tuple(parts), tuple(superseded), tuple(damaged))
