"""Profile likelihood from archived points.

The value of a cell is the largest likelihood of the archived points in it. It is a **lower bound** to the true
profile likelihood: no sampler visits every maximum, least of all in the tails and with many parameters, so that
regions come out too small rather than too large. Measured on a chained Rosenbrock function in six dimensions, binned
maxima of sampler points missed the exact 2 ln L by a median of 0.1 to 1.4 units. Cells without points stay empty:
nothing is filled in.
"""

from __future__ import annotations

import math
from collections.abc import Iterable, Mapping
from dataclasses import dataclass
from types import MappingProxyType
from typing import Final

import numpy as np
import pandas as pd

from scanfit.priors import FloatArray, Prior
from scanfit.results import Axis
from scanfit.statistics.binned import Archive, Grid, IndexArray, window
from scanfit.statistics.credible import Interval, intervals_below
from scanfit.statistics.decides import decider_names
from scanfit.statistics.levels import LEVELS, likelihood_threshold
from scanfit.statistics.scale import from_scale, to_scale

SHOWN: Final = 16.0
"""No point below this drop of 2 ln L widens the window of a profile."""
_MARGIN: Final = 0.23
"""Of the window, at each end, in widths of the region of the higher level. No simple fraction: the outermost good point
shall not lie on an edge between cells."""
GAP: Final = 1.0
"""Intervals count as separate only where 2 ln L falls this far below the threshold between them: the scatter of binned
maxima would cut one interval into many."""
EXPECTED: Final = 5.0
"""Intervals count as separate only where so many points within the threshold would have been found between them, had
the likelihood been as good there as beside it. Chance leaves such a gap empty in 0.7 % of cases."""

CAVEAT: Final = (
    "Binned maxima of archived points: a lower bound to the true profile likelihood, 0.1 to 1.4 units of 2 ln L too "
    "low in the median where this was measured. Empty cells hold no archived point; nothing is interpolated into them."
)
"""What a reader must know beside every figure of a profile likelihood."""

COLUMNS: Final = (
    "axis_x", "axis_y", "x_low", "x_high", "y_low", "y_high", "x", "y", "log_likelihood", "two_delta_lnl", "decided_by",
)  # fmt: skip


@dataclass(frozen=True)
class Profile:
    """Profile likelihood over one axis or a plane.

    Parameters
    ----------
    axes : tuple of Axis
        One or two.
    grid : Grid
        Cells on the scale of the axes.
    rows : ndarray of int
        Row of the best point in each cell; -1 where the cell is empty.
    places : tuple of ndarray
        Coordinates of those points on the scale of the axes; NaN where empty.
    two_delta : ndarray
        Drop of 2 ln L from the best fit; NaN where empty.
    tried : ndarray of int
        Number of points in each cell, however bad.
    near : tuple of (ndarray, ndarray)
        Places of the points within `SHOWN` of the best fit along the first axis, and their drop of 2 ln L.
    """

    axes: tuple[Axis, ...]
    grid: Grid
    rows: IndexArray
    places: tuple[FloatArray, ...]
    two_delta: FloatArray
    tried: IndexArray
    near: tuple[FloatArray, FloatArray]


def profile(points: pd.DataFrame, axes: tuple[Axis, ...], archive: Archive | None = None) -> Profile | None:
    """Take the best archived point in each cell.

    Parameters
    ----------
    points : DataFrame
        Archive: the columns of the axes, ``log_likelihood``, ``status`` and ``loglike_<term>``.
    axes : tuple of Axis
        One axis, or two for a plane.
    archive : Archive, optional
        Ranking of `points`, to be shared between calls.

    Returns
    -------
    Profile or None
        None where the points have no extent on an axis. The window holds the region of the higher level with a margin,
        and beyond it no more than the points within `SHOWN` of the best fit; cells are as many as those points can
        fill.
    """
    archive = archive or Archive(points)
    near = archive.near(SHOWN)
    columns = [points[axis.name].to_numpy(dtype=float) for axis in axes]
    core = archive.near(likelihood_threshold(LEVELS["95"], len(axes)) + 2.0)
    windows = [
        _worth_showing(to_scale(column[core], axis), to_scale(column[near], axis), axis)
        for column, axis in zip(columns, axes, strict=True)
    ]
    if any(ends is None for ends in windows):
        return None
    fill = len(near) / 50 if len(axes) == 1 else math.sqrt(len(near) / 5)
    cells = min(max(int(fill), 12), 60)
    grid = Grid.over([ends for ends in windows if ends is not None], cells)
    # Far points matter only to cells without near ones; ten units more of ln L than the window is ample for a map.
    rows = archive.near(SHOWN + 20.0)
    scaled = [to_scale(column[rows], axis) for column, axis in zip(columns, axes, strict=True)]
    best = grid.best(scaled)
    found = np.where(best >= 0, rows[best], -1)
    places = tuple(np.where(best >= 0, values[best], np.nan) for values in scaled)
    everywhere = [to_scale(column[archive.order_with_zeros], axis) for column, axis in zip(columns, axes, strict=True)]
    near_points = (to_scale(columns[0][near], axes[0]), archive.two_delta(near))
    return Profile(axes, grid, found, places, archive.two_delta(found), grid.count(everywhere), near_points)


def _worth_showing(core: FloatArray, near: FloatArray, axis: Axis) -> tuple[float, float] | None:
    """Window of the good points with a margin: a few fair points far away must not blow it up."""
    inner, outer = window(core, axis), window(near, axis)
    if inner is None or outer is None:
        return outer
    margin = _MARGIN * (inner[1] - inner[0])
    return max(outer[0], inner[0] - margin), min(outer[1], inner[1] + margin)


