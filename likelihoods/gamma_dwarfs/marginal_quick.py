"""One target: its likelihood integrated over log10 J and background level where both are smooth, which is the rule.

*Background level.* At fixed y the log-likelihood is a known function of nu with cheap derivatives: one pass over the
bins gives the value and four of them, so its maximum and Laplace's integral with the next order,

    ln integral = L - (1/2) ln(-L'' error^2) + L''''/(8 L''^2) - 5 L'''^2/(24 L''^3),

follow without a search. Each node of y starts from the tangent at its neighbour.

*J-factor.* The trapezoidal rule on the whole line converges faster than any power for smooth integrands (SIAM Rev. 56
(2014) 385). Steps are 1.2 times the smaller error of log10 J and are halved until two sums agree to 2e-4, which leaves
an error of about the square of that. The kink of an asymmetric error lies on a node; the first Euler-Maclaurin term
takes care of it.

*Honesty.* The likelihood is concave in A = 10^y with nu integrated out, so tangents at two nodes bound it between
them. If that bound leaves room for a peak between nodes, if the sums do not agree or the peak is narrower than the
step, or if the next order of Laplace is not small, the answer is NaN and `marginal_careful` takes over.
"""

from __future__ import annotations

import math
from typing import Final

import numpy as np
from numba import njit

from .profiling import LN10, best_background

MOST_NODES: Final = 40
NODE_COLUMNS: Final = 6
"""Of a node: y, amplitude, log integrand, Poisson part, its slope in the amplitude, best background scale."""
_ORIGIN: Final = 12
"""Row of the node at y = 0; the last row is for scratch."""
_DROP: Final = 13.0
_STEP: Final = 1.2
_AGREEMENT: Final = 2e-4
_SHARPEST: Final = 1.7
"""Squared ratio of the last step to the width of the peak: a normal peak is then integrated to 2e-5."""
_ROOM: Final = 4.0
_LAPLACE: Final = 0.01


@njit(cache=True, fastmath=False, error_model="numpy")
def _node(target, y, scale, node):  # type: ignore[no-untyped-def]
    """Fill `node` at `y`, searching the background scale from `scale`; returns d(best scale)/d(amplitude) or NaN."""
    amplitude = math.exp(LN10 * y)
    known = target.background_error == 0.0
    weight = 0.0 if known else 1.0 / target.background_error**2
    value = slope = shift = turn = 0.0
    for _ in range(4):
        value = -scale * target.background_total - amplitude * target.signal_total
        slope, mixed = -target.signal_total, 0.0
        first, second, third, fourth = 0.0, 0.0, 0.0, 0.0
        product = 1.0
        for k in range(target.size):
            mean = scale * target.background[k] + amplitude * target.signal[k]
            counts, inverse = target.counts[k], 1.0 / mean
            product *= mean
            last = k + 1 == target.size or target.counts[k + 1] != counts
            # Bins with equal counts, which stand side by side, share a logarithm.
            if last or not 1e-150 < product < 1e150:
                value += counts * math.log(product)
                product = 1.0
            by_signal = counts * target.signal[k] * inverse
            slope += by_signal
            if not known:
                share = target.background[k] * inverse
                power = counts * share
                mixed -= by_signal * share
                first += power
                power *= share
                second += power
                power *= share
                third += power
                fourth += power * share
        if known:
            break
        off = scale - target.background_centre
        value -= 0.5 * weight * off * off
        first -= target.background_total + weight * off
        second += weight
        third, fourth = 2.0 * third, -6.0 * fourth
        shift = first / second
        if abs(shift) > 0.04 * scale:
            scale = max(scale + shift, 0.2 * scale)
            continue
        for _ in range(2):
            shift = (first + shift * shift * (0.5 * third + shift * fourth / 6.0)) / second
        value += shift * (first + shift * (-0.5 * second + shift * (third / 6.0 + shift * fourth / 24.0)))
        second -= shift * (third + 0.5 * shift * fourth)
        third += shift * fourth
        scale += shift
        slope += mixed * shift
        kurtosis, skewness = fourth / (8.0 * second**2), 5.0 * third**2 / (24.0 * second**3)
        if abs(kurtosis) + skewness > _LAPLACE or scale * math.sqrt(second) < 6.0:
            return math.nan
        value += kurtosis + skewness - 0.5 * math.log(second / weight)
        turn = mixed / second
        break
    else:
        return math.nan
    width = target.minus if y < 0.0 else target.plus
    node[0], node[1], node[3], node[4], node[5] = y, amplitude, value, slope, scale
    node[2] = value - 0.5 * (y / width) ** 2
    return turn


