"""Weighted density estimates in one and two dimensions.

Points on a fine grid are smoothed with kernels whose width and shape follow the points around them (`kernels`): one
width for all would either break broad parts of a dark-matter posterior into speckles or smear its thin bands. Kernels
are reflected at the grid's ends, so that a density cut off by the prior is not depleted there. How many points shape
a kernel, and how wide it is, is found by likelihood cross-validation (Habbema, Hermans and van den Broek, COMPSTAT
(1974) 101; Duin, IEEE Trans. Comput. C-25 (1976) 1175).
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import Final

import numpy as np
from numpy.typing import NDArray

from scanfit.priors import FloatArray
from scanfit.statistics.kernels import Cells, Windows, smooth

CELLS: Final = {1: 1024, 2: 256}
"""Cells along each axis, by dimension."""

_TRIALS: Final = ((3.0, 0.85), (1.0, 0.75), (0.3, 0.65), (0.1, 0.55))
"""Kernels tried, smoothest first: the number of points that shape them, in units of size^(4 / (4 + d)), which balances
bias and scatter, and their width in units of the spread of those points."""
_JUDGES: Final = 1.0
"""Number of points around a kernel that judge it, in the same units."""
_SHARED: Final = 0.2
_CONFIDENCE: Final = 2.0
"""Standard errors by which a sharper kernel must be better than the smoothest."""
_BACKGROUND: Final = 0.01
"""Share of a flat density mixed in while scoring, lest one stray point set the width for all."""
_ATOM: Final = 0.05
"""Share of the weight on one value from which on it is not smoothed."""
_STRAY_WEIGHT: Final = 1e-5
"""Share of the weight at each end that does not stretch the grid."""
_NEGLIGIBLE: Final = 1e-10
"""Share of the largest weight below which a point is left out."""
_CUT_OFF: Final = 0.3
"""A density whose last percent takes up less than this share of the nine before it is cut off there (0.11 for a flat
density, 0.46 for one that falls linearly to zero, 0.7 and more for normal and exponential tails)."""


@dataclass(frozen=True)
class Density:
    """A density on a grid, in the scale of its axes.

    Parameters
    ----------
    edges : tuple of ndarray, each of shape (cells + 1,)
        Cell edges along each axis.
    mass : ndarray, shape (cells,) or (cells, cells)
        Weight in each cell before smoothing; sums to one.
    height : ndarray, same shape
        Smoothed probability density.
    bandwidth : tuple of float
        Median standard deviation of the kernels along each axis.
    effective_size : float
        Number of independent points that the weights are worth.
    """

    edges: tuple[FloatArray, ...]
    mass: FloatArray
    height: FloatArray
    bandwidth: tuple[float, ...]
    effective_size: float

    @property
    def centres(self) -> tuple[FloatArray, ...]:
        """Cell centres along each axis."""
        return tuple(0.5 * (edge[1:] + edge[:-1]) for edge in self.edges)


def effective_size(weights: FloatArray) -> float:
    """Kish's number of equally weighted points, (sum w)^2 / sum w^2.

    For a Markov chain this is an upper bound: it does not see that neighbouring points are correlated.
    """
    weights = np.asarray(weights, dtype=float)
    return float(weights.sum() ** 2 / np.square(weights).sum())


def weighted_quantile(values: FloatArray, weights: FloatArray, probability: FloatArray | float) -> FloatArray:
    """Quantiles of weighted points, interpolated between the midpoints of their steps.

    Parameters
    ----------
    values, weights : ndarray, shape (n,)
        Points, in any order, and weights of at least zero.
    probability : float or ndarray
        In [0, 1].
    """
    order = np.argsort(values, kind="stable")
    ordered, steps = np.asarray(values, dtype=float)[order], np.asarray(weights, dtype=float)[order]
    cumulative = np.cumsum(steps)
    return np.asarray(np.interp(probability, (cumulative - 0.5 * steps) / cumulative[-1], ordered))


def sample_range(values: FloatArray, weights: FloatArray, low: float, high: float) -> tuple[float, float]:
    """Range of a density: up to a bound that the points nearly touch, or to an edge where they are cut off, or else
    with room for the kernels.

    Stray points without weight do not stretch it. The grid's ends reflect kernels, so that quantities are treated
    rightly that have an edge of their own (a fraction that cannot exceed one); where a density dies out, the range
    goes on far enough for the reflection to change nothing.

    Parameters
    ----------
    values, weights : ndarray, shape (n,)
        Points on the axis' scale.
    low, high : float
        Bounds of the prior, infinite where there are none.
    """
    shares = np.array([_STRAY_WEIGHT, 0.01, 0.1, 0.9, 0.99, 1.0 - _STRAY_WEIGHT])
    first, one, ten, ninety, ninety_nine, last = weighted_quantile(values, weights, shares).tolist()
    near, room = 0.01 * (last - first), 0.08 * (last - first)
    if first - low < near:
        start = low
    else:
        start = first if one - first < _CUT_OFF * (ten - one) else max(low, first - room)
    if high - last < near:
        return start, high
    return start, last if last - ninety_nine < _CUT_OFF * (ninety_nine - ninety) else min(high, last + room)


def estimate(
    values: FloatArray, weights: FloatArray, ranges: Sequence[tuple[float, float]], cells: int | None = None
) -> Density:
    """Estimate a density from weighted points.

    Parameters
    ----------
    values : ndarray, shape (n, d) with d = 1 or 2
        Points in the scale of the axes; those outside `ranges` are left out.
    weights : ndarray, shape (n,)
        Weights of at least zero.
    ranges : sequence of (low, high)
        Extent of the grid along each axis; the kernel is reflected there.
    cells : int, optional
        Cells along each axis, `CELLS` by default.

    Returns
    -------
    Density
        Of unit mass. A single value that holds much of the weight (a fraction cut at one) stays a spike of one cell.
        Kernels broaden a smooth density (by some per cent at a few thousand effective points); `credible` therefore
        counts weight in the unsmoothed cells.
    """
    dimension = values.shape[1]
    cells = cells or CELLS[dimension]
    edges = tuple(np.linspace(low, high, cells + 1) for low, high in ranges)
    places = [(values[:, k] - low) * (cells / (high - low)) for k, (low, high) in enumerate(ranges)]
    inside = (weights > _NEGLIGIBLE * weights.max()) & np.logical_and.reduce([(place >= -1e-9) & (place <= cells + 1e-9) for place in places])
    points, kept = _distinct(np.column_stack([place[inside] for place in places]), weights[inside])
    size = effective_size(kept)
    atoms = _in_atom(points, kept)
    x, y = points[:, 0], points[:, 1] if dimension == 2 else np.full(len(points), 0.5)
    shape = (cells, cells if dimension == 2 else 1)
    fine = Cells.of(x, y, np.where(atoms, 0.0, kept), shape)
    smoothed, spread = _cross_validated(fine, x, y, np.where(atoms, 0.0, kept), size)
    steps = [float(edge[1] - edge[0]) for edge in edges]
    every = Cells.of(x, y, kept, shape).mass
    return Density(
        edges,
        every.reshape((cells,) * dimension),
        (smoothed + every - fine.mass).reshape((cells,) * dimension) / np.prod(steps),
        tuple(float(width * step) for width, step in zip(spread, steps, strict=False)),
        size,
    )


def _cross_validated(
    fine: Cells, x: FloatArray, y: FloatArray, weights: FloatArray, size: float
) -> tuple[FloatArray, FloatArray]:
    """Smoothed mass of each cell, and the median kernel width along x and y in cells.

    The search works on cells of twice the size, which costs little. Of the trials whose score cannot be told from the
    best by more than its standard error, the smoothest is taken (Breiman, Friedman, Olshen and Stone, Classification
    and Regression Trees (1984), section 3.4.3).
    """
    if not fine.mass.any():
        return np.zeros(fine.shape), np.zeros(2)
    dimension = 1 if fine.shape[1] == 1 else 2
    shape = (fine.shape[0] // 2, max(fine.shape[1] // 2, 1))
    halves = (0.5, 0.5 if dimension == 2 else 1.0)
    coarse = Cells.of(x * halves[0], y * halves[1], weights, shape)
    power = 1.0 / (dimension + 4)
    rule_of_thumb = [_spread(place, weights) * half * size**-power for place, half in zip((x, y), halves, strict=True)]
    windows = Windows(coarse, rule_of_thumb)
    filled = np.flatnonzero(coarse.mass)
    mass, squares = coarse.mass.ravel()[filled], coarse.squares.ravel()[filled]
    flat = coarse.mass.sum() / coarse.mass.size
    reflect = (True, dimension == 2)
    unit = size ** (4.0 * power)
    shapes, scores = [], []
    for count, width in _TRIALS:
        shapes.append(width**2 * windows.covariance(count * unit))
        smoothed, central = smooth(coarse.mass, filled, shapes[-1], reflect)
        left_out = np.maximum(smoothed.ravel()[filled] - central * squares / mass, 0.0)
        scores.append(np.log((1.0 - _BACKGROUND) * left_out + _BACKGROUND * flat))
    gain, error = windows.average(np.array(scores[1:]) - scores[0], _JUDGES * unit)
    certain = np.vstack([np.zeros(len(filled)), gain - _CONFIDENCE * error])
    # Neighbours share their choice: where wide kernels met narrow ones, the density would seem to have an edge.
    choice = windows.average(np.argmax(certain, axis=0, keepdims=True).astype(float), _SHARED * unit)[0][0]
    lower = np.minimum(choice.astype(np.intp), len(_TRIALS) - 2)
    share, every, column = choice - lower, np.array(shapes), np.arange(len(filled))
    covariance = ((1.0 - share) * every[lower, :, column].T) + share * every[lower + 1, :, column].T
    parent = np.zeros(coarse.mass.size, dtype=np.intp)
    parent[filled] = np.arange(len(filled))
    places = np.flatnonzero(fine.mass)
    column, row = np.unravel_index(places, fine.shape)
    own = parent[(column // 2) * shape[1] + (row // 2 if dimension == 2 else row)]
    units = np.array([4.0, 4.0, 4.0] if dimension == 2 else [4.0, 0.0, 0.0])[:, np.newaxis]
    smoothed, _ = smooth(fine.mass, places, units * covariance[:, own], reflect)
    return smoothed, np.sqrt(np.median(units[[0, 2]] * covariance[[0, 2]], axis=1))


def _spread(values: FloatArray, weights: FloatArray) -> float:
    """Standard deviation, or the one that the central 95 % suggest where that is smaller."""
    lower, upper = weighted_quantile(values, weights, np.array([0.025, 0.975]))
    mean = np.average(values, weights=weights)
    deviation = float(np.sqrt(np.average(np.square(values - mean), weights=weights)))
    central = float(upper - lower) / 3.92
    return min(deviation, central) if central > 0.0 else deviation


def _in_atom(values: FloatArray, weights: FloatArray) -> NDArray[np.bool_]:
    """Points on a single value that holds a large share of the weight; none in more than one dimension."""
    if values.shape[1] > 1:
        return np.zeros(len(values), dtype=bool)
    _, place = np.unique(values[:, 0], return_inverse=True)
    return np.bincount(place, weights)[place] > _ATOM


def _distinct(values: FloatArray, weights: FloatArray) -> tuple[FloatArray, FloatArray]:
    """Points and normalised weights, repeated points taken together: a chain that stays put has not found a second
    point."""
    order = np.lexsort(values.T)
    ordered = values[order]
    first = np.flatnonzero(np.r_[True, np.any(np.diff(ordered, axis=0) != 0.0, axis=1)])
    return ordered[first], np.add.reduceat(weights[order], first) / weights.sum()
