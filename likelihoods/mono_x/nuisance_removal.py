"""Compiled kernels that remove the nuisances of `SimplifiedLikelihood`: Newton's method, and Laplace's to second order.

All nuisances are standard normal variates z; z[n] belongs to the signal, z[:n] through theta = L z to the background.
What is minimised is f(z) = sum_I [lambda_I - N_I + N_I ln(N_I/lambda_I)] + z^2/2, whose derivatives are exact.
"""

from __future__ import annotations

import math
from typing import Final

import numpy as np
from numba import njit

from scanfit.priors import FloatArray

POSITIVE_WIDTH: Final = 1e-3
"""Width of the rounding at zero background, in units of the background's uncertainty."""

_MOST_STEPS: Final = 200
_CONVERGED: Final = 1e-9
"""Expected gain in ln L below which the next Newton step is the last: its own error is of the order of the square."""


@njit(cache=True, error_model="numpy")
def maximise(
    observed: FloatArray,
    signal: FloatArray,
    spread: FloatArray,
    constant: FloatArray,
    slope: FloatArray,
    curvature: FloatArray,
    lower: FloatArray,
    volume: bool,
) -> tuple[float, float, float, FloatArray]:
    """Find the most likely nuisances, starting from zero.

    Parameters
    ----------
    observed, signal, spread, constant, slope, curvature : ndarray, shape (n,)
        Counts, expected signal and its log uncertainty, coefficients of the background's polynomial.
    lower : ndarray, shape (n, n)
        Cholesky factor of the nuisances' correlation.
    volume : bool
        Whether to compute the Laplace terms, too.

    Returns
    -------
    peak : float
        -f at the minimum.
    log_volume, correction : float
        Laplace's ln of the integral of exp(-f) over exp(peak), with the normalised density of z; and what the next
        order adds to it. Both zero unless `volume`.
    z : ndarray, shape (n + 1,)
        Where the minimum is.
    """
    n = observed.size
    z, trial = np.zeros(n + 1), np.zeros(n + 1)
    # Rows: expected counts, background's first and second derivative by theta, signal.
    now, then = np.empty((4, n)), np.empty((4, n))
    gradient, hessian = np.empty(n + 1), np.empty((n + 1, n + 1))
    z[n] = _start(signal, spread, constant, slope)
    expectations(signal, spread, constant, slope, curvature, lower, z, now)
    value = cost(observed, now, z)
    for _ in range(_MOST_STEPS):
        derivatives(observed, spread, lower, z, now, True, gradient, hessian)
        if not factorise(hessian):
            derivatives(observed, spread, lower, z, now, False, gradient, hessian)
            factorise(hessian)
        step = gradient.copy()
        _solve_lower(hessian, step)
        gain = 0.0
        for k in range(n + 1):
            gain += step[k] ** 2
        solve_upper(hessian, step)
        size = _largest_step(spread, lower, step, now)
        while True:
            for k in range(n + 1):
                trial[k] = z[k] - size * step[k]
            expectations(signal, spread, constant, slope, curvature, lower, trial, then)
            new_value = cost(observed, then, trial)
            # Below the convergence limit rounding decides the comparison: take the step.
            if gain < _CONVERGED or new_value <= value - 1e-4 * size * gain:
                break
            size *= 0.5
            if size < 1e-12:
                gain = 0.0
                break
        z, trial = trial, z
        now, then = then, now
        value = new_value
        if gain < _CONVERGED:
            break

    log_volume = correction = 0.0
    if volume:
        derivatives(observed, spread, lower, z, now, True, gradient, hessian)
        if not factorise(hessian):
            derivatives(observed, spread, lower, z, now, False, gradient, hessian)
            factorise(hessian)
        for k in range(n + 1):
            log_volume -= math.log(hessian[k, k])
        correction = _next_order(observed, spread, lower, now, hessian)
    return -value, log_volume, correction, z


@njit(cache=True, error_model="numpy")
def _start(signal: FloatArray, spread: FloatArray, constant: FloatArray, slope: FloatArray) -> float:
    """First value of the signal's nuisance: zero, or where no bin's signal exceeds the background's uncertainty.

    The likelihood of a signal far too large has further, lower maxima where a background vanishes; the highest one is
    reached from small signals.
    """
    lowest = 0.0
    for i in range(signal.size):
        scale = slope[i] + math.sqrt(max(constant[i], 1.0))
        if signal[i] > scale and spread[i] > 0.0:
            lowest = min(lowest, -math.log(signal[i] / scale) / spread[i])
    return lowest


