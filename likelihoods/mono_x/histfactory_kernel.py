"""Compiled profile likelihood of a HistFactory model: expectations, exact derivatives, Newton's method in a box.

Model (HistFactory, CERN-OPEN-2012-016): the expectation of a bin is the sum over samples of (nominal + additive
variations) times all factors. Additive variations and factors with a high and a low variant are interpolated as usual:
polynomials of order six within one standard deviation that join smoothly to straight lines or exponentials outside.
"""

from __future__ import annotations

import math
from typing import Final, NamedTuple, TypeAlias

import numpy as np
from numba import njit
from numpy.typing import NDArray

from scanfit.priors import FloatArray

IntArray: TypeAlias = NDArray[np.int64]

_MOST_STEPS: Final = 500
_CONVERGED: Final = 1e-10
"""Expected gain in ln L below which the next step is the last."""
_SMALLEST_RATE: Final = 1e-3
"""Events below which a bin's expected curvature grows no further."""


class Layout(NamedTuple):
    """The model in flat arrays. A row is one sample in one channel.

    Parameters
    ----------
    nominal, row_first, row_at : ndarray
        Contents of all rows end to end; for each row its first bin among all bins, and where its contents begin (with
        one more entry for the end).
    shift_row, shift_parameter, shift_at, shift_up, shift_down : ndarray
        Additive variations: row, parameter, and where their differences to the nominal contents begin.
    scale_row, scale_parameter, scale_shape : ndarray
        Factors with two variants: ln of the low and of the high one, then the six coefficients in between.
    factor_row, factor_parameter, factor_stride : ndarray
        Plain factors: a parameter for the whole row (stride 0), or one for each bin (stride 1).
    """

    nominal: FloatArray
    row_first: IntArray
    row_at: IntArray
    shift_row: IntArray
    shift_parameter: IntArray
    shift_at: IntArray
    shift_up: FloatArray
    shift_down: FloatArray
    scale_row: IntArray
    scale_parameter: IntArray
    scale_shape: FloatArray
    factor_row: IntArray
    factor_parameter: IntArray
    factor_stride: IntArray


class Constraints(NamedTuple):
    """One term a parameter: its kind (0 none, 1 normal, 2 Poisson), centre, and sigma or number of auxiliary events."""

    kind: IntArray
    centre: FloatArray
    size: FloatArray


@njit(cache=True, error_model="numpy")
def expectations(model: Layout, theta: FloatArray, rate: FloatArray, slope: FloatArray) -> None:
    """Fill `rate`, shape (n_bins,), and its derivatives `slope`, shape (n_bins, n_parameters or more)."""
    rate[:] = 0.0
    slope[:] = 0.0
    for row in range(model.row_first.size):
        begin, first = model.row_at[row], model.row_first[row]
        count = model.row_at[row + 1] - begin
        content = model.nominal[begin : begin + count].copy()
        factor = np.ones(count)
        for k in range(model.shift_row.size):
            if model.shift_row[k] == row:
                alpha = theta[model.shift_parameter[k]]
                for i in range(count):
                    up, down = model.shift_up[model.shift_at[k] + i], model.shift_down[model.shift_at[k] + i]
                    content[i] += _shift(alpha, up, down)[0]
        for k in range(model.scale_row.size):
            if model.scale_row[k] == row:
                factor *= _scale(theta[model.scale_parameter[k]], model.scale_shape[k])[0]
        for k in range(model.factor_row.size):
            if model.factor_row[k] == row:
                for i in range(count):
                    factor[i] *= theta[model.factor_parameter[k] + model.factor_stride[k] * i]
        for i in range(count):
            rate[first + i] += content[i] * factor[i]
        for k in range(model.shift_row.size):
            if model.shift_row[k] == row:
                p = model.shift_parameter[k]
                for i in range(count):
                    up, down = model.shift_up[model.shift_at[k] + i], model.shift_down[model.shift_at[k] + i]
                    slope[first + i, p] += factor[i] * _shift(theta[p], up, down)[1]
        for k in range(model.scale_row.size):
            if model.scale_row[k] == row:
                p = model.scale_parameter[k]
                value, derivative = _scale(theta[p], model.scale_shape[k])
                for i in range(count):
                    slope[first + i, p] += content[i] * factor[i] * derivative / value
        for k in range(model.factor_row.size):
            if model.factor_row[k] == row:
                for i in range(count):
                    p = model.factor_parameter[k] + model.factor_stride[k] * i
                    if theta[p] != 0.0:
                        slope[first + i, p] += content[i] * factor[i] / theta[p]


@njit(cache=True, error_model="numpy")
def _shift(alpha: float, up: float, down: float) -> tuple[float, float]:
    """Additive variation and its derivative; `up` and `down` are high minus nominal and nominal minus low."""
    if alpha >= 1.0:
        return alpha * up, up
    if alpha <= -1.0:
        return alpha * down, down
    mean, bend = 0.5 * (up + down), 0.0625 * (up - down)
    a2 = alpha * alpha
    value = alpha * (mean + alpha * bend * (15.0 + a2 * (3.0 * a2 - 10.0)))
    return value, mean + alpha * bend * (30.0 + a2 * (18.0 * a2 - 40.0))


