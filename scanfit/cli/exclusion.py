"""What ``scanfit limit --plane`` writes and prints: the part of a plane that one search excludes alone."""

from __future__ import annotations

import csv
import io
import math
from dataclasses import asdict
from pathlib import Path
from typing import TYPE_CHECKING, Any, Final

import numpy as np

from scanfit.contracts import ExclusionPlane
from scanfit.priors import FloatArray

if TYPE_CHECKING:
    from rich.table import Table

ROWS_PRINTED: Final = 12
_SMALLEST: Final = 1e-12
"""CLs below which nothing changes any more; keeps the logarithm finite."""


def excluded_ranges(x: FloatArray, confidence: FloatArray, level: float) -> list[tuple[float, float]]:
    """Where along `x` a search excludes at confidence level `level`; ends by linear interpolation of ln CLs.

    Parameters
    ----------
    x, confidence : ndarray, shape (n,)
        Rising positions, and CLs there; NaN where the search refuses the point, which ends a range.
    """
    excess = math.log1p(-level) - np.log(np.maximum(confidence, _SMALLEST))
    inside = excess > 0.0
    ranges: list[tuple[float, float]] = []
    for first in np.flatnonzero(inside & ~np.append(False, inside[:-1])):
        last = int(first)
        while last + 1 < len(x) and inside[last + 1]:
            last += 1
        ranges.append((_edge(x, excess, int(first), -1), _edge(x, excess, last, 1)))
    return ranges


def plane_table(plane: ExclusionPlane, level: float) -> Table:
    """Excluded ranges of x for some values of y."""
    from scanfit.cli.printing import table

    shown = np.unique(np.linspace(0, len(plane.y_values) - 1, ROWS_PRINTED).round().astype(int))
    rows = [
        [
            float(plane.y_values[row]),
            *(
                ", ".join(f"{low:.4g} - {high:.4g}" for low, high in excluded_ranges(plane.x_values, values, level))
                or "nothing"
                for values in (plane.observed[row], plane.expected[row])
            ),
        ]
        for row in shown
    ]
    unit = f" [{plane.x.unit}]" if plane.x.unit else ""
    header = [
        f"{plane.y.name} [{plane.y.unit}]" if plane.y.unit else plane.y.name,
        f"{plane.x.name} excluded{unit}",
        f"expected, median{unit}",
    ]
    return table(f"{plane.title}: excluded at {100 * level:g} %; {plane.fixed}", header, rows)


def plane_record(plane: ExclusionPlane, level: float) -> dict[str, Any]:
    """JSON-ready content; CLs as rows of equal y, null where the search refuses the point."""
    return {
        "title": plane.title,
        "fixed": plane.fixed,
        "level": level,
        "x": asdict(plane.x),
        "y": asdict(plane.y),
        "x_values": plane.x_values.tolist(),
        "y_values": plane.y_values.tolist(),
        "cls_observed": plane.observed.tolist(),
        "cls_expected": plane.expected.tolist(),
        "caveats": list(plane.caveats),
    }


def write_plane(plane: ExclusionPlane, folder: Path, name: str, level: float) -> list[Path]:
    """Write table, record and figure; return the files."""
    from scanfit.plugins import installed
    from scanfit.store.atomic import explaining, write_bytes, write_json

    stem = folder / f"plane_{name}"
    table_file, record_file = (stem.with_name(stem.name + ending) for ending in (".csv", ".json"))
    text = io.StringIO()
    for line in (plane.title, plane.fixed, "excluded at confidence level L where CLs < 1 - L", *plane.caveats):
        text.write(f"# {line}\n")
    columns = plane.table()
    writer = csv.writer(text, lineterminator="\n")
    writer.writerow(columns)
    writer.writerows([f"{value:.6g}" for value in row] for row in zip(*columns.values(), strict=True))
    with explaining(folder):
        folder.mkdir(parents=True, exist_ok=True)
    write_bytes(table_file, text.getvalue().encode())
    write_json(record_file, plane_record(plane, level))
    drawn: list[Path] = installed("drawings")["plane"].load()(plane, stem, level)
    return [table_file, record_file, *drawn]


def _edge(x: FloatArray, excess: FloatArray, inner: int, step: int) -> float:
    """Where the excess reaches zero between an excluded point and its neighbour; the point itself without one."""
    outer = inner + step
    if not 0 <= outer < len(x) or math.isnan(excess[outer]):
        return float(x[inner])
    share = excess[inner] / (excess[inner] - excess[outer])
    return float(x[inner] + share * (x[outer] - x[inner]))