@njit(cache=True, error_model="numpy")
def _largest_step(spread: FloatArray, lower: FloatArray, step: FloatArray, expectations: FloatArray) -> float:
    """Fraction of a Newton step that at most halves any background and changes no signal by more than a factor e.

    A signal far too large for the data would otherwise throw the backgrounds to zero, where the search gets lost.
    """
    n = spread.size
    size = 1.0
    for i in range(n):
        change = 0.0
        for k in range(i + 1):
            change += lower[i, k] * step[k]
        change *= expectations[1, i]
        background = expectations[0, i] - expectations[3, i]
        if size * change > 0.5 * background:
            size = max(0.5 * background / change, 1e-3)
        if size * abs(spread[i] * step[n]) > 1.0:
            size = 1.0 / abs(spread[i] * step[n])
    return size


@njit(cache=True, error_model="numpy")
def expectations(
    signal: FloatArray,
    spread: FloatArray,
    constant: FloatArray,
    slope: FloatArray,
    curvature: FloatArray,
    lower: FloatArray,
    z: FloatArray,
    out: FloatArray,
) -> None:
    """Fill `out`, shape (4, n): expected counts, background's first and second derivative by theta, signal."""
    n = signal.size
    for i in range(n):
        theta = 0.0
        for k in range(i + 1):
            theta += lower[i, k] * z[k]
        raw = constant[i] + (slope[i] + curvature[i] * theta) * theta
        raw_first = slope[i] + 2.0 * curvature[i] * theta
        width2 = 4.0 * (POSITIVE_WIDTH * slope[i]) ** 2
        root = math.sqrt(raw * raw + width2)
        # For raw < 0 the conjugate form keeps the small positive rest exact.
        positive = 0.5 * (raw + root) if raw > 0.0 else 0.5 * width2 / (root - raw)
        varied = signal[i] * math.exp(min(spread[i] * z[n], 500.0))
        out[0, i] = positive + varied
        out[1, i] = positive / root * raw_first
        out[2, i] = positive / root * 2.0 * curvature[i] + 0.5 * width2 / root**3 * raw_first**2
        out[3, i] = varied


@njit(cache=True, error_model="numpy")
def cost(observed: FloatArray, expectations: FloatArray, z: FloatArray) -> float:
    """What is minimised, at `z` and given the expectations there."""
    total = 0.0
    for i in range(observed.size):
        rate = expectations[0, i]
        total += rate - observed[i]
        if observed[i] > 0.0:
            total += observed[i] * math.log(observed[i] / rate)
    for k in range(z.size):
        total += 0.5 * z[k] ** 2
    return total


@njit(cache=True, error_model="numpy")
def derivatives(
    observed: FloatArray,
    spread: FloatArray,
    lower: FloatArray,
    z: FloatArray,
    expectations: FloatArray,
    exact: bool,
    gradient: FloatArray,
    hessian: FloatArray,
) -> None:
    """Fill gradient and Hessian (lower triangle); without `exact`, terms that could make it indefinite are dropped."""
    n = observed.size
    hessian[:] = 0.0
    for k in range(n + 1):
        gradient[k] = z[k]
        hessian[k, k] = 1.0
    for i in range(n):
        rate, first, second, varied = expectations[0, i], expectations[1, i], expectations[2, i], expectations[3, i]
        tension, weight = 1.0 - observed[i] / rate, observed[i] / rate**2
        tilt = varied * spread[i]
        own, own_signal = tension * second, tension * tilt * spread[i]
        if not exact:
            own, own_signal = max(own, 0.0), max(own_signal, 0.0)
        own += weight * first**2
        own_signal += weight * tilt**2
        mixed = weight * first * tilt
        gradient[n] += tension * tilt
        hessian[n, n] += own_signal
        for k in range(i + 1):
            gradient[k] += tension * first * lower[i, k]
            hessian[n, k] += mixed * lower[i, k]
            scaled = own * lower[i, k]
            for m in range(k + 1):
                hessian[k, m] += scaled * lower[i, m]


@njit(cache=True, error_model="numpy")
def factorise(matrix: FloatArray) -> bool:
    """Cholesky factor in place of the lower triangle; False when the matrix is not positive definite."""
    for j in range(matrix.shape[0]):
        for k in range(j + 1):
            total = matrix[j, k]
            for m in range(k):
                total -= matrix[j, m] * matrix[k, m]
            if k < j:
                matrix[j, k] = total / matrix[k, k]
            elif total > 0.0:
                matrix[j, j] = math.sqrt(total)
            else:
                return False
    return True


@njit(cache=True, error_model="numpy")
def _solve_lower(lower: FloatArray, vector: FloatArray) -> None:
    for j in range(vector.size):
        for k in range(j):
            vector[j] -= lower[j, k] * vector[k]
        vector[j] /= lower[j, j]


@njit(cache=True, error_model="numpy")
def solve_upper(lower: FloatArray, vector: FloatArray) -> None:
    """Solve with the transpose of a lower triangle, in place."""
    for j in range(vector.size - 1, -1, -1):
        for k in range(j + 1, vector.size):
            vector[j] -= lower[k, j] * vector[k]
        vector[j] /= lower[j, j]


