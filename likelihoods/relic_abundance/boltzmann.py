r"""Freeze-out: the number-density equation of Gondolo & Gelmini, Nucl. Phys. B 360 (1991) 145, solved for one relic.

With Y = n/s and W = ln Y as function of tau = ln x, x = m/T, the equation is

    dW/dtau = -lambda (e^W - Y_eq^2 e^-W),    lambda = sqrt(pi/45) M_Pl m g*^(1/2) <sigma v> / x.

Y stays positive because W is what is solved for. The equation is stiff before freeze-out, so it is stepped with the
three-stage Radau IIA method of order five (Hairer & Wanner, Solving Ordinary Differential Equations II, section IV.8);
for a scalar equation the full Newton iteration costs next to nothing.
"""

from __future__ import annotations

import math
from typing import Final

from numba import njit

from scanfit.priors import FloatArray

from ..constants import PLANCK_MASS
from .bessel import smooth_factor_k1, smooth_factor_k2
from .degrees_of_freedom import interpolate
from .panels import LOWEST_X
from .thermal_average import average

_RATE: Final = math.sqrt(math.pi / 45.0) * PLANCK_MASS
_EQUILIBRIUM: Final = 45.0 / (4.0 * math.pi**4) * math.sqrt(0.5 * math.pi)
_LOG_2_5: Final = math.log(2.5)
_HIGHEST_START: Final = 300.0
"""No relic stays in equilibrium to x = 300: that would take a cross section above 10^100 GeV^-2."""

_S6: Final = math.sqrt(6.0)
_C1, _C2 = (4.0 - _S6) / 10.0, (4.0 + _S6) / 10.0
_A11, _A12, _A13 = (88.0 - 7.0 * _S6) / 360.0, (296.0 - 169.0 * _S6) / 1800.0, (-2.0 + 3.0 * _S6) / 225.0
_A21, _A22, _A23 = (296.0 + 169.0 * _S6) / 1800.0, (88.0 + 7.0 * _S6) / 360.0, (-2.0 - 3.0 * _S6) / 225.0
_A31, _A32, _A33 = (16.0 - _S6) / 36.0, (16.0 + _S6) / 36.0, 1.0 / 9.0
_E1, _E2, _E3 = (-13.0 - 7.0 * _S6) / 3.0, (-13.0 + 7.0 * _S6) / 3.0, -1.0 / 3.0
_REAL_EIGENVALUE: Final = 3.0 + 3.0 ** (2.0 / 3.0) - 3.0 ** (1.0 / 3.0)

SOLVED, START_NOT_FOUND, STEP_TOO_SMALL = 0, 1, 2


@njit(cache=True, error_model="numpy")
def rate_and_equilibrium(
    nodes: FloatArray, table: FloatArray, mass: float, count: float, x: float
) -> tuple[float, float]:
    """Lambda and Y_eq at x; `count` is the number of internal degrees of freedom."""
    g_s, g_star_sqrt = interpolate(table, math.log(mass / x))
    rate = _RATE * mass * g_star_sqrt * average(nodes, x) / x
    equilibrium = _EQUILIBRIUM * count / g_s * x * math.sqrt(x) * smooth_factor_k2(1.0 / x) * math.exp(-x)
    return rate, equilibrium


@njit(cache=True, error_model="numpy")
def _lag(x: float) -> float:
    """-d ln Y_eq/d ln x at constant g_s."""
    return x * smooth_factor_k1(1.0 / x) / smooth_factor_k2(1.0 / x)


@njit(cache=True, error_model="numpy")
def _find_start(nodes: FloatArray, table: FloatArray, mass: float, count: float, departure: float) -> float:
    """Find the x at which Y exceeds Y_eq by about the fraction `departure`; LOWEST_X when that never happens later."""
    low, high = LOWEST_X, _HIGHEST_START
    x = 20.0
    for _ in range(40):
        rate, equilibrium = rate_and_equilibrium(nodes, table, mass, count, x)
        tight = 2.0 * rate * equilibrium * departure / _lag(x)
        excess = math.log(max(tight, 1e-200))
        if abs(excess) < 0.7:
            return x
        if excess > 0.0:
            low = x
        else:
            high = x
        # Y_eq falls as e^-x and everything else as a power.
        x = x + excess
        if not low < x < high:
            x = math.sqrt(low * high)
        if high < 1.02 * low:
            break
    return low


