"""Credible intervals and regions of highest posterior density.

A region holds every place where the density exceeds a height, with the height chosen so that the region holds the
asked share of the posterior *weight*, counted in unsmoothed cells. The smoothed density therefore decides the shape
only, and its broadening does not inflate the size (the density-quantile method, Hyndman, Amer. Statist. 50 (1996)
120). The density is the one on the axis' drawn scale: highest density is not invariant under a change of variable.
The Monte-Carlo error of an interval's end, measured on normal samples of 300 to 20,000 effective points, is about
2/sqrt(effective size) standard deviations of the posterior.
"""

from __future__ import annotations

import math
from collections.abc import Mapping
from dataclasses import dataclass
from typing import Final, TypeAlias

import numpy as np
from numpy.typing import NDArray

from scanfit.priors import FloatArray
from scanfit.results import Axis
from scanfit.statistics.density import Density, estimate, sample_range
from scanfit.statistics.levels import LEVELS
from scanfit.statistics.scale import bounds, from_scale, to_scale

Interval: TypeAlias = tuple[float, float]

_ISLAND: Final = 0.004
"""An island, or a gap, of the density that holds less weight than this is noise: it is dropped, or bridged."""
_CERTAIN: Final = 2.0
"""A gap counts where it holds fewer points than a density on the interval's boundary would put there, by this many
standard deviations of their number; a density that only wavers about that height is not cut into pieces."""


@dataclass(frozen=True)
class CredibleRegion:
    """Posterior density on a plane and the heights that bound its credible regions.

    Parameters
    ----------
    density : Density
        On the scale of the axes.
    heights : mapping of str to float
        For each label of `LEVELS` the density on the region's boundary.
    """

    density: Density
    heights: Mapping[str, float]


def credible_height(density: Density, level: float) -> float:
    """Density on the boundary of the region of highest density that holds `level` of the weight."""
    height, mass = density.height.ravel(), density.mass.ravel()
    order = np.argsort(height, kind="stable")[::-1]
    held = np.cumsum(mass[order])
    return float(np.interp(level * held[-1], held, height[order]))


def marginal_density(values: FloatArray, weights: FloatArray, axis: Axis) -> Density | None:
    """Density of one parameter or quantity on its axis' scale; None where fewer than three distinct values have
    weight.

    Parameters
    ----------
    values, weights : ndarray, shape (n,)
        Values in declared units; those that the axis cannot show are left out.
    """
    scaled = to_scale(values, axis)
    usable = np.isfinite(scaled) & (weights > 0.0)
    scaled, kept = scaled[usable], weights[usable]
    if len(scaled) < 3:
        return None
    low, high = sample_range(scaled, kept, *bounds(axis))
    if not high - low > 1e-12 * max(abs(low), abs(high), 1e-300):
        return None
    return estimate(scaled[:, np.newaxis], kept, [(low, high)])


def credible_intervals(density: Density, level: float, axis: Axis) -> list[Interval]:
    """Intervals of highest density in declared units, in ascending order.

    Parameters
    ----------
    density : Density
        From `marginal_density`.
    level : float
        Posterior probability that they hold together.
    """
    return [
        (float(from_scale(np.array(low), axis)), float(from_scale(np.array(high), axis)))
        for low, high in _scaled_intervals(density, level)
    ]


def inside_intervals(density: Density, level: float) -> NDArray[np.bool_]:
    """Cells of a one-dimensional density whose centres lie in its credible intervals, for shading."""
    grid = density.centres[0]
    parts = [(grid >= low) & (grid <= high) for low, high in _scaled_intervals(density, level)]
    return np.asarray(np.logical_or.reduce(parts))


def _scaled_intervals(density: Density, level: float) -> list[Interval]:
    """Credible intervals on the scale of the axis."""
    height = credible_height(density, level)
    edges, grid = density.edges[0], density.centres[0]
    held = np.r_[0.0, np.cumsum(density.mass)]
    found: list[Interval] = []
    for start, stop in intervals_below(-density.height, -height):
        low = edges[0] if start <= 0.0 else float(np.interp(start, np.arange(len(grid)), grid))
        high = edges[-1] if stop >= len(grid) - 1 else float(np.interp(stop, np.arange(len(grid)), grid))
        if found and not _is_gap(found[-1][1], low, height, density):
            low = found.pop()[0]
        found.append((low, high))
    masses = [float(np.diff(np.interp(ends, edges, held))[0]) for ends in found]
    return [ends for ends, mass in zip(found, masses, strict=True) if mass >= min(_ISLAND, max(masses))]


def _is_gap(low: float, high: float, height: float, density: Density) -> bool:
    """Whether a density is known to fall below a height between two places."""
    held = np.r_[0.0, np.cumsum(density.mass)]
    mass = float(np.diff(np.interp((low, high), density.edges[0], held))[0])
    expected = density.effective_size * height * (high - low)
    missing = expected - density.effective_size * mass
    return mass >= _ISLAND and missing > _CERTAIN * math.sqrt(expected)


def intervals_below(curve: FloatArray, threshold: float) -> list[Interval]:
    """Stretches of a sampled curve that lie at or below a threshold, as fractional indices, interpolated linearly."""
    below = np.r_[False, curve <= threshold, False]
    starts, stops = np.flatnonzero(~below[:-1] & below[1:]), np.flatnonzero(below[:-1] & ~below[1:]) - 1
    found = []
    for first, last in zip(starts.tolist(), stops.tolist(), strict=True):
        start, stop = float(first), float(last)
        if first > 0:
            start -= _crossing(curve[first], curve[first - 1], threshold)
        if last < len(curve) - 1:
            stop += _crossing(curve[last], curve[last + 1], threshold)
        found.append((start, stop))
    return found


def _crossing(inside: float, outside: float, threshold: float) -> float:
    """Share of the step from `inside` to `outside` at which the threshold is crossed."""
    return float((threshold - inside) / (outside - inside)) if math.isfinite(outside) else 0.0


def credible_region(
    x: FloatArray, y: FloatArray, weights: FloatArray, axes: tuple[Axis, Axis], cells: int | None = None
) -> CredibleRegion | None:
    """Credible regions of highest density on a plane; None where the posterior has no extent there.

    Parameters
    ----------
    x, y, weights : ndarray, shape (n,)
        Posterior points in declared units with their weights; points that the axes cannot show are left out.
    axes : pair of Axis
        Horizontal and vertical.
    cells : int, optional
        Cells along each axis, `density.CELLS` by default.
    """
    scaled = np.column_stack([to_scale(x, axes[0]), to_scale(y, axes[1])])
    usable = np.isfinite(scaled).all(axis=1) & (weights > 0.0)
    scaled, kept = scaled[usable], weights[usable]
    if len(scaled) < 3:
        return None
    ranges = [sample_range(scaled[:, k], kept, *bounds(axis)) for k, axis in enumerate(axes)]
    if any(not high - low > 1e-12 * max(abs(low), abs(high), 1e-300) for low, high in ranges):
        return None
    density = estimate(scaled, kept, ranges, cells)
    return CredibleRegion(density, {label: credible_height(density, level) for label, level in LEVELS.items()})