@njit(cache=True, error_model="numpy")
def _scale(alpha: float, shape: FloatArray) -> tuple[float, float]:
    """Factor and its derivative; `shape` holds ln low, ln high and the six coefficients."""
    value, derivative = 0.0, 0.0
    if alpha >= 1.0:
        value = math.exp(alpha * shape[1])
        return value, value * shape[1]
    if alpha <= -1.0:
        value = math.exp(-alpha * shape[0])
        return value, -value * shape[0]
    for k in range(5, -1, -1):
        derivative = derivative * alpha + (k + 1) * shape[2 + k]
        value = (value + shape[2 + k]) * alpha
    return 1.0 + value, derivative


@njit(cache=True, error_model="numpy")
def cost(
    model: Layout,
    constraints: Constraints,
    observed: FloatArray,
    theta: FloatArray,
    signal: FloatArray,
    spread: FloatArray,
    rate: FloatArray,
    slope: FloatArray,
) -> float:
    """Minus ln L over its largest conceivable value; fills expectations with the signal, and their derivatives.

    `theta` has one more entry than the model has parameters: the signal's nuisance, a standard normal variate.
    """
    expectations(model, theta, rate, slope)
    last = theta.size - 1
    total: float = 0.5 * theta[last] ** 2
    for i in range(observed.size):
        varied = signal[i] * math.exp(min(spread[i] * theta[last], 500.0))
        rate[i] += varied
        slope[i, last] = varied * spread[i]
        if rate[i] < 0.0 or (rate[i] == 0.0 and observed[i] > 0.0):
            return math.inf
        total += rate[i] - observed[i]
        if observed[i] > 0.0:
            total += observed[i] * math.log(observed[i] / rate[i])
    for p in range(last):
        kind, centre, size = constraints.kind[p], constraints.centre[p], constraints.size[p]
        if kind == 1:
            total += 0.5 * ((theta[p] - centre) / size) ** 2
        elif kind == 2:
            if theta[p] <= 0.0:
                return math.inf
            total += size * theta[p] - centre
            if centre > 0.0:
                total += centre * math.log(centre / (size * theta[p]))
    return total


@njit(cache=True, error_model="numpy")
def minimise(
    model: Layout,
    constraints: Constraints,
    observed: FloatArray,
    start: FloatArray,
    low: FloatArray,
    high: FloatArray,
    signal: FloatArray,
    spread: FloatArray,
) -> tuple[float, FloatArray]:
    """Return the smallest `cost` with every parameter between `low` and `high`, and where it is.

    Newton's method with the larger of observed and expected curvature of the counts; parameters that a step would push
    out of the box stay at its wall for that step. A parameter with ``low == high`` is fixed.
    """
    count = start.size
    theta, trial = start.copy(), start.copy()
    rate, slope = np.empty(observed.size), np.empty((observed.size, count))
    new_rate, new_slope = rate.copy(), slope.copy()
    value = cost(model, constraints, observed, theta, signal, spread, rate, slope)
    for _ in range(_MOST_STEPS):
        gradient, hessian = np.zeros(count), np.zeros((count, count))
        for i in range(observed.size):
            tension = 1.0 - observed[i] / rate[i] if observed[i] > 0.0 else 1.0
            # Far above its count a bin has hardly any curvature, and steps would be wild: not less than expected then.
            weight = observed[i] / rate[i] ** 2 if observed[i] > rate[i] else 1.0 / max(rate[i], _SMALLEST_RATE)
            for p in range(count):
                if slope[i, p] != 0.0:
                    gradient[p] += tension * slope[i, p]
                    for q in range(p + 1):
                        hessian[p, q] += weight * slope[i, p] * slope[i, q]
        for p in range(count - 1):
            kind, centre, size = constraints.kind[p], constraints.centre[p], constraints.size[p]
            if kind == 1:
                gradient[p] += (theta[p] - centre) / size**2
                hessian[p, p] += 1.0 / size**2
            elif kind == 2:
                gradient[p] += size - centre / theta[p]
                hessian[p, p] += centre / theta[p] ** 2
        gradient[count - 1] += theta[count - 1]
        hessian[count - 1, count - 1] += 1.0
        for p in range(count):
            held = low[p] == high[p] or (theta[p] <= low[p] and gradient[p] > 0.0)
            if held or (theta[p] >= high[p] and gradient[p] < 0.0):
                gradient[p] = 0.0
                hessian[p, :] = 0.0
                hessian[:, p] = 0.0
                hessian[p, p] = 1.0
            # Keeps parameters that no bin depends on from making the matrix singular.
            hessian[p, p] += 1e-12
            for q in range(p):
                hessian[q, p] = hessian[p, q]
        step = np.linalg.solve(hessian, gradient)
        gain = float((step * gradient).sum())
        size = 1.0
        while True:
            for p in range(count):
                trial[p] = min(max(theta[p] - size * step[p], low[p]), high[p])
            new_value = cost(model, constraints, observed, trial, signal, spread, new_rate, new_slope)
            if new_value <= value - 1e-4 * size * gain or (gain < _CONVERGED and new_value <= value + _CONVERGED):
                break
            size *= 0.5
            if size < 1e-12:
                return value, theta
        theta, trial = trial, theta
        rate, new_rate = new_rate, rate
        slope, new_slope = new_slope, slope
        value = new_value
        if gain < _CONVERGED:
            break
    return value, theta
