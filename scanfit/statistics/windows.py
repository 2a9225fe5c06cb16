"""Points in the cells of a grid, and the shape of the points around each cell.

The shape is the covariance of the points seen through a Gaussian window that is widened until it holds a given number
of them (nearest-neighbour bandwidths: Breiman, Meisel and Purcell, Technometrics 19 (1977) 135). One dimension is a
grid with a single column.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import Final

import numpy as np
from numba import njit
from numpy.typing import NDArray

from scanfit.priors import FloatArray

_NARROWEST: Final = 1.0
"""First window, in cells."""
_WIDEST: Final = 1.5
"""Width at which a window stops to grow, in units of the rule of thumb for a normal density: no window reaches from
one mode to the next."""
_GROWTH: Final = 2.0
"""Growth of a window from step to step: of its area, or in one dimension of its variance."""
_MOST_STEPS: Final = 16
_SEEN: Final = 3.0
"""Standard deviations at which a window ends."""
_UNCERTAIN: Final = 8.0
"""Number of points at which their covariance counts as much as that of the window they were seen through."""
_CELL: Final = 0.36
"""Variance in cells added to the shape of a window, which must not fall between the cells' centres."""


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
        column, row = (np.clip(place.astype(np.intp), 0, size - 1) for place, size in zip((x, y), shape, strict=True))
        index, total = column * shape[1] + row, shape[0] * shape[1]
        powers = (weights, weights * x, weights * y, weights * x * x, weights * x * y, weights * y * y)
        moments = np.array([np.bincount(index, power, minlength=total) for power in powers])
        squares: FloatArray = np.bincount(index, np.square(weights), minlength=total).astype(float)
        return cls(shape, moments.reshape(6, *shape), squares.reshape(shape))

    @property
    def mass(self) -> FloatArray:
        """Weight in each cell."""
        return np.asarray(self.moments[0])


class Windows:
    """Count and covariance of the points around each filled cell, through Gaussian windows that grow along them.

    Each window is twice as large as the one before and has the shape of the points that were seen in that: on a band
    it grows along the band and does not reach across to what lies beside it.

    Parameters
    ----------
    cells : Cells
        The points.
    rule_of_thumb : pair of float
        Kernel width for a normal density along each axis, in cells.
    most : float
        Number of points at which a window stops to grow.
    """

    def __init__(self, cells: Cells, rule_of_thumb: Sequence[float], most: float) -> None:
        self._cells, self._places = cells, np.flatnonzero(cells.mass)
        limit = np.square(_WIDEST * np.maximum(np.asarray(rule_of_thumb, dtype=float), _NARROWEST))
        number = len(self._places)
        window = np.repeat(np.array([[1.0], [0.0], [1.0]]) * _NARROWEST**2, number, axis=1)
        growing = np.arange(number)
        windows, counts, shapes = [], [], []
        count, shape = np.zeros(number), window.copy()
        for _ in range(_MOST_STEPS):
            count, shape = count.copy(), shape.copy()
            count[growing], shape[:, growing] = self._seen(growing, window[:, growing])
            windows.append(window)
            counts.append(count)
            shapes.append(shape)
            small = np.maximum(window[0] / limit[0], window[2] / limit[1]) < 1.0
            growing = np.flatnonzero(small & (count < most))
            if len(growing) == 0:
                break
            window = window.copy()
            window[:, growing] = self._grown(window[:, growing], shape[:, growing])
        self._windows, self._counts, self._shapes = np.array(windows), np.array(counts), np.array(shapes)

    def _grown(self, window: FloatArray, shape: FloatArray) -> FloatArray:
        """Windows of twice the area with the shape of the points; in one dimension, of twice the variance."""
        if self._cells.shape[1] == 1:
            return np.asarray(window * np.array([[_GROWTH], [1.0], [1.0]]))
        seen = shape + np.array([[_CELL], [0.0], [_CELL]])
        size, seen_size = (kind[0] * kind[2] - np.square(kind[1]) for kind in (window, seen))
        return np.asarray(_GROWTH * np.sqrt(size / seen_size) * seen)

    def _seen(self, which: NDArray[np.intp], window: FloatArray) -> tuple[FloatArray, FloatArray]:
        """Effective number of points in windows and their covariance xx, xy, yy."""
        moments = np.moveaxis(self._cells.moments, 0, -1)
        sums, squares, flat = self._look(moments, self._cells.squares[..., np.newaxis], which, window)
        x, y, xx, xy, yy = sums[:, 1:].T / sums[:, 0]
        count = np.square(sums[:, 0]) / squares[:, 0]
        shape = np.array([np.maximum(xx - x * x, 0.0), xy - x * y, np.maximum(yy - y * y, 0.0)])
        # A window that sticks out of the grid sees less, and that narrower, than it would of the same density inside.
        share, narrow_x, narrow_y = flat.T
        shape /= np.array([narrow_x, np.sqrt(narrow_x * narrow_y), narrow_y])
        distrust = _UNCERTAIN / (_UNCERTAIN + count)
        return count / share, (1.0 - distrust) * shape + distrust * window

    def _look(
        self, linear: FloatArray, square: FloatArray, which: NDArray[np.intp], window: FloatArray
    ) -> tuple[FloatArray, FloatArray, FloatArray]:
        column, row = np.unravel_index(self._places[which], self._cells.shape)
        linear, square = np.ascontiguousarray(linear), np.ascontiguousarray(square)
        xx, xy, yy = np.ascontiguousarray(window)
        first, second, flat = _look_through_windows(linear, square, self._cells.mass, column, row, xx, xy, yy, _SEEN)
        return first, second, flat

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
        level, every = self._first_to_hold(count), np.arange(len(self._places))
        number = len(values)
        mass, squares = self._cells.mass.ravel()[self._places], self._cells.squares.ravel()[self._places]
        linear = self._spread_out(np.vstack([mass, mass * values]))
        square = self._spread_out(np.vstack([squares, squares * values, squares * np.square(values)]))
        sums, second, _ = self._look(linear, square, every, self._windows[level, :, every].T)
        mean = sums[:, 1:].T / sums[:, 0]
        rest = second[:, 1 + number :].T + mean * (mean * second[:, 0] - 2.0 * second[:, 1 : 1 + number].T)
        scatter = np.maximum(rest, 0.0) / np.square(sums[:, 0])
        return mean, np.sqrt(scatter + 1.0 / self._counts[level, every])

    def _spread_out(self, values: FloatArray) -> FloatArray:
        grid = np.zeros((self._cells.mass.size, len(values)))
        grid[self._places] = values.T
        return grid.reshape(*self._cells.shape, len(values))

    def _first_to_hold(self, count: float) -> NDArray[np.intp]:
        enough = self._counts >= count
        return np.where(enough.any(axis=0), np.argmax(enough, axis=0), len(enough) - 1)


