"""Gaussian kernels that follow the points: wide where these are sparse, and drawn out along bands.

The shape of a kernel is the covariance of the points around it, seen through a Gaussian window that is widened until
it holds a given number of them: the nearest-neighbour form of a sample-point kernel (Breiman, Meisel and Purcell,
Technometrics 19 (1977) 135; its width goes with density^(-1/2) in two dimensions, the law of Abramson, Ann. Statist.
10 (1982) 1217). Everything works on binned points; one dimension is a grid with a single column.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import Final

import numpy as np
from numba import njit
from numpy.typing import NDArray
from scipy.ndimage import zoom

from scanfit.priors import FloatArray

_WIDEST: Final = 1.5
"""Widest window in units of the rule of thumb for a normal density: no window reaches from one mode to the next."""
_STEP: Final = 2.0**0.5
_NARROWEST_WINDOW: Final = 1.0
"""Narrowest window in cells of the grid that the windows work on."""
_NARROWEST_KERNEL: Final = 0.6
"""Added in quadrature to every kernel, in cells: a narrower one would show the grid."""
_CUT: Final = 4.0
"""Standard deviations at which a kernel is cut off."""
_WIDE: Final = 4.0
"""Standard deviation in cells above which a kernel may as well be drawn on cells of twice the size."""
_UNCERTAIN: Final = 4.0
"""Number of points up to which their covariance is distrusted, and pulled towards that of the window."""


@dataclass(frozen=True)
class Cells:
    """Points in the cells of a grid, with their moments.

    Parameters
    ----------
    shape : (int, int)
        Of the grid.
    moments : ndarray, shape (6, *shape)
        Sums of w, w x, w y, w x^2, w x y and w y^2, positions in cells from the grid's corner.
    squares : ndarray, shape `shape`
        Sums of w^2.
    """

    shape: tuple[int, int]
    moments: FloatArray
    squares: FloatArray

    @classmethod
    def of(cls, x: FloatArray, y: FloatArray, weights: FloatArray, shape: tuple[int, int]) -> Cells:
        """Sort points into cells; positions in cells, already inside the grid."""
        column, row = (
            np.clip(place.astype(np.intp), 0, size - 1) for place, size in zip((x, y), shape, strict=True)
        )
        index, total = column * shape[1] + row, shape[0] * shape[1]
        powers = (weights, weights * x, weights * y, weights * x * x, weights * x * y, weights * y * y)
        moments = np.array([np.bincount(index, power, minlength=total) for power in powers])
        squares = np.bincount(index, np.square(weights), minlength=total)
        return cls(shape, moments.reshape(6, *shape), squares.reshape(shape))

    @property
    def mass(self) -> FloatArray:
        """Weight in each cell."""
        return np.asarray(self.moments[0])


class Windows:
    """Count and covariance of the points around each cell, through Gaussian windows of rising width.

    Parameters
    ----------
    cells : Cells
        The points.
    rule_of_thumb : pair of float
        Kernel width for a normal density along each axis, in cells.
    """

    def __init__(self, cells: Cells, rule_of_thumb: Sequence[float]) -> None:
        widest = _WIDEST * np.maximum(np.asarray(rule_of_thumb, dtype=float), _NARROWEST_WINDOW)
        steps = max(1, int(np.ceil(np.log(widest.max() / _NARROWEST_WINDOW) / np.log(_STEP))))
        widths = [np.maximum(widest * _STEP**-step, _NARROWEST_WINDOW) for step in range(steps, -1, -1)]
        self._cells, self._widths = cells, widths
        self._places = np.flatnonzero(cells.mass)
        counts, shapes = zip(*(self._seen(cells, width) for width in widths), strict=True)
        self._counts, self._shapes = np.array(counts), np.array(shapes)

    def _seen(self, cells: Cells, width: FloatArray) -> tuple[FloatArray, FloatArray]:
        """Effective number of points, shape (n,), and their covariance xx, xy, yy, shape (3, n), at filled cells."""
        across, along = _window(cells.shape, width)
        sums = (across @ cells.moments @ along).reshape(6, -1)[:, self._places]
        squares = (np.square(across) @ cells.squares @ np.square(along)).ravel()[self._places]
        x, y, xx, xy, yy = sums[1:] / sums[0]
        count = np.square(sums[0]) / squares
        shape = np.array([np.maximum(xx - x * x, 0.0), xy - x * y, np.maximum(yy - y * y, 0.0)])
        # A window that sticks out of the grid sees less, and that narrower, than it would of the same density inside.
        column, row = np.unravel_index(self._places, cells.shape)
        (share_x, narrowing_x), (share_y, narrowing_y) = _seen_of_flat(across), _seen_of_flat(along)
        count /= share_x[column] * share_y[row]
        shape /= [narrowing_x[column], np.sqrt(narrowing_x[column] * narrowing_y[row]), narrowing_y[row]]
        blank = np.array([width[0] ** 2, 0.0, width[1] ** 2])[:, np.newaxis]
        distrust = np.square(_UNCERTAIN / (_UNCERTAIN + count))
        return count, (1.0 - distrust) * shape + distrust * blank

    def covariance(self, count: float) -> FloatArray:
        """Covariance xx, xy, yy around each filled cell, in the window that holds `count` points; shape (3, n).

        Between two windows the covariance is interpolated; the widest window is taken where none holds enough.
        """
        upper = self._first_to_hold(count)
        lower, column = np.maximum(upper - 1, 0), np.arange(len(upper))
        few, many = self._counts[lower, column], self._counts[upper, column]
        share = np.clip(np.log(count / few) / np.log(np.maximum(many / few, 1.0 + 1e-9)), 0.0, 1.0)
        return np.asarray(
            ((1.0 - share)[:, np.newaxis] * self._shapes[lower, :, column]
             + share[:, np.newaxis] * self._shapes[upper, :, column]).T
        )  # fmt: skip

    def average(self, values: FloatArray, count: float) -> tuple[FloatArray, FloatArray]:
        """Weighted mean of values around each filled cell, in the window that holds `count` points, and its error.

        Parameters
        ----------
        values : ndarray, shape (m, n)
            Several values at each filled cell.
        count : float
            Points in the window.
        """
        level = self._first_to_hold(count)
        mass, squares = self._cells.mass.ravel()[self._places], self._cells.squares.ravel()[self._places]
        means, errors = np.empty(values.shape), np.empty(values.shape)
        for chosen in np.unique(level):
            window = _window(self._cells.shape, self._widths[chosen])
            here = level == chosen
            total = self._sum(mass, window)[here]
            mean = self._sum(mass * values, window)[:, here] / total
            narrow = (np.square(window[0]), np.square(window[1]))
            square, linear = self._sum(squares * np.square(values), narrow), self._sum(squares * values, narrow)
            rest = square[:, here] + mean * (mean * self._sum(squares, narrow)[here] - 2.0 * linear[:, here])
            scatter = np.maximum(rest, 0.0) / np.square(total)
            means[:, here], errors[:, here] = mean, np.sqrt(scatter + 1.0 / self._counts[chosen, here])
        return means, errors

    def _sum(self, values: FloatArray, window: tuple[FloatArray, FloatArray]) -> FloatArray:
        """Sum values of filled cells, shape (..., n), over the windows around these cells."""
        grid = np.zeros((*values.shape[:-1], self._cells.mass.size))
        grid[..., self._places] = values
        summed = window[0] @ grid.reshape(*values.shape[:-1], *self._cells.shape) @ window[1]
        return np.asarray(summed.reshape(grid.shape)[..., self._places])

    def _first_to_hold(self, count: float) -> NDArray[np.intp]:
        enough = self._counts >= count
        return np.where(enough.any(axis=0), np.argmax(enough, axis=0), len(enough) - 1)


def _window(shape: tuple[int, int], width: FloatArray) -> tuple[FloatArray, FloatArray]:
    """Gaussian window around every place along each of two axes, as matrices."""
    across, along = (
        np.exp(-0.5 * np.square(np.subtract.outer(np.arange(size), np.arange(size)) / w))
        for size, w in zip(shape, width, strict=True)
    )
    return across, along


def _seen_of_flat(window: FloatArray) -> tuple[FloatArray, FloatArray]:
    """What a window at each cell sees of a flat density: its share of the largest mass, and of the largest variance."""
    place = np.arange(len(window)) + 0.5
    mass = window.sum(axis=1)
    mean = window @ place / mass
    variance = window @ np.square(place) / mass - np.square(mean) + 1.0 / 12.0
    return mass / mass.max(), variance / variance.max()


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
    xx, xy, yy = covariance[0] + _NARROWEST_KERNEL**2, covariance[1].copy(), covariance[2] + _NARROWEST_KERNEL**2
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
    coarse = np.zeros(shape)
    if wide.any() and shape[0] > 2 * _WIDE:
        half = (shape[0] // halved[0], shape[1] // halved[1])
        scale = np.array([halved[0], halved[1], 1.0, halved[0] ** 2, halved[0] * halved[1], halved[1] ** 2])
        merged = _merge(sources[:, wide] / scale[:, np.newaxis], half)
        coarse = zoom(_sum_of_kernels(merged, half, reflect), halved, order=3, mode="grid-mirror", grid_mode=True)
        coarse /= halved[0] * halved[1]
        sources = sources[:, ~wide]
    for axis in range(2):
        if reflect[axis]:
            sources = np.hstack([sources, *_images(sources, axis, shape[axis])])
    _add_kernels(coarse, *np.ascontiguousarray(sources), _CUT)
    return np.maximum(coarse, 0.0)


def _merge(sources: FloatArray, shape: tuple[int, int]) -> FloatArray:
    """One kernel for all that share a cell, with their mass and their mean place and covariance."""
    index = np.ravel_multi_index([sources[k].astype(np.intp) for k in range(2)], shape, mode="clip")
    mass = np.bincount(index, sources[2])
    filled = np.flatnonzero(mass)
    means = [np.bincount(index, sources[2] * row)[filled] / mass[filled] for row in sources]
    means[2] = mass[filled]
    return np.array(means)


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
