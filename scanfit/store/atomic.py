"""Write files so that a crash at any instant leaves the old content or the new, never a mixture.

Order of events: write a new file beside the old one, flush, fsync it, rename it over the old one, fsync the folder. A
process killed in between leaves a file that ends in `UNFINISHED`, which nobody reads.

Equal content gives equal bytes: no times, no process numbers and no machine names go into any file written here.
"""

from __future__ import annotations

import errno
import json
import math
import os
import shutil
from collections.abc import Callable, Iterator, Mapping
from contextlib import contextmanager, suppress
from io import BytesIO
from pathlib import Path
from typing import Any, BinaryIO

import numpy as np
import numpy.typing as npt
import pandas as pd
import pyarrow as pa
import pyarrow.parquet as pq

from scanfit.errors import RunFolderError

UNFINISHED = ".unfinished"
"""Ending of a file that is being written; its name starts with a dot, which Parquet readers of a folder skip."""

ROW_GROUP = 131_072
"""Rows that a streaming reader holds at a time."""


@contextmanager
def replacing(path: Path, size: int | None = None) -> Iterator[BinaryIO]:
    """Give an open binary file that becomes `path` when the block ends without an exception.

    Parameters
    ----------
    path : Path
        The file to create or replace.
    size : int, optional
        Bytes that will be written, for the message when the disk is full.

    Raises
    ------
    RunFolderError
        If the file cannot be written; `path` is then as it was before.
    """
    new = path.with_name(f".{path.name}.{os.getpid()}{UNFINISHED}")
    with explaining(path, size):
        try:
            with new.open("wb") as file:
                yield file
                file.flush()
                os.fsync(file.fileno())
            new.replace(path)
            sync_folder(path.parent)
        except BaseException:
            with suppress(OSError):
                new.unlink(missing_ok=True)
            raise


def write_bytes(path: Path, content: bytes) -> None:
    """Write `content`; see `replacing`."""
    with replacing(path, len(content)) as file:
        file.write(content)


def write_json(path: Path, value: Any) -> None:
    """Write `value` as JSON: keys in the given order, floats exact, NaN and infinities as null.

    Parameters
    ----------
    path : Path
        The file to create or replace.
    value : object
        Mappings, sequences, NumPy arrays and scalars, paths, text, numbers, None.
    """
    write_bytes(path, (json.dumps(plain(value), indent=2, ensure_ascii=False, allow_nan=False) + "\n").encode())


def read_json(path: Path) -> Any:
    """Read a JSON file.

    Raises
    ------
    RunFolderError
        If it cannot be read or is not JSON.
    """
    with explaining(path, reading=True):
        text = path.read_bytes()
    try:
        return json.loads(text)
    except ValueError as error:
        raise RunFolderError(f"{path} is damaged: {error}") from None


def write_table(path: Path, table: pa.Table) -> None:
    """Write a table of numbers as Parquet, with page checksums; equal tables give equal bytes.

    Columns called ``status`` or ``flag_...`` hold few distinct values and are stored as a dictionary. All other
    columns of doubles are split by byte before compression: 8 % smaller and quicker to read, measured.
    """
    few = [name for name in table.column_names if name == "status" or name.startswith("flag_")]
    split = [field.name for field in table.schema if pa.types.is_floating(field.type) and field.name not in few]
    with replacing(path, table.nbytes) as file:
        pq.write_table(
            table,
            file,
            row_group_size=ROW_GROUP,
            compression="zstd",
            compression_level=1,
            use_dictionary=few,
            use_byte_stream_split=split,
            write_page_checksum=True,
        )


def write_parquet(path: Path, frame: pd.DataFrame) -> None:
    """Write a data frame's columns, without its index; see `write_table`."""
    # Numbers go by way of NumPy: from pandas, a NaN would become a null.
    numbers = set(frame.select_dtypes("number").columns)
    arrays = {name: pa.array(frame[name].to_numpy() if name in numbers else frame[name]) for name in frame.columns}
    write_table(path, pa.table(arrays).replace_schema_metadata(None))


def write_npz(path: Path, arrays: Mapping[str, npt.ArrayLike]) -> None:
    """Write arrays by name as a compressed NumPy archive; equal arrays give equal bytes."""
    content = BytesIO()
    named: dict[str, Any] = {name: np.asarray(array) for name, array in arrays.items()}
    np.savez_compressed(content, **named)
    write_bytes(path, content.getvalue())


def remove_unfinished(folder: Path) -> list[str]:
    """Delete what writers that died left in `folder`; return the names."""
    names = sorted(path.name for path in folder.glob(f".*{UNFINISHED}"))
    with explaining(folder):
        for name in names:
            (folder / name).unlink(missing_ok=True)
    return names


def sync_folder(folder: Path) -> None:
    """Make renames and deletions in `folder` survive a power cut."""
    handle = os.open(folder, os.O_RDONLY)
    try:
        os.fsync(handle)
    except OSError as error:  # some network file systems cannot sync a folder and say so
        if error.errno not in (errno.EINVAL, errno.ENOTSUP):
            raise
    finally:
        os.close(handle)


@contextmanager
def explaining(path: Path, size: int | None = None, reading: bool = False) -> Iterator[None]:
    """Turn an `OSError` within the block into a `RunFolderError` that says what to do about it."""
    try:
        yield
    except OSError as error:
        raise RunFolderError(_advice(error, path, size, reading)) from error


def _advice(error: OSError, path: Path, size: int | None, reading: bool) -> str:
    if error.errno in (errno.ENOSPC, errno.EDQUOT):
        reason = "the disk is full" if error.errno == errno.ENOSPC else "the disk quota is used up"
        need = f"about {_megabytes(size)} needed" if size is not None else "more room needed"
        free = ""
        with suppress(OSError):
            free = f", {_megabytes(shutil.disk_usage(path.parent).free)} free"
        return f"{path} cannot be written: {reason} ({need}{free}). Make room, then give the same command again."
    if error.errno in (errno.EROFS, errno.EACCES, errno.EPERM):
        if reading:
            return f"{path} cannot be read: no permission."
        return f"{path} cannot be written: the folder is read-only for this user. Choose another one with --out."
    return f"{path} cannot be {'read' if reading else 'written'}: {error.strerror or error}"


def _megabytes(size: int) -> str:
    return f"{size / 1e6:.1f} MB" if size >= 1e5 else f"{size / 1e3:.1f} kB"


def plain(value: Any, non_finite: Callable[[float], Any] = lambda _: None) -> Any:
    """Reduce `value` to what JSON knows; `non_finite` says what becomes of NaN and infinities."""
    if isinstance(value, Mapping):
        return {str(key): plain(item, non_finite) for key, item in value.items()}
    if isinstance(value, np.ndarray | np.generic):
        return plain(value.tolist(), non_finite)
    if isinstance(value, list | tuple):
        return [plain(item, non_finite) for item in value]
    if isinstance(value, bool | int | str) or value is None:
        return value
    if isinstance(value, float):
        return value if math.isfinite(value) else non_finite(value)
    if hasattr(value, "isoformat"):
        return value.isoformat()
    if isinstance(value, os.PathLike):
        return os.fspath(value)
    raise TypeError(f"{type(value).__name__} cannot be written as JSON")
