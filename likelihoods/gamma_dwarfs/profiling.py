"""One target: its likelihood, and every maximum of it in log10 J with the background level profiled.

The Poisson part is concave in (nu, A = 10^y) together, so it stays concave in A once nu is profiled. Let A* maximise
it. Where A* <= 1 the maximum over y lies between log10 A* and 0, where the sum is concave: one safeguarded Newton
search is exact. Where A* > 1, data and measured J pull apart and there may be several maxima: the slope is scanned on
a grid up to where the penalty exceeds anything the data could gain, and every maximum is polished.
"""

from __future__ import annotations

import math
from typing import Any, Final, NamedTuple

from numba import njit

LN10: Final = math.log(10.0)
MOST_MODES: Final = 16


class Target(NamedTuple):
    """One target inside the kernels; the arrays hold only bins with counts, by rising counts, the totals all bins."""

    counts: Any
    background: Any
    signal: Any
    size: int
    background_total: float
    signal_total: float
    background_error: float
    background_centre: float
    minus: float
    plus: float


@njit(cache=True, fastmath=False, error_model="numpy")
def poisson(target, amplitude, scale):  # type: ignore[no-untyped-def]
    """Sum of n ln mu - mu."""
    total = -scale * target.background_total - amplitude * target.signal_total
    # Logarithms are most of the cost: bins with equal counts, which stand side by side, share one.
    product = 1.0
    for k in range(target.size):
        product *= scale * target.background[k] + amplitude * target.signal[k]
        last = k + 1 == target.size or target.counts[k + 1] != target.counts[k]
        if last or not 1e-150 < product < 1e150:
            total += target.counts[k] * math.log(product)
            product = 1.0
    return total


@njit(cache=True, fastmath=False, error_model="numpy")
def background_curvature(target, amplitude, scale):  # type: ignore[no-untyped-def]
    """First derivative in the background scale, and minus the second."""
    first = -target.background_total - (scale - target.background_centre) / target.background_error**2
    second = 1.0 / target.background_error**2
    for k in range(target.size):
        share = target.background[k] / (scale * target.background[k] + amplitude * target.signal[k])
        first += target.counts[k] * share
        second += target.counts[k] * share * share
    return first, second


@njit(cache=True, fastmath=False, error_model="numpy")
def best_background(target, amplitude):  # type: ignore[no-untyped-def]
    """The background scale that maximises the likelihood at this amplitude; Newton on a concave function."""
    if target.background_error == 0.0:
        return 1.0
    scale = max(target.background_centre, 1e-3)
    for _ in range(60):
        first, second = background_curvature(target, amplitude, scale)
        following = max(scale + first / second, 0.1 * scale)
        if abs(following - scale) < 1e-5 * target.background_error or following < 1e-12:
            return following
        scale = following
    return scale


@njit(cache=True, fastmath=False, error_model="numpy")
def slope(target, y):  # type: ignore[no-untyped-def]
    """First and second derivative in y of the log-likelihood, the background scale profiled."""
    amplitude = math.exp(LN10 * y)
    scale = best_background(target, amplitude)
    first, second, mixed, pure = -target.signal_total, 0.0, 0.0, 0.0
    for k in range(target.size):
        inverse = 1.0 / (scale * target.background[k] + amplitude * target.signal[k])
        by_signal, by_background = target.signal[k] * inverse, target.background[k] * inverse
        first += target.counts[k] * by_signal
        second -= target.counts[k] * by_signal * by_signal
        mixed -= target.counts[k] * by_signal * by_background
        pure -= target.counts[k] * by_background * by_background
    if target.background_error > 0.0:
        second -= mixed * mixed / (pure - 1.0 / target.background_error**2)
    width = target.minus if y < 0.0 else target.plus
    return (
        LN10 * amplitude * first - y / width**2,
        LN10**2 * amplitude * (first + amplitude * second) - 1.0 / width**2,
    )


@njit(cache=True, fastmath=False, error_model="numpy")
def profiled(target, y):  # type: ignore[no-untyped-def]
    """Log-likelihood at y without constants, the background scale profiled."""
    amplitude = math.exp(LN10 * y)
    scale = best_background(target, amplitude)
    width = target.minus if y < 0.0 else target.plus
    value = poisson(target, amplitude, scale) - 0.5 * (y / width) ** 2
    if target.background_error > 0.0:
        value -= 0.5 * ((scale - target.background_centre) / target.background_error) ** 2
    return value


@njit(cache=True, fastmath=False, error_model="numpy")
def _maximum(target, low, high, y):  # type: ignore[no-untyped-def]
    """The maximum between `low` (rising) and `high` (falling), starting at `y`."""
    for _ in range(100):
        first, second = slope(target, y)
        if first > 0.0:
            low = y
        else:
            high = y
        following = y - first / second if second < 0.0 else 0.5 * (low + high)
        if not low <= following <= high:
            following = 0.5 * (low + high)
        if abs(following - y) < 1e-6:
            return following
        y = following
    return y


@njit(cache=True, fastmath=False, error_model="numpy")
def maxima(target, found):  # type: ignore[no-untyped-def]
    """Fill `found` with all maxima in y, ascending; returns their number (at least 1)."""
    first, _ = slope(target, 0.0)
    if first <= 0.0:
        low = -target.minus
        while slope(target, low)[0] <= 0.0:
            low *= 2.0
        found[0] = _maximum(target, low, 0.0, 0.0)
        return 1
    # No data could gain more than the distance to a fit that meets every count.
    gain = -profiled(target, 0.0)
    for k in range(target.size):
        gain += target.counts[k] * (math.log(target.counts[k]) - 1.0)
    highest = target.plus * math.sqrt(2.0 * max(gain, 0.0)) + 0.12
    steps = math.ceil(highest / 0.12)
    number, before = 0, 0.0
    for step in range(1, steps + 1):
        y = highest * step / steps
        rise, _ = slope(target, y)
        if first > 0.0 and rise <= 0.0 and number < MOST_MODES:
            found[number] = _maximum(target, before, y, before)
            number += 1
        first, before = rise, y
    if number == 0:
        found[0] = highest
        number = 1
    return number
