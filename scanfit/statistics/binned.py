"""Archived points ranked by likelihood, and the best of them in each cell of a grid.

Everything is vectorised over points: ten million take seconds.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from types import MappingProxyType

import numpy as np
import pandas as pd
from numpy.typing import NDArray

from scanfit.priors import FloatArray, LogNormal, Normal, Prior, TruncatedNormal
from scanfit.results import Axis
from scanfit.statistics.scale import bounds

IndexArray = NDArray[np.intp]

TERM_PREFIX = "loglike_"
_NEAR = 0.01
"""A window ends at a bound of the prior that the points approach to this share of their range."""


def log_constraint(points: pd.DataFrame, priors: Mapping[str, Prior]) -> FloatArray:
    """Log-likelihood of the measurements behind the priors of nuisances, zero at its maximum.

    A normal or log-normal prior of a nuisance stands for a measurement made elsewhere. The posterior counts it through
    the prior; a profile likelihood must count it as one more term, or the nuisance would float freely. Other priors
    state no measurement and add nothing.

    Parameters
    ----------
    points : DataFrame
        With the columns of `priors`.
    priors : mapping of str to Prior
        Of the nuisances, by name.
    """
    total = np.zeros(len(points))
    for name, prior in priors.items():
        values = points[name].to_numpy(dtype=float)
        if isinstance(prior, Normal | TruncatedNormal):
            total -= 0.5 * np.square((values - prior.mean) / prior.sigma)
        elif isinstance(prior, LogNormal):
            total -= 0.5 * np.square(np.log(values / prior.centre) / np.log(prior.factor))
    return total


class Archive:
    """Points of a run in ascending order of likelihood; failed points and points outside the prior are left out.

    Parameters
    ----------
    points : DataFrame
        Columns ``log_likelihood``, ``status`` and ``loglike_<term>`` for each term.
    constraints : mapping of str to Prior
        Priors of the nuisances; see `log_constraint`.

    Raises
    ------
    ValueError
        If no point has a likelihood above zero.

    Attributes
    ----------
    terms : tuple of str
        Names of the terms in the order of their columns.
    order : ndarray of int
        Rows of `points` whose likelihood is above zero, worst first.
    order_with_zeros : ndarray of int
        The same with the points of likelihood zero before them.
    profiled : ndarray
        Log-likelihood with the constraints, of all rows of `points`.
    term_best : ndarray, shape (n_terms,)
        Largest log-likelihood of each term over all evaluated points.
    """

    def __init__(self, points: pd.DataFrame, constraints: Mapping[str, Prior] = MappingProxyType({})) -> None:
        columns = [name for name in points.columns if name.startswith(TERM_PREFIX)]
        self.terms = tuple(name.removeprefix(TERM_PREFIX) for name in columns)
        self.profiled: FloatArray = points["log_likelihood"].to_numpy(dtype=float) + log_constraint(points, constraints)
        self._term_values = [points[name].to_numpy(dtype=float) for name in columns]
        evaluated = (points["status"].to_numpy() == 0) & ~np.isnan(self.profiled)
        for values in self._term_values:
            evaluated &= ~np.isnan(values)
        rows = np.flatnonzero(evaluated)
        self.order_with_zeros: IndexArray = rows[np.argsort(self.profiled[rows], kind="stable")]
        first = np.searchsorted(self.profiled[self.order_with_zeros], -np.inf, side="right")
        self.order: IndexArray = self.order_with_zeros[first:]
        if len(self.order) == 0:
            raise ValueError("no point of the archive has a likelihood above zero")
        self.term_best = np.array([values[rows].max() for values in self._term_values])

    @property
    def best_row(self) -> int:
        """Row of the best fit: the largest likelihood, constraints included."""
        return int(self.order[-1])

    def near(self, two_delta: float) -> IndexArray:
        """Rows whose 2 ln L lies at most `two_delta` below the best, worst first."""
        values = self.profiled[self.order]
        return self.order[np.searchsorted(values, values[-1] - 0.5 * two_delta) :]

    def two_delta(self, rows: IndexArray) -> FloatArray:
        """Drop of 2 ln L from the best fit for given rows; NaN where the row is negative."""
        drop = 2.0 * (self.profiled[self.best_row] - self.profiled[rows])
        return np.where(rows >= 0, drop, np.nan)

    def deficits(self, rows: IndexArray) -> FloatArray:
        """How far each term lies below its own best, shape ``(n_rows, n_terms)``."""
        values = (
            np.column_stack([values[rows] for values in self._term_values]) if self.terms else np.empty((len(rows), 0))
        )
        return np.asarray(self.term_best - values)


@dataclass(frozen=True)
class Grid:
    """Equal cells on the scale of one or two axes.

    Parameters
    ----------
    edges : tuple of ndarray, each of shape (cells + 1,)
        Cell edges along each axis.
    """

    edges: tuple[FloatArray, ...]

    @classmethod
    def over(cls, windows: Sequence[tuple[float, float]], cells: int) -> Grid:
        """Divide each window into `cells`."""
        return cls(tuple(np.linspace(low, high, cells + 1) for low, high in windows))

    @property
    def shape(self) -> tuple[int, ...]:
        """Number of cells along each axis."""
        return tuple(len(edge) - 1 for edge in self.edges)

    @property
    def centres(self) -> tuple[FloatArray, ...]:
        """Cell centres along each axis."""
        return tuple(0.5 * (edge[1:] + edge[:-1]) for edge in self.edges)

    def best(self, scaled: Sequence[FloatArray]) -> IndexArray:
        """Index of the best point in each cell, -1 where a cell is empty; shape `shape`.

        Parameters
        ----------
        scaled : sequence of ndarray, each of shape (n,)
            Coordinates of the points along each axis, **worst point first**; NaN and points outside take no part.
        """
        flat, inside = self._cell(scaled)
        chosen = np.flatnonzero(inside)
        found = np.full(int(np.prod(self.shape)), -1, dtype=np.intp)
        # numpy keeps the last of several assignments to one place: the best, as points come worst first.
        found[flat[chosen]] = chosen
        return found.reshape(self.shape)

    def count(self, scaled: Sequence[FloatArray]) -> IndexArray:
        """Number of points in each cell; coordinates as for `best`, in any order."""
        flat, inside = self._cell(scaled)
        return np.bincount(flat[inside], minlength=int(np.prod(self.shape))).reshape(self.shape)

    def _cell(self, scaled: Sequence[FloatArray]) -> tuple[IndexArray, NDArray[np.bool_]]:
        """Flat index of the cell that each point lies in, and whether it lies in any."""
        flat = np.zeros(len(scaled[0]), dtype=np.intp)
        inside = np.ones(len(flat), dtype=bool)
        for values, edge, cells in zip(scaled, self.edges, self.shape, strict=True):
            place = (values - edge[0]) * (cells / (edge[-1] - edge[0]))
            # A bound of the prior sits exactly on the last edge and may miss it by rounding.
            inside &= (place >= -1e-9) & (place <= cells + 1e-9)
            place = np.where(inside, place, 0.0)
            flat = flat * cells + np.clip(place.astype(np.intp), 0, cells - 1)
        return flat, inside


def window(scaled: FloatArray, axis: Axis, stray: float = 0.0) -> tuple[float, float] | None:
    """Range of the points on an axis, up to the prior's bounds where they nearly touch them; None where there is none.

    Parameters
    ----------
    scaled : ndarray
        Coordinates; NaN are ignored.
    stray : float
        Share of the points at each end that may fall outside.
    """
    usable = scaled[np.isfinite(scaled)]
    if len(usable) < 2:
        return None
    low, high = np.quantile(usable, [stray, 1.0 - stray]) if stray else (usable.min(), usable.max())
    span = float(high - low)
    if not span > 1e-12 * max(abs(low), abs(high), 1e-300):
        return None
    floor, ceiling = bounds(axis)
    near = _NEAR * span
    return (floor if low - floor < near else float(low)), (ceiling if ceiling - high < near else float(high))