@njit(cache=True, error_model="numpy")
def _next_order(
    observed: FloatArray, spread: FloatArray, lower: FloatArray, expectations: FloatArray, factor: FloatArray
) -> float:
    """Second-order term of Laplace's method at the minimum.

    With S the inverse Hessian and f_ijk.. the higher derivatives it is (any text on saddle-point expansions)

        - f_ijkl S_ij S_kl/8 + f_ijk f_lmn S_ij S_kl S_mn/8 + f_ijk f_lmn S_il S_jm S_kn/12.

    Each bin depends on two variables only, its own theta and the signal's nuisance; so the tensors are sums over bins
    of symmetric tensors in two dimensions, whose components are listed here by how many indices belong to the signal.
    The rounding of the background near zero enters through its first two derivatives only.
    """
    n = observed.size
    # Covariance of (theta_1 ... theta_n, z_n) in the Gaussian approximation.
    columns = np.zeros((n + 1, n + 1))
    for i in range(n):
        columns[i, : i + 1] = lower[i, : i + 1]
    columns[n, n] = 1.0
    for i in range(n + 1):
        _solve_lower(factor, columns[i])
    covariance = columns @ columns.T

    third = np.empty((n, 4))
    pull = np.zeros(n + 1)
    quartic = 0.0
    for i in range(n):
        rate, d1, d2, varied = expectations[0, i], expectations[1, i], expectations[2, i], expectations[3, i]
        e1 = varied * spread[i]
        e2, e3, e4 = e1 * spread[i], e1 * spread[i] ** 2, e1 * spread[i] ** 3
        p1, p2 = 1.0 - observed[i] / rate, observed[i] / rate**2
        p3, p4 = -2.0 * p2 / rate, 6.0 * p2 / rate**2
        third[i, 0] = p3 * d1**3 + 3.0 * p2 * d2 * d1
        third[i, 1] = p3 * d1**2 * e1 + p2 * d2 * e1
        third[i, 2] = p3 * d1 * e1**2 + p2 * e2 * d1
        third[i, 3] = p3 * e1**3 + 3.0 * p2 * e1 * e2 + p1 * e3
        fourth_0 = p4 * d1**4 + 6.0 * p3 * d2 * d1**2 + 3.0 * p2 * d2**2
        fourth_1 = p4 * d1**3 * e1 + 3.0 * p3 * d2 * d1 * e1
        fourth_2 = p4 * d1**2 * e1**2 + p3 * (d2 * e1**2 + e2 * d1**2) + p2 * d2 * e2
        fourth_3 = p4 * d1 * e1**3 + 3.0 * p3 * e2 * d1 * e1 + p2 * e3 * d1
        fourth_4 = p4 * e1**4 + 6.0 * p3 * e2 * e1**2 + p2 * (3.0 * e2**2 + 4.0 * e3 * e1) + p1 * e4
        tt, ts, ss = covariance[i, i], covariance[i, n], covariance[n, n]
        quartic += fourth_0 * tt**2 + 4.0 * fourth_1 * tt * ts + fourth_2 * (2.0 * tt * ss + 4.0 * ts**2)
        quartic += 4.0 * fourth_3 * ts * ss + fourth_4 * ss**2
        pull[i] = third[i, 0] * tt + 2.0 * third[i, 1] * ts + third[i, 2] * ss
        pull[n] += third[i, 1] * tt + 2.0 * third[i, 2] * ts + third[i, 3] * ss

    chained = 0.0
    for i in range(n + 1):
        for j in range(n + 1):
            chained += pull[i] * covariance[i, j] * pull[j]
    paired = 0.0
    for i in range(n):
        a0, a1, a2, a3 = third[i]
        for j in range(n):
            b0, b1, b2, b3 = third[j]
            # Covariance of bin i's two variables (first letter) with bin j's.
            tt, ts, st, ss = covariance[i, j], covariance[i, n], covariance[n, j], covariance[n, n]
            paired += b0 * (a0 * tt**3 + 3.0 * a1 * tt**2 * st + 3.0 * a2 * tt * st**2 + a3 * st**3)
            paired += 3.0 * b1 * (
                a0 * tt**2 * ts + a1 * (tt**2 * ss + 2.0 * tt * st * ts) + a2 * (2.0 * tt * st * ss + st**2 * ts)
                + a3 * st**2 * ss
            )  # fmt: skip
            paired += 3.0 * b2 * (
                a0 * tt * ts**2 + a1 * (st * ts**2 + 2.0 * tt * ts * ss) + a2 * (tt * ss**2 + 2.0 * st * ts * ss)
                + a3 * st * ss**2
            )  # fmt: skip
            paired += b3 * (a0 * ts**3 + 3.0 * a1 * ts**2 * ss + 3.0 * a2 * ts * ss**2 + a3 * ss**3)
    return -quartic / 8.0 + chained / 8.0 + paired / 12.0