@njit(cache=True, fastmath=False, error_model="numpy")
def _look_through_windows(
    linear: FloatArray, square: FloatArray, mass: FloatArray, column: NDArray[np.intp], row: NDArray[np.intp],
    xx: FloatArray, xy: FloatArray, yy: FloatArray, cut: float,
) -> tuple[FloatArray, FloatArray, FloatArray]:  # fmt: skip
    """Sum fields over Gaussian windows with given centres and covariances, all in cells.

    Returns the sums of `linear` times the window, of `square` times its square, and what the window sees of a flat
    density: the share of its mass inside the grid and of its variances along the axes.
    """
    first, second = np.zeros((len(column), linear.shape[2])), np.zeros((len(column), square.shape[2]))
    flat = np.ones((len(column), 3))
    for k in range(len(column)):
        slope = xy[k] / xx[k]
        spread = np.sqrt(yy[k] - xy[k] * slope)
        decay = np.exp(-1.0 / spread**2)
        reach = int(np.ceil(cut * np.sqrt(xx[k])))
        height = int(np.ceil(cut * np.sqrt(yy[k])))
        inside = column[k] >= reach and column[k] + reach < mass.shape[0]
        inside = inside and (mass.shape[1] == 1 or (row[k] >= height and row[k] + height < mass.shape[1]))
        total = x = y = x_square = y_square = 0.0
        for i in range(max(0, column[k] - reach), min(mass.shape[0], column[k] + reach + 1)):
            offset = i - column[k]
            middle = row[k] + slope * offset
            outer = np.exp(-0.5 * offset**2 / xx[k])
            low = max(0, int(np.ceil(middle - cut * spread)))
            # Values of a Gaussian at equal steps follow from their ratios, which fall by a constant factor.
            following = outer * np.exp(-0.5 * ((low - middle) / spread) ** 2)
            ratio = np.exp(-(low - middle + 0.5) / spread**2)
            for j in range(low, min(mass.shape[1], int(np.floor(middle + cut * spread)) + 1)):
                seen = following
                following *= ratio
                ratio *= decay
                if inside and mass[i, j] == 0.0:
                    continue
                if not inside:
                    total += seen
                    x += seen * offset
                    x_square += seen * offset**2
                    y += seen * (j - row[k])
                    y_square += seen * (j - row[k]) ** 2
                    if mass[i, j] == 0.0:
                        continue
                for field in range(linear.shape[2]):
                    first[k, field] += seen * linear[i, j, field]
                for field in range(square.shape[2]):
                    second[k, field] += seen * seen * square[i, j, field]
        if not inside:
            if mass.shape[1] > 1:
                flat[k, 0] = min(1.0, total / (2.0 * np.pi * np.sqrt(xx[k]) * spread))
                flat[k, 2] = min(1.0, max((y_square - y * y / total) / total + 1.0 / 12.0, 0.1 * yy[k]) / yy[k])
            else:
                flat[k, 0] = min(1.0, total / np.sqrt(2.0 * np.pi * xx[k]))
            flat[k, 1] = min(1.0, max((x_square - x * x / total) / total + 1.0 / 12.0, 0.1 * xx[k]) / xx[k])
    return first, second, flat
