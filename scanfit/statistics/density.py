"""Weighted density estimates in one and two dimensions.

Points on a fine grid are smoothed with Gaussian kernels whose width and shape follow the points around them: one width
for all would either break the broad parts of a dark-matter posterior into speckles or smear its thin bands. A kernel
has the covariance of its nearest points (`windows`), so that its width goes with density^(-1/2) in two dimensions, the
law of Abramson, Ann. Statist. 10 (1982) 1217, and it is drawn out along bands. Kernels are reflected at the grid's
ends, so that a density cut off by the prior is not depleted there.

How many points shape a kernel is found by likelihood cross-validation (Duin, IEEE Trans. Comput. C-25 (1976) 1175),
place by place: the points around a kernel judge it.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import Final

import numpy as np
from numpy.typing import NDArray

from scanfit.priors import FloatArray
from scanfit.statistics.kernels import smooth
from scanfit.statistics.windows import Cells, Windows

CELLS: Final = {1: 1024, 2: 256}
"""Cells along each axis, by dimension."""

_WINDOW_CELLS: Final = {1: 256, 2: 64}
"""Cells along each axis of the coarser grid on which the shapes of kernels are sought, by dimension."""
_TRIALS: Final = ((3.0, 0.85), (1.0, 0.75), (0.3, 0.65), (0.1, 0.55))
"""Kernels tried, smoothest first: the number of points that shape them, in units of size^(4 / (4 + d)), which balances
bias and scatter, and their width in units of the spread of those points."""
_JUDGES: Final = 1.0
"""Number of points around a kernel that judge it, in the same units."""
_SHARED: Final = 0.3
"""Number of points that share a choice, in the same units."""
_CONFIDENCE: Final = {1: 3.0, 2: 1.5}
"""The smoothest kernel is taken that is worse than the best by at most so many standard errors, by dimension. Tried on
normal, flat, banded and bimodal samples: the smallest for which chance does not choose sharp kernels."""
_BACKGROUND: Final = 0.01
"""Share of a flat density mixed in while scoring, lest one stray point set the width for all."""
_ATOM: Final = 0.05
"""Share of the weight on one value from which on it is not smoothed."""
_STRAY_WEIGHT: Final = 1e-5
"""Share of the weight at each end that does not stretch the grid."""
_NEGLIGIBLE: Final = 1e-10
"""Share of the largest weight below which a point is left out."""
_CUT_OFF: Final = 0.2
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
    start = first if one - first <= _CUT_OFF * (ten - one) else max(low, first - room)
    stop = last if last - ninety_nine <= _CUT_OFF * (ninety_nine - ninety) else min(high, last + room)
    return (low if first - low < near else start), (high if high - last < near else stop)


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
    inside = weights > _NEGLIGIBLE * weights.max()
    inside &= np.logical_and.reduce([(place >= -1e-9) & (place <= cells + 1e-9) for place in places])
    points, kept = _distinct(np.column_stack([place[inside] for place in places]), weights[inside])
    x, y = points[:, 0], points[:, 1] if dimension == 2 else np.full(len(points), 0.5)
    shape = (cells, cells if dimension == 2 else 1)
    atoms = _in_atom(points, kept)
    held = Cells.of(x[atoms], y[atoms], kept[atoms], shape).mass
    free = ~atoms
    # Points per unit of weight: a single value, however heavy, says nothing of how well the rest is sampled.
    size = effective_size(kept[free]) / kept[free].sum() if free.any() else 1.0
    smoothed, spread = np.zeros(shape), np.zeros(2)
    if free.any():
        smoothed, spread = _cross_validated(x[free], y[free], kept[free], size * float(kept[free].sum()), shape)
    steps = [float(edge[1] - edge[0]) for edge in edges]
    whole = (cells,) * dimension
    return Density(
        edges,
        Cells.of(x, y, kept, shape).mass.reshape(whole),
        (smoothed + held).reshape(whole) / np.prod(steps),
        tuple(float(width * step) for width, step in zip(spread, steps, strict=False)),
        size,
    )


def _cross_validated(
    x: FloatArray, y: FloatArray, weights: FloatArray, size: float, shape: tuple[int, int]
) -> tuple[FloatArray, FloatArray]:
    """Smoothed weight in each cell, and the median width of the kernels along both axes, in cells.

    Every trial is drawn with all kernels, and scored in every cell by the logarithm of the density that the others
    give to it. Around each kernel the mean score of the points near it decides. Its error has two parts: the scatter
    of the scores, and the Poisson noise of the number of points that judge, which raises or lowers all their scores
    together.
    """
    dimension = 1 if shape[1] == 1 else 2
    larger = max(shape[0] // _WINDOW_CELLS[dimension], 1)
    fine, middle, coarse = (_cells(x, y, weights, shape, factor) for factor in (1, max(larger // 2, 1), larger))
    power = 1.0 / (dimension + 4)
    unit = size ** (4.0 * power)
    rule_of_thumb = [_spread(place, weights) / larger * size**-power for place in (x, y)]
    windows = Windows(coarse, rule_of_thumb, _TRIALS[0][0] * unit)
    reflect = (True, dimension == 2)
    filled, own = _filled(middle, coarse)
    mass, squares = middle.mass.ravel()[filled], middle.squares.ravel()[filled]
    flat = mass.sum() / middle.mass.size
    coarse_mass = np.bincount(own, mass)
    shapes, scores = [], []
    for count, width in _TRIALS:
        shapes.append(width**2 * windows.covariance(count * unit))
        kernels = _rescaled(shapes[-1][:, own], larger // max(larger // 2, 1), dimension)
        smoothed, central = smooth(middle.mass, filled, kernels, reflect)
        left_out = np.maximum(smoothed.ravel()[filled] - central * squares / mass, 0.0)
        score = np.log((1.0 - _BACKGROUND) * left_out + _BACKGROUND * flat)
        scores.append(np.bincount(own, mass * score) / coarse_mass)
    gain, error = windows.average(np.array(scores) - scores[0], _JUDGES * unit)
    best, every = np.argmax(gain, axis=0), np.arange(gain.shape[1])
    smoothest = np.argmax(gain >= gain[best, every] - _CONFIDENCE[dimension] * error[best, every], axis=0)
    # Neighbours share their choice: where wide kernels met narrow ones, the density would seem to have an edge.
    choice = windows.average(smoothest[np.newaxis].astype(float), _SHARED * unit)[0][0]
    lower = np.minimum(choice.astype(np.intp), len(_TRIALS) - 2)
    share, tried = choice - lower, np.array(shapes)
    covariance = (1.0 - share) * tried[lower, :, every].T + share * tried[lower + 1, :, every].T
    filled, own = _filled(fine, coarse)
    covariance = _rescaled(covariance[:, own], larger, dimension)
    smoothed, _ = smooth(fine.mass, filled, covariance, reflect)
    return smoothed, np.sqrt(np.median(covariance[[0, 2]], axis=1))


def _cells(x: FloatArray, y: FloatArray, weights: FloatArray, shape: tuple[int, int], factor: int) -> Cells:
    """Sort points into cells that are `factor` times larger; one column stays one column."""
    across, along = (1.0 / factor if size > 1 else 1.0 for size in shape)
    return Cells.of(x * across, y * along, weights, (max(shape[0] // factor, 1), max(shape[1] // factor, 1)))


def _filled(fine: Cells, coarse: Cells) -> tuple[NDArray[np.intp], NDArray[np.intp]]:
    """Flat indices of the filled cells, and the place of the larger cell around each among the filled larger cells."""
    filled = np.flatnonzero(fine.mass)
    column, row = np.unravel_index(filled, fine.shape)
    across, along = (size // larger for size, larger in zip(fine.shape, coarse.shape, strict=True))
    around = (column // across) * coarse.shape[1] + row // along
    return filled, np.searchsorted(np.flatnonzero(coarse.mass), around)


def _rescaled(covariance: FloatArray, factor: int, dimension: int) -> FloatArray:
    """Covariance in cells that are `factor` times smaller; no width across a single column."""
    kept = np.array([[1.0], [1.0], [1.0]] if dimension == 2 else [[1.0], [0.0], [0.0]])
    return np.asarray(float(factor) ** 2 * kept * covariance)


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
    point.
    """
    order = np.lexsort(values.T)
    ordered = values[order]
    first = np.flatnonzero(np.r_[True, np.any(np.diff(ordered, axis=0) != 0.0, axis=1)])
    return ordered[first], np.add.reduceat(weights[order], first) / weights.sum()
