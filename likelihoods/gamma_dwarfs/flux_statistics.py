"""Log-likelihoods of targets from tables against flux, with J-factors profiled or integrated out.

The tables may have any shape, so nothing is assumed: log10 J runs over a grid that covers 6.5 standard deviations, 26
steps of half the smaller error to begin with, and is halved until the integral changes by less than 1e-5. The maximum
is found on the finest grid and refined by golden section between its neighbours.
"""

from __future__ import annotations

import math
from typing import Final

import numpy as np
from numba import njit

from .profiling import LN10

_REACH: Final = 6.5
_STEP: Final = 0.5
_DROP: Final = 20.0
_MOST_STEPS: Final = 400
_AGREEMENT: Final = 1e-5
_HALVINGS: Final = 8
_GOLDEN: Final = 0.5 * (math.sqrt(5.0) - 1.0)


@njit(cache=True, fastmath=False, error_model="numpy")
def _interpolated(x, size, flux, value, slope):  # type: ignore[no-untyped-def]
    """Cubic between points, tangents outside."""
    if x <= flux[0]:
        return value[0] + slope[0] * (x - flux[0])
    if x >= flux[size - 1]:
        return value[size - 1] + slope[size - 1] * (x - flux[size - 1])
    k = np.searchsorted(flux[:size], x) - 1
    step = flux[k + 1] - flux[k]
    t = (x - flux[k]) / step
    u = 1.0 - t
    return (
        u * u * ((1.0 + 2.0 * t) * value[k] + t * step * slope[k])
        + t * t * ((3.0 - 2.0 * t) * value[k + 1] - u * step * slope[k + 1])
    )  # fmt: skip


@njit(cache=True, fastmath=False, error_model="numpy")
def _at(y, fluxes, sizes, flux, value, slope, minus, plus):  # type: ignore[no-untyped-def]
    """Log-likelihood of one target at y, without constants."""
    width = minus if y < 0.0 else plus
    total = -0.5 * (y / width) ** 2
    amplitude = math.exp(LN10 * y)
    for j in range(fluxes.size):
        total += _interpolated(amplitude * fluxes[j], sizes[j], flux[j], value[j], slope[j])
    return total


@njit(cache=True, fastmath=False, error_model="numpy")
def table_log_likelihoods(  # type: ignore[no-untyped-def]
    fluxes, sizes, flux, value, slope, minus, plus, marginal
):
    """Log-likelihood of each target, without ln of the normalisation of p(y).

    Parameters
    ----------
    fluxes : ndarray, shape (n_targets, n_bins)
        Expected flux at the measured J-factor.
    sizes : ndarray of int, shape (n_targets, n_bins)
        Points of each table.
    flux, value, slope : ndarray, shape (n_targets, n_bins, n_points)
        The tables: flux, log-likelihood and its derivative.
    minus, plus : ndarray, shape (n_targets,)
        Errors of log10 J in dex.
    marginal : bool
        Integrate over J; otherwise take its best value.

    Returns
    -------
    ndarray, shape (n_targets,)
    """
    result = np.empty(fluxes.shape[0])
    for i in range(result.size):
        step = _STEP * min(minus[i], plus[i])
        first, last = -math.ceil(_REACH * minus[i] / step), math.ceil(_REACH * plus[i] / step)
        # Where the flux is far too high J must fall further than its error suggests.
        highest, best, total, before = -math.inf, 0.0, 0.0, -1.0
        for _ in range(_MOST_STEPS):
            found = _at(first * step, fluxes[i], sizes[i], flux[i], value[i], slope[i], minus[i], plus[i])
            if found < highest - _DROP or (0.5 * (first * step / minus[i]) ** 2 > _DROP and found < highest):
                break
            highest = max(highest, found)
            first -= 2
        highest = -math.inf
        for halving in range(_HALVINGS):
            for k in range(first, last + 1):
                if halving > 0 and k % 2 == 0:
                    continue
                y = k * step
                found = _at(y, fluxes[i], sizes[i], flux[i], value[i], slope[i], minus[i], plus[i])
                if found > highest:
                    total *= math.exp(highest - found)
                    before *= math.exp(highest - found)
                    highest, best = found, y
                total += math.exp(found - highest)
            integral = total * step
            if halving > 0 and abs(integral - before) < _AGREEMENT * integral:
                break
            before, step, first, last = integral, 0.5 * step, 2 * first, 2 * last
        if marginal:
            result[i] = highest + math.log(integral)
            continue
        low, high = best - step, best + step
        for _ in range(30):
            left, right = high - _GOLDEN * (high - low), low + _GOLDEN * (high - low)
            at_left = _at(left, fluxes[i], sizes[i], flux[i], value[i], slope[i], minus[i], plus[i])
            at_right = _at(right, fluxes[i], sizes[i], flux[i], value[i], slope[i], minus[i], plus[i])
            if at_left > at_right:
                high = right
            else:
                low = left
            highest = max(highest, at_left, at_right)
        result[i] = highest
    return result