@njit(cache=True, fastmath=False, error_model="numpy")
def _room(left, right):  # type: ignore[no-untyped-def]
    """How far the Poisson part may rise above both nodes between them."""
    if left[4] <= 0.0 or right[4] >= 0.0:
        return 0.0
    crossing = (right[3] - left[3] + left[4] * left[1] - right[4] * right[1]) / (left[4] - right[4])
    return left[3] + left[4] * (crossing - left[1]) - max(left[3], right[3])


@njit(cache=True, fastmath=False, error_model="numpy")
def quick_integral(target, work):  # type: ignore[no-untyped-def]
    """Log of the integral over y of exp(log-likelihood) without constants, or NaN where it takes more care.

    `work` is room for nodes, shape (`MOST_NODES`, `NODE_COLUMNS`).
    """
    step = _STEP * min(target.minus, target.plus)
    turn = _node(target, 0.0, best_background(target, 1.0), work[_ORIGIN])
    if math.isnan(turn):
        return math.nan
    highest, first, last = work[_ORIGIN, 2], _ORIGIN, _ORIGIN
    start_turn = turn
    # Beyond a node the likelihood cannot exceed what its tangent in the amplitude allows.
    while True:
        here = work[last]
        if here[2] < highest - _DROP and here[4] <= 0.0:
            break
        if last == MOST_NODES - 2:
            return math.nan
        y = here[0] + step
        scale = max(here[5] + turn * (math.exp(LN10 * y) - here[1]), 0.5 * here[5])
        turn = _node(target, y, scale, work[last + 1])
        if math.isnan(turn) or _room(here, work[last + 1]) > _ROOM:
            return math.nan
        last += 1
        highest = max(highest, work[last, 2])
    turn = start_turn
    while True:
        here = work[first]
        if here[2] + max(0.0, -here[4] * here[1]) < highest - _DROP:
            break
        if first == 0:
            return math.nan
        y = here[0] - step
        scale = max(here[5] + turn * (math.exp(LN10 * y) - here[1]), 0.5 * here[5])
        turn = _node(target, y, scale, work[first - 1])
        if math.isnan(turn) or _room(work[first - 1], here) > _ROOM:
            return math.nan
        first -= 1
        highest = max(highest, work[first, 2])
    kink = math.exp(work[_ORIGIN, 2] - highest) * LN10 * work[_ORIGIN, 4]
    kink *= 3.0 * (target.plus**-2 - target.minus**-2) / 720.0
    sum_before = 0.0
    for k in range(first, last + 1):
        sum_before += math.exp(work[k, 2] - highest)
    integral = step * sum_before + step**4 * kink
    offset = work[first, 0]
    scales, values = work[first : last + 1, 5].copy(), work[first : last + 1, 2].copy()
    for _ in range(3):
        finer_scales, finer_values = np.empty(2 * scales.size - 1), np.empty(2 * scales.size - 1)
        finer_scales[::2], finer_values[::2] = scales, values
        total = sum_before
        for k in range(scales.size - 1):
            node = work[MOST_NODES - 1]
            turn = _node(target, offset + (k + 0.5) * step, 0.5 * (scales[k] + scales[k + 1]), node)
            if math.isnan(turn):
                return math.nan
            total += math.exp(node[2] - highest)
            finer_scales[2 * k + 1], finer_values[2 * k + 1] = node[5], node[2]
        scales, values, sum_before, step, before = finer_scales, finer_values, total, 0.5 * step, integral
        integral = step * total + step**4 * kink
        peak = min(max(int(np.argmax(values)), 1), values.size - 2)
        resolved = 2.0 * values[peak] - values[peak - 1] - values[peak + 1] < _SHARPEST
        if resolved and abs(integral - before) < _AGREEMENT * integral:
            return highest + math.log(integral)
    return math.nan
