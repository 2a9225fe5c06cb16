"""Weighted density estimates in one and two dimensions.

A histogram on a fine grid is smoothed with a Gaussian kernel that is reflected at the grid's ends, so that a density
cut off by the prior is not depleted there. The width of the kernel is found by least-squares cross-validation
(Rudemo, Scand. J. Statist. 9 (1982) 65; Bowman, Biometrika 71 (1984) 353): a rule of thumb would smear the thin bands
and separate modes of which dark-matter posteriors are made.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import Final

import numpy as np
from numpy.typing import NDArray
from scipy.ndimage import gaussian_filter

from scanfit.priors import FloatArray

CELLS: Final = {1: 1024, 2: 256}
"""Cells along each axis, by dimension."""

_TRIAL_WIDTHS: Final = np.geomspace(0.05, 1.15, 13)
"""Kernel widths tried, in units of the rule of thumb for a normal density."""
_NARROWEST: Final = 0.6
"""Narrowest kernel in cells; a narrower one would show the grid."""
_SLACK: Final = {1: 0.003, 2: 0.04}
"""The smoothest kernel is taken whose score lies within this share of the best, by dimension: the minimum is noisy.
Tried on normal and bimodal samples (1-d: the largest without bias beyond the scatter) and on thin bands (2-d)."""
_ATOM: Final = 0.05
"""Share of the weight on one value from which on it is not smoothed."""
_STRAY_WEIGHT: Final = 1e-5
"""Share of the weight at each end that does not stretch the grid."""


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
        Standard deviation of the kernel along each axis.
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
    """Range that the points fill, less stray points without weight; ends at a bound that the points nearly touch.

    Reflecting the kernel where the points end, and not only at a bound of the prior, treats quantities rightly that
    have an edge of their own (a fraction that cannot exceed one); where a density dies out smoothly it changes
    nothing.
    """
    first, last = weighted_quantile(values, weights, np.array([_STRAY_WEIGHT, 1.0 - _STRAY_WEIGHT]))
    near = 0.01 * (last - first)
    return (low if first - low < near else float(first)), (high if high - last < near else float(last))


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
        For a smooth density the kernel adds its variance to that of the density (a few per cent in width at a few
        thousand effective points); `credible` therefore counts weight in the unsmoothed cells.
    """
    dimension = values.shape[1]
    cells = cells or CELLS[dimension]
    edges = tuple(np.linspace(low, high, cells + 1) for low, high in ranges)
    places = [(values[:, k] - low) * (cells / (high - low)) for k, (low, high) in enumerate(ranges)]
    inside = (weights > 0.0) & np.logical_and.reduce([(place >= -1e-9) & (place <= cells + 1e-9) for place in places])
    kept = weights[inside] / weights[inside].sum()
    index = np.ravel_multi_index(
        [np.clip(place[inside].astype(np.intp), 0, cells - 1) for place in places], (cells,) * dimension
    )
    mass = np.bincount(index, kept, minlength=cells**dimension).reshape((cells,) * dimension)
    size = effective_size(_without_repeats(values[inside], kept))
    rule_of_thumb = [
        _spread(values[inside, k], kept) * size ** (-1.0 / (dimension + 4)) / (edge[1] - edge[0])
        for k, edge in enumerate(edges)
    ]
    cell_size = float(np.prod([edge[1] - edge[0] for edge in edges]))
    atoms = np.bincount(index, np.where(_in_atom(values[inside], kept), kept, 0.0), minlength=mass.size)
    atoms = atoms.reshape(mass.shape)
    width, smooth = _cross_validated(mass - atoms, rule_of_thumb, size)
    smooth += atoms
    bandwidth = tuple(float(w * (edge[1] - edge[0])) for w, edge in zip(width, edges, strict=True))
    return Density(edges, mass, smooth / cell_size, bandwidth, size)


def _cross_validated(mass: FloatArray, rule_of_thumb: Sequence[float], size: float) -> tuple[FloatArray, FloatArray]:
    """Kernel width in cells along each axis, and the cells smoothed with it."""
    if mass.sum() > 0.0:
        mass, total = mass / mass.sum(), float(mass.sum())
    else:
        total = 0.0
    trials: list[tuple[float, FloatArray]] = []
    for factor in _TRIAL_WIDTHS:
        width = np.maximum(factor * np.asarray(rule_of_thumb), _NARROWEST)
        smooth = gaussian_filter(mass, width, mode="reflect")
        at_zero = float(np.prod([_central_weight(w) for w in width]))
        left_out = (float((mass * smooth).sum()) - at_zero / size) / (1.0 - 1.0 / size) if size > 1.0 else 0.0
        trials.append((float(np.square(smooth).sum()) - 2.0 * left_out, width))
    best = min(score for score, _ in trials)
    chosen = [width for score, width in trials if score <= best + _SLACK[mass.ndim] * abs(best)][-1]
    return chosen, total * gaussian_filter(mass, chosen, mode="reflect")


def _central_weight(width: float) -> float:
    offsets = np.arange(-int(4.0 * width + 0.5), int(4.0 * width + 0.5) + 1)
    return float(1.0 / np.exp(-0.5 * np.square(offsets / width)).sum())


def _spread(values: FloatArray, weights: FloatArray) -> float:
    """Standard deviation, or the one that the quartiles suggest where that is smaller."""
    lower, upper = weighted_quantile(values, weights, np.array([0.25, 0.75]))
    mean = np.average(values, weights=weights)
    deviation = float(np.sqrt(np.average(np.square(values - mean), weights=weights)))
    quartiles = float(upper - lower) / 1.349
    return min(deviation, quartiles) if quartiles > 0.0 else deviation


def _in_atom(values: FloatArray, weights: FloatArray) -> NDArray[np.bool_]:
    """Points on a single value that holds a large share of the weight; none in more than one dimension."""
    if values.shape[1] > 1:
        return np.zeros(len(values), dtype=bool)
    _, place = np.unique(values[:, 0], return_inverse=True)
    return np.bincount(place, weights)[place] > _ATOM


def _without_repeats(values: FloatArray, weights: FloatArray) -> FloatArray:
    """Weights with repeated points taken together: a chain that stays put has not found a second point."""
    order = np.lexsort(values.T)
    new = np.r_[True, np.any(np.diff(values[order], axis=0) != 0.0, axis=1)]
    return np.add.reduceat(weights[order], np.flatnonzero(new))