@njit(cache=True, error_model="numpy")
def solve(
    nodes: FloatArray,
    table: FloatArray,
    mass: float,
    count: float,
    last_x: float,
    first_x: float,
    departure: float,
    tolerance: float,
    longest_step: float,
    track: FloatArray,
) -> tuple[float, float, float, int, int]:
    """Integrate from equilibrium to the end.

    Parameters
    ----------
    nodes : ndarray, shape (n, 3)
        Of the thermal average, in GeV^-2; already halved where particle and antiparticle differ.
    table : ndarray
        `degrees_of_freedom.solver_table`.
    mass, count : float
        Mass in GeV and internal degrees of freedom, of particle and antiparticle together.
    last_x : float
        Where the integration ends; what is left is added assuming a constant average.
    first_x : float
        Where it starts; 0 lets `departure` decide.
    departure : float
        Relative excess of Y over Y_eq at the start.
    tolerance : float
        Largest estimated local error in ln Y.
    longest_step : float
        In ln x.
    track : ndarray, shape (k, 2)
        Filled with x and Y of as many steps as fit.

    Returns
    -------
    Y today, x where Y = 2.5 Y_eq, sum of estimated local errors, status, number of steps.
    """
    x = first_x if first_x > 0.0 else _find_start(nodes, table, mass, count, departure)
    rate, equilibrium = rate_and_equilibrium(nodes, table, mass, count, x)
    if not (equilibrium > 0.0 and rate >= 0.0 and math.isfinite(rate)):
        return math.nan, math.nan, math.inf, START_NOT_FOUND, 0
    tau, last_tau = math.log(x), math.log(last_x)
    # While Y follows Y_eq, lambda (Y^2 - Y_eq^2) = -Y dlnY_eq/dtau; out of equilibrium start on Y_eq itself.
    excess = 0.0
    if rate * equilibrium > 10.0 * _lag(x):
        ratio = _lag(x) / (rate * equilibrium)
        excess = math.log(0.5 * (ratio + math.sqrt(ratio * ratio + 4.0)))
    w = math.log(equilibrium) + excess
    freeze_out_x = math.nan
    if excess > _LOG_2_5:
        freeze_out_x = x
    step = min(1.0 / x, longest_step)
    error_sum = 0.0
    steps = 0
    growth = math.exp(w)
    slope = -rate * (growth - equilibrium * equilibrium / growth)
    stiffness = rate * (growth + equilibrium * equilibrium / growth)
    if len(track) > 0:
        track[0, 0], track[0, 1] = x, growth

    while tau < last_tau - 1e-12:
        step = min(step, last_tau - tau)
        if step < 1e-9:
            return math.exp(w), freeze_out_x, math.inf, STEP_TOO_SMALL, steps
        r1, q1 = rate_and_equilibrium(nodes, table, mass, count, math.exp(tau + _C1 * step))
        r2, q2 = rate_and_equilibrium(nodes, table, mass, count, math.exp(tau + _C2 * step))
        r3, q3 = rate_and_equilibrium(nodes, table, mass, count, math.exp(tau + step))
        b1, b2, b3 = q1 * q1, q2 * q2, q3 * q3
        z1, z2, z3 = _C1 * step * slope, _C2 * step * slope, step * slope
        converged = False
        for _ in range(12):
            e1, e2, e3 = math.exp(w + z1), math.exp(w + z2), math.exp(w + z3)
            f1, f2, f3 = -r1 * (e1 - b1 / e1), -r2 * (e2 - b2 / e2), -r3 * (e3 - b3 / e3)
            j1, j2, j3 = -step * r1 * (e1 + b1 / e1), -step * r2 * (e2 + b2 / e2), -step * r3 * (e3 + b3 / e3)
            m11, m12, m13 = 1.0 - _A11 * j1, -_A12 * j2, -_A13 * j3
            m21, m22, m23 = -_A21 * j1, 1.0 - _A22 * j2, -_A23 * j3
            m31, m32, m33 = -_A31 * j1, -_A32 * j2, 1.0 - _A33 * j3
            y1 = step * (_A11 * f1 + _A12 * f2 + _A13 * f3) - z1
            y2 = step * (_A21 * f1 + _A22 * f2 + _A23 * f3) - z2
            y3 = step * (_A31 * f1 + _A32 * f2 + _A33 * f3) - z3
            p1, p2, p3 = m22 * m33 - m23 * m32, m13 * m32 - m12 * m33, m12 * m23 - m13 * m22
            determinant = m11 * p1 + m21 * p2 + m31 * p3
            d1 = (y1 * p1 + y2 * p2 + y3 * p3) / determinant
            d2 = (
                y1 * (m23 * m31 - m21 * m33) + y2 * (m11 * m33 - m13 * m31) + y3 * (m13 * m21 - m11 * m23)
            ) / determinant
            d3 = (
                y1 * (m21 * m32 - m22 * m31) + y2 * (m12 * m31 - m11 * m32) + y3 * (m11 * m22 - m12 * m21)
            ) / determinant
            z1, z2, z3 = z1 + d1, z2 + d2, z3 + d3
            change = max(abs(d1), abs(d2), abs(d3))
            if not change < 50.0:
                break
            if change < 1e-2 * tolerance:
                converged = True
                break
        if not converged:
            step *= 0.3
            continue
        # The usual estimate filters with the stiffness at the start; here that falls exponentially within a step.
        new_stiffness = r3 * (math.exp(w + z3) + b3 / math.exp(w + z3))
        error = abs(slope + (_E1 * z1 + _E2 * z2 + _E3 * z3) / step)
        error /= _REAL_EIGENVALUE / step + min(stiffness, new_stiffness)
        factor = min(5.0, max(0.2, 0.9 * (tolerance / max(error, 1e-300)) ** 0.25))
        if error > tolerance:
            step *= factor
            continue
        if math.isnan(freeze_out_x):
            new_excess = w + z3 - math.log(q3) if q3 > 0.0 else math.inf
            if new_excess > _LOG_2_5:
                share = (_LOG_2_5 - excess) / (new_excess - excess) if new_excess < 1e3 else 0.5
                freeze_out_x = math.exp(tau + share * step)
            excess = new_excess
        tau += step
        w += z3
        steps += 1
        error_sum += error
        growth = math.exp(w)
        slope, stiffness, rate = -r3 * (growth - b3 / growth), r3 * (growth + b3 / growth), r3
        if steps < len(track):
            track[steps, 0], track[steps, 1] = math.exp(tau), growth
        step = min(step * factor, longest_step)
    return 1.0 / (1.0 / math.exp(w) + rate), freeze_out_x, error_sum, SOLVED, steps
