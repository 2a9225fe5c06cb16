"""One target: its likelihood integrated over log10 J and background level, whatever its shape.

Gauss-Legendre quadrature in y over the range where the integrand exceeds exp(-17) of its maximum, in panels that end at
the kink of an asymmetric error, around a narrow peak and at several maxima; inside it, Gauss-Hermite in nu around its
conditional maximum. Slower than `marginal_quick`, which hands over to it whatever is not smooth enough.
"""

from __future__ import annotations

import math
from typing import Final

import numpy as np
from numba import njit

from .profiling import LN10, background_curvature, best_background, poisson, profiled, slope

_DROP: Final = 17.0
_LEGENDRE_X, _LEGENDRE_W = np.polynomial.legendre.leggauss(20)
_HERMITE_X, _HERMITE_W = np.polynomial.hermite_e.hermegauss(5)
_HERMITE_LOG_W = np.log(_HERMITE_W / math.sqrt(2.0 * math.pi)) + 0.5 * _HERMITE_X**2
# Where panels end, in units of a peak's own width: around it, how far one panel reaches, and what is a steep side.
_PEAK: Final = 4.5
_NARROW: Final = 7.5
_STEEP: Final = 4.0


@njit(cache=True, fastmath=False, error_model="numpy")
def _edge(target, y, value, direction):  # type: ignore[no-untyped-def]
    """Where the log-likelihood has fallen from `value` by some `_DROP` on one side of the outermost maximum `y`."""
    step = 6.0 / math.sqrt(max(-slope(target, y)[1], 1.0))
    inside, outside = 0.0, math.inf
    for _ in range(60):
        drop = value - profiled(target, y + direction * step)
        if drop < _DROP:
            inside = step
            step = 1.4 * step if outside == math.inf else 0.5 * (inside + outside)
        elif drop > 1.5 * _DROP:
            outside = step
            step = 0.7 * step if inside == 0.0 else 0.5 * (inside + outside)
        else:
            break
    return y + direction * step


@njit(cache=True, fastmath=False, error_model="numpy")
def _log_integrand(target, y):  # type: ignore[no-untyped-def]
    """Log of the likelihood at y, the background scale integrated over its normal density."""
    amplitude = math.exp(LN10 * y)
    width = target.minus if y < 0.0 else target.plus
    if target.background_error == 0.0:
        return poisson(target, amplitude, 1.0) - 0.5 * (y / width) ** 2
    centre = best_background(target, amplitude)
    spread = 1.0 / math.sqrt(background_curvature(target, amplitude, centre)[1])
    highest, total = -math.inf, 0.0
    for k in range(_HERMITE_X.size):
        scale = centre + spread * _HERMITE_X[k]
        if scale <= 0.0:
            continue
        value = (
            poisson(target, amplitude, scale)
            + _HERMITE_LOG_W[k]
            - 0.5 * ((scale - target.background_centre) / target.background_error) ** 2
        )
        if value > highest:
            total = total * math.exp(highest - value) + 1.0 if total > 0.0 else 1.0
            highest = value
        else:
            total += math.exp(value - highest)
    return highest + math.log(total * spread / target.background_error) - 0.5 * (y / width) ** 2


@njit(cache=True, fastmath=False, error_model="numpy")
def careful_integral(target, found, number):  # type: ignore[no-untyped-def]
    """Log of the integral over y of exp(log-likelihood), given its maxima."""
    highest = -math.inf
    values = np.empty(number)
    for k in range(number):
        values[k] = profiled(target, found[k])
        highest = max(highest, values[k])
    first, last = 0, number - 1
    while values[first] < highest - _DROP:
        first += 1
    while values[last] < highest - _DROP:
        last -= 1
    low, high = _edge(target, found[first], highest, -1.0), _edge(target, found[last], highest, 1.0)
    breaks = np.empty(2 * number + 6)
    breaks[0], breaks[1], size = low, high, 2
    if first == last:
        # A narrow peak on a broad shoulder gets a panel of its own.
        peak, sharpness = found[first], 1.0 / math.sqrt(max(-slope(target, found[first])[1], 1e-2))
        if low < peak - _NARROW * sharpness:
            breaks[size] = peak - _PEAK * sharpness
            size += 1
        if high > peak + _NARROW * sharpness:
            breaks[size] = peak + _PEAK * sharpness
            size += 1
        if high < peak + _STEEP * sharpness or low > peak - _STEEP * sharpness:
            breaks[size] = peak
            size += 1
    else:
        for k in range(first, last + 1):
            breaks[size] = found[k]
            size += 1
            if k < last:
                breaks[size] = 0.5 * (found[k] + found[k + 1])
                size += 1
    if target.minus != target.plus and low < 0.0 < high:
        breaks[size] = 0.0
        size += 1
    breaks[:size].sort()
    total = 0.0
    for panel in range(size - 1):
        middle, half = 0.5 * (breaks[panel] + breaks[panel + 1]), 0.5 * (breaks[panel + 1] - breaks[panel])
        for k in range(_LEGENDRE_X.size):
            value = _log_integrand(target, middle + half * _LEGENDRE_X[k])
            total += half * _LEGENDRE_W[k] * math.exp(value - highest)
    return highest + math.log(total)
