"""Sums of Gaussian kernels, each with its own covariance, on a grid.

One dimension is a grid with a single column.
"""

from __future__ import annotations

from typing import Final

import numpy as np
from numba import njit
from numpy.typing import NDArray
from scipy.ndimage import zoom

from scanfit.priors import FloatArray

_NARROWEST: Final = 0.6
"""Added in quadrature to the width of every kernel, in cells: a narrower one would show the grid."""
_WIDE: Final = 4.0
"""Standard deviation in cells above which a kernel may as well be drawn on cells of twice the size."""
_CUT: Final = 4.0
"""Standard deviations at which a kernel is cut off."""


def smooth(
    mass: FloatArray, places: NDArray[np.intp], covariance: FloatArray, reflect: tuple[bool, bool]
) -> tuple[FloatArray, FloatArray]:
    """Replace the mass of each filled cell by a kernel.

    Parameters
    ----------
    mass : ndarray, shape (nx, ny)
        Weight in each cell.
    places : ndarray of int, shape (n,)
        Flat indices of the filled cells.
    covariance : ndarray, shape (3, n)
        Covariance xx, xy, yy of their kernels, in cells.
    reflect : pair of bool
        Axes at whose ends kernels are reflected.

    Returns
    -------
    smoothed : ndarray, shape (nx, ny)
        With the sum of `mass`.
    central : ndarray, shape (n,)
        Share of its own mass that each cell keeps.

    Notes
    -----
    A kernel is reflected along its own axis, not square to the bound: the image of a band that ends at the bound is
    the band's continuation, and a flat density stays flat. Where two bounds meet, the two images would not fit;
    kernels there are set upright, with the width that they have along lines parallel to the axes.
    """
    x, y = (index + 0.5 for index in np.unravel_index(places, mass.shape))
    xx, xy, yy = covariance[0] + _NARROWEST**2, covariance[1].copy(), covariance[2] + _NARROWEST**2
    near = [
        active & (np.minimum(place, size - place) < _CUT * np.sqrt(variance))
        for active, place, size, variance in zip(reflect, (x, y), mass.shape, (xx, yy), strict=True)
    ]
    corner = near[0] & near[1]
    xx, yy = (np.where(corner, variance - xy**2 / other, variance) for variance, other in ((xx, yy), (yy, xx)))
    xy = np.where(corner, 0.0, xy)
    smoothed = _sum_of_kernels(np.array([x, y, mass.ravel()[places], xx, xy, yy]), mass.shape, reflect)
    return smoothed * (mass.sum() / smoothed.sum()), _central(xx, xy, yy, mass.shape)


def _sum_of_kernels(sources: FloatArray, shape: tuple[int, int], reflect: tuple[bool, bool]) -> FloatArray:
    """Sum kernels given by rows x, y, mass, xx, xy, yy, in cells; wide ones are merged and summed on coarser cells."""
    halved = [2 if size > 1 else 1 for size in shape]
    across = sources[3] - np.square(sources[4]) / sources[5]
    along = sources[5] - np.square(sources[4]) / sources[3] if shape[1] > 1 else across
    wide = np.minimum(across, along) > _WIDE**2
    summed = np.zeros(shape)
    if wide.any() and shape[0] > 2 * _WIDE:
        half = (shape[0] // halved[0], shape[1] // halved[1])
        scale = np.array([halved[0], halved[1], 1.0, halved[0] ** 2, halved[0] * halved[1], halved[1] ** 2])
        merged = _merge(sources[:, wide] / scale[:, np.newaxis], half)
        drawn = _sum_of_kernels(merged, half, reflect) / (halved[0] * halved[1])
        summed = np.asarray(zoom(drawn, halved, order=3, mode="grid-mirror", grid_mode=True))
        sources = sources[:, ~wide]
    for axis in range(2):
        if reflect[axis]:
            sources = np.hstack([sources, *_images(sources, axis, shape[axis])])
    x, y, mass, xx, xy, yy = np.ascontiguousarray(sources)
    _add_kernels(summed, x, y, mass, xx, xy, yy, _CUT)
    return np.maximum(summed, 0.0)


def _merge(sources: FloatArray, shape: tuple[int, int]) -> FloatArray:
    """One kernel for all that share a cell, with their mass and their mean place and covariance."""
    index = np.ravel_multi_index([sources[k].astype(np.intp) for k in range(2)], shape, mode="clip")
    mass = np.bincount(index, sources[2])
    filled = np.flatnonzero(mass)
    means = [np.bincount(index, sources[2] * row)[filled] / mass[filled] for row in sources]
    return np.array([*means[:2], mass[filled], *means[3:]])


def _images(sources: FloatArray, axis: int, size: int) -> list[FloatArray]:
    """Images of the kernels that reach beyond either end of an axis."""
    images = []
    for end in (0.0, float(size)):
        distance = end - sources[axis]
        reaching = np.abs(distance) < _CUT * np.sqrt(sources[3 + 2 * axis])
        image = sources[:, reaching].copy()
        slope = image[4] / image[3 + 2 * axis]
        image[axis] += 2.0 * distance[reaching]
        image[1 - axis] += 2.0 * distance[reaching] * slope
        images.append(image)
    return images


def _central(xx: FloatArray, xy: FloatArray, yy: FloatArray, shape: tuple[int, ...]) -> FloatArray:
    if shape[1] == 1:
        return np.asarray(1.0 / np.sqrt(2.0 * np.pi * xx))
    return np.asarray(1.0 / (2.0 * np.pi * np.sqrt(xx * yy - xy * xy)))


@njit(cache=True, fastmath=False, error_model="numpy")
def _add_kernels(
    grid: FloatArray, x: FloatArray, y: FloatArray, mass: FloatArray, xx: FloatArray, xy: FloatArray, yy: FloatArray,
    cut: float,
) -> None:  # fmt: skip
    """Add kernels with given centres, masses and covariances to a grid, all in cells."""
    for k in range(len(x)):
        slope = xy[k] / xx[k]
        spread = np.sqrt(yy[k] - xy[k] * slope)
        reach = cut * np.sqrt(xx[k])
        scale = mass[k] / np.sqrt(xx[k]) / spread
        decay = np.exp(-1.0 / spread**2)
        for i in range(max(0, int(np.ceil(x[k] - reach - 0.5))), min(grid.shape[0], int(x[k] + reach + 0.5))):
            offset = i + 0.5 - x[k]
            middle = y[k] + slope * offset
            first = max(0, int(np.ceil(middle - cut * spread - 0.5)))
            last = min(grid.shape[1], int(np.floor(middle + cut * spread + 0.5)))
            # Values of a Gaussian at equal steps follow from their ratios, which fall by a constant factor.
            start = first + 0.5 - middle
            value = scale * np.exp(-0.5 * (offset**2 / xx[k] + (start / spread) ** 2))
            ratio = np.exp(-(start + 0.5) / spread**2)
            for j in range(first, last):
                grid[i, j] += value
                value *= ratio
                ratio *= decay
