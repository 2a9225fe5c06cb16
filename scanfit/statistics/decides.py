"""Which search decides where.

A term's *deficit* at a point is how far its log-likelihood falls below the best that it reaches at any archived
point. The term with the largest deficit decides there; where no deficit exceeds `DECISIVE` nothing does. This says
which search objects most to a point; it does not say that the point would be allowed without that search.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import Final

import numpy as np
import pandas as pd

from scanfit.priors import FloatArray
from scanfit.results import Axis
from scanfit.statistics.binned import TERM_PREFIX, Archive, Grid, IndexArray, window
from scanfit.statistics.scale import to_scale

DECISIVE: Final = 1.0
"""Units of log-likelihood by which a term must fall short before it decides."""
NOTHING: Final = -1
"""Code of a point at which nothing decides."""
EMPTY: Final = -2
"""Code of a cell without points."""


@dataclass(frozen=True)
class DecisionMap:
    """The deciding term in each cell of a plane, at the best archived point of the cell.

    Parameters
    ----------
    axes : pair of Axis
        Horizontal and vertical.
    grid : Grid
        Cells, on the scale of the axes.
    terms : tuple of str
        Names of the terms.
    decider : ndarray of int, shape (cells, cells)
        Index into `terms`, or `NOTHING`, or `EMPTY`.
    two_delta : ndarray, shape (cells, cells)
        Drop of 2 ln L from the best fit; NaN in an empty cell, infinite where the likelihood is zero.
    """

    axes: tuple[Axis, Axis]
    grid: Grid
    terms: tuple[str, ...]
    decider: IndexArray
    two_delta: FloatArray


@dataclass(frozen=True)
class TermRecord:
    """How one term fared.

    Parameters
    ----------
    name : str
        Name of the term.
    best : float
        Its largest log-likelihood over the archive.
    at_best_fit : float
        Its log-likelihood at the best archived point.
    posterior_deficit : float
        Posterior mean of its deficit.
    decides : float
        Posterior probability of the points at which it decides.
    """

    name: str
    best: float
    at_best_fit: float
    posterior_deficit: float
    decides: float

    @property
    def deficit(self) -> float:
        """Deficit at the best fit."""
        return self.best - self.at_best_fit


def deciders(deficits: FloatArray) -> IndexArray:
    """Index of the deciding term, or `NOTHING`.

    Parameters
    ----------
    deficits : ndarray, shape (n, n_terms)
        As from `Archive.deficits`.
    """
    if deficits.shape[1] == 0:
        return np.full(len(deficits), NOTHING, dtype=np.intp)
    return np.where(deficits.max(axis=1) > DECISIVE, deficits.argmax(axis=1), NOTHING)


def decider_names(archive: Archive, rows: IndexArray) -> list[str]:
    """Name of the deciding term of each row; "none" where nothing decides, empty where the row is negative."""
    names = [*archive.terms, "none"]  # NOTHING is -1 and picks the last
    codes = deciders(archive.deficits(rows))
    return [names[code] if row >= 0 else "" for code, row in zip(codes.tolist(), rows.tolist(), strict=True)]


def decision_map(
    points: pd.DataFrame, axes: tuple[Axis, Axis], archive: Archive | None = None, cells: int | None = None
) -> DecisionMap | None:
    """Find the deciding term over everything that was explored, excluded places included.

    Parameters
    ----------
    points : DataFrame
        Archive with the columns of both axes, ``log_likelihood``, ``status`` and ``loglike_<term>``.
    axes : pair of Axis
        Horizontal and vertical.
    archive : Archive, optional
        Ranking of `points`, to be shared between calls.
    cells : int, optional
        Cells along each axis; by default so many that a cell holds a dozen points on average, 12 to 72.

    Returns
    -------
    DecisionMap or None
        None where the points have no extent on an axis.
    """
    archive = archive or Archive(points)
    # A point of likelihood zero is decided too: the term that made it zero has an infinite deficit.
    order = archive.order_with_zeros
    scaled = [to_scale(points[axis.name].to_numpy(dtype=float)[order], axis) for axis in axes]
    windows = [window(values, axis, stray=1e-3) for values, axis in zip(scaled, axes, strict=True)]
    if any(ends is None for ends in windows):
        return None
    cells = cells or int(np.clip(np.sqrt(len(order) / 12), 12, 72))
    grid = Grid.over([ends for ends in windows if ends is not None], cells)
    best = grid.best(scaled)
    rows = np.where(best >= 0, order[best], -1)
    codes = deciders(archive.deficits(rows.ravel())).reshape(rows.shape)
    return DecisionMap(axes, grid, archive.terms, np.where(rows >= 0, codes, EMPTY), archive.two_delta(rows))


def term_records(
    points: pd.DataFrame, posterior: pd.DataFrame, archive: Archive | None = None
) -> tuple[Sequence[TermRecord], float]:
    """Summarise every term over the archive and the posterior.

    Parameters
    ----------
    points, posterior : DataFrame
        Archive, and posterior points with ``weight``; both with the columns ``loglike_<term>``.
    archive : Archive, optional
        Ranking of `points`, to be shared between calls.

    Returns
    -------
    records : sequence of TermRecord
        In the order of the archive's columns.
    undecided : float
        Posterior probability of the points at which nothing decides.
    """
    archive = archive or Archive(points)
    weighted = posterior[posterior["weight"] > 0.0]
    weights = weighted["weight"].to_numpy(dtype=float)
    weights = weights / weights.sum()
    values = weighted[[TERM_PREFIX + term for term in archive.terms]].to_numpy(dtype=float)
    deficits = archive.term_best - values
    codes = deciders(deficits)
    at_best = archive.term_best - archive.deficits(np.array([archive.best_row]))[0]
    records = [
        TermRecord(
            name=term,
            best=float(archive.term_best[k]),
            at_best_fit=float(at_best[k]),
            posterior_deficit=float(weights @ deficits[:, k]),
            decides=float(weights[codes == k].sum()),
        )
        for k, term in enumerate(archive.terms)
    ]
    return records, float(weights[codes == NOTHING].sum())