def profile_intervals(curve: Profile, level: float) -> list[Interval]:
    """Confidence intervals of a one-dimensional profile in declared units, in ascending order.

    Parameters
    ----------
    curve : Profile
        Over one axis.
    level : float
        Asymptotic confidence level.

    Returns
    -------
    list of (low, high)
        Ends are interpolated between the best points of neighbouring cells, linearly in the square root of the drop,
        which is exact for a parabola; an interval that reaches the prior's bound ends there. Intervals are taken
        together where the gap between them is not known to be one: see `GAP` and `EXPECTED`.
    """
    axis, edges = curve.axes[0], curve.grid.edges[0]
    threshold = likelihood_threshold(level, 1)
    empty = np.isnan(curve.two_delta)
    drop = np.where(empty, np.inf, np.maximum(curve.two_delta, 0.0))
    places = np.where(empty, curve.grid.centres[0], curve.places[0])
    index = np.arange(len(drop), dtype=float)
    found: list[Interval] = []
    for low, high in intervals_below(np.sqrt(drop), np.sqrt(threshold)):
        if found and not _is_gap(curve, threshold, found[-1][1], low):
            low = found.pop()[0]
        found.append((low, high))
    # Beside an empty cell, and at the window's ends, the cell's own edge is all that is known.
    open_below, open_above = np.r_[True, empty[:-1]], np.r_[empty[1:], True]
    ends = [
        (
            edges[int(low)] if low == int(low) and open_below[int(low)] else np.interp(low, index, places),
            edges[int(high) + 1] if high == int(high) and open_above[int(high)] else np.interp(high, index, places),
        )
        for low, high in found
    ]
    return [(float(from_scale(np.array(low), axis)), float(from_scale(np.array(high), axis))) for low, high in ends]


def _is_gap(curve: Profile, threshold: float, start: float, stop: float) -> bool:
    """Whether the likelihood is known to be worse between two intervals, given as fractional cells.

    Two estimates are made of the number of points within the threshold to expect there, from the stretches beside
    the gap, as wide as the gap: the number of such points, and their share of all points tried there times the number
    of points tried in the gap. The worse side counts, and the larger estimate: a gap is known either because points
    were found on both sides and not between, or because the search went there in vain.
    """
    edges, cells = curve.grid.edges[0], len(curve.two_delta)
    first, last = int(np.floor(start)) + 1, int(np.ceil(stop))  # the cells of the gap
    drop = curve.two_delta[first:last]
    if np.where(np.isnan(drop), np.inf, drop).max(initial=0.0) < threshold + GAP:
        return False
    width = max(last - first, 1)
    place, drop = curve.near
    good = np.histogram(place[drop <= threshold], edges)[0]
    beside = [slice(max(first - width, 0), first), slice(last, min(last + width, cells))]
    found = [float(good[side].sum()) for side in beside]
    share = [number / max(int(curve.tried[side].sum()), 1) for number, side in zip(found, beside, strict=True)]
    return max(min(found), min(share) * int(curve.tried[first:last].sum())) >= EXPECTED


def profile_table(
    points: pd.DataFrame,
    axes: Mapping[str, Axis],
    planes: Iterable[tuple[str, str]] = (),
    constraints: Mapping[str, Prior] = MappingProxyType({}),
) -> pd.DataFrame:
    """Profile likelihoods over every axis and over planes, in long form.

    Parameters
    ----------
    points : DataFrame
        Archive, with the columns of `axes`.
    axes : mapping of str to Axis
        Parameters and quantities by column name.
    planes : iterable of (x, y)
        Names of the axes of each plane.
    constraints : mapping of str to Prior
        Priors of the free nuisances; see `binned.log_constraint`.

    Returns
    -------
    DataFrame
        Columns `COLUMNS`, one row a cell: the cell's edges and the best point's coordinates in declared units, its
        log-likelihood (with constraints), drop of 2 ln L and the deciding term ("none" where nothing decides).
        One-dimensional profiles have an empty ``axis_y``. Empty cells are rows with NaN and an empty ``decided_by``.
    """
    archive = Archive(points, constraints)
    wanted = [(axis,) for axis in axes.values()] + [(axes[x], axes[y]) for x, y in planes]
    tables = [_table(found, archive) for choice in wanted if (found := profile(points, choice, archive)) is not None]
    return pd.concat(tables, ignore_index=True) if tables else pd.DataFrame(columns=list(COLUMNS))


def _table(found: Profile, archive: Archive) -> pd.DataFrame:
    columns: dict[str, object] = {"axis_x": found.axes[0].name, "axis_y": ""}
    for letter in "xy":
        columns |= {f"{letter}_low": np.nan, f"{letter}_high": np.nan, letter: np.nan}
    corners = np.meshgrid(*(np.arange(cells) for cells in found.grid.shape), indexing="ij")
    for letter, axis, edges, places, corner in zip(
        "xy", found.axes, found.grid.edges, found.places, corners, strict=False
    ):
        columns[f"axis_{letter}"] = axis.name
        columns[f"{letter}_low"] = from_scale(edges[corner], axis).ravel()
        columns[f"{letter}_high"] = from_scale(edges[corner + 1], axis).ravel()
        columns[letter] = from_scale(places, axis).ravel()
    rows = found.rows.ravel()
    columns["log_likelihood"] = np.where(rows >= 0, archive.profiled[rows], np.nan)
    columns["two_delta_lnl"] = found.two_delta.ravel()
    columns["decided_by"] = decider_names(archive, rows)
    return pd.DataFrame(columns, index=range(len(rows)))[list(COLUMNS)]
