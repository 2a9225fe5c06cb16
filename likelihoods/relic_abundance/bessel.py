r"""Modified Bessel functions of the second kind, scaled by exp(z), for compiled kernels.

For z >= 1 the smooth factor of

    e^z K_nu(z) = sqrt(pi / (2 z)) P_nu(1/z)

is a polynomial in 1/z on each of three intervals. Its coefficients are worked out once per process from the integral
e^z K_nu(z) = int_0^inf exp(-z (cosh t - 1)) cosh(nu t) dt (Abramowitz & Stegun 9.6.24), which the trapezoidal rule
sums to rounding error. Below z = 1 the ascending series (9.6.10-9.6.13) is used.
"""

from __future__ import annotations

import math
from typing import Final

import numpy as np
from numba import njit

from scanfit.priors import FloatArray

_EDGES: Final = (1.0, 0.25, 0.0625, 0.0)
"""Ends of the three intervals in 1/z."""
_DEGREES: Final = (19, 13, 10)
_EULER_GAMMA: Final = 0.5772156649015329


def _smooth_factor(order: int, z: FloatArray) -> FloatArray:
    """P_nu(1/z) by the trapezoidal rule, shape of `z`; the integrand falls double-exponentially."""
    step = 0.2
    tau = np.arange(0.0, 12.0 + step, step)
    t = tau / np.sqrt(z)[:, None]
    integrand = np.exp(-2.0 * z[:, None] * np.sinh(0.5 * t) ** 2) * np.cosh(order * t)
    integrand[:, 0] *= 0.5
    return np.asarray(math.sqrt(2.0 / math.pi) * step * integrand.sum(axis=1))


def _coefficients(order: int) -> FloatArray:
    """Polynomial coefficients, shape (3, 20), in the variable that runs over [-1, 1] on each interval."""
    table = np.zeros((3, max(_DEGREES) + 1))
    for row, degree in enumerate(_DEGREES):
        count = degree + 1
        node = np.cos(np.pi * (np.arange(count) + 0.5) / count)
        high, low = _EDGES[row], _EDGES[row + 1]
        values = _smooth_factor(order, 1.0 / (0.5 * (high + low) + 0.5 * (high - low) * node))
        basis = np.polynomial.chebyshev.chebvander(node, degree)
        series = (2.0 / count) * basis.T @ values
        series[0] *= 0.5
        table[row, :count] = np.polynomial.chebyshev.cheb2poly(series)
    return table


_P1: Final = _coefficients(1)
_P2: Final = _coefficients(2)


@njit(cache=True, error_model="numpy")
def _polynomial(table: FloatArray, w: float) -> float:
    if w <= _EDGES[2]:
        row, degree = 2, _DEGREES[2]
    elif w <= _EDGES[1]:
        row, degree = 1, _DEGREES[1]
    else:
        row, degree = 0, _DEGREES[0]
    high, low = _EDGES[row], _EDGES[row + 1]
    s = (2.0 * w - high - low) / (high - low)
    total: float = table[row, degree]
    for power in range(degree - 1, -1, -1):
        total = total * s + table[row, power]
    return total


@njit(cache=True, error_model="numpy")
def smooth_factor_k1(w: float) -> float:
    """P_1(w) = sqrt(2 z/pi) e^z K_1(z) with w = 1/z, for 0 <= w <= 1."""
    return _polynomial(_P1, w)


@njit(cache=True, error_model="numpy")
def smooth_factor_k2(w: float) -> float:
    """P_2(w) = sqrt(2 z/pi) e^z K_2(z) with w = 1/z, for 0 <= w <= 1."""
    return _polynomial(_P2, w)


@njit(cache=True, error_model="numpy")
def _ascending_k0_k1(z: float) -> tuple[float, float]:
    """K_0 and K_1, unscaled, for 0 < z <= 1."""
    q = 0.25 * z * z
    log_half = math.log(0.5 * z)
    i0, i1, sum0, sum1 = 0.0, 0.0, 0.0, 0.0
    term = 1.0  # q^k / (k!)^2
    harmonic = 0.0
    for k in range(12):
        i0 += term
        i1 += term / (k + 1.0)
        sum0 += term * harmonic
        sum1 += term / (k + 1.0) * (2.0 * harmonic + 1.0 / (k + 1.0) - 2.0 * _EULER_GAMMA)
        harmonic += 1.0 / (k + 1.0)
        term *= q / ((k + 1.0) * (k + 1.0))
    k0 = -(log_half + _EULER_GAMMA) * i0 + sum0
    k1 = 1.0 / z + log_half * 0.5 * z * i1 - 0.25 * z * sum1
    return k0, k1


@njit(cache=True, error_model="numpy")
def k1e(z: float) -> float:
    """e^z K_1(z) for z > 0, to a few units of 1e-15."""
    if z >= 1.0:
        return math.sqrt(0.5 * math.pi / z) * smooth_factor_k1(1.0 / z)
    _, k1 = _ascending_k0_k1(z)
    return math.exp(z) * k1


@njit(cache=True, error_model="numpy")
def k2e(z: float) -> float:
    """e^z K_2(z) for z > 0, to a few units of 1e-15."""
    if z >= 1.0:
        return math.sqrt(0.5 * math.pi / z) * smooth_factor_k2(1.0 / z)
    k0, k1 = _ascending_k0_k1(z)
    return math.exp(z) * (k0 + 2.0 * k1 / z)
