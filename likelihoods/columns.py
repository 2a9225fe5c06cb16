"""Read the user's tables: CSV or Parquet, columns by name, every broken rule said at once."""

from __future__ import annotations

from collections.abc import Sequence
from pathlib import Path

import numpy as np
import pandas as pd
import pyarrow as pa

from scanfit.errors import InputError, Problem
from scanfit.priors import FloatArray


def read_columns(path: Path, required: Sequence[str], optional: Sequence[str] = ()) -> dict[str, FloatArray]:
    """Read numeric columns of a table.

    Parameters
    ----------
    path : Path
        ``.csv`` (a header line; lines that start with # are comments) or ``.parquet``.
    required, optional : sequence of str
        Names of the columns that must and may be there.

    Returns
    -------
    dict
        Arrays of shape (n_rows,), n_rows >= 1, all finite; without the optional columns that are not there.

    Raises
    ------
    InputError
        If the file cannot be read, or with every column that is missing, unknown, or holds something else than numbers.
    """
    frame = _frame(path)
    known = (*required, *optional)
    problems = [Problem(name, "this column is required", None, ()) for name in required if name not in frame]
    problems += [Problem(str(name), "unknown column", None, known) for name in frame.columns if name not in known]
    if frame.empty:
        problems.append(Problem("", "the table has no rows"))
    result = {}
    for name in (name for name in known if name in frame):
        values = pd.to_numeric(frame[name], errors="coerce").to_numpy(dtype=float)
        bad = np.flatnonzero(~np.isfinite(values))
        if len(bad):
            problems.append(
                Problem(name, f"must be a finite number in row {bad[0] + 1}", str(frame[name].iloc[bad[0]]))
            )
        result[name] = values
    if problems:
        raise InputError(problems, str(path))
    return result


def _frame(path: Path) -> pd.DataFrame:
    if path.suffix not in (".csv", ".parquet"):
        raise InputError([Problem("", "must be a .csv or .parquet file", path.name)], str(path))
    try:
        if path.suffix == ".parquet":
            return pd.read_parquet(path)
        return pd.read_csv(path, comment="#", skipinitialspace=True)
    except OSError as error:
        raise InputError([Problem("", f"the file cannot be read: {error.strerror or error}")], str(path)) from None
    except (ValueError, pa.ArrowException) as error:
        raise InputError([Problem("", f"the table cannot be read: {error}")], str(path)) from None
